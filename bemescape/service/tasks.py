"""What the workers do. They get bytes and hand back bytes, so that they may run on another machine.

Each function answers {"refused": sentence} where the input is at fault; anything else that goes wrong is raised and
is the service's fault. Heavy imports are made inside: the service imports this module only for the names.
"""

from __future__ import annotations

import json
import tempfile
import threading
import time
from collections import OrderedDict
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bemescape.errors import AccuracyError, ConvergenceError, EscapeError
from bemescape.progress import ProgressEvent

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult
    from bemescape.surface.surface import Surface
    from bemescape.windows.grade import GradedMesh
    from bemescape.windows.placement import Placement

__all__ = [
    "MOST_POINTS",
    "SECTION_PIXELS",
    "STUDY_ROW",
    "StoppedByRequest",
    "StudyMember",
    "SurfaceFile",
    "check_run",
    "draw_run",
    "draw_surface",
    "place_run_windows",
    "read_position_file",
    "read_upload",
    "request_stop",
    "section_of_run",
    "slow_regions_of_run",
    "solve_run",
    "table_of_study",
    "times_of_run",
    "warm_up",
]

Answer = dict[str, Any]

#: Fewest and most samples along one side of a section.
SECTION_PIXELS = (8, 160)
#: Most places inside for which one request may ask the time.
MOST_POINTS = 10_000
#: File of a run that belongs to a study: its row of the study's table, as `bemescape.study.measures` measures it.
STUDY_ROW = "study_row.json"
#: Values of a label array that are listed; arrays with more are measurements, not labels.
_MOST_LABELS = 64
#: Colours of the page's 3D view, and the size of a picture drawn in its place.
_WALL, _WINDOW, _PICTURE_PX = "#ccd4db", "#35d0ff", (1000, 720)
_PROGRESS_EVERY_S = 0.25
_KEPT_RESULTS, _KEPT_SURFACES = 3, 3


class StoppedByRequest(Exception):
    """The run was cancelled, or ran into its time limit; the message says which."""


# -- stopping and telling --------------------------------------------------------------------------

_stop_reasons: dict[str, str] = {}


def request_stop(key: str, reason: str) -> None:
    """Run on every worker: a task with this key ends at its next step."""
    _stop_reasons[key] = reason


class _Telling:
    """Sends progress to whoever listens on the scheduler, and stops the work when asked to."""

    def __init__(self, key: str, limit_s: float) -> None:
        self._key, self._ends, self._limit_s = key, time.monotonic() + limit_s, limit_s
        self._told_at, self._stage = 0.0, ""

    def __call__(self, event: ProgressEvent) -> None:
        if self._key in _stop_reasons:
            raise StoppedByRequest(_stop_reasons.pop(self._key))
        now = time.monotonic()
        if now > self._ends:
            raise StoppedByRequest(f"it reached its time limit of {self._limit_s:g} s; ask for a larger target error")
        if event.stage == self._stage and now - self._told_at < _PROGRESS_EVERY_S:
            return
        self._told_at, self._stage = now, event.stage
        _send(self._key, {"stage": event.stage, "done": event.done, "detail": event.detail})


def _send(key: str, event: dict[str, Any]) -> None:
    from distributed import get_worker

    get_worker().log_event(key, event)


def _answers(task: Callable[..., Answer]) -> Callable[..., Answer]:
    """Input that is at fault becomes an answer, without the folder in which the worker put it."""

    @wraps(task)
    def guarded(*args: Any, **options: Any) -> Answer:
        with tempfile.TemporaryDirectory(prefix="bemescape-") as name:
            try:
                return task(Path(name), *args, **options)
            except EscapeError as error:
                kind = "no answer" if isinstance(error, ConvergenceError | AccuracyError) else "input"
                return {"refused": without_folder(str(error), name), "kind": kind}
            except StoppedByRequest as error:
                return {"stopped": str(error)}
            except (MemoryError, RecursionError):
                reason = "it needs more memory than the service gives one task; make it smaller"
                return {"refused": reason, "kind": "input"}

    return guarded


def without_folder(message: str, folder: str) -> str:
    """A message without the place on disk that only the service knows."""
    return message.replace(f"{folder}/", "").replace(folder, "the upload")


# -- short work: uploads and previews --------------------------------------------------------------


@dataclass(frozen=True)
class SurfaceFile:
    """A surface as it was uploaded; `name` without folder and ending."""

    sha256: str
    name: str
    suffix: str
    unit: str | list[str]
    heal: str
    data: bytes


class _Kept:
    """The last few things that were read, by key; reading them again would take most of the time of a preview."""

    def __init__(self, most: int) -> None:
        self._most, self._lock = most, threading.Lock()
        self._values: OrderedDict[Any, Any] = OrderedDict()

    def get(self, key: Any, make: Callable[[], Any]) -> Any:
        with self._lock:
            if key in self._values:
                self._values.move_to_end(key)
                return self._values[key]
        value = make()
        with self._lock:
            self._values[key] = value
            while len(self._values) > self._most:
                self._values.popitem(last=False)
        return value


_surfaces, _results = _Kept(_KEPT_SURFACES), _Kept(_KEPT_RESULTS)


def warm_up() -> bool:
    """Import what previews and uploads need, so that the first of them does not wait."""
    import bemescape.surface.heal
    import bemescape.surface.read
    import bemescape.windows.grade  # noqa: F401

    return True


@_answers
def read_upload(folder: Path, upload: SurfaceFile, most_faces: int) -> Answer:
    """Health of an uploaded mesh, what healing changes, and buffers for the page."""
    from bemescape.errors import SurfaceError
    from bemescape.service.buffers import surface_buffers
    from bemescape.surface.heal import heal_surface
    from bemescape.surface.read import read_unhealed

    raw = read_unhealed(_written(folder, upload), unit=_unit(upload.unit))
    if len(raw.faces) > most_faces:
        raise SurfaceError(f"{upload.name} has {len(raw.faces)} faces (limit here {most_faces}); thin it out first")
    healed, reason = None, None
    try:
        healed = heal_surface(raw, upload.heal)  # type: ignore[arg-type]
    except EscapeError as error:
        reason = without_folder(str(error), str(folder))
    shown = healed if healed is not None else raw
    health = raw.health.to_dict() if raw.health is not None else None
    report = {
        "sha256": raw.sha256,
        "faces": len(shown.faces),
        "vertices": len(shown.vertices),
        "unit_um": raw.unit_um.tolist(),
        "bounds_um": shown.bounds.tolist(),
        "volume_um3": shown.volume,
        "area_um2": shown.area,
        "solvable": healed is not None,
        "reason": reason,
        "health": health,
        "health_lines": raw.health.lines() if raw.health is not None else [],
        "healing": healed.healing.to_dict() if healed is not None and healed.healing is not None else None,
        "healing_lines": healed.healing.lines() if healed is not None and healed.healing is not None else [],
        "label_arrays": _label_arrays(shown),
    }
    return {
        "report": report,
        "mesh": surface_buffers(shown),
        "healed": None if healed is None else _as_vtp(folder, healed),
    }


def _label_arrays(surface: Surface) -> list[dict[str, Any]]:
    import numpy as np

    found = []
    for carrier, arrays in (("faces", surface.face_data), ("vertices", surface.vertex_data)):
        for name, array in arrays.items():
            values = np.asarray(array)
            if values.ndim != 1 or values.dtype.kind not in "iufb":
                continue
            known, counts = np.unique(values, return_counts=True)
            if 2 <= len(known) <= _MOST_LABELS and np.isfinite(known.astype(float)).all():
                entries = [
                    {"value": float(value), "count": int(count)} for value, count in zip(known, counts, strict=True)
                ]
                found.append({"name": str(name), "on": carrier, "values": entries})
    return found


def _as_vtp(folder: Path, surface: Surface) -> bytes:
    """The surface in units of its file, with its arrays."""
    import pyvista

    mesh = pyvista.PolyData.from_regular_faces(surface.vertices / surface.unit_um, surface.faces)
    for target, arrays in ((mesh.cell_data, surface.face_data), (mesh.point_data, surface.vertex_data)):
        for name, array in arrays.items():
            target[name] = array
    path = folder / "healed.vtp"
    mesh.save(path)
    return path.read_bytes()


def _written(folder: Path, upload: SurfaceFile) -> Path:
    """The upload under a name of ours that reads well in a message."""
    path = folder / f"{_plain_name(upload.name)}{upload.suffix}"
    path.write_bytes(upload.data)
    return path


def _plain_name(name: str) -> str:
    kept = "".join(letter if letter.isalnum() or letter in "-_" else "_" for letter in name)[:60]
    return kept if kept.strip("_") else "surface"


def _unit(unit: str | list[str]) -> str | tuple[str, ...]:
    return unit if isinstance(unit, str) else tuple(unit)


def _loaded_surface(folder: Path, upload: SurfaceFile) -> Surface:
    from bemescape.surface.read import read_surface

    key = (upload.sha256, upload.suffix, json.dumps(upload.unit), upload.heal)
    surface: Surface = _surfaces.get(
        key,
        lambda: read_surface(_written(folder, upload), unit=_unit(upload.unit), heal=upload.heal),  # type: ignore[arg-type]
    )
    return surface


@_answers
def read_position_file(folder: Path, data: bytes) -> Answer:
    """How many positions a CSV file holds."""
    import numpy as np

    from bemescape.windows.positions import read_positions

    path = folder / "positions.csv"
    path.write_bytes(data)
    places, _ = read_positions(path, otherwise_um=np.ones(3))
    return {"rows": len(places)}


@_answers
def place_run_windows(
    folder: Path, upload: SurfaceFile, table: Mapping[str, Any], files: Mapping[str, bytes], most_panels: int
) -> Answer:
    """The true part of the wall that each window takes, cut as the solve cuts it, for the page."""
    import numpy as np

    from bemescape.service.buffers import windows_buffers
    from bemescape.surface.surface import triangle_areas_normals

    _write_files(folder, files)
    mesh, placement = _placed(folder, upload, table, most_panels)
    areas, _ = triangle_areas_normals(mesh.vertices, mesh.faces)
    windows = [
        {
            "name": window.name,
            "area_um2": float(areas[mesh.window_of == number].sum()),
            "place_um": [float(value) for value in np.asarray(patch.touchdown_um)],
            "radius_um": float(patch.radius_um),
        }
        for number, (window, patch) in enumerate(zip(placement.windows, placement.patches, strict=True))
    ]
    return {"buffers": windows_buffers(mesh, windows, list(placement.notes))}


def _placed(
    folder: Path, upload: SurfaceFile, table: Mapping[str, Any], most_panels: int
) -> tuple[GradedMesh, Placement]:
    """The wall with its windows cut; the files of the case lie in the folder."""
    from bemescape.case import parse_case
    from bemescape.windows.grade import Fineness, graded, place_windows

    surface = _loaded_surface(folder, upload)
    case = parse_case(table, folder=folder, name=upload.name, source="the openings")
    placement = place_windows(surface, case.windows_for(surface))
    # Rims as round as they look on a screen; nothing else is refined.
    return graded(placement, Fineness(rim_segments=40, layers=0, wall_panels=8), most_faces=most_panels), placement


@_answers
def draw_surface(
    folder: Path,
    upload: SurfaceFile,
    table: Mapping[str, Any] | None,
    files: Mapping[str, bytes],
    most_panels: int,
    towards: tuple[float, float, float],
) -> Answer:
    """A picture of a surface with its windows (none without a table), for a browser that cannot draw it."""
    import numpy as np
    import pyvista

    from bemescape.surface.read import read_unhealed

    _write_files(folder, files)
    if table is None:
        surface = read_unhealed(_written(folder, upload), unit=_unit(upload.unit))
        parts = [(surface.vertices, surface.faces, _WALL)]
    else:
        mesh, _ = _placed(folder, upload, table, most_panels)
        inside = mesh.window_of >= 0
        parts = [(mesh.vertices, mesh.faces[~inside], _WALL), (mesh.vertices, mesh.faces[inside], _WINDOW)]
    plotter = pyvista.Plotter(off_screen=True, window_size=list(_PICTURE_PX))
    try:
        plotter.set_background("white")
        for vertices, faces, colour in parts:
            if len(faces):
                plotter.add_mesh(pyvista.PolyData.from_regular_faces(vertices, faces), color=colour)
        low, high = np.min(parts[0][0], axis=0), np.max(parts[0][0], axis=0)
        direction = np.asarray(towards) / np.linalg.norm(towards)
        plotter.camera_position = [0.5 * (low + high) + direction, 0.5 * (low + high), (0.0, 0.0, 1.0)]
        plotter.reset_camera()
        plotter.screenshot(folder / "picture.png")
    finally:
        plotter.close()
    return {"picture": (folder / "picture.png").read_bytes()}


# -- runs ------------------------------------------------------------------------------------------


def _write_files(folder: Path, files: Mapping[str, bytes]) -> None:
    for name, data in files.items():
        (folder / name).write_bytes(data)


@_answers
def solve_run(
    folder: Path,
    key: str,
    name: str,
    table: Mapping[str, Any],
    files: Mapping[str, bytes],
    limit_s: float,
    *,
    for_study: bool = False,
) -> Answer:
    """Solve a case whose files are given by name; the result as files, with buffers for the page."""
    from bemescape.case import parse_case

    tell = _Telling(key, limit_s)
    _write_files(folder, files)
    result = parse_case(table, folder=folder, name=name, source="the order").solve(tell)
    tell(ProgressEvent("saving"))
    answer = _packed_result(result, folder / "out")
    if for_study:
        from bemescape.study.measures import measured

        answer["files"][STUDY_ROW] = json.dumps(dict(measured(result))).encode()
    return answer


def _packed_result(result: EscapeResult, folder: Path) -> Answer:
    from bemescape.results.store import save_result
    from bemescape.service.buffers import result_buffers

    save_result(result, folder, pictures=False)
    files = {path.name: path.read_bytes() for path in sorted(folder.iterdir())}
    return {
        "files": {**files, "mesh.buffers": result_buffers(result)},
        "summary": result.summary.model_dump_json(),
    }


def _loaded_result(folder: Path, run: Mapping[str, Any]) -> EscapeResult:
    def load() -> EscapeResult:
        from bemescape.results.store import load_result

        _write_files(folder, run["files"])
        return load_result(folder)

    result: EscapeResult = _results.get(run["key"], load)
    return result


@_answers
def draw_run(folder: Path, run: Mapping[str, Any]) -> Answer:
    """Pictures and report of a result."""
    from bemescape.results.store import PICTURES, REPORT, add_pictures, load_result

    _write_files(folder, run["files"])
    add_pictures(load_result(folder), folder)
    return {"files": {name: (folder / name).read_bytes() for name in (*PICTURES, REPORT) if (folder / name).is_file()}}


@_answers
def check_run(folder: Path, key: str, run: Mapping[str, Any], limit_s: float) -> Answer:
    """A second opinion on a result by another method; the result with it, as files."""
    from dataclasses import replace

    from bemescape.results.store import load_result

    tell = _Telling(key, limit_s)
    _write_files(folder, run["files"])
    result = load_result(folder)
    opinion = result.crosscheck(progress=tell)
    return {**_packed_result(replace(result, crosschecked=opinion), folder / "out"), "statement": opinion.line}


# -- questions to a result -------------------------------------------------------------------------


@_answers
def slow_regions_of_run(folder: Path, run: Mapping[str, Any], wall_fraction: float) -> Answer:
    """Slow regions at another part of the wall."""
    regions = _loaded_result(folder, run).slow_regions(wall_fraction)
    return {
        "wall_fraction": regions.wall_fraction,
        "level_s": regions.level_s,
        "regions": [
            {
                "area_um2": region.area_um2,
                "mean_time_s": region.mean_time_s,
                "centre_um": list(region.centre_um),
                "distance_to_window_um": region.distance_to_window_um,
                "nearest_window": region.nearest_window,
            }
            for region in regions
        ],
    }


@_answers
def section_of_run(
    folder: Path,
    run: Mapping[str, Any],
    point_um: tuple[float, float, float],
    normal: tuple[float, float, float],
    pixels: int,
) -> Answer:
    """Time inside on a plane: a square grid of samples, NaN outside, with its corner and its two steps."""
    import numpy as np

    from bemescape.errors import SettingsError
    from bemescape.service.buffers import packed

    result = _loaded_result(folder, run)
    n = np.asarray(normal, dtype=np.float64)
    length = np.linalg.norm(n)
    if not (np.isfinite(length) and length > 0.0):
        raise SettingsError("the normal of the section has no direction; give one that is not (0, 0, 0)")
    n /= length
    helper = np.eye(3)[np.abs(n).argmin()]
    u = np.cross(n, helper)
    u /= np.linalg.norm(u)
    v = np.cross(n, u)
    origin = np.asarray(point_um, dtype=np.float64)
    middle = result.vertices.mean(axis=0)
    place = middle + n * ((origin - middle) @ n)  # the point of the plane that is closest to the middle of the shape
    relative = result.vertices - place
    low = np.array([(relative @ u).min(), (relative @ v).min()])
    high = np.array([(relative @ u).max(), (relative @ v).max()])
    step = float((high - low).max() / pixels)
    columns, rows = (max(1, int(np.ceil(side / step))) for side in high - low)
    a = low[0] + step * (np.arange(columns) + 0.5)
    b = low[1] + step * (np.arange(rows) + 0.5)
    points = place + a[None, :, None] * u + b[:, None, None] * v
    times = result.time_at(points.reshape(-1, 3), outside="nan").reshape(rows, columns)
    header = {
        "corner_um": (place + low[0] * u + low[1] * v).tolist(),
        "along_um": (u * step * columns).tolist(),
        "up_um": (v * step * rows).tolist(),
        "step_um": step,
    }
    return {"buffers": packed(header, {"time_s": times})}


@_answers
def times_of_run(folder: Path, run: Mapping[str, Any], points_um: list[tuple[float, float, float]]) -> Answer:
    """Mean escape time from places inside or on the wall; None outside."""
    import numpy as np

    times = _loaded_result(folder, run).time_at(np.asarray(points_um, dtype=np.float64), outside="nan")
    return {"time_s": [float(value) if np.isfinite(value) else None for value in times]}


# -- studies ---------------------------------------------------------------------------------------


@dataclass(frozen=True)
class StudyMember:
    """One surface of a study and what became of its run: `values` measured, or `failure` in a sentence."""

    run: str
    shape: str
    group: str
    subject: str
    mesh_sha256: str
    values: Mapping[str, Any] | None
    seconds: float
    failure: str


@_answers
def table_of_study(
    folder: Path, name: str, motion: Mapping[str, Any], subjects: str, members: list[StudyMember]
) -> Answer:
    """Table (CSV) and statistics (JSON) of a study, made by the code that makes them for a study file."""
    from bemescape.service.spreadsheets import harmless
    from bemescape.study.document import Study, StudyDocument
    from bemescape.study.plan import PlannedCase, StudyPlan
    from bemescape.study.shapes import StudyShape
    from bemescape.study.statistics import study_statistics
    from bemescape.study.store import StoredCase
    from bemescape.study.table import make_table, table_as_csv

    document = StudyDocument.model_validate(
        {"shapes": [{"files": "*"}], "motion": motion, "statistics": {"subjects": subjects}}
    )
    shapes = [
        StudyShape(member.shape, folder, member.shape, "um", "auto", group=member.group, subject=member.subject)
        for member in members
    ]
    cases = [
        PlannedCase(
            name=shape.name,
            shape=shape,
            swept={},
            table={},
            files={},
            key=member.run,
            solve_key=member.run,
            mesh_sha256=member.mesh_sha256,
            faces=0,
            estimated_s=0.0,
            estimated_mb=0.0,
        )
        for shape, member in zip(shapes, members, strict=True)
    ]
    plan = StudyPlan(Study(name, folder, document, {}), tuple(shapes), tuple(cases))
    stored = {
        member.run: StoredCase(member.run, folder, member.values, member.seconds, "")
        for member in members
        if member.values is not None
    }
    table = make_table(plan, stored, {member.run: member.failure for member in members})
    statistics = study_statistics(plan, table)
    for column in table.select_dtypes(exclude="number"):
        table[column] = table[column].map(harmless)
    return {"csv": table_as_csv(table).decode(), "statistics": statistics.model_dump_json()}
