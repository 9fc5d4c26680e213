"""Results on disk: written so that a crash leaves no half answer, read back without solving again.

A result folder holds

- `summary.json`: the answer for machines (`bemescape.results.summary`); it appears last, so that where it is
  the numbers are complete;
- `surface.vtp`: the panels with their values, for other programs;
- `result.npz`: everything, exactly, for `load_result`; arrays and one JSON text, no pickled objects;
- pictures and `report.html`, if wanted: made from the numbers, after them.
"""

from __future__ import annotations

import json
import math
import os
import tempfile
import zipfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import asdict, fields, is_dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bemescape.errors import EscapeError, SettingsError
from bemescape.results.pores import PoreTable
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.second_opinion import CrossCheck, WalkerEstimate
from bemescape.results.spread import Spread
from bemescape.results.starts import StartResult
from bemescape.results.summary import Summary
from bemescape.results.ways_out import WaysOut

__all__ = ["add_pictures", "is_result_folder", "load_result", "save_result"]

SUMMARY, SURFACE, VALUES, REPORT = "summary.json", "surface.vtp", "result.npz", "report.html"
#: What `save_pictures` writes: removed with the result they show, when it is replaced.
PICTURES = (
    "view_front.png",
    "view_side.png",
    "view_top.png",
    "cutaway.png",
    "windows.png",
    "spread.png",
    "survival.png",
    "convergence.png",
)
_FORMAT = "bemescape result 3"
_HEADER = "header_json"
STAGING = ".saving-"

#: Array fields of a result: kind, and length of each row (0: one number).
_ARRAYS: Mapping[str, tuple[type[np.generic], int]] = {
    "vertices": (np.float64, 3),
    "faces": (np.int64, 3),
    "parent_face": (np.int64, 0),
    "panel_window": (np.int64, 0),
    "panel_time_s": (np.float64, 0),
    "panel_exit_density_per_um2": (np.float64, 0),
}
#: Parts of a result that may be missing: name -> their class, and their arrays with a value, or a row, to a panel.
_PARTS: Mapping[str, tuple[Any, tuple[str, ...]]] = {
    "pores": (PoreTable, ()),
    "spread": (Spread, ("panel_second_moment_s2", "panel_second_slope_s2_per_um")),
    "ways_out": (
        WaysOut,
        (
            "panel_splitting",
            "panel_splitting_slope_per_um",
            "panel_weighted_time_s",
            "panel_weighted_slope_s_per_um",
        ),
    ),
}


def save_result(result: EscapeResult, folder: Path, *, pictures: bool = True) -> Path:
    """Write a result into a folder, which is made if need be.

    A result that was saved there before is replaced, with its pictures.

    Parameters
    ----------
    result : EscapeResult
        What to save.
    folder : Path
        Where to; its other files are left alone.
    pictures : bool, default True
        Whether to render PNGs and `report.html` too, which takes seconds.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    SettingsError
        The folder cannot be written, or files of the same names in it belong to something else.
    """
    folder = Path(folder)
    # Everything that may fail in the making is made before an earlier result is touched.
    summary = result.summary.model_dump_json(indent=2) + "\n"
    with _writing(folder):
        folder.mkdir(parents=True, exist_ok=True)
        _refuse_foreign_files(folder)
        with tempfile.TemporaryDirectory(prefix=STAGING, dir=folder) as name:
            staging = Path(name)
            _write_values(result, staging / VALUES)
            _write_surface(result, staging / SURFACE)
            (staging / SUMMARY).write_text(summary, encoding="utf-8")
            for old in (folder / SUMMARY, *_picture_files(folder)):
                old.unlink(missing_ok=True)
            for part in (VALUES, SURFACE, SUMMARY):
                os.replace(staging / part, folder / part)
    if pictures:
        add_pictures(result, folder)
    return folder


def add_pictures(result: EscapeResult, folder: Path) -> None:
    """Render the pictures and `report.html` of a result into the folder where it is saved.

    Raises
    ------
    SettingsError
        The folder cannot be written.
    """
    from bemescape.viz.pictures import save_pictures
    from bemescape.viz.report import write_report

    with _writing(folder), tempfile.TemporaryDirectory(prefix=STAGING, dir=folder) as name:
        staging = Path(name)
        pictures = save_pictures(result, staging)
        write_report(result, staging / REPORT, pictures=pictures)
        for made in sorted(staging.iterdir()):
            os.replace(made, folder / made.name)


def is_result_folder(folder: str | Path) -> bool:
    """Whether a folder holds a saved result (or one whose saving was cut short)."""
    try:
        with zipfile.ZipFile(Path(folder) / VALUES) as archive:
            return f"{_HEADER}.npy" in archive.namelist()
    except (OSError, ValueError, zipfile.BadZipFile):
        return False


def load_result(folder: Path) -> EscapeResult:
    """Read back what `save_result` wrote; nothing is solved again.

    Raises
    ------
    SettingsError
        The folder holds no complete result, or one of its files is damaged.
    """
    folder = Path(folder)
    if not folder.is_dir():
        raise SettingsError(
            f"there is no result folder {folder}; give the folder that a solve wrote"
            if not folder.exists()
            else f"{folder} is a file; give the folder that a solve wrote"
        )
    missing = [name for name in (SUMMARY, VALUES) if not (folder / name).is_file()]
    if missing:
        raise SettingsError(
            f"{folder} is not a complete result: {' and '.join(missing)} missing; give the folder that a solve wrote"
        )
    with _reading(folder / SUMMARY):
        summary = Summary.model_validate_json((folder / SUMMARY).read_bytes())
    with _reading(folder / VALUES):
        result = _read_values(folder / VALUES)
    if (summary.name, summary.mean_time_s, summary.panels) != (
        result.name,
        result.mean_time_s,
        len(result.faces),
    ):
        raise SettingsError(f"{folder} mixes files of two results ({SUMMARY} and {VALUES} differ); solve again")
    # A cached property: measuring again would only repeat what is on disk.
    result.__dict__["summary"] = summary
    return result


def _write_values(result: EscapeResult, path: Path) -> None:
    header = {
        field.name: _plain(getattr(result, field.name))
        for field in fields(EscapeResult)
        if field.name not in _ARRAYS and field.name not in _PARTS
    }
    arrays: dict[str, Any] = {}
    for name, (kind, _) in _ARRAYS.items():
        arrays[name] = np.ascontiguousarray(getattr(result, name), dtype=kind)
    for name, (_, on_panels) in _PARTS.items():
        part = getattr(result, name)
        header[name] = None
        if part is not None:
            header[name] = {
                entry.name: _plain(getattr(part, entry.name)) for entry in fields(part) if entry.name not in on_panels
            }
            for array in on_panels:
                arrays[f"{name}.{array}"] = np.ascontiguousarray(getattr(part, array), dtype=np.float64)
    text = json.dumps({"format": _FORMAT, **header}).encode()
    arrays[_HEADER] = np.frombuffer(text, dtype=np.uint8)
    with path.open("wb") as stream:
        np.savez(stream, **arrays)


def _plain(value: Any) -> Any:
    """As JSON holds it; floats keep all digits."""
    if is_dataclass(value) and not isinstance(value, type):
        return _plain(asdict(value))
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [_plain(entry) for entry in value]
    if isinstance(value, np.ndarray | np.generic):
        return _plain(value.tolist())
    if value is None or isinstance(value, bool | int | float | str):
        return value
    return str(value)


def _read_values(path: Path) -> EscapeResult:
    with np.load(path, allow_pickle=False) as archive:
        header = json.loads(bytes(archive[_HEADER]).decode())
        if header.pop("format", None) != _FORMAT:
            raise ValueError("written by another version of the program")
        arrays = {name: archive[name] for name in _ARRAYS}
        on_panels = {
            name: {array: archive[f"{name}.{array}"] for array in names}
            for name, (_, names) in _PARTS.items()
            if header[name] is not None
        }
    _check_arrays(arrays, windows=len(header["windows"]))
    parts = {name: _read_part(name, header.pop(name), on_panels.get(name, {}), arrays) for name in _PARTS}
    _check_pores(parts, panels=len(arrays["faces"]), windows=len(header["windows"]))
    for array in arrays.values():
        array.setflags(write=False)
    return EscapeResult(**arrays, **parts, **_typed(header))


def _read_part(
    name: str, plain: dict[str, Any] | None, on_panels: dict[str, NDArray[Any]], arrays: Mapping[str, NDArray[Any]]
) -> Any:
    if plain is None:
        return None
    kind, _ = _PARTS[name]
    rows = (len(plain["windows"]),) if kind is WaysOut else ()
    for key, array in on_panels.items():
        if array.dtype != np.float64 or array.shape != (*rows, len(arrays["faces"])):
            raise ValueError(f"{name}.{key} is {array.dtype} {array.shape}")
        array.setflags(write=False)
    values = {key: np.array(value) if isinstance(value, list) else value for key, value in plain.items()}
    if kind is WaysOut:
        values["windows"] = tuple(plain["windows"])
    return kind(**on_panels, **values)


def _check_pores(parts: Mapping[str, Any], *, panels: int, windows: int) -> None:
    """Shapes and ranges of what the parts hold of compact pores."""
    table, spread, ways = parts["pores"], parts["spread"], parts["ways_out"]
    count = 0
    if table is not None:
        count = len(table)
        for entry in fields(PoreTable):
            array = getattr(table, entry.name)
            rows = (count, 3) if entry.name in ("centre_um", "normal") else (count,)
            kind = np.int64 if entry.name in ("window", "panel") else np.float64
            if array.shape != rows or array.dtype != kind or not np.isfinite(array).all():
                raise ValueError(f"pores.{entry.name} is {array.dtype} {array.shape}")
        for name, end in (("window", windows), ("panel", panels)):
            array = getattr(table, name)
            if count == 0 or array.min() < 0 or array.max() >= end:
                raise ValueError(f"pores.{name} points outside its range")
        if table.radius_um.min() <= 0.0:
            raise ValueError("pores.radius_um holds a radius that is not above 0")
    outflows: list[tuple[Any, tuple[int, ...]]] = [] if spread is None else [(spread.pore_second_outflow, (count,))]
    if ways is not None:
        each = (len(ways.windows), count)
        outflows += [(ways.pore_splitting_outflow, each), (ways.pore_weighted_outflow, each)]
    for array, shape in outflows:
        if (array is None) != (table is None) or (array is not None and array.shape != shape):
            raise ValueError("the outflow through compact pores does not fit them")


def _typed(header: dict[str, Any]) -> dict[str, Any]:
    from pydantic import TypeAdapter

    from bemescape.surface.heal import HealReport
    from bemescape.surface.health import HealthReport

    kinds: dict[str, Any] = {
        "windows": tuple[WindowResult, ...],
        "health": HealthReport | None,
        "healing": HealReport | None,
        "residuals": tuple[float, ...],
        "levels": tuple[dict[str, float], ...],
        "notes": tuple[str, ...],
        "start": dict[str, float],
        "start_details": dict[str, StartResult],
        "crosschecked": CrossCheck | None,
        "walked": WalkerEstimate | None,
        "settings": dict[str, Any],
        "name": str,
        "mesh_sha256": str,
        "target_met": bool,
    }
    wanted = {field.name for field in fields(EscapeResult)} - set(_ARRAYS) - set(_PARTS)
    return {name: TypeAdapter(kinds.get(name, float)).validate_python(header[name]) for name in wanted}


def _check_arrays(arrays: Mapping[str, NDArray[Any]], *, windows: int) -> None:
    """Shapes and ranges: compiled code trusts them later."""
    panels, corners = len(arrays["faces"]), len(arrays["vertices"])
    for name, (kind, row) in _ARRAYS.items():
        array = arrays[name]
        shape = (corners if name == "vertices" else panels, *([row] if row else []))
        if array.dtype != kind or array.shape != shape:
            raise ValueError(f"{name} is {array.dtype} {array.shape}, not {np.dtype(kind)} {shape}")
    if not (panels and np.isfinite(arrays["vertices"]).all()):
        raise ValueError("the panels have no finite positions")
    for name, lowest, end in (
        ("faces", 0, corners),
        ("panel_window", -1, windows),
        ("parent_face", -1, math.inf),
    ):
        if arrays[name].min() < lowest or arrays[name].max() >= end:
            raise ValueError(f"{name} points outside its range")


def _write_surface(result: EscapeResult, path: Path) -> None:
    import pyvista

    mesh = pyvista.PolyData.from_regular_faces(np.asarray(result.vertices), np.asarray(result.faces))
    mesh.cell_data["time_s"] = result.panel_time_s
    mesh.cell_data["exit_density_per_um2"] = result.panel_exit_density_per_um2
    mesh.cell_data["window"] = result.panel_window
    mesh.cell_data["slow_region"] = np.asarray(result.slow_regions().panel_region, dtype=np.int64)
    mesh.cell_data["parent_face"] = result.parent_face
    if result.spread is not None:
        mesh.cell_data["second_moment_s2"] = result.spread.panel_second_moment_s2
    if result.ways_out is not None:
        for number, splitting, times in zip(
            result.ways_out.windows,
            result.ways_out.panel_splitting,
            result.ways_out.panel_conditional_time_s,
            strict=True,
        ):
            mesh.cell_data[f"splitting_{number}"] = splitting
            mesh.cell_data[f"conditional_time_s_{number}"] = times
    mesh.save(path)
    if not path.is_file():
        raise OSError(f"{path.name} was not written")


def _picture_files(folder: Path) -> list[Path]:
    return [folder / name for name in (*PICTURES, REPORT)]


def _refuse_foreign_files(folder: Path) -> None:
    if is_result_folder(folder):
        return
    for path in (folder / SUMMARY, folder / SURFACE, folder / VALUES, *_picture_files(folder)):
        if path.exists():
            raise SettingsError(
                f"{path} exists and belongs to no saved result, so it is not overwritten; choose another folder"
            )


@contextmanager
def _writing(folder: Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise SettingsError(
            f"result folder {folder} cannot be written: {error.strerror or error}; choose another folder"
        ) from error


@contextmanager
def _reading(path: Path) -> Iterator[None]:
    try:
        yield
    except EscapeError:
        raise
    except (
        OSError,
        ValueError,
        KeyError,
        TypeError,
        EOFError,
        MemoryError,
        RecursionError,
        zipfile.BadZipFile,
    ) as error:
        why = " ".join(str(error).split())[:100] or type(error).__name__
        raise SettingsError(f"{path} is damaged or not ours ({why}); solve again") from error
