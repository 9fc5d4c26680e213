"""Real solid harmonics and their derivatives along a normal.

With Schmidt's normalisation the regular harmonics R_lm (|m| ≤ l; negative m: sine) obey

    1/|x − y| = Σ_l Σ_m R_lm(y) S_lm(x),   S_lm(x) = R_lm(x)/|x|^(2l+1),   |y| < |x|,

and are numbered l² + l + m, so that a lower degree is a leading block. They follow from R_00 = 1, R_11 = x,
R_1,−1 = y by

    R_m,m + i R_m,−m = √((2m−1)/2m) (x + iy) (R_m−1,m−1 + i R_m−1,1−m),                         m > 1,
    √((l+1)²−m²) R_l+1,m = (2l+1) z R_lm − √(l²−m²) r² R_l−1,m.

Sources: Hobson (1931), The theory of spherical and ellipsoidal harmonics, chapter IV; the recurrences are those of
the associated Legendre functions, DLMF 14.10.3 and 14.7.8, in Schmidt's normalisation. Since S_lm(x) = R_lm(x/r²)/r
(Kelvin's transform), the same recurrences with x/r² for x and 1/r² for r², begun from 1/r, give the irregular
harmonics.

A panel with normal n, seen to second order, needs 1 − ½ spread ∂²/∂n² of a harmonic function, and a dipole ∂/∂n of
that. Each quantity is therefore carried as its Taylor coefficients in t along x + t n, up to t³; the recurrences hold
for truncated power series as they do for numbers.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from bemescape.compiled import njit

__all__ = [
    "BLOCK",
    "SERIES",
    "charge_irregular",
    "charge_regular",
    "coefficient_count",
    "dipole_irregular",
    "dipole_regular",
    "irregular",
    "regular",
    "slopes_irregular",
    "slopes_regular",
    "steps",
]

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]

#: Points are handled in blocks of this many, side by side in vector registers (see below).
BLOCK = 96


def coefficient_count(degree: int) -> int:
    """Number of harmonics up to `degree`."""
    return (degree + 1) ** 2


def steps(degree: int) -> Floats:
    """Factors (2, degree + 1, degree + 1) of the recurrence in l, [k, l, m], towards l: of z R_l−1,m and r² R_l−2,m."""
    factors = np.zeros((2, degree + 1, degree + 1))
    for m in range(degree + 1):
        for above in range(m + 1, degree + 1):
            below = above - 1
            root = np.sqrt(above**2 - m**2)
            factors[0, above, m] = (2 * below + 1) / root
            factors[1, above, m] = np.sqrt(below**2 - m**2) / root
    return factors


def regular(points: Floats, degree: int) -> Floats:
    """R_lm at points (n, 3) -> (n, (degree + 1)²), in double precision."""
    return _harmonics(points, (points**2).sum(axis=1), np.ones(len(points)), degree)


def irregular(points: Floats, degree: int) -> Floats:
    """S_lm at points (n, 3) -> (n, (degree + 1)²), in double precision."""
    square = (points**2).sum(axis=1)
    return _harmonics(points / square[:, None], 1.0 / square, 1.0 / np.sqrt(square), degree)


def _harmonics(points: Floats, square: Floats, start: Floats, degree: int) -> Floats:
    x, y, z = points.T
    factors = steps(degree)
    out = np.zeros((len(points), coefficient_count(degree)))
    diagonal = start.astype(complex)
    for m in range(degree + 1):
        if m:
            diagonal = diagonal * (x + 1j * y) * (np.sqrt((2 * m - 1) / (2 * m)) if m > 1 else 1.0)
        before, now = np.zeros_like(diagonal), diagonal
        for row in range(m, degree + 1):
            if row > m:
                now, before = factors[0, row, m] * z * now - factors[1, row, m] * square * before, now
            out[:, row * row + row + m] = now.real
            if m:
                out[:, row * row + row - m] = now.imag
    return out


# Rows of the power series: of x, y, z, of r² (or 1/r²) and of the two harmonics with m = l; the last holds the spread.
_X, _Y, _Z, _SQUARE, _COS, _SIN, _SPREAD = range(7)
SERIES = 7

# Loops over a block vectorise only with unsigned row numbers (numba allows for negative ones otherwise), with a length
# that is no constant (LLVM would unroll the loop first), and if they are long: they begin with a check that rows lie
# apart, and short ones would take the scalar way. Hence whole blocks always, of 96 (measured: 64 are
# too few for dipoles).
_ONE_BELOW, _TWO_BELOW = np.uintp(1), np.uintp(2)

# What is written, from the coefficients of the power series.
_CHARGE, _DIPOLE, _SLOPES = 1, 2, 3


def _weights(kind, *, far):
    """A compiled function that writes the harmonics of one block of points.

    `kind`: _CHARGE writes f − ½ spread f″, _DIPOLE f′ − ½ spread f‴, _SLOPES three layers: the first as _CHARGE, then f
    and f′. `far` selects the irregular harmonics. All in single precision, in units of the box.

    It is one long function because numba's cache on disk knows closures by what they hold: numbers are the same in
    every process, compiled functions are not.
    """
    dipole = kind == _DIPOLE

    @njit(cache=True, fastmath=True, error_model="numpy")
    def run(points, degree, factors, w, column, out):
        """Harmonics at a block of points (7, BLOCK): x, y, z, normal, spread.

        They are written to out (layers, count, BLOCK); w (SERIES, 4, BLOCK) and column (2 degree + 3, 4, BLOCK) are
        work arrays, the latter for the harmonics of one m at a time, cosines first, from l = m upwards.
        """
        width = points.shape[1]
        zero, one, two, three, five = (
            np.float32(0.0), np.float32(1.0), np.float32(2.0), np.float32(3.0), np.float32(5.0),
        )  # fmt: skip
        # Series of the coordinates, of r² or 1/r², and of R_00 or S_00.
        for k in range(width):
            x, y, z = points[0, k], points[1, k], points[2, k]
            nx, ny, nz = points[3, k], points[4, k], points[5, k]
            square = x * x + y * y + z * z
            slope = two * (x * nx + y * ny + z * nz)
            if far:
                t0 = one / square
                t1 = -slope * t0 * t0
                t2 = -(slope * t1 + t0) * t0
                t3 = -(slope * t2 + t1) * t0
                w[_X, 0, k], w[_Y, 0, k], w[_Z, 0, k] = x * t0, y * t0, z * t0
                w[_X, 1, k], w[_Y, 1, k], w[_Z, 1, k] = x * t1 + nx * t0, y * t1 + ny * t0, z * t1 + nz * t0
                w[_X, 2, k], w[_Y, 2, k], w[_Z, 2, k] = x * t2 + nx * t1, y * t2 + ny * t1, z * t2 + nz * t1
                w[_X, 3, k], w[_Y, 3, k], w[_Z, 3, k] = x * t3 + nx * t2, y * t3 + ny * t2, z * t3 + nz * t2
                w[_SQUARE, 0, k], w[_SQUARE, 1, k], w[_SQUARE, 2, k], w[_SQUARE, 3, k] = t0, t1, t2, t3
                # 1/r along a line: Legendre's recurrence.
                b = slope / two
                s0 = np.sqrt(t0)
                s1 = -b * s0 * t0
                s2 = -(three * b * s1 + s0) * t0 / two
                s3 = -(five * b * s2 + two * s1) * t0 / three
                w[_COS, 0, k], w[_COS, 1, k], w[_COS, 2, k], w[_COS, 3, k] = s0, s1, s2, s3
            else:
                w[_X, 0, k], w[_Y, 0, k], w[_Z, 0, k] = x, y, z
                w[_X, 1, k], w[_Y, 1, k], w[_Z, 1, k] = nx, ny, nz
                w[_SQUARE, 0, k], w[_SQUARE, 1, k], w[_SQUARE, 2, k] = square, slope, one
                w[_COS, 0, k], w[_COS, 1, k], w[_COS, 2, k], w[_COS, 3, k] = one, zero, zero, zero
            w[_SIN, 0, k], w[_SIN, 1, k], w[_SIN, 2, k], w[_SIN, 3, k] = zero, zero, zero, zero
            w[_SPREAD, 0, k] = points[6, k]
        for m in range(degree + 1):
            if m > 0:
                # The next harmonics with m = l: (cos + i sin) (x + i y), up to a factor.
                factor = np.float32(math.sqrt((2.0 * m - 1.0) / (2.0 * m)) if m > 1 else 1.0)
                for k in range(width):
                    x0, x1, y0, y1 = w[_X, 0, k], w[_X, 1, k], w[_Y, 0, k], w[_Y, 1, k]
                    c0, c1, c2 = w[_COS, 0, k], w[_COS, 1, k], w[_COS, 2, k]
                    s0, s1, s2 = w[_SIN, 0, k], w[_SIN, 1, k], w[_SIN, 2, k]
                    w[_COS, 0, k] = factor * (x0 * c0 - y0 * s0)
                    w[_SIN, 0, k] = factor * (y0 * c0 + x0 * s0)
                    w[_COS, 1, k] = factor * (x0 * c1 + x1 * c0 - y0 * s1 - y1 * s0)
                    w[_SIN, 1, k] = factor * (y0 * c1 + y1 * c0 + x0 * s1 + x1 * s0)
                    re = x0 * c2 + x1 * c1 - y0 * s2 - y1 * s1
                    im = y0 * c2 + y1 * c1 + x0 * s2 + x1 * s1
                    if far:
                        x2, y2 = w[_X, 2, k], w[_Y, 2, k]
                        re += x2 * c0 - y2 * s0
                        im += y2 * c0 + x2 * s0
                    if dipole:
                        c3, s3 = w[_COS, 3, k], w[_SIN, 3, k]
                        re3 = x0 * c3 + x1 * c2 - y0 * s3 - y1 * s2
                        im3 = y0 * c3 + y1 * c2 + x0 * s3 + x1 * s2
                        if far:
                            x3, y3 = w[_X, 3, k], w[_Y, 3, k]
                            re3 += x2 * c1 + x3 * c0 - y2 * s1 - y3 * s0
                            im3 += y2 * c1 + y3 * c0 + x2 * s1 + x3 * s0
                        w[_COS, 3, k], w[_SIN, 3, k] = factor * re3, factor * im3
                    w[_COS, 2, k], w[_SIN, 2, k] = factor * re, factor * im
            for side in range(2 if m > 0 else 1):
                # Above the first row there is another, whatever it holds: its factor is 0.
                first = np.uintp(1 + side * (degree + 1))
                start, sign = _COS + side, m if side == 0 else -m
                number = np.uintp(m * m + m + sign)
                for order in range(4):
                    for k in range(width):
                        column[first, order, k] = w[start, order, k]
                for k in range(width):
                    if dipole:
                        out[0, number, k] = column[first, 1, k] - three * w[_SPREAD, 0, k] * column[first, 3, k]
                    else:
                        out[0, number, k] = column[first, 0, k] - w[_SPREAD, 0, k] * column[first, 2, k]
                        if kind == _SLOPES:
                            out[1, number, k], out[2, number, k] = column[first, 0, k], column[first, 1, k]
                for ell in range(m + 1, degree + 1):
                    # From the two rows below.
                    along, across = factors[0, ell, m], factors[1, ell, m]
                    row, number = first + np.uintp(ell - m), np.uintp(ell * ell + ell + sign)
                    below, lower = row - _ONE_BELOW, row - _TWO_BELOW
                    for k in range(width):
                        z0, z1 = along * w[_Z, 0, k], along * w[_Z, 1, k]
                        q0, q1, q2 = across * w[_SQUARE, 0, k], across * w[_SQUARE, 1, k], across * w[_SQUARE, 2, k]
                        a0, a1, a2 = column[below, 0, k], column[below, 1, k], column[below, 2, k]
                        b0, b1, b2 = column[lower, 0, k], column[lower, 1, k], column[lower, 2, k]
                        f0 = z0 * a0 - q0 * b0
                        f1 = z0 * a1 + z1 * a0 - q0 * b1 - q1 * b0
                        f2 = z0 * a2 + z1 * a1 - q0 * b2 - q1 * b1 - q2 * b0
                        if far:
                            z2 = along * w[_Z, 2, k]
                            f2 += z2 * a0
                        column[row, 0, k], column[row, 1, k], column[row, 2, k] = f0, f1, f2
                        if dipole:
                            f3 = z0 * column[below, 3, k] + z1 * a2 - q0 * column[lower, 3, k] - q1 * b2 - q2 * b1
                            if far:
                                f3 += z2 * a1 + along * w[_Z, 3, k] * a0 - across * w[_SQUARE, 3, k] * b0
                            column[row, 3, k] = f3
                            out[0, number, k] = f1 - three * w[_SPREAD, 0, k] * f3
                        else:
                            out[0, number, k] = f0 - w[_SPREAD, 0, k] * f2
                            if kind == _SLOPES:
                                out[1, number, k], out[2, number, k] = f0, f1

    return run


charge_regular, charge_irregular = _weights(_CHARGE, far=False), _weights(_CHARGE, far=True)
dipole_regular, dipole_irregular = _weights(_DIPOLE, far=False), _weights(_DIPOLE, far=True)
slopes_regular, slopes_irregular = _weights(_SLOPES, far=False), _weights(_SLOPES, far=True)
