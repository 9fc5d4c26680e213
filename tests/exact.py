"""Exact and published values, each with its source or derivation. D = 1 unless it is an argument.

Conventions: `mean` is the volume average of the escape time; caps on the unit ball have the half-angle eps, so a
disc window of chord radius 2 sin(eps/2).
"""

import itertools

import numpy as np


def prism_mean(length, diffusion=1.0, permeability=np.inf):
    """L²/(3D) + L/κ, one end open: elementary, u = (L² − x²)/(2D) + L/κ."""
    return length**2 / (3.0 * diffusion) + length / permeability


def prism_far_end(length, diffusion=1.0):
    """L²/(2D): u at the closed end."""
    return length**2 / (2.0 * diffusion)


def absorbing_ball_mean(radius, diffusion=1.0, permeability=np.inf):
    """R²/(15D) + R/(3κ): average of u = (R² − r²)/(6D) + R/(3κ), since r² averages to 3R²/5."""
    return radius**2 / (15.0 * diffusion) + radius / (3.0 * permeability)


def ball_centre_minus_mean(radius, diffusion=1.0):
    """R²/(10D) whatever the windows: u + r²/(6D) is harmonic, so its centre value is its average."""
    return radius**2 / (10.0 * diffusion)


def shell_mean_inner_open(a, b):
    """Spherical shell a < r < b, inner wall absorbing, outer closed: integrated by hand from the radial solution."""
    return (b - a) ** 2 * (a**3 + 3 * a**2 * b + 6 * a * b**2 + 5 * b**3) / (15 * a * (a**2 + a * b + b**2))


def shell_mean_outer_open(a, b):
    """The same with the outer wall absorbing and the inner one an obstacle."""
    return (b - a) ** 2 * (5 * a**3 + 6 * a**2 * b + 3 * a * b**2 + b**3) / (15 * b * (a**2 + a * b + b**2))


def strip_mean(half_angle):
    """Cylinder R = 1, lateral strip |φ| < eps open: 1/8 − ln sin(eps/2).

    Closed formula for a gate of any size on a disc: Caginalp & Chen (2012), doi:10.1007/s00205-011-0455-6;
    the average re-derived.
    """
    return 0.125 - np.log(np.sin(half_angle / 2.0))


def strip_opposite_wall(half_angle):
    """Time from the wall opposite the strip: arccosh(1/sin(eps/2))."""
    return float(np.arccosh(1.0 / np.sin(half_angle / 2.0)))


def cap_mean(eps, points=400):
    """Unit ball with one absorbing cap, by Collins' dual-series method (Collins 1961, doi:10.1112/S0025579300001406).

    u = (1 − r²)/6 + a₀ + Σ aₙ rⁿ Pₙ leads to the second-kind equation on [0, eps]

        π h(t) + ½ ∫ h(s) [k(t+s) + k(t−s)] ds = 2 (a₀ + 2/3) cos(t/2),   ∫ h cos(t/2) dt = 2/3,
        k(x) = −cos(x/2) ln(2 sin(x/2)) − sin(x/2) (π − x)/2  for x > 0, even,

    solved by Nyström on Gauss–Legendre panels graded to t = eps with the logarithm of k integrated exactly on each
    panel by subtraction. Returns a₀ + 1/15.
    """
    panels = 1.0 - 0.5 ** np.arange(0, 14)
    edges = eps * np.concatenate([panels, [1.0]])
    order = max(8, points // len(edges))
    nodes, weights = np.polynomial.legendre.leggauss(order)
    t = np.concatenate([0.5 * (b - a) * nodes + 0.5 * (a + b) for a, b in itertools.pairwise(edges)])
    w = np.concatenate([0.5 * (b - a) * weights for a, b in itertools.pairwise(edges)])

    def smooth(x):
        """k without its logarithm ln|x|, times cos: finite at 0."""
        x = np.abs(x)
        ratio = np.where(x > 1e-12, 2.0 * np.sin(x / 2.0) / np.maximum(x, 1e-300), 1.0)
        return -np.cos(x / 2.0) * np.log(ratio) - np.sin(x / 2.0) * (np.pi - x) / 2.0

    def log_integral(x):
        """∫₀^eps ln|x − s| ds."""
        up, down = eps - x, x

        def part(y):
            return np.where(y > 0.0, y * (np.log(np.maximum(y, 1e-300)) - 1.0), 0.0)

        return part(up) + part(down)

    difference = np.abs(t[:, None] - t[None])
    log = np.where(difference > 0.0, np.log(np.maximum(difference, 1e-300)), 0.0)
    cosine = np.cos(difference / 2.0)
    kernel = (smooth(difference) - cosine * log) * w
    # Subtraction: ∫ cos·ln|t−s| h(s) = Σ w cos·ln (h_s − h_t) + h_t ∫ cos·ln, with ∫(1 − cos) ln smooth.
    whole = log_integral(t) + ((cosine - 1.0) * log) @ w
    kernel[np.diag_indices(len(t))] += -whole + (cosine * log) @ w
    total = t[:, None] + t[None]
    kernel += (smooth(total) - np.cos(total / 2.0) * np.log(total)) * w
    matrix = np.pi * np.eye(len(t)) + 0.5 * kernel
    h = np.linalg.solve(matrix, 2.0 * np.cos(t / 2.0))
    scale = (2.0 / 3.0) / (w @ (h * np.cos(t / 2.0)))
    return scale - 2.0 / 3.0 + 1.0 / 15.0


#: cap_mean to 12 digits, by the same equation on panels graded to the end singularity until two grids agreed to
#: 1e-12, and confirmed to 1e-10 by a first-kind equation with the sphere's surface Neumann function.
CAP_MEAN = {
    0.05: 21.6071576062,
    0.1: 10.90026780762,
    0.2: 5.426881311052,
    0.5: 1.972025502625,
    1.0: 0.7183925858575,
    2.0: 0.1354060740581,
}
#: Time from the wall point opposite the cap, from the same solution.
CAP_ANTIPODE = {0.1: 11.39728525842, 0.2: 5.92178780637, 0.5: 2.451883377238}
#: u on the axis at height z (cap around +z), eps = 0.5, from the same solution.
CAP_AXIS_05 = {0.5: 1.3424776371, -0.5: 2.3713788929, 0.9: 0.267341569}

#: Two equal caps: (eps, angle between the centres) -> mean. Spectral solution with the sphere's closed-form Neumann
#: function, antipodal pairs also by dual series to 1e-12; the three-term formula of Cheviakov, Ward & Straube (2010,
#: doi:10.1137/100782620) agrees within its own error.
TWO_EQUAL_CAPS = {
    (0.1, 0.22): 7.0538414,
    (0.1, 0.25): 6.84388629,
    (0.1, 0.3): 6.57993048,
    (0.1, 0.5): 6.02611246,
    (0.1, 1.0): 5.556524621,
    (0.2, np.pi): 2.467394318503,
    (0.1, np.pi): 5.201974474248,
}
#: Two unequal antipodal caps (0.1, 0.2): mean and the share of the smaller; dual series, 12 digits.
UNEQUAL_CAPS_MEAN, UNEQUAL_CAPS_SHARE = 3.402154331544, 0.3419518369677
#: The same two with 0.4 between their centres, 0.1 between their rims: mean, share of the smaller, conductance;
#: spectral solution as for TWO_EQUAL_CAPS.
CLOSE_UNEQUAL_CAPS = (4.31419478, 0.29212085, 0.328026)

#: Unit cube, square window of side s on one face: mean = 1/3 + window resistance. Piecewise constant Galerkin,
#: graded and extrapolated to ~1e-6, cross-checked by cosine modes to 2e-5.
CUBE_CENTRED_WINDOW = {0.1: 4.053400, 0.4: 0.824235}
#: The same window in a corner of the face (by images: a centred window of side 2s in a 2 × 2 × 1 box).
CUBE_CORNER_WINDOW = {0.1: 7.778242, 0.4: 1.317342}
#: Unit cube with a centred square neck, side 0.4, length 0.5, open at the far end: average over head and neck, and
#: over the head alone. Galerkin ~1e-6, mode cross-check 1e-5.
NECK_ALL, NECK_HEAD = 3.943980, 4.127853

#: Unit ball with equal caps at the vertices of a platonic solid: (number, half-angle) -> mean. Spectral solution with
#: the sphere's closed-form Neumann function.
PLATONIC_CAPS = {
    (6, 0.2): 0.70005458,
    (8, 0.2): 0.50527188,
    (12, 0.2): 0.3141251,
    (6, 0.1): 1.60770681,
    (8, 0.1): 1.18409492,
    (12, 0.1): 0.76397854,
}
#: Cylinder R = H = 1 with a coaxial neck, open at its end: (neck radius, length) -> average over head and neck.
#: Head and neck are matched by a Galerkin method with edge-weighted functions, two resolutions agree to 1e-8; the same
#: method gives the flanged end correction 0.8217 (King 1936) and Fok's function (CYLINDER_DISC).
CYLINDER_NECK_ALL = {
    (0.1, 0.1): 17.4394678,
    (0.2, 0.2): 8.31885720,
    (0.2, 0.5): 15.7813822,
    (0.2, 1.0): 28.2294967,
    (0.5, 1.0): 4.81056125,
}
#: Cylinder R = H = 1 with a concentric disc window of radius a in one end: a -> mean; spectral to 1e-12. Less H²/(3D)
#: they follow V/(4aD) times Fok's function of a/R (Fok 1941, C. R. Acad. Sci. URSS 31:305; its series from memory:
#: 1 − 1.40925 x + 0.33818 x³ + …) as far as a flat end may be taken for a long cylinder.
CYLINDER_DISC = {0.1: 7.0845936474, 0.2: 3.1654450563, 0.5: 0.86716833941}
#: A quarter disc in a right-angled corner has a quarter of the conductance of the whole disc, Da (images), against 2Da
#: for the disc of the same area, half as wide, in the middle of a wall (Rayleigh: 4Da per disc): its resistance is
#: twice that disc's, to the order (window / body).
CORNER_TO_MIDDLE = 2.0
#: Slope of ln(T/V) against ln(a) for a funnel of neck radius a + z²/(2R), a ≪ R: quasi-one-dimensional,
#: T = V/(πD) ∫ dz/r² = V √(2R) / (4 D a^(3/2)); Holcman & Schuss (2014, SIAM Rev. 56:213) have this exponent.
#: The prefactor depends on where the funnel ends and is not tested.
FUNNEL_EXPONENT = -1.5
#: Unit cube, all faces absorbing: eigenfunction series. By its mirror planes also the tetrahedron (0, 0, 0),
#: (1/2, 0, 0), (1/2, 1/2, 0), (1/2, 1/2, 1/2) with only the face x = 1/2 absorbing.
CUBE_ALL_ABSORBING = 0.02016850031879


def ellipsoid_mean(a, b, c):
    """1/(5D (a⁻² + b⁻² + c⁻²)), all absorbing, D = 1: u = (1 − Σ xᵢ²/aᵢ²)/(2 Σ aᵢ⁻²)."""
    return 1.0 / (5.0 * (a**-2.0 + b**-2.0 + c**-2.0))


def caps_interaction(places):
    """H = Σ_{i<j} 1/d − ½ ln d − ½ ln(2 + d) of points (n, 3) on the unit sphere, d their distances.

    The mean time of n equal small caps grows with H alone: Cheviakov, Ward & Straube (2010), doi:10.1137/100782620.
    """
    d = np.array([np.linalg.norm(a - b) for a, b in itertools.combinations(np.asarray(places), 2)])
    return float((1.0 / d - 0.5 * np.log(d) - 0.5 * np.log(2.0 + d)).sum())


#: Smallest H for n points: minimised from many random starts; the paper's own table gives the same arrangements
#: (2: antipodal, 4: tetrahedron, 6: octahedron; from memory).
LEAST_CAPS_INTERACTION = {2: -0.539720771, 3: -1.067345254, 4: -1.667179878, 6: -2.581005544}


# -- partly open windows, ways out, second moments -------------------------------------------------------


def slab_two_ends_mean(length, kappa_0, kappa_l):
    """Slab 0 < x < L, D = 1, permeabilities at both ends: elementary; infinite κ by its limit."""
    a, b = 1.0 / kappa_0, 1.0 / kappa_l
    return length * (12.0 * a * b + 4.0 * length * (a + b) + length**2) / (12.0 * (a + b + length))


def slab_splitting(x, length, kappa_0, kappa_l):
    """Probability of leaving at x = 0 from x, D = 1: (1/κ₁ + L − x)/(1/κ₀ + 1/κ₁ + L), linear since w″ = 0."""
    return (1.0 / kappa_l + length - x) / (1.0 / kappa_0 + 1.0 / kappa_l + length)


def slab_conditional_time(x, length):
    """Mean time of those who leave at x = 0, both ends absorbing, D = 1: (L² − (L − x)²)/6.

    From g″ = −w with w = 1 − x/L, g = 0 at both ends, divided by w. For a shell and its inner wall the same holds
    along the radius, since r g obeys the same equation.
    """
    return (length**2 - (length - x) ** 2) / 6.0


def slab_second_moments(length, permeability=np.inf):
    """E[T²] from the closed end and from a uniform start, one end open, D = 1: integrated from m″ = −2u."""
    k = permeability
    far = 5.0 * length**4 / 12.0 + 5.0 * length**3 / (3.0 * k) + 2.0 * length**2 / k**2
    uniform = 4.0 * length**4 / 15.0 + 4.0 * length**3 / (3.0 * k) + 2.0 * length**2 / k**2
    return far, uniform


def ball_second_moments(permeability=np.inf):
    """E[T²] from the centre and from a uniform start of the unit ball, its whole wall open, D = 1: as the slab."""
    k = permeability
    centre = 7.0 / 180.0 + 7.0 / (45.0 * k) + 2.0 / (9.0 * k**2)
    uniform = 4.0 / 315.0 + 4.0 / (45.0 * k) + 2.0 / (9.0 * k**2)
    return centre, uniform


#: Shell 1 < r < 2, uniform start: E[T²] with the inner, or the outer, wall absorbing; radial equations integrated
#: symbolically.
SHELL_SECOND_MOMENT_INNER, SHELL_SECOND_MOMENT_OUTER = 0.992290249433, 0.0827664399093
#: Shell 1 < r < 2, κ = 1 on one wall: mean; and κ = 1 inside, 2 outside: mean and the share of the inner wall.
SHELL_MEAN_INNER_ROBIN, SHELL_MEAN_OUTER_ROBIN = 3.00952380952, 0.75952380952
SHELL_MEAN_BOTH_ROBIN, SHELL_SHARE_BOTH_ROBIN = 0.364835164835, 0.164835164835
#: Shell 1 < r < 2, both walls absorbing: mean 17/210; share of the inner wall a(2a + b)/(2(a² + ab + b²)) = 2/7.
SHELL_MEAN_BOTH, SHELL_SHARE_BOTH = 17.0 / 210.0, 2.0 / 7.0


def shell_splitting(r, a=1.0, b=2.0):
    """Probability of leaving through the inner wall from r: a(b − r)/(r(b − a)), harmonic."""
    return a * (b - r) / (r * (b - a))


#: Half oblate spheroid of focal radius 1 and height 1 (semi-axes √2, √2, 1): the focal disc in its flat face and the
#: dome absorb. In oblate coordinates w = 1 − arctan(λ)/arctan(1): share of the disc 1/π, conductance 8 (times D), and
#: on the axis, where λ = z, w = 1 − (4/π) arctan z. Smythe (1968), Static and Dynamic Electricity, 5.28.
SPHEROID_SHARE, SPHEROID_CONDUCTANCE = 1.0 / np.pi, 8.0


def spheroid_splitting_on_axis(z):
    """Probability of leaving through the focal disc from the axis at height z; see above."""
    return 1.0 - 4.0 / np.pi * np.arctan(z)


#: One absorbing cap on the unit ball: CV² of a uniform start, from the same series solution as CAP_MEAN, whose field
#: is squared and integrated in closed form.
CAP_CV2 = {0.1: 1.005723561, 0.5: 1.111391714, 1.0: 1.396076761}
#: Two caps of half-angles (0.1, 0.2), antipodal: conductance between them; dual series.
UNEQUAL_CAPS_CONDUCTANCE = 0.2419090018309
#: Two caps (0.1, 0.5), antipodal: mean, share of the smaller, conductance; dual series, 12 digits.
FAR_UNEQUAL_CAPS = (1.537603776482, 0.1772299222801, 0.3028664756139)

#: Partly open cap on the unit ball, (half-angle, κ) -> mean, and the area of the cap: Galerkin with edge functions,
#: two resolutions to 1e-8; limits κ → 0, κ → ∞ and the full ball reproduced.
ROBIN_CAP_MEAN = {
    (0.1, 10.0): 25.0212957,
    (0.5, 0.1): 56.6452146,
    (0.5, 1.0): 7.61798883,
    (0.5, 10.0): 2.64389089,
    (0.5, 100.0): 2.064816,
    (1.0, 10.0): 0.91496816,
}
CAP_AREA = {0.1: 0.03138975532, 0.5: 0.76917144847, 1.0: 2.88836579751}
#: Mean for a uniform flux over the cap (0.5), less V/(κA): the limit κ → 0.
CAP_UNIFORM_FLUX = 2.18854318
#: Disc of radius a and permeability κ in a flat wall, κa/D = 1: its conductance over 4Da, by a Galerkin method, and
#: what two resistances in series, 1/(4Da) + 1/(πa²κ), say instead.
ROBIN_DISC, ROBIN_DISC_IN_SERIES = 0.426679706, 0.439900846
#: Volume of the unit ball.
BALL_VOLUME = 4.0 * np.pi / 3.0


#: Exterior of the unit sphere with one absorbing cap of half-angle 0.1: rate over 4πDR; dual series to 1e-13.
EXTERIOR_CAP_RATE = 0.03536093083


def cap_on_inner_shell_mean(b):
    """Shell 1 < r < b, D = 1, closed but for a cap of half-angle 0.1 on the inner wall; right to O(eps²), 0.3 %.

    V/k of the same cap on a sphere in open space, with what the closed outer wall changes: for degree 0 the shell
    whose whole inner wall absorbs against 1/(4π); for degree l a point source on the inner wall, whose own potential
    q/(l + 1) becomes q (1 + β(l + 1)/l)/((l + 1)(1 − β)), β = b^(−2l−1).
    """
    volume = BALL_VOLUME * (b**3 - 1.0)
    change = shell_mean_inner_open(1.0, b) / volume - 1.0 / (4.0 * np.pi)
    for degree in range(1, 40):
        beta = b ** (-2.0 * degree - 1.0)
        held = (1.0 + beta * (degree + 1.0) / degree) / ((degree + 1.0) * (1.0 - beta)) - 1.0 / (degree + 1.0)
        change += (2.0 * degree + 1.0) / (4.0 * np.pi) * held
    return volume * (1.0 / (4.0 * np.pi * EXTERIOR_CAP_RATE) + change)


#: Disc of radius a and permeability κ in a flat wall: κa/D -> its conductance over 4Da, by the same Galerkin method.
ROBIN_DISC_TABLE = {
    0.01: 0.0077878836,
    0.1: 0.0724011256,
    1.0: 0.426679706,
    10.0: 0.858672159,
    100.0: 0.97817952,
}
#: Unit ball with 50 equal caps on a Fibonacci lattice (z = 1 − (2i + 1)/50, azimuth π(1 + √5)(i + ½)): half-angle ->
#: mean. Spectral solution with the sphere's closed-form Neumann function.
FIBONACCI_CAPS_50 = {0.02: 1.0247041, 0.05: 0.391019, 0.1: 0.17978}
#: Unit ball with equal caps of half-angle 0.05 at the corners of an octahedron, the same way.
OCTAHEDRON_CAPS_005 = 3.39105707
#: u on the axis at height z, one cap of half-angle 0.1 around +z, from the solution behind CAP_MEAN.
CAP_AXIS_01 = {0.9: 5.479989851, 0.5: 10.0713717754, -0.5: 11.3153370886}


def caps_by_matrix(directions, eps):
    """Unit ball, equal caps of half-angle eps around the directions (n, 3): matrix form, relative error O(eps²).

    The form of Cheviakov, Ward & Straube (2010, doi:10.1137/100782620) with one unknown flux each; their three-term
    formula follows from it for equal fluxes.
    """
    d = np.linalg.norm(directions[:, None] - directions[None], axis=2)
    np.fill_diagonal(d, 1.0)
    matrix = (2.0 / d - 2.0 - np.log(d / 2.0 + d**2 / 4.0)) / (4.0 * np.pi)
    np.fill_diagonal(matrix, 1.0 / (4.0 * eps) - (np.log(2.0 * eps) + 0.5) / (4.0 * np.pi))
    return BALL_VOLUME / np.linalg.solve(matrix, np.ones(len(d))).sum() + 1.0 / 15.0
