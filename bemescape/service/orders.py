"""The order of a run: a case file in JSON whose mesh is an uploaded surface.

What is checked, and what is said when it is wrong, is what `bemescape.case` checks and says of a case file.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from pydantic import BaseModel, ConfigDict, Field

from bemescape.case import AccuracySection, MotionSection, StartSection, WindowSection, parse_case
from bemescape.errors import SettingsError
from bemescape.service.models import Run, Surface
from bemescape.service.problems import Refusal
from bemescape.service.settings import Limits
from bemescape.service.store import Store
from bemescape.service.tasks import SurfaceFile

__all__ = [
    "ORDER_EXAMPLE",
    "CheckedOrder",
    "RunOrder",
    "case_of_run",
    "case_of_windows",
    "checked_order",
    "surface_file",
]

ORDER_EXAMPLE = {
    "surface": "0123456789abcdef",
    "name": "bouton, neck only",
    "motion": {"diffusion": "200 um^2/s"},
    "window": [{"name": "neck", "labels": {"array": "label", "value": 1}}],
    "accuracy": {"target": "0.5 %"},
    "start": {"points": {"centre": [-60.0, 0.0, -40.0]}},
}
_SOURCE = "the order"
#: Panels that a solve may use by default (see `SolverSettings`).
_DEFAULT_PANELS, _PER_FACE = 60_000, 2


class RunOrder(BaseModel):
    """A case file in JSON. `file` of a `points` window is a list of positions, that of `near` another surface."""

    model_config = ConfigDict(extra="forbid")
    surface: str = Field(pattern="^[0-9a-f]{16}$", description="id of an uploaded surface")
    name: str | None = Field(default=None, description="name of the run; that of the surface by default")
    motion: MotionSection
    window: tuple[WindowSection, ...]
    accuracy: AccuracySection = AccuracySection()
    start: StartSection = StartSection()


@dataclass(frozen=True)
class CheckedOrder:
    """An order that can be queued: on which surface, under which name, with which tables."""

    surface_id: str
    name: str
    table: dict[str, Any]


def checked_order(store: Store, limits: Limits, owner: str, order: Any) -> CheckedOrder:
    """Check an order before it is queued.

    Raises
    ------
    SettingsError
        An entry is wrong, missing or unknown.
    Refusal
        The surface, another surface or a list of positions is not there, or the surface cannot be solved.
    """
    if not isinstance(order, Mapping):
        raise SettingsError(f"{_SOURCE} should be a JSON object with surface, motion and window")
    table = {key: value for key, value in order.items() if key not in ("surface", "name")}
    surface_id = order.get("surface")
    if not isinstance(surface_id, str):
        raise SettingsError(f"{_SOURCE}: surface is missing; give the id of an uploaded surface")
    surface = store.surface(owner, surface_id)
    report = json.loads(surface.report)
    name = order.get("name", surface.name)
    if not isinstance(name, str) or not 0 < len(name.strip()) <= 60 or not name.isprintable():
        raise SettingsError(f"{_SOURCE}: name should be 1 to 60 printable characters")
    table = _plain(table)
    case, _ = _with_files(store, owner, surface, table)
    document = parse_case(case, folder=".", name=name, source=_SOURCE).document
    if not report["solvable"]:
        raise Refusal(422, f"surface {surface.name!r} cannot be solved: {report['reason']}")
    panels = document.accuracy.max_panels
    if panels is not None and panels > limits.panels:
        raise SettingsError(f"{_SOURCE}: [accuracy] max_panels is {panels} (limit here {limits.panels})")
    if panels is None and max(_DEFAULT_PANELS, _PER_FACE * report["faces"]) > limits.panels:
        table = {**table, "accuracy": {**table.get("accuracy", {}), "max_panels": limits.panels}}
    return CheckedOrder(surface_id, name, table)


def _plain(table: dict[str, Any]) -> dict[str, Any]:
    """Without NaN and infinity, which Python's JSON lets through."""
    try:
        text = json.dumps(table, allow_nan=False)
    except (ValueError, RecursionError) as error:
        raise SettingsError(f"{_SOURCE} holds a number that is not finite, or is nested too deeply") from error
    plain: dict[str, Any] = json.loads(text)
    return plain


def surface_file(store: Store, surface: Surface) -> SurfaceFile:
    """The surface as its worker needs it."""
    return SurfaceFile(
        sha256=surface.file_sha256,
        name=surface.name,
        suffix=surface.suffix,
        unit=json.loads(surface.unit),
        heal=surface.heal,
        data=store.files.read(surface.file_sha256),
    )


def case_of_run(store: Store, run: Run) -> tuple[dict[str, Any], dict[str, bytes]]:
    """The tables of a case file for a run, and its files by name."""
    surface = store.surface(run.owner, run.surface_id)
    case, named = _with_files(store, run.owner, surface, json.loads(run.order))
    return case, {name: store.files.read(sha256) for name, sha256 in named.items()}


def case_of_windows(
    store: Store, owner: str, surface: Surface, windows: Any
) -> tuple[dict[str, Any], dict[str, bytes]]:
    """The same for openings alone, before there is an order."""
    case, named = _with_files(store, owner, surface, {"motion": {"diffusion": "1 um^2/s"}, "window": windows})
    parse_case(case, folder=".", name=surface.name, source="the openings")
    named.pop(case["surface"]["file"])
    return case, {name: store.files.read(sha256) for name, sha256 in named.items()}


def _with_files(
    store: Store, owner: str, surface: Surface, table: Mapping[str, Any]
) -> tuple[dict[str, Any], dict[str, str]]:
    """The case with file names of ours in place of ids, and the checksum of each file."""
    own = f"surface{surface.suffix}"
    named = {own: surface.file_sha256}
    windows: Any = table.get("window")
    if isinstance(windows, list):
        windows = [_window_with_file(store, owner, window, named) for window in windows]
    case = {**table, "surface": {"file": own, "unit": json.loads(surface.unit), "heal": surface.heal}}
    if windows is not None:
        case["window"] = windows
    return case, named


def _window_with_file(store: Store, owner: str, window: Any, named: dict[str, str]) -> Any:
    if not isinstance(window, Mapping):
        return window
    changed = dict(window)
    for kind in ("points", "near"):
        section = changed.get(kind)
        if not isinstance(section, Mapping) or not isinstance(section.get("file"), str):
            continue
        if kind == "points":
            positions = store.positions(owner, section["file"])
            name = _file_name(positions.name.rsplit(".", 1)[0], positions.id, ".csv", positions.file_sha256, named)
            changed[kind] = {**section, "file": name}
        else:
            other = store.surface(owner, section["file"])
            name = _file_name(other.name, other.id, other.suffix, other.file_sha256, named)
            changed[kind] = {"unit": json.loads(other.unit), **section, "file": name}
    return changed


def _file_name(name: str, entry_id: str, suffix: str, sha256: str, named: dict[str, str]) -> str:
    """A name of ours for a file in the worker's folder, under which messages may speak of it; it joins `named`."""
    readable = "".join(letter if letter.isalnum() or letter in "-_" else "_" for letter in name)[:60]
    chosen = f"{readable}{suffix}"
    if not readable.strip("_") or named.get(chosen, sha256) != sha256:
        chosen = f"{readable}-{entry_id}{suffix}"
    named[chosen] = sha256
    return chosen
