"""What an exploration of arrangements has found: values, tables, and the folder they are saved in."""

from __future__ import annotations

import csv
import os
import tempfile
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field

from bemescape.errors import SettingsError
from bemescape.units import format_time
from bemescape.version import __version__

if TYPE_CHECKING:
    from bemescape.results.result import EscapeResult
    from bemescape.surface.surface import Surface

__all__ = [
    "Arrangement",
    "ClusteringRow",
    "Exploration",
    "ExplorationSummary",
    "SweepRow",
    "is_exploration_folder",
]

Floats = NDArray[np.float64]

SUMMARY, REPORT = "exploration.json", "exploration.html"
#: Solved arrangements are saved as results of their own, in folders of these names.
ENDS = ("best", "worst")
_STAGING = ".saving-"


class _Model(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class SweepRow(_Model):
    """One window alone, at one radius; a full solve."""

    radius_um: float
    mean_time_s: float
    relative_error: float = Field(description="estimated numerical error of this mean time")


class ClusteringRow(_Model):
    """k windows close together against k windows far apart."""

    open_windows: int
    spread_time_s: float = Field(description="mean time with the windows on sites far apart")
    clustered_time_s: float = Field(description="mean time with them on neighbouring sites")
    lost_to_clustering: float = Field(description="clustered / spread - 1")
    spread_sites: list[str]
    clustered_sites: list[str]


class Arrangement(_Model):
    """Windows open at some of the sites."""

    sites: list[str]
    mean_time_s: float = Field(description="by the reduced model")
    shares: dict[str, float] = Field(description="part of all exits through each, by the reduced model")
    solved_time_s: float | None = Field(default=None, description="by a full solve; null: it failed, see notes")
    solved_relative_error: float | None = Field(default=None, description="estimated numerical error of that")
    difference: float | None = Field(default=None, description="reduced / solved - 1")


class SiteRow(_Model):
    """One candidate site, and the mean time with a window there alone, by the reduced model."""

    name: str
    place_um: tuple[float, float, float]
    mean_time_s: float


class ExplorationSummary(_Model):
    """The content of `exploration.json`."""

    name: str
    diffusion_um2_s: float
    volume_um3: float
    area_um2: float
    radius_um: float
    permeability_um_s: float | None = Field(description="null: perfectly absorbing")
    open_windows: int
    sites: list[SiteRow]
    sweep_site: str | None = Field(description="where the window of the sweep lies; null: no sweep")
    sweep: list[SweepRow]
    clustering: list[ClusteringRow]
    best: Arrangement = Field(description="smallest mean time found")
    worst: Arrangement = Field(description="largest mean time found")
    arrangements_tried: int
    complete: bool = Field(description="true: these are all arrangements that exist")
    typical_time_s: float = Field(description="median over all, or over random, arrangements")
    asymmetry: float = Field(description="reciprocity missed by the reduced model, relative; 0 if it were exact")
    seconds: dict[str, float] = Field(description="wall time of each part")
    notes: list[str]
    made_with: dict[str, Any]


@dataclass(frozen=True, eq=False)
class Exploration:
    """Arrangements of windows on candidate sites of one surface.

    Attributes
    ----------
    name : str
    surface : Surface
    site_names : tuple of str
    places_um : (s, 3) float64
        The sites, on the wall.
    site_time_s : (s,) float64
        Mean time with one window there, by the reduced model.
    diffusion_um2_s, radius_um, permeability_um_s : float
        Of every window.
    open_windows : int
        k, how many are open at a time.
    sweep_site : str or None
    sweep : tuple of SweepRow
    clustering : tuple of ClusteringRow
        k = 2 up to `open_windows`.
    best, worst : Arrangement
    solved : mapping of str to EscapeResult
        "best" and "worst", as far as their full solves succeeded.
    tried : int
    complete : bool
        Whether all arrangements were tried.
    sampled_s : (n,) float64
        Mean times of all, or of random, arrangements.
    asymmetry : float
        What the reduced model misses of reciprocity, relative.
    seconds : mapping of str to float
    notes : tuple of str
    settings : mapping
    """

    name: str
    surface: Surface
    site_names: tuple[str, ...]
    places_um: Floats
    site_time_s: Floats
    diffusion_um2_s: float
    radius_um: float
    permeability_um_s: float
    open_windows: int
    sweep_site: str | None
    sweep: tuple[SweepRow, ...]
    clustering: tuple[ClusteringRow, ...]
    best: Arrangement
    worst: Arrangement
    solved: dict[str, EscapeResult]
    tried: int
    complete: bool
    sampled_s: Floats
    asymmetry: float
    seconds: dict[str, float]
    notes: tuple[str, ...]
    settings: dict[str, Any]

    @cached_property
    def summary(self) -> ExplorationSummary:
        """The content of `exploration.json`."""
        finite = np.isfinite(self.permeability_um_s)
        return ExplorationSummary(
            name=self.name,
            diffusion_um2_s=self.diffusion_um2_s,
            volume_um3=self.surface.volume,
            area_um2=self.surface.area,
            radius_um=self.radius_um,
            permeability_um_s=self.permeability_um_s if finite else None,
            open_windows=self.open_windows,
            sites=[
                SiteRow(name=name, place_um=(float(x), float(y), float(z)), mean_time_s=float(time))
                for name, (x, y, z), time in zip(self.site_names, self.places_um, self.site_time_s, strict=True)
            ],
            sweep_site=self.sweep_site,
            sweep=list(self.sweep),
            clustering=list(self.clustering),
            best=self.best,
            worst=self.worst,
            arrangements_tried=self.tried,
            complete=self.complete,
            typical_time_s=float(np.median(self.sampled_s)),
            asymmetry=self.asymmetry,
            seconds=self.seconds,
            notes=list(self.notes),
            made_with={"version": __version__, "mesh_sha256": self.surface.sha256, "settings": self.settings},
        )

    def save(self, folder: str | Path, *, pictures: bool = True) -> Path:
        """Write `exploration.json`, the tables as CSV, and with `pictures` also PNGs and `exploration.html`.

        The full solves of the best and the worst arrangement go into `best/` and `worst/` as results of their own.

        Raises
        ------
        SettingsError
            The folder cannot be written, or a folder in it holds something else.
        """
        folder = Path(folder)
        try:
            folder.mkdir(parents=True, exist_ok=True)
            (folder / SUMMARY).unlink(missing_ok=True)
            for end, result in self.solved.items():
                result.save(folder / end, pictures=pictures)
            with tempfile.TemporaryDirectory(prefix=_STAGING, dir=folder) as name:
                staging = Path(name)
                self._write_tables(staging)
                if pictures:
                    from bemescape.viz.arrangements import write_exploration

                    write_exploration(self, staging)
                for made in sorted(staging.iterdir()):
                    os.replace(made, folder / made.name)
            # Last: where it stands, the numbers are complete.
            text = self.summary.model_dump_json(indent=2) + "\n"
            (folder / f"{_STAGING}{SUMMARY}").write_text(text, encoding="utf-8")
            os.replace(folder / f"{_STAGING}{SUMMARY}", folder / SUMMARY)
        except OSError as error:
            raise SettingsError(
                f"the folder {folder} cannot be written ({error.strerror or error}); give another place"
            ) from error
        return folder

    def _write_tables(self, folder: Path) -> None:
        summary = self.summary
        _write_csv(
            folder / "sites.csv",
            ("site", "x_um", "y_um", "z_um", "mean_time_alone_s"),
            ((row.name, *row.place_um, row.mean_time_s) for row in summary.sites),
        )
        _write_csv(
            folder / "sweep.csv",
            ("site", "radius_um", "mean_time_s", "relative_error"),
            ((self.sweep_site, row.radius_um, row.mean_time_s, row.relative_error) for row in self.sweep),
        )
        _write_csv(
            folder / "clustering.csv",
            ("open_windows", "spread_time_s", "clustered_time_s", "lost_to_clustering", "spread", "clustered"),
            (
                (
                    row.open_windows,
                    row.spread_time_s,
                    row.clustered_time_s,
                    row.lost_to_clustering,
                    " ".join(row.spread_sites),
                    " ".join(row.clustered_sites),
                )
                for row in self.clustering
            ),
        )
        _write_csv(
            folder / "arrangements.csv",
            ("arrangement", "sites", "mean_time_s", "solved_time_s", "solved_relative_error", "difference"),
            (
                (
                    end,
                    " ".join(row.sites),
                    row.mean_time_s,
                    row.solved_time_s,
                    row.solved_relative_error,
                    row.difference,
                )
                for end, row in zip(ENDS, (self.best, self.worst), strict=True)
            ),
        )

    def __repr__(self) -> str:
        return (
            f"Exploration: {self.name}, {self.open_windows} of {len(self.site_names)} sites open, "
            f"{format_time(self.best.mean_time_s)} to {format_time(self.worst.mean_time_s)}, "
            f"{self.tried} arrangements"
        )


def is_exploration_folder(folder: str | Path) -> bool:
    """Whether a folder holds a saved exploration."""
    return (Path(folder) / SUMMARY).is_file() and (Path(folder) / "sites.csv").is_file()


def _write_csv(path: Path, header: Sequence[str], rows: Iterable[Sequence[Any]]) -> None:
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream)
        writer.writerow(header)
        writer.writerows(["" if value is None else value for value in row] for row in rows)
