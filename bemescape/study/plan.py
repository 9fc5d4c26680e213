"""From a study to its cases: every shape with every combination of swept values, each with a key and an estimate."""

from __future__ import annotations

import hashlib
import itertools
import json
import math
import os
import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from bemescape.case import CaseDocument, parse_case
from bemescape.errors import SettingsError
from bemescape.study.document import SWEPT, Study
from bemescape.study.shapes import StudyShape, find_shapes, overridden
from bemescape.version import __version__

__all__ = ["PlannedCase", "StudyPlan", "plan_study"]

#: A file beside the mesh, `NAME.windows.toml`, whose [[window]] tables replace those of the study for this shape.
SIDECAR = ".windows.toml"
#: Changes when the same input would be stored differently.
KEY_FORMAT = "bemescape case 1"
MOST_CASES = 200_000

# A process that has loaded the solver, and what a panel adds to it; measured on balls, spines and branched tubes of
# 2 000 to 40 000 panels (`tests/bench/solve.py`), rounded up.
_BASE_MB, _MB_PER_PANEL = 450.0, 0.015
# Seconds of one thread for the three resolutions that most cases need.
_BASE_S, _S_PER_PANEL = 0.6, 1.3e-3
#: Panels of the last resolution: those of the file, more beside rims, and finer below the 1 % target.
_LEAST_PANELS = 2500


@dataclass(frozen=True)
class PlannedCase:
    """One solve of the study.

    Attributes
    ----------
    name : str
        The shape's name with the swept values: "spine_07 D=20".
    shape : StudyShape
    swept : mapping of str to float
        Column of the table -> value in µm, s.
    table : mapping
        The whole case file; its files are plain names in one folder.
    files : mapping of str to Path
        These names -> where the files are.
    key : str
        Checksum of everything that the answer depends on: files, windows, settings, version.
    solve_key : str
        The same without D where all windows absorb perfectly: one solve then serves every D.
    mesh_sha256 : str
    faces : int
        Faces of the mesh file, from its header or size.
    estimated_s, estimated_mb : float
        Time of one thread and memory of a process; rough, corrected by what was measured as cases finish.
    """

    name: str
    shape: StudyShape
    swept: Mapping[str, float]
    table: Mapping[str, Any]
    files: Mapping[str, Path]
    key: str
    solve_key: str
    mesh_sha256: str
    faces: int
    estimated_s: float
    estimated_mb: float


@dataclass(frozen=True)
class StudyPlan:
    """What a study will solve.

    Attributes
    ----------
    study : Study
    shapes : tuple of StudyShape
    cases : tuple of PlannedCase
        Shape by shape, sweeps in the order of the file.
    """

    study: Study
    shapes: tuple[StudyShape, ...]
    cases: tuple[PlannedCase, ...]

    @cached_property
    def distinct(self) -> dict[str, PlannedCase]:
        """Key -> the first case that has it: equal cases are solved once."""
        first: dict[str, PlannedCase] = {}
        for case in self.cases:
            first.setdefault(case.key, case)
        return first

    @property
    def swept_columns(self) -> tuple[str, ...]:
        """Columns of the table that tell the cases of one shape apart."""
        return tuple(self.cases[0].swept) if self.cases else ()

    def estimated_s(self, workers: int, skip: frozenset[str] = frozenset()) -> float:
        """Seconds on so many workers for the cases whose key is not in `skip`."""
        solves = {case.solve_key: case.estimated_s for key, case in self.distinct.items() if key not in skip}
        left = list(solves.values())
        return max([sum(left) / workers, *left]) if left else 0.0


def plan_study(study: Study) -> StudyPlan:
    """Look up the shapes and lay out the cases; nothing is solved, meshes are not parsed.

    Raises
    ------
    SettingsError
        A shape or one of the files that its windows name is missing, or a rule for a window is wrong; the message
        names the row of the list.
    """
    shapes = find_shapes(study)
    combinations = list(_combinations(study))
    if len(shapes) * len(combinations) > MOST_CASES:
        raise SettingsError(
            f"study {study.name!r} has {len(shapes)} shapes × {len(combinations)} swept values = "
            f"{len(shapes) * len(combinations)} cases (limit {MOST_CASES}); sweep fewer values"
        )
    sums: dict[Path, str] = {}
    cases = []
    for shape in shapes:
        rules = _windows_of(study, shape)
        faces = estimated_faces(shape.path)
        for chosen in combinations:
            cases.append(_planned(study, shape, rules, chosen, faces, sums))
    return StudyPlan(study, shapes, tuple(cases))


def _combinations(study: Study) -> Sequence[dict[str, Any]]:
    sweep = study.document.sweep
    swept = {key: getattr(sweep, key) for key in SWEPT if getattr(sweep, key)}
    return [dict(zip(swept, values, strict=True)) for values in itertools.product(*swept.values())]


@dataclass(frozen=True)
class _Rules:
    """The windows of one shape as tables, the folder that their files are relative to, and where they are written."""

    windows: Sequence[Mapping[str, Any]]
    folder: Path
    place: str


def _windows_of(study: Study, shape: StudyShape) -> _Rules:
    sidecar = shape.path.with_name(shape.path.stem + SIDECAR)
    windows, folder, place = list(study.table.get("window", [])), study.folder, shape.place
    if sidecar.exists():
        windows, folder, place = _sidecar_windows(sidecar), sidecar.parent, f"{shape.place}, {sidecar.name}"
    if not windows:
        raise SettingsError(
            f"{shape.place}: shape {shape.name!r} has no window; add a [[window]] to the study, or a file "
            f"{sidecar.name} beside the mesh"
        )
    return _Rules(overridden(windows, shape), folder, place)


def _sidecar_windows(path: Path) -> list[dict[str, Any]]:
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError, RecursionError, ValueError) as error:
        raise SettingsError(f"{path} is not valid TOML: {' '.join(str(error).split())[:200]}") from error
    found: Any = table.get("window")
    windows = [window for window in found if isinstance(window, dict)] if isinstance(found, list) else []
    if set(table) != {"window"} or not windows or len(windows) < len(found):
        others = sorted(set(table) - {"window"})
        raise SettingsError(
            f"{path} holds {', '.join(map(repr, others)) if others else 'no [[window]]'}; a windows file beside a mesh "
            "holds [[window]] tables and nothing else"
        )
    return windows


def _planned(
    study: Study,
    shape: StudyShape,
    rules: _Rules,
    chosen: Mapping[str, Any],
    faces: int,
    sums: dict[Path, str],
) -> PlannedCase:
    table: dict[str, Any] = {
        "surface": {"file": shape.path.name, "unit": _listed(shape.unit), "heal": shape.heal},
        "motion": {"diffusion": chosen["diffusion"]} if "diffusion" in chosen else dict(study.table["motion"]),
        "window": _swept_windows(study, rules.windows, chosen),
        "accuracy": dict(study.table.get("accuracy", {})),
    }
    case = parse_case(table, folder=rules.folder, name=shape.name, source=rules.place)
    files = {shape.path.name: shape.path}
    for window in table["window"]:
        for part in window.values():
            if isinstance(part, dict) and isinstance(part.get("file"), str):
                path = rules.folder / part["file"]
                if not path.is_file():
                    raise SettingsError(
                        f"{rules.place}: window {window.get('name')!r} names the file {part['file']!r}, but there is "
                        f"no file {path}"
                    )
                part["file"] = _free_name(path, files)
                files[part["file"]] = path
    for key in _idle_sweeps(study, table["window"], chosen):
        needs = "" if key == "permeability" else f"it needs a window with a {key}, and "
        raise SettingsError(
            f"{shape.place}: [sweep] {key} has no window to act on; {needs}[sweep] window, if given, must be its name"
        )
    checksums = {name: _sha256(path, sums) for name, path in files.items()}
    document = case.document
    values = {SWEPT[key].column: SWEPT[key].parse(value) for key, value in chosen.items()}
    panels = max(_LEAST_PANELS, 1.8 * faces) * max(1.0, 0.01 / document.accuracy.target) ** 0.5
    return PlannedCase(
        name=" ".join([shape.name, *(f"{SWEPT[key].letter}={value}" for key, value in chosen.items())]),
        shape=shape,
        swept=values,
        table=table,
        files=files,
        key=_key(document, table, checksums),
        solve_key=_key(document, table, checksums, any_diffusion=_scales_with_diffusion(document)),
        mesh_sha256=checksums[shape.path.name],
        faces=faces,
        estimated_s=_BASE_S + _S_PER_PANEL * panels,
        estimated_mb=_BASE_MB + _MB_PER_PANEL * panels,
    )


def _listed(unit: str | tuple[str, ...]) -> str | list[str]:
    return unit if isinstance(unit, str) else list(unit)


def _swept_windows(
    study: Study, windows: Sequence[Mapping[str, Any]], chosen: Mapping[str, Any]
) -> list[dict[str, Any]]:
    """Copies of the rules with the swept radius, permeability, count and seed put in where they apply."""
    only = study.document.sweep.window
    made = []
    for window in windows:
        entry = {key: dict(part) if isinstance(part, Mapping) else part for key, part in window.items()}
        if only is None or entry.get("name") == only:
            if "permeability" in chosen:
                entry["permeability"] = chosen["permeability"]
            for part in (part for part in entry.values() if isinstance(part, dict)):
                if "radius" in chosen and "radius" in part:
                    part["radius"] = chosen["radius"]
                if "count" in part or "density" in part:
                    part |= {key: chosen[key] for key in ("count", "seed") if key in chosen}
                    if "count" in chosen:
                        part.pop("density", None)
        made.append(entry)
    return made


def _idle_sweeps(study: Study, windows: Sequence[Mapping[str, Any]], chosen: Mapping[str, Any]) -> list[str]:
    """The swept keys of windows that act on none of them."""
    only = study.document.sweep.window
    parts = [
        part
        for window in windows
        if only is None or window.get("name") == only
        for part in window.values()
        if isinstance(part, dict)
    ]
    is_scatter = any("count" in part for part in parts)
    acts = {
        "radius": any("radius" in part for part in parts),
        "permeability": bool(parts),
        "count": is_scatter,
        "seed": is_scatter,
    }
    return [key for key in acts if key in chosen and not acts[key]]


def _free_name(path: Path, files: Mapping[str, Path]) -> str:
    """A name for a file in the one folder of a case: its own, or with a number before it."""
    names = [path.name, *(f"{number}-{path.name}" for number in range(2, len(files) + 3))]
    return next(name for name in names if files.get(name, path) == path)


def _sha256(path: Path, known: dict[Path, str]) -> str:
    if path not in known:
        try:
            with path.open("rb") as stream:
                known[path] = hashlib.file_digest(stream, "sha256").hexdigest()
        except OSError as error:
            raise SettingsError(f"{path} cannot be read: {error.strerror or error}") from error
    return known[path]


def _scales_with_diffusion(document: CaseDocument) -> bool:
    """Whether every time of the case is in proportion to 1/D."""
    return all(math.isinf(window.permeability_um_s) for window in document.window)


def _key(
    document: CaseDocument, table: Mapping[str, Any], checksums: Mapping[str, str], *, any_diffusion: bool = False
) -> str:
    """Names of files are replaced by checksums: a renamed or moved copy is the same case."""
    content = document.model_dump(mode="json")
    if any_diffusion:
        del content["motion"]
    content["surface"]["file"] = checksums[table["surface"]["file"]]
    for entry, written in zip(content["window"], table["window"], strict=True):
        for kind, part in entry.items():
            if isinstance(part, dict) and "file" in part:
                part["file"] = checksums[written[kind]["file"]]
    text = json.dumps([KEY_FORMAT, __version__, content], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()


_PLY_FACES = re.compile(rb"element\s+face\s+(\d{1,12})")
#: Bytes of a triangle with its half of a vertex, where the header does not count them.
_BYTES_PER_FACE = {".obj": 35, ".off": 30, ".glb": 18, ".gltf": 24, ".vtp": 60, ".vtk": 40, ".ply": 25}


def estimated_faces(path: Path) -> int:
    """Number of triangles of a mesh file by its header, or by its size where none says it."""
    try:
        size = os.path.getsize(path)
        with path.open("rb") as stream:
            head = stream.read(4096)
    except OSError as error:
        raise SettingsError(f"{path} cannot be read: {error.strerror or error}") from error
    suffix = path.suffix.lower()
    if suffix == ".ply" and (match := _PLY_FACES.search(head)):
        return min(int(match[1]), size)
    if suffix == ".stl":
        text = head[:5] == b"solid" and b"facet" in head
        return max(1, size // 250 if text else (size - 84) // 50)
    return max(1, math.ceil(size / _BYTES_PER_FACE.get(suffix, 30)))
