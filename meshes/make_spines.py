"""Make the spines of the demo study, their list and the study file: `python meshes/make_spines.py`.

24 dendritic spines of the "Harrow block", a piece of tissue that never existed, in two invented conditions whose necks
differ in radius; four invented animals in each. A spine is a roundish head on a bent round neck; the window is the flat
end of the neck (label 1). Lengths are nanometres. Every random choice has a fixed seed, so that a second run writes
the same bytes.

The answer is known beforehand to the error of the formula for a neck: a molecule leaves a head of volume V through a
neck of length L and radius a after about V L / (π a² D). The list carries V L / (π a²) as a covariate.
"""

from __future__ import annotations

import csv
import itertools
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import segmented as sg
import trimesh
from numpy.typing import NDArray

HERE = Path(__file__).resolve().parent
FOLDER = HERE / "spines"
AROUND = 16
MOUTH = 1
SEED = 71
CONDITIONS = {"rest": 62.0, "stimulated": 80.0}
SPINES_PER_ANIMAL, ANIMALS = 3, 4

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Spine:
    """What the generator chose: nm, and radians of the neck's bend."""

    name: str
    group: str
    animal: str
    neck_radius: float
    neck_length: float
    head_radius: float
    flatness: float
    bend: float
    azimuth: float
    bumps: int


def chosen_spines() -> list[Spine]:
    """Both conditions, animal by animal."""
    rng = np.random.default_rng(SEED)
    spines = []
    for condition, radius in CONDITIONS.items():
        for animal in range(ANIMALS):
            of_animal = rng.normal(0.0, 3.0)
            for _ in range(SPINES_PER_ANIMAL):
                number = len(spines) + 1
                spines.append(
                    Spine(
                        name=f"spine_{number:02d}",
                        group=condition,
                        animal=f"{'RS'[condition == 'stimulated']}{animal + 1}",
                        neck_radius=round(radius + of_animal + rng.normal(0.0, 6.0), 1),
                        neck_length=round(rng.uniform(450.0, 900.0), 1),
                        head_radius=round(rng.uniform(210.0, 320.0), 1),
                        flatness=round(rng.uniform(0.8, 1.0), 3),
                        bend=round(rng.uniform(0.1, 0.9), 3),
                        azimuth=round(rng.uniform(0.0, 2.0 * np.pi), 3),
                        bumps=int(rng.integers(1, 10_000)),
                    )
                )
    return spines


def profile(spine: Spine) -> Floats:
    """Rings (k, 2) of the body of revolution: height above the base and radius."""
    step = 2.0 * np.pi * spine.neck_radius / AROUND * 1.6
    rings = max(6, round(spine.neck_length / step))
    neck = [(height, spine.neck_radius) for height in np.linspace(0.0, spine.neck_length, rings + 1)]
    tall = spine.head_radius * spine.flatness
    first = np.arcsin(spine.neck_radius / spine.head_radius)
    middle = spine.neck_length + tall * np.cos(first)
    angles = np.linspace(first, np.pi, 11)[1:-1]
    head = [(middle - tall * np.cos(angle), spine.head_radius * np.sin(angle)) for angle in angles]
    return np.array(neck + head + [(middle + tall, 0.0)])


def mesh_of(spine: Spine) -> sg.Mesh:
    """The closed mesh; cross-sections are polygons of the circles' areas."""
    rings = profile(spine)
    outwards = np.sqrt(2.0 * np.pi / AROUND / np.sin(2.0 * np.pi / AROUND))
    phi = 2.0 * np.pi * np.arange(AROUND) / AROUND
    circles = [
        np.column_stack([outwards * radius * np.cos(phi), outwards * radius * np.sin(phi), np.full(AROUND, height)])
        for height, radius in rings[:-1]
    ]
    lid = [np.array([[0.0, 0.0, 0.0]])]
    lid.append(np.column_stack([circles[0][:, :2] * 0.5, np.zeros(AROUND)]))
    vertices = np.concatenate([*lid, *circles, [[0.0, 0.0, rings[-1, 0]]]])
    faces, labels = [], []
    starts = [1 + AROUND * k for k in range(len(circles) + 1)]
    for k in range(AROUND):
        after = (k + 1) % AROUND
        faces.append((0, starts[0] + after, starts[0] + k))
        labels.append(MOUTH)
        for number, (low, high) in enumerate(itertools.pairwise(starts)):
            a, b, c, d = low + k, low + after, high + after, high + k
            faces += [(a, b, c), (a, c, d)]
            labels += [MOUTH if number == 0 else 0] * 2
        faces.append((starts[-1] + k, starts[-1] + after, len(vertices) - 1))
        labels.append(0)
    bumpy = _bumpy_head(vertices, spine)
    return sg.Mesh(_bent(bumpy, spine), np.array(faces), np.array(labels, np.uint8))


def _bumpy_head(vertices: Floats, spine: Spine) -> Floats:
    """Gentle bumps on the head that fade out towards the neck."""
    rng = np.random.default_rng(spine.bumps)
    waves = rng.normal(size=(6, 3)) / (0.8 * spine.head_radius)
    phases = rng.uniform(0.0, 2.0 * np.pi, 6)
    centre = np.array([0.0, 0.0, spine.neck_length + spine.head_radius * spine.flatness])
    height = 0.035 * np.sin(vertices @ waves.T + phases).sum(axis=1)
    fade = np.clip((vertices[:, 2] - spine.neck_length - 0.3 * spine.head_radius) / spine.head_radius, 0.0, 1.0)
    return np.asarray(centre + (vertices - centre) * (1.0 + height * fade)[:, None])


def _bent(vertices: Floats, spine: Spine) -> Floats:
    """The neck's axis as an arc; its cross-sections and the length of its axis stay."""
    radius = spine.neck_length / spine.bend
    turn = np.minimum(vertices[:, 2], spine.neck_length) / radius
    beyond = np.maximum(vertices[:, 2] - spine.neck_length, 0.0)
    across, up = np.array([np.cos(spine.azimuth), np.sin(spine.azimuth)]), vertices[:, :2]
    along = up @ across
    side = up - along[:, None] * across
    reach = radius - (radius - along) * np.cos(turn) + beyond * np.sin(turn)
    height = (radius - along) * np.sin(turn) + beyond * np.cos(turn)
    return np.column_stack([side + reach[:, None] * across, height])


def head_volume(mesh: sg.Mesh, spine: Spine) -> float:
    """Volume of the mesh without the neck, nm³."""
    return float(mesh.trimesh.volume) - np.pi * spine.neck_radius**2 * spine.neck_length


STUDY = """# Spines of the Harrow block: does a wider neck let a small protein out sooner?
# Shapes, conditions, animals and D are invented for this demo.
# Run: bemescape study meshes/spines.study.toml --out spines_study

[[shapes]]
list = "spines.csv"
unit = "nm"

[[window]]
name = "neck end"
labels = { array = "label", value = 1 }

[accuracy]
target = "1 %"

[sweep]
diffusion = ["10 um^2/s", "40 um^2/s"]
"""


def main() -> None:
    """Write everything and say so."""
    FOLDER.mkdir(exist_ok=True)
    rows = []
    for spine in chosen_spines():
        mesh = sg.single_precision(mesh_of(spine))
        if found := sg.faults(mesh):
            raise RuntimeError(f"{spine.name} is not a sound mesh: {'; '.join(found)}")
        path = FOLDER / f"{spine.name}.ply"
        sg.write_ply(mesh, path, ["demo spine, invented, made by make_spines.py", "unit nm"])
        volume = head_volume(mesh, spine) * 1e-9
        neck = spine.neck_length * 1e-3 / (np.pi * (spine.neck_radius * 1e-3) ** 2)
        rows.append(
            {
                "file": f"spines/{path.name}",
                "group": spine.group,
                "subject": spine.animal,
                "neck_radius_nm": spine.neck_radius,
                "neck_length_nm": spine.neck_length,
                "head_volume_um3": f"{volume:.6g}",
                "neck_formula_um2": f"{volume * neck:.6g}",
            }
        )
        print(spine.name, len(mesh.faces), "faces", trimesh.Trimesh(mesh.vertices, mesh.faces).is_watertight)
    with (HERE / "spines.csv").open("w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, rows[0], lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
    (HERE / "spines.study.toml").write_text(STUDY, encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main()
