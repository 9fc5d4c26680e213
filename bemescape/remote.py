"""The library's calls on a service: the same surfaces, windows and results, computed elsewhere."""

from __future__ import annotations

import json
import os
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import httpx

from bemescape.errors import AccuracyError, EscapeError, SettingsError
from bemescape.progress import Progress, ProgressEvent, silent

if TYPE_CHECKING:
    from bemescape.case import Case
    from bemescape.escape import SolverSettings
    from bemescape.results.result import EscapeResult
    from bemescape.results.starts import Start
    from bemescape.surface.surface import Surface
    from bemescape.units import Quantity
    from bemescape.windows.window import Window

__all__ = ["Remote", "RemoteSurface", "ServiceError", "connect"]

#: Where a script finds its token if it is not given.
TOKEN_VARIABLE = "BEMESCAPE_TOKEN"
_OVER = {"done", "failed", "cancelled", "deleted"}
_PATIENCE_S = 60.0


class ServiceError(EscapeError, RuntimeError):
    """The service does not answer, refuses this client, or failed at its work."""


@dataclass(frozen=True)
class RemoteSurface:
    """A surface that the service keeps.

    Attributes
    ----------
    id, name : str
    unit_um : tuple of 3 floats
        µm per unit of the file along x, y, z.
    faces : int
    solvable : bool
    record : mapping
        All that the service says of it, with the health report.
    """

    id: str
    name: str
    unit_um: tuple[float, float, float]
    faces: int
    solvable: bool
    record: Mapping[str, Any]


def connect(url: str, *, token: str | None = None) -> Remote:
    """A service at an address like "http://127.0.0.1:8000".

    Parameters
    ----------
    url : str
    token : str, optional
        By default what the environment variable BEMESCAPE_TOKEN holds.

    Raises
    ------
    SettingsError
        The address is none.
    ServiceError
        Nothing answers there, or the token is needed or unknown.
    """
    if not url.startswith(("http://", "https://")):
        raise SettingsError(f"the address of a service begins with http:// or https://, but this is {url[:80]!r}")
    remote = Remote(url, token if token is not None else os.environ.get(TOKEN_VARIABLE))
    session = remote.ask("GET", "session").json()
    if not session["signed_in"]:
        remote.close()
        raise ServiceError(f"{url} needs a valid token; give token=... or set {TOKEN_VARIABLE}")
    return remote


class Remote:
    """A service; made by `connect`. Use it in a `with` block, or close it."""

    def __init__(self, url: str, token: str | None) -> None:
        self.url = url.rstrip("/")
        headers = {} if token is None else {"Authorization": f"Bearer {token}"}
        timeout = httpx.Timeout(180.0, connect=10.0)
        self._client = httpx.Client(base_url=f"{self.url}/api/", headers=headers, timeout=timeout)

    def close(self) -> None:
        """Close the connection."""
        self._client.close()

    def __enter__(self) -> Remote:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def __repr__(self) -> str:
        return f"Remote: {self.url}"

    def ask(self, method: Literal["GET", "POST", "DELETE"], path: str, **options: Any) -> httpx.Response:
        """One request.

        Raises
        ------
        SettingsError
            The service refuses the input; its sentence.
        ServiceError
            Anything else but success.
        """
        try:
            answer = self._client.request(method, path, **options)
        except httpx.HTTPError as error:
            raise ServiceError(
                f"{self.url} does not answer ({type(error).__name__}); is the service running?"
            ) from error
        if answer.is_success:
            return answer
        raise _refusal(answer)

    # -- surfaces ----------------------------------------------------------------------------------

    def read_surface(
        self,
        path: str | Path,
        *,
        unit: Quantity | Sequence[Quantity] | None = None,
        heal: Literal["none", "auto", "rebuild"] = "auto",
    ) -> RemoteSurface:
        """Upload a mesh file; arguments as for `bemescape.read_surface`.

        Raises
        ------
        SettingsError
            The file is not there, or the service refuses it.
        """
        path = Path(path)
        try:
            data = path.read_bytes()
        except OSError as error:
            raise SettingsError(f"{path} cannot be read: {error.strerror or error}") from error
        units = [unit] if isinstance(unit, str) or not isinstance(unit, Sequence) else list(unit)
        text = ", ".join("" if part is None else str(part) for part in units)
        return self._upload(path.name, data, text, heal)

    def _upload(self, name: str, data: bytes, unit: str, heal: str) -> RemoteSurface:
        record = self.ask("POST", "surfaces", files={"file": (name, data)}, data={"unit": unit, "heal": heal}).json()
        return RemoteSurface(
            record["id"], record["name"], tuple(record["unit_um"]), record["faces"], record["solvable"], record
        )  # fmt: skip

    def _kept(self, surface: Surface | RemoteSurface) -> RemoteSurface:
        """A surface of this process, uploaded as it is."""
        if isinstance(surface, RemoteSurface):
            return surface
        return self._upload(f"{surface.name or 'surface'}.ply", _as_ply(surface), "um", "none")

    # -- solving -----------------------------------------------------------------------------------

    def solve_escape(
        self,
        surface: Surface | RemoteSurface,
        windows: Sequence[Window],
        diffusion: Quantity,
        *,
        target: float | str = 0.005,
        start: Mapping[str, Start] | None = None,
        ways_out: Sequence[str] | None = None,
        name: str | None = None,
        settings: SolverSettings | None = None,
        progress: Progress = silent,
    ) -> EscapeResult:
        """`bemescape.solve_escape`, computed by the service.

        Raises
        ------
        SettingsError
            As there, with the service's sentence; or settings other than `max_panels` are given.
        AccuracyError
            The run failed its own checks.
        ServiceError
            The service or its worker failed, or the run was cancelled.
        """
        from bemescape.units import diffusion_um2_s, fraction

        kept = self._kept(surface)
        order: dict[str, Any] = {
            "surface": kept.id,
            "name": name or kept.name,
            "motion": {"diffusion": f"{diffusion_um2_s(diffusion)!r} um^2/s"},
            "window": [self._window(window, kept) for window in windows],
            "accuracy": {"target": fraction(target, "target error")},
            "start": _starts(start or {}, kept, ways_out),
        }
        if settings is not None:
            order["accuracy"] |= _budget(settings)
        return self._solved(order, progress)

    def solve_case(self, case: Case, *, progress: Progress = silent) -> EscapeResult:
        """A case as `bemescape.read_case` gives it, computed by the service; errors as `solve_escape`."""
        document = case.document
        section = document.surface
        unit = section.unit if isinstance(section.unit, str) else list(section.unit)
        surface = self.read_surface(case.surface_path, unit=unit, heal=section.heal)
        if not surface.solvable:
            raise SettingsError(f"surface {surface.name!r} cannot be solved: {surface.record['reason']}")
        order = _order_of(document, surface.id, case.name)
        for window in order["window"]:
            if "near" in window:
                near = window["near"]
                other = self.read_surface(case.folder / near["file"], unit=near["unit"], heal="none")
                near["file"] = other.id
            if "points" in window:
                window["points"]["file"] = self._positions((case.folder / window["points"]["file"]).read_bytes())
        return self._solved(order, progress)

    def _positions(self, data: bytes) -> str:
        found: str = self.ask("POST", "positions", files={"file": ("positions.csv", data)}).json()["id"]
        return found

    def _window(self, window: Window, surface: RemoteSurface) -> dict[str, Any]:
        from bemescape.windows import window as kinds

        shape = window.shape
        entry: dict[str, Any] = {"name": window.name}
        if window.permeability_um_s != float("inf"):
            entry["permeability"] = f"{window.permeability_um_s!r} um/s"
        if isinstance(shape, kinds.Disc):
            entry["disc"] = _disc(shape, surface)
        elif isinstance(shape, kinds.Labels):
            entry["labels"] = {"array": shape.array, "value": shape.value}
        elif isinstance(shape, kinds.Near):
            other = self._upload(f"{shape.other.name or 'other'}.ply", _as_ply(shape.other), "um", "none")
            entry["near"] = {"file": other.id, "unit": "um", "distance": _um(shape.distance_um)}
        elif isinstance(shape, kinds.Lid):
            entry["lid"] = {
                "point": _in_file(shape.point_um, surface),
                "normal": _in_file(shape.normal, surface),
                **({} if shape.near_um is None else {"near": _in_file(shape.near_um, surface)}),
            }
        elif isinstance(shape, kinds.Points):
            rows = "\n".join(",".join(repr(float(value)) for value in row) for row in shape.positions_um)
            entry["points"] = {
                "file": self._positions(f"x,y,z\n{rows}\n".encode()),
                "unit": "um",
                "radius": _um(shape.radius_um),
                "farthest": _um(shape.farthest_um),
            }
        else:
            size = (
                {"count": shape.count} if shape.count is not None else {"density": f"{shape.density_per_um2!r} /um^2"}
            )
            entry["scatter"] = {**size, "radius": _um(shape.radius_um), "gap": _um(shape.gap_um), "seed": shape.seed}
        return entry

    def _solved(self, order: Mapping[str, Any], progress: Progress) -> EscapeResult:
        run = self.ask("POST", "runs", json=order).json()
        try:
            record = self._watched(run["id"], progress)
        except KeyboardInterrupt:
            self.ask("POST", f"runs/{run['id']}/cancel")
            raise
        if record["state"] != "done":
            raise _failure(record)
        return self.result(run["id"])

    def _watched(self, run_id: str, progress: Progress) -> dict[str, Any]:
        """The record of a run that is over; a stream that breaks is taken up again."""
        last_heard = time.monotonic()
        while True:
            try:
                for kind, data in self._events(run_id):
                    last_heard = time.monotonic()
                    if kind == "progress":
                        progress(ProgressEvent(data["stage"], data["done"], data["detail"]))
                    elif data["state"] in _OVER:
                        return data
                    elif data["state"] == "queued":
                        progress(ProgressEvent("waiting", None, f"{data['before_it']} runs come first"))
            except httpx.HTTPError as error:
                if time.monotonic() - last_heard > _PATIENCE_S:
                    raise ServiceError(f"{self.url} has not answered for {_PATIENCE_S:g} s; run {run_id}") from error
                time.sleep(1.0)

    def _events(self, run_id: str) -> Iterator[tuple[str, dict[str, Any]]]:
        with self._client.stream("GET", f"runs/{run_id}/events", timeout=_PATIENCE_S) as answer:
            if not answer.is_success:
                answer.read()
                raise _refusal(answer)
            kind = ""
            for line in answer.iter_lines():
                if line.startswith("event: "):
                    kind = line.removeprefix("event: ")
                elif line.startswith("data: "):
                    yield kind, json.loads(line.removeprefix("data: "))

    # -- results -----------------------------------------------------------------------------------

    def runs(self) -> list[dict[str, Any]]:
        """What the service says of your runs, newest first."""
        found: list[dict[str, Any]] = self.ask("GET", "runs").json()
        return found

    def result(self, run_id: str) -> EscapeResult:
        """The result of a finished run, as if it had been solved here."""
        from bemescape.results.store import load_result

        with tempfile.TemporaryDirectory(prefix="bemescape-") as name:
            folder = Path(name)
            for file in ("summary.json", "result.npz"):
                (folder / file).write_bytes(self.ask("GET", f"runs/{run_id}/files/{file}").content)
            return load_result(folder)


def _refusal(answer: httpx.Response) -> EscapeError:
    try:
        message = str(answer.json()["detail"])
    except (ValueError, KeyError, TypeError):
        message = f"the service answered with status {answer.status_code}"
    kind: Callable[[str], EscapeError] = SettingsError if answer.status_code in (409, 413, 415, 422) else ServiceError
    return kind(message)


def _failure(record: Mapping[str, Any]) -> EscapeError:
    kinds: dict[str, Callable[[str], EscapeError]] = {"input": SettingsError, "no answer": AccuracyError}
    if record.get("fault") in kinds:
        return kinds[record["fault"]](record["reason"])
    return ServiceError(f"the run is {record['state']}: {record['reason']}")


def _budget(settings: SolverSettings) -> dict[str, Any]:
    from bemescape.escape import SolverSettings as Defaults

    if (settings.tolerance, settings.balance_limit) != (Defaults().tolerance, Defaults().balance_limit):
        raise SettingsError("a service takes max_panels only; leave tolerance and balance_limit as they are")
    return {} if settings.max_panels is None else {"max_panels": settings.max_panels}


def _um(value: float) -> str:
    return f"{value!r} um"


def _in_file(place: Sequence[float], surface: RemoteSurface) -> list[float]:
    return [float(value) / scale for value, scale in zip(place, surface.unit_um, strict=True)]


def _disc(shape: Any, surface: RemoteSurface) -> dict[str, Any]:
    return {"centre": _in_file(shape.centre_um, surface), "radius": _um(shape.radius_um)}


def _starts(start: Mapping[str, Start], surface: RemoteSurface, ways_out: Sequence[str] | None) -> dict[str, Any]:
    from bemescape.results.starts import Ball
    from bemescape.windows import window as kinds

    points: dict[str, Any] = {}
    regions: list[dict[str, Any]] = []
    for name, place in start.items():
        if isinstance(place, Ball):
            ball = {"centre": _in_file(place.centre_um, surface), "radius": _um(place.radius_um)}
            regions.append({"name": name, "ball": ball})
        elif isinstance(place, kinds.Window):
            if isinstance(place.shape, kinds.Disc):
                regions.append({"name": name, "disc": _disc(place.shape, surface)})
            elif isinstance(place.shape, kinds.Labels):
                regions.append({"name": name, "labels": {"array": place.shape.array, "value": place.shape.value}})
            else:
                raise SettingsError(f"start {name!r}: a service takes points, balls, discs and labels as starts")
        else:
            points[name] = _in_file(place, surface)
    return {"points": points, "region": regions, **({} if ways_out is None else {"ways_out": list(ways_out)})}


def _order_of(document: Any, surface_id: str, name: str) -> dict[str, Any]:
    """A checked case as the JSON of an order: quantities get their units back."""
    units = {
        "diffusion": "um^2/s", "radius": "um", "distance": "um", "permeability": "um/s", "gap": "um",
        "farthest": "um", "density": "um^-2",
    }  # fmt: skip

    def spoken(value: Any, key: str = "") -> Any:
        if isinstance(value, Mapping):
            return {
                k: spoken(entry, k) for k, entry in value.items()
                if entry is not None and not (k == "permeability" and entry == float("inf"))
            }  # fmt: skip
        if isinstance(value, list | tuple):
            return [spoken(entry) for entry in value]
        return f"{value!r} {units[key]}" if key in units and not isinstance(value, str) else value

    table: dict[str, Any] = spoken(document.model_dump(by_alias=True, exclude={"surface"}))
    return {"surface": surface_id, "name": name, **table}


def _as_ply(surface: Surface) -> bytes:
    """A surface as binary PLY in µm, all digits kept, with its arrays of numbers."""
    import numpy as np

    def columns(arrays: Mapping[str, Any]) -> list[tuple[str, Any]]:
        kept = []
        for key, array in arrays.items():
            values = np.asarray(array)
            plain = key.isascii() and key.isidentifier() and key not in ("x", "y", "z", "vertex_indices")
            if plain and values.ndim == 1 and values.dtype.kind in "iufb":
                kept.append((key, values.astype("<f8")))
        return kept

    of_vertices, of_faces = columns(surface.vertex_data), columns(surface.face_data)
    header = [
        "ply",
        "format binary_little_endian 1.0",
        f"element vertex {len(surface.vertices)}",
        *(f"property double {axis}" for axis in "xyz"),
        *(f"property double {key}" for key, _ in of_vertices),
        f"element face {len(surface.faces)}",
        "property list uchar int vertex_indices",
        *(f"property double {key}" for key, _ in of_faces),
        "end_header",
    ]
    vertices = np.column_stack([surface.vertices, *(values for _, values in of_vertices)]).astype("<f8")
    record = np.dtype([("n", "u1"), ("corners", "<i4", 3), *((key, "<f8") for key, _ in of_faces)])
    faces = np.zeros(len(surface.faces), record)
    faces["n"], faces["corners"] = 3, surface.faces
    for key, values in of_faces:
        faces[key] = values
    return "\n".join(header).encode() + b"\n" + vertices.tobytes() + faces.tobytes()
