"""Make the demo shapes, their case files and the table in README.md: `python meshes/make_demo_shapes.py`.

The compartments are invented: four bodies from the "Harrow block", a piece of tissue that never existed.
Every random choice has a fixed seed, so that a second run writes the same bytes. Lengths are nanometres.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from importlib.metadata import version
from pathlib import Path

import numpy as np
import segmented as sg

HERE = Path(__file__).resolve().parent
MARK_BEGIN, MARK_END = "<!-- table begins: written by make_demo_shapes.py -->", "<!-- table ends -->"
SIZE_LIMIT_BYTES = 1_000_000
MOUTH, PATCH = 1, 2


# --- the four bodies --------------------------------------------------------------------------------


def bouton() -> sg.Mesh:
    """Flattened body with a flat release face (facing up) and a bent 120 nm neck that ends at x = 850."""
    swelling = sg.joined(sg.ellipsoid((0, 0, 0), (520, 440, 400)), sg.ellipsoid((-210, 170, -60), (300, 310, 270)), 160)
    body = sg.bumpy(swelling, 16.0, 520.0, seed=11)
    body = sg.common(body, sg.half_space((-60, -30, 300), (-0.12, 0.06, 1)), 90)
    neck = sg.tube(
        [(250, -20, -40), (480, -40, -70), (640, -70, -50), (780, -60, -10), (950, -60, 0)],
        [220, 150, 126, 126, 126],
    )
    mesh = sg.segmented(
        sg.joined(body, neck, 70), (-640, -560, -500), (930, 620, 460), voxel=12, triangles=9000, seed=12
    )
    mesh = sg.cut_mouth(mesh, 0, 850.0, beyond=1, label=MOUTH)
    centre = sg.snapped(mesh, [(-60, -30, 300)])[0]
    return sg.paint_patch(mesh, centre, 170.0, label=PATCH, seed=13)


def spine() -> sg.Mesh:
    """Head of half a micrometre on a bent neck that ends at z = 0; the contact patch is the head's top."""
    head = sg.bumpy(sg.ellipsoid((150, 60, 800), (275, 240, 215)), 10.0, 330.0, seed=21)
    dent = sg.ellipsoid((130, 50, 1330), (420, 400, 370))
    head = sg.common(head, lambda points: -dent(points), 70)
    neck = sg.tube(
        [(0, 0, -120), (0, 0, 40), (-50, 10, 230), (-10, 50, 430), (90, 70, 600), (140, 60, 760)],
        [150, 150, 112, 108, 128, 200],
    )
    mesh = sg.segmented(
        sg.joined(head, neck, 60), (-230, -260, -100), (500, 380, 1100), voxel=8, triangles=8000, seed=22
    )
    mesh = sg.cut_mouth(mesh, 2, 0.0, beyond=-1, label=MOUTH)
    centre = sg.snapped(mesh, [(130, 50, 960)])[0]
    return sg.paint_patch(mesh, centre, 140.0, label=PATCH, seed=23)


def nucleus() -> sg.Mesh:
    """Four lobes around a core that merge into a body of about five micrometres, with shallow clefts."""
    lobes = [
        sg.ellipsoid((-950, 260, 100), (1550, 1500, 1450)),
        sg.ellipsoid((1000, 720, -150), (1400, 1300, 1350)),
        sg.ellipsoid((750, -1050, 250), (1350, 1250, 1250)),
        sg.ellipsoid((-700, -1200, -300), (1200, 1100, 1100)),
        sg.ellipsoid((100, -150, 0), (1200, 1200, 1150)),
    ]
    body = lobes[0]
    for lobe in lobes[1:]:
        body = sg.joined(body, lobe, 600)
    body = sg.bumpy(body, 40.0, 1900.0, seed=31)
    return sg.segmented(body, (-2800, -2700, -1900), (2800, 2500, 1900), voxel=40, triangles=8000, seed=32)


def mitochondrion() -> sg.Mesh:
    """Branched tube of 400 nm with a constriction of 120 nm in its left arm."""
    left_arm = [(-1650, -190, 0), (-1250, 20, 60), (-940, 90, 40), (-690, 70, 20), (-440, 40, 0)]
    right_arm = [(150, -30, 0), (700, 120, 60), (1150, 90, 140), (1600, -120, 90)]
    trunk = sg.tube([*left_arm, *right_arm], [330, 400, 360, 141, 370, 430, 390, 400, 330])
    branch = sg.tube([(120, -20, 0), (330, -330, -60), (480, -690, -30), (400, -1080, 70)], [360, 350, 370, 310])
    body = sg.bumpy(sg.joined(trunk, branch, 120), 9.0, 480.0, seed=41)
    return sg.segmented(body, (-1950, -1400, -350), (1900, 450, 450), voxel=14, triangles=12000, seed=42)


# --- case files -------------------------------------------------------------------------------------


def label_window(name: str, value: int) -> str:
    """The faces of one label as a window."""
    return f'[[window]]\nname = "{name}"\nlabels = {{ array = "label", value = {value} }}'


def disc_window(name: str, centre: Sequence[float] | sg.Floats, radius: int) -> str:
    """The wall around a point of the wall as a window."""
    place = ", ".join(f"{value:.1f}" for value in centre)
    return f'[[window]]\nname = "{name}"\ndisc = {{ centre = [{place}], radius = "{radius} nm" }}'


def case_text(name: str, title: str, motion: str, windows: Sequence[str], start: dict[str, Sequence[float]]) -> str:
    """A whole case file."""
    points = ", ".join(f"{key} = [{', '.join(f'{x:.1f}' for x in place)}]" for key, place in start.items())
    blocks = [
        f"# {title}\n# Both the shape and the diffusion coefficient are invented for this demo.",
        f'[surface]\nfile = "{name}.ply"\nunit = "nm"\nheal = "auto"',
        f'[motion]\ndiffusion = "{motion}"',
        *windows,
        '[accuracy]\ntarget = "0.5 %"',
        f"[start]  # positions in file units\npoints = {{ {points} }}",
    ]
    return "\n\n".join(blocks) + "\n"


def spread_sites(mesh: sg.Mesh, count: int, gap: float, seed: int) -> list[np.ndarray]:
    """Face centroids drawn at random by area, no two closer than `gap`."""
    rng, surface = np.random.default_rng(seed), mesh.trimesh
    sites: list[np.ndarray] = []
    for face in rng.choice(len(mesh.faces), size=20_000, p=surface.area_faces / surface.area):
        place = surface.triangles_center[face]
        if len(sites) < count and all(np.linalg.norm(place - other) >= gap for other in sites):
            sites.append(place)
    if len(sites) < count:
        raise RuntimeError(f"room for {len(sites)} of {count} sites at a gap of {gap} nm; lower the gap")
    return sites


def bouton_case(mesh: sg.Mesh) -> str:
    """Two openings of unequal size: the neck and the release face."""
    patch = mesh.vertices[mesh.faces[mesh.labels == PATCH]].mean(axis=(0, 1))
    return case_text(
        "bouton",
        "Bouton H-12 of the Harrow block: how long does a small molecule stay, and which way does it leave?",
        "200 um^2/s",
        [label_window("neck", MOUTH), label_window("release face", PATCH)],
        check_inside(mesh, {"centre": (-60.0, 0.0, -40.0), "below_release_face": patch - (0.0, 0.0, 60.0)}),
    )


def spine_case(mesh: sg.Mesh) -> str:
    """One way out, through the neck; the contact patch (label 2) is a part of the wall here."""
    patch = mesh.vertices[mesh.faces[mesh.labels == PATCH]].mean(axis=(0, 1))
    return case_text(
        "spine",
        "Spine H-31 of the Harrow block: a small protein leaves through the neck (label 2: contact patch).",
        "20 um^2/s",
        [label_window("neck base", MOUTH)],
        check_inside(mesh, {"below_contact": patch - (0.0, 0.0, 50.0), "mid_neck": (-42.0, 18.0, 270.0)}),
    )


def nucleus_case(mesh: sg.Mesh) -> str:
    """Forty equal pores."""
    sites = spread_sites(mesh, 40, 800.0, seed=33)
    return case_text(
        "nucleus",
        "Nucleus H-02 of the Harrow block: a large complex looks for one of 40 pores.",
        "2 um^2/s",
        [disc_window(f"pore {number:02d}", site, 80) for number, site in enumerate(sites, start=1)],
        check_inside(mesh, {"middle": (0.0, 0.0, 0.0), "east_lobe": (1300.0, 900.0, -150.0)}),
    )


def mitochondrion_case(mesh: sg.Mesh) -> str:
    """Two contact sites, one of them behind the constriction."""
    left, branch = sg.snapped(mesh, [(-1830, -290, 0), (380, -1240, 90)])
    return case_text(
        "mitochondrion",
        "Mitochondrion H-07 of the Harrow block: a matrix protein between two contact sites.",
        "10 um^2/s",
        [disc_window("left contact", left, 80), disc_window("branch contact", branch, 80)],
        check_inside(mesh, {"junction": (140.0, -60.0, 0.0), "right_arm": (1400.0, -10.0, 120.0)}),
    )


def check_inside(mesh: sg.Mesh, start: dict[str, Sequence[float]]) -> dict[str, Sequence[float]]:
    """The same points, once each is known to lie at least 30 nm inside."""
    for name, place in start.items():
        if (depth := sg.depth(mesh, place)) < 30.0:
            raise RuntimeError(f"start point {name!r} is {depth:.0f} nm inside the wall (limit 30 nm); move it")
    return start


# --- the files --------------------------------------------------------------------------------------

SHAPES: dict[str, tuple[Callable[[], sg.Mesh], Callable[[sg.Mesh], str]]] = {
    "bouton": (bouton, bouton_case),
    "spine": (spine, spine_case),
    "nucleus": (nucleus, nucleus_case),
    "mitochondrion": (mitochondrion, mitochondrion_case),
}


def write_shape(name: str) -> tuple[str, list[Path]]:
    """Write one mesh and its case file; return the mesh's row of the table and both paths."""
    make, case = SHAPES[name]
    mesh = sg.single_precision(make())
    if found := sg.faults(mesh):
        raise RuntimeError(f"{name} is not a sound mesh: {'; '.join(found)}")
    ply, toml = HERE / f"{name}.ply", HERE / f"{name}.toml"
    sg.write_ply(mesh, ply, ["demo shape, invented, made by make_demo_shapes.py", "unit nm"])
    if ply.stat().st_size > SIZE_LIMIT_BYTES:
        raise RuntimeError(f"{ply.name} has {ply.stat().st_size} bytes (limit {SIZE_LIMIT_BYTES})")
    toml.write_text(case(mesh), encoding="utf-8", newline="\n")

    surface = mesh.trimesh
    patches = [float(surface.area_faces[mesh.labels == label].sum()) * 1e-6 for label in (MOUTH, PATCH)]
    cells = [
        f"`{ply.name}`",
        "nm",
        f"{len(mesh.faces)}",
        f"{surface.volume * 1e-9:.4g}",
        f"{surface.area * 1e-6:.4g}",
        " × ".join(f"{size * 1e-3:.2f}" for size in surface.extents),
        *(f"{area:.4g}" if area else "–" for area in patches),
    ]
    return "| " + " | ".join(cells) + " |", [ply, toml]


def write_table(rows: Sequence[str], files: Sequence[Path]) -> None:
    """Replace the table of README.md."""
    lines = ["| mesh | unit | triangles | volume µm³ | area µm² | extent µm | label 1 µm² | label 2 µm² |"]
    lines += ["|---|---|---|---|---|---|---|---|", *rows, "", "| file | bytes | sha256 |", "|---|---|---|"]
    for path in files:
        digest = hashlib.sha256(path.read_bytes()).hexdigest()
        lines.append(f"| `{path.name}` | {path.stat().st_size} | `{digest}` |")
    versions = [f"{package} {version(package)}" for package in ("numpy", "scipy", "trimesh", "vtk")]
    lines += ["", f"Written with {', '.join(versions)}."]
    readme = HERE / "README.md"
    before, rest = readme.read_text(encoding="utf-8").split(MARK_BEGIN)
    after = rest.split(MARK_END)[1]
    table = "\n".join([MARK_BEGIN, "", *lines, "", MARK_END])
    readme.write_text(before + table + after, encoding="utf-8", newline="\n")


def main() -> None:
    """Write everything and say so."""
    rows, files = [], []
    for name in SHAPES:
        row, paths = write_shape(name)
        rows.append(row)
        files += paths
        print(row)
    write_table(rows, files)


if __name__ == "__main__":
    main()
