"""The case file: one surface, its windows and the motion inside, as TOML.

The file is checked as a whole before anything is computed. Each refusal names the file, the place in it, the
value and the remedy; an unknown key names the nearest known one.
"""

from __future__ import annotations

import difflib
import math
import tomllib
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Literal, Self, get_args

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    ValidationError,
    WithJsonSchema,
    model_validator,
)

from bemescape.errors import SettingsError
from bemescape.progress import Progress, silent
from bemescape.units import (
    density_per_um2,
    diffusion_um2_s,
    fraction,
    length_um,
    permeability_um_s,
    unit_scale_um,
)

if TYPE_CHECKING:
    from collections.abc import Callable

    from bemescape.arrangements import Exploration
    from bemescape.escape import SolverSettings
    from bemescape.results.result import EscapeResult
    from bemescape.results.starts import Start
    from bemescape.surface.surface import Surface
    from bemescape.windows.window import Window

__all__ = [
    "WINDOW_KINDS",
    "AccuracySection",
    "Case",
    "CaseDocument",
    "FileName",
    "LengthUnit",
    "Name",
    "Section",
    "WindowSection",
    "case_schema",
    "parse_case",
    "read_case",
    "read_toml",
    "validation_sentence",
]

#: A case file is a page of text; what is larger is another kind of file, or an attack on the reader.
LARGEST_CASE_BYTES = 256 * 1024
LONGEST_NAME = 60
#: Reading a dotted key takes memory as the square of its parts; a real line has a few dots, most in numbers.
MOST_DOTS_IN_A_LINE = 200


def _text_with_unit(parse: Callable[[Any], float]) -> BeforeValidator:
    def check(value: Any) -> float:
        if isinstance(value, int | float) and not isinstance(value, bool) and value != math.inf:
            raise SettingsError(f"is the plain number {value:g}; give it with its unit, in quotes")
        return parse(value)

    return BeforeValidator(check)


def _checked_unit(value: Any) -> str | tuple[str, ...]:
    parts = value if isinstance(value, list | tuple) else (value,)
    if len(parts) not in (1, 3) or not all(isinstance(part, str) for part in parts):
        raise SettingsError(f'is {_shortened(value)}; write "nm", "4 nm" or ["4 nm", "4 nm", "40 nm"]')
    for part in parts:
        unit_scale_um(part)
    return value if isinstance(value, str) else tuple(parts)


def _checked_name(value: str) -> str:
    if not value.strip() or len(value) > LONGEST_NAME or not value.isprintable():
        raise SettingsError(f"is {_shortened(value)}; a name has 1 to {LONGEST_NAME} printable characters, like 'neck'")
    return value


def _checked_file(value: str) -> str:
    if not value.strip() or not value.isprintable():
        raise SettingsError(f"is {_shortened(value)}; give the path of a mesh file, like 'bouton.ply'")
    return value


def _quantity_schema(example: str) -> WithJsonSchema:
    return WithJsonSchema({"type": "string", "description": "number with unit", "examples": [example]})


_Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
_Position = Annotated[tuple[_Number, _Number, _Number], Field(examples=[[100.0, 0.0, -620.0]])]
Name = Annotated[str, Field(strict=True, examples=["neck"]), AfterValidator(_checked_name)]
FileName = Annotated[str, Field(strict=True, examples=["bouton.ply"]), AfterValidator(_checked_file)]
LengthUnit = Annotated[
    str | tuple[str, ...],
    BeforeValidator(_checked_unit),
    WithJsonSchema(
        {
            "oneOf": [
                {"type": "string"},
                {"type": "array", "items": {"type": "string"}, "minItems": 3, "maxItems": 3},
            ],
            "description": "length of one unit of the mesh file, or of its three axes",
            "examples": ["nm", ["4 nm", "4 nm", "40 nm"]],
        }
    ),
]
_Diffusion = Annotated[float, _text_with_unit(diffusion_um2_s), _quantity_schema("20 um^2/s")]
_Radius = Annotated[float, _text_with_unit(lambda v: length_um(v, "radius")), _quantity_schema("60 nm")]
_Distance = Annotated[float, _text_with_unit(lambda v: length_um(v, "distance")), _quantity_schema("20 nm")]
_Density = Annotated[float, _text_with_unit(density_per_um2), _quantity_schema("3 /um^2")]
_Permeability = Annotated[float, _text_with_unit(permeability_um_s), _quantity_schema("10 um/s")]
_Target = Annotated[
    float,
    BeforeValidator(lambda value: fraction(value, "target")),
    WithJsonSchema({"type": ["string", "number"], "examples": ["0.5 %", 0.005], "default": "0.5 %"}),
]


class Section(BaseModel):
    """A table of a case or study file; unknown keys are errors."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class SurfaceSection(Section):
    """The mesh file; its path is relative to the case file."""

    file: FileName
    unit: LengthUnit = Field(examples=["nm"])
    heal: Literal["none", "auto", "rebuild"] = Field(default="auto", examples=["auto"])


class MotionSection(Section):
    """How the molecule moves."""

    diffusion_um2_s: _Diffusion = Field(alias="diffusion", examples=["20 um^2/s"])


class DiscSection(Section):
    """The wall within a straight-line distance of a point."""

    centre: _Position = Field(description="in units of the mesh file", examples=[[100.0, 0.0, -620.0]])
    radius_um: _Radius = Field(alias="radius", examples=["60 nm"])


class LabelsSection(Section):
    """The faces with one value in an array of the mesh file."""

    array: str = Field(strict=True, min_length=1, examples=["label"])
    value: _Number = Field(examples=[1])


class NearSection(Section):
    """The wall closer than a distance to another mesh in the same frame."""

    file: FileName = Field(examples=["psd.ply"])
    unit: LengthUnit = Field(examples=["nm"])
    distance_um: _Distance = Field(alias="distance", examples=["20 nm"])


class LidSection(Section):
    """A flat lid where a plane cuts the surface; the side that the normal points to is cut off."""

    point: _Position = Field(description="in units of the mesh file", examples=[[0.0, 0.0, -600.0]])
    normal: _Position = Field(description="a direction in units of the mesh file", examples=[[0.0, 0.0, -1.0]])
    near: _Position | None = Field(
        default=None, description="picks among several openings", examples=[[0.0, 0.0, -600.0]]
    )

    @model_validator(mode="after")
    def _normal_has_a_direction(self) -> Self:
        if not any(self.normal):
            raise SettingsError("has the normal [0, 0, 0], which has no direction; point it at what is cut off")
        return self


class PointsSection(Section):
    """Pores at the positions of a CSV file, moved to the wall."""

    file: FileName = Field(examples=["pores.csv"])
    radius_um: _Radius = Field(alias="radius", examples=["25 nm"])
    unit: LengthUnit | None = Field(
        default=None, description="of the positions; that of the mesh file by default", examples=["nm"]
    )
    farthest_um: _Distance | None = Field(
        default=None, alias="farthest", description="limit for the distance to the wall", examples=["50 nm"]
    )


class ScatterSection(Section):
    """Pores at random places, spaced."""

    count: int | None = Field(default=None, strict=True, ge=1, le=10_000_000, examples=[40])
    density_per_um2: _Density | None = Field(default=None, alias="density", examples=["3 /um^2"])
    radius_um: _Radius = Field(alias="radius", examples=["25 nm"])
    gap_um: _Distance | None = Field(
        default=None, alias="gap", description="between two rims; one radius by default", examples=["100 nm"]
    )
    seed: int = Field(default=0, strict=True, ge=0, le=2**63, examples=[1])

    @model_validator(mode="after")
    def _has_a_number(self) -> Self:
        if (self.count is None) == (self.density_per_um2 is None):
            given = "neither count nor density" if self.count is None else "count and density"
            raise SettingsError(f"has {given}; give exactly one of them")
        return self


class WindowSection(Section):
    """One opening: a name, one kind, and a permeability where it is not perfectly absorbing."""

    name: Name
    disc: DiscSection | None = None
    labels: LabelsSection | None = None
    near: NearSection | None = None
    lid: LidSection | None = None
    points: PointsSection | None = None
    scatter: ScatterSection | None = None
    permeability_um_s: _Permeability = Field(default=math.inf, alias="permeability", examples=["10 um/s"])
    compact: bool | None = Field(
        default=None,
        strict=True,
        description="solve round windows as compact pores; by default where they are many and small",
        examples=[True],
    )

    @model_validator(mode="after")
    def _has_one_kind(self) -> Self:
        given = [kind for kind in WINDOW_KINDS if getattr(self, kind) is not None]
        if len(given) != 1:
            raise SettingsError(
                f"has {' and '.join(given) if given else 'no kind'}; "
                f"a window has exactly one of {', '.join(WINDOW_KINDS[:-1])} or {WINDOW_KINDS[-1]}"
            )
        if self.compact and given[0] not in ROUND_KINDS:
            raise SettingsError(f"is compact, which only a {', '.join(ROUND_KINDS[:-1])} or {ROUND_KINDS[-1]} can be")
        return self


#: Sections that a file may hold several of, and what one of them is.
LISTED_SECTIONS = {"window": "window", "shapes": "set of shapes"}
#: Keys of a `[[window]]` that say which part of the wall it takes.
WINDOW_KINDS = ("disc", "labels", "near", "lid", "points", "scatter")
#: Those whose openings are round: they may be solved as compact pores.
ROUND_KINDS = ("disc", "points", "scatter")


class AccuracySection(Section):
    """How good the answer must be, and how much it may cost."""

    target: _Target = Field(default=0.005, examples=["0.5 %"])
    max_panels: int | None = Field(default=None, strict=True, ge=100, le=10_000_000, examples=[60000])


class BallSection(Section):
    """A ball inside the volume."""

    centre: _Position = Field(description="in units of the mesh file", examples=[[100.0, 0.0, 0.0]])
    radius_um: _Radius = Field(alias="radius", examples=["60 nm"])


class StartRegionSection(Section):
    """A part of the wall, given like a window, or a ball inside: molecules start uniformly over it."""

    name: Name
    disc: DiscSection | None = None
    labels: LabelsSection | None = None
    ball: BallSection | None = None

    @model_validator(mode="after")
    def _has_one_kind(self) -> Self:
        given = [kind for kind in ("disc", "labels", "ball") if getattr(self, kind) is not None]
        if len(given) != 1:
            raise SettingsError(
                f"has {' and '.join(given) if given else 'no kind'}; a start region has exactly one of disc, labels or "
                "ball"
            )
        return self


class StartSection(Section):
    """Places from which times and ways out are wanted beside the mean."""

    points: dict[Name, _Position] = Field(default_factory=dict, description="in units of the mesh file")
    region: tuple[StartRegionSection, ...] = ()
    ways_out: tuple[Name, ...] | None = Field(
        default=None,
        description="windows whose splitting is wanted; by default all, if there are 2 to 12",
        examples=[["neck"]],
    )

    @model_validator(mode="after")
    def _names_are_distinct(self) -> Self:
        count = Counter([*self.points, *(region.name for region in self.region)])
        twice = next((name for name, times in count.items() if times > 1), None)
        if twice is not None:
            raise SettingsError(f"has {count[twice]} starts named {twice!r}; give each its own name")
        return self


class ExploreSection(Section):
    """Candidate sites for equal windows, and what is asked about their arrangements."""

    points: PointsSection | None = Field(default=None, description="sites at the positions of a CSV file")
    scatter: ScatterSection | None = Field(default=None, description="sites at random places")
    open_windows: int = Field(
        strict=True, ge=1, le=400, description="how many windows are open at a time", examples=[4]
    )
    permeability_um_s: _Permeability = Field(default=math.inf, alias="permeability", examples=["10 um/s"])
    sweep_um: tuple[_Radius, ...] | None = Field(
        default=None, alias="sweep", description="radii of one window alone", examples=[["15 nm", "30 nm", "60 nm"]]
    )
    arrangements: int = Field(
        default=10_000, strict=True, ge=100, le=10_000_000, description="about how many are tried", examples=[10000]
    )
    seed: int = Field(default=0, strict=True, ge=0, le=2**63, examples=[1])

    @model_validator(mode="after")
    def _has_one_kind(self) -> Self:
        if (self.points is None) == (self.scatter is None):
            given = "neither points nor scatter" if self.points is None else "points and scatter"
            raise SettingsError(f"has {given}; candidate sites are exactly one of them")
        return self


class CaseDocument(Section):
    """The content of a case file."""

    surface: SurfaceSection
    motion: MotionSection
    window: tuple[WindowSection, ...] = ()
    accuracy: AccuracySection = AccuracySection()
    start: StartSection = StartSection()
    explore: ExploreSection | None = None

    @model_validator(mode="after")
    def _windows_are_distinct(self) -> Self:
        if not self.window and self.explore is not None:
            return self
        if not self.window:
            raise SettingsError("has no [[window]]; nothing can leave, so add at least one")
        name, count = Counter(window.name for window in self.window).most_common(1)[0]
        if count > 1:
            raise SettingsError(f"has {count} windows named {name!r}; give each its own name")
        return self


def case_schema() -> dict[str, Any]:
    """JSON schema (draft 2020-12) of a case file, for editors that check TOML."""
    return CaseDocument.model_json_schema()


@dataclass(frozen=True)
class Case:
    """A checked case.

    Attributes
    ----------
    name : str
        The file's name without its ending.
    folder : Path
        What the mesh file's path is relative to.
    document : CaseDocument
        What the file says, quantities in µm, s, µm²/s and µm/s; positions still in units of the mesh file.
    """

    name: str
    folder: Path
    document: CaseDocument

    @property
    def surface_path(self) -> Path:
        """The mesh file."""
        return self.folder / self.document.surface.file

    def with_accuracy(self, *, target: float | None = None, max_panels: int | None = None) -> Case:
        """The same case with another target (relative error) or panel budget; None keeps the file's.

        Raises
        ------
        SettingsError
            The target does not lie between 0 and 1, or the budget between 100 and ten million panels.
        """
        changes = {key: value for key, value in (("target", target), ("max_panels", max_panels)) if value is not None}
        before = self.document.accuracy.model_dump()
        try:
            accuracy = AccuracySection.model_validate(before | changes)
        except ValidationError as error:
            raise SettingsError(validation_sentence(error, {"accuracy": changes}, root=("accuracy",))) from error
        return replace(self, document=self.document.model_copy(update={"accuracy": accuracy}))

    def with_arrangements(self, count: int) -> Case:
        """The same case with another number of arrangements to try.

        Raises
        ------
        SettingsError
            The case has no [explore], or the number is out of range.
        """
        section = self._explore_section()
        try:
            checked = ExploreSection.model_validate(
                {"open_windows": 1, "scatter": {"count": 2, "radius": "1 nm"}, "arrangements": count}
            )
        except ValidationError as error:
            place = {"explore": {"arrangements": count}}
            raise SettingsError(validation_sentence(error, place, root=("explore",))) from error
        changed = section.model_copy(update={"arrangements": checked.arrangements})
        return replace(self, document=self.document.model_copy(update={"explore": changed}))

    def _explore_section(self) -> ExploreSection:
        section = self.document.explore
        if section is None:
            raise SettingsError(
                f"case {self.name!r} has no [explore]; add it with open_windows and points or scatter, the candidate "
                "sites"
            )
        return section

    def load_surface(self, progress: Progress = silent) -> Surface:
        """Read, check and heal the mesh file.

        Raises
        ------
        SettingsError
            The mesh file does not exist.
        SurfaceError
            It cannot be read, or cannot be healed into a closed surface.
        """
        section = self.document.surface
        if not self.surface_path.is_file():
            raise SettingsError(
                f"case {self.name!r}: [surface] file is {section.file!r}, but there is no file "
                f"{self.surface_path}; the path is relative to the case file"
            )
        from bemescape.surface import read_surface

        return read_surface(self.surface_path, unit=section.unit, heal=section.heal, progress=progress)

    def windows_for(self, surface: Surface) -> tuple[Window, ...]:
        """The windows with positions in µm, by the surface's units; reads the files that they name.

        Raises
        ------
        SettingsError
            A file of positions or another mesh is missing or wrong; the message names the window.
        SurfaceError
            Another mesh cannot be read.
        """
        return tuple(self._window(section, surface) for section in self.document.window)

    def _window(self, section: WindowSection, surface: Surface) -> Window:
        from bemescape.windows.window import Window

        name, kappa, compact = section.name, section.permeability_um_s, section.compact
        if (disc := section.disc) is not None:
            centre = _scaled(disc.centre, surface)
            return Window.disc(name, centre=centre, radius=disc.radius_um, permeability=kappa, compact=compact)
        if (labels := section.labels) is not None:
            return Window.labels(name, array=labels.array, value=labels.value, permeability=kappa)
        if (near := section.near) is not None:
            path = self._file_of(f"[[window]] {name!r}", "near.file", near.file)
            return Window.near(name, surface=path, unit=near.unit, distance=near.distance_um, permeability=kappa)
        if (lid := section.lid) is not None:
            # A direction between two positions of the file is scaled as they are.
            return Window.lid(
                name,
                point=_scaled(lid.point, surface),
                normal=_scaled(lid.normal, surface),
                near=None if lid.near is None else _scaled(lid.near, surface),
                permeability=kappa,
            )
        if section.points is not None:
            window = self._pores(f"[[window]] {name!r}", name, section.points, surface, kappa)
            return replace(window, compact=compact)
        if section.scatter is not None:
            return replace(_scattered(name, section.scatter, kappa), compact=compact)
        raise SettingsError(f"window {name!r} has no kind")

    def _pores(self, place: str, name: str, points: PointsSection, surface: Surface, kappa: float) -> Window:
        from bemescape.windows.positions import read_positions
        from bemescape.windows.window import Window

        path = self._file_of(place, "points.file", points.file)
        positions, lines = read_positions(path, unit=points.unit, otherwise_um=surface.unit_um)
        return Window.points(
            name,
            positions=positions,
            lines=lines,
            radius=points.radius_um,
            farthest=points.farthest_um,
            permeability=kappa,
        )

    def _file_of(self, place: str, key: str, file: str) -> Path:
        path = self.folder / file
        if not path.is_file():
            raise SettingsError(
                f"case {self.name!r}: {place} {key} is {file!r}, but there is no file {path}; the path is "
                "relative to the case file"
            )
        return path

    def start_um(self, surface: Surface) -> dict[str, Start]:
        """The named start points, (3,) in µm, and start regions."""
        from bemescape.results.starts import Ball
        from bemescape.windows.window import Window

        section = self.document.start
        starts: dict[str, Start] = {name: _scaled(point, surface) for name, point in section.points.items()}
        for region in section.region:
            if region.ball is not None:
                starts[region.name] = Ball(_scaled(region.ball.centre, surface), region.ball.radius_um)
            elif region.disc is not None:
                centre = _scaled(region.disc.centre, surface)
                starts[region.name] = Window.disc(region.name, centre=centre, radius=region.disc.radius_um)
            elif region.labels is not None:
                array, value = region.labels.array, region.labels.value
                starts[region.name] = Window.labels(region.name, array=array, value=value)
        return starts

    def explore(self, progress: Progress = silent) -> Exploration:
        """Load the surface and compare arrangements of windows on the sites of [explore].

        The case's own windows are closed; the answer says so.

        Raises
        ------
        SettingsError
            The case has no [explore], or an entry of it does not suit the surface.
        EscapeError
            As `load_surface` and `bemescape.arrangements.explore`.
        """
        section = self._explore_section()
        surface = self.load_surface(progress)
        from bemescape.arrangements import explore

        kappa = section.permeability_um_s
        if section.points is not None:
            sites = self._pores("[explore]", "site", section.points, surface, kappa)
        elif section.scatter is not None:
            sites = _scattered("site", section.scatter, kappa)
        found = explore(
            surface,
            sites,
            open_windows=section.open_windows,
            diffusion=self.document.motion.diffusion_um2_s,
            sweep=section.sweep_um,
            arrangements=section.arrangements,
            seed=section.seed,
            target=self.document.accuracy.target,
            name=self.name,
            settings=self._settings(),
            progress=progress,
        )
        if not self.document.window:
            return found
        closed = ", ".join(repr(window.name) for window in self.document.window[:6])
        return replace(found, notes=(f"the case's own windows are closed here: {closed}", *found.notes))

    def _settings(self) -> SolverSettings:
        from bemescape.escape import SolverSettings

        budget = self.document.accuracy.max_panels
        return SolverSettings() if budget is None else SolverSettings(max_panels=budget)

    def solve(self, progress: Progress = silent) -> EscapeResult:
        """Load the surface and solve.

        Raises
        ------
        SettingsError
            The case has no window.
        EscapeError
            As `load_surface` and `bemescape.escape.solve_escape`.
        """
        if not self.document.window:
            raise SettingsError(
                f"case {self.name!r} has no [[window]]; nothing can leave, so add at least one (its [explore] is for "
                "bemescape explore)"
            )
        surface = self.load_surface(progress)
        from bemescape.escape import solve_escape

        accuracy = self.document.accuracy
        return solve_escape(
            surface,
            self.windows_for(surface),
            self.document.motion.diffusion_um2_s,
            target=accuracy.target,
            start=self.start_um(surface) or None,
            ways_out=self.document.start.ways_out,
            name=self.name,
            settings=self._settings(),
            progress=progress,
        )


def _scattered(name: str, scatter: ScatterSection, kappa: float) -> Window:
    from bemescape.windows.window import Window

    return Window.scatter(
        name,
        count=scatter.count,
        density=scatter.density_per_um2,
        radius=scatter.radius_um,
        gap=scatter.gap_um,
        seed=scatter.seed,
        permeability=kappa,
    )


def _scaled(position: Sequence[float], surface: Surface) -> tuple[float, float, float]:
    x, y, z = (float(value * scale) for value, scale in zip(position, surface.unit_um, strict=True))
    return x, y, z


def read_case(path: str | Path) -> Case:
    """Read and check a case file.

    Raises
    ------
    SettingsError
        There is no such file, it is not TOML, or a line of it is wrong; the message names the place.
    """
    path = Path(path)
    return parse_case(read_toml(path, "case"), folder=path.parent, name=path.stem, source=str(path))


def read_toml(path: Path, kind: str) -> dict[str, Any]:
    """The tables of a TOML file that a person wrote; `kind` says what it should be: "case", "study".

    Raises
    ------
    SettingsError
        There is no such file, it is too large, or it is not TOML.
    """
    try:
        if path.is_dir():
            raise SettingsError(f"{path} is a folder; give the {kind} file in it")
        if not path.is_file():
            raise SettingsError(f"there is no {kind} file {_shown(path)}; check the path")
        with path.open("rb") as stream:
            content = stream.read(LARGEST_CASE_BYTES + 1)
    except (OSError, ValueError) as error:
        if isinstance(error, SettingsError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise SettingsError(f"{kind} file {_shown(path)} cannot be read: {reason}") from error
    if len(content) > LARGEST_CASE_BYTES:
        raise SettingsError(
            f"{path} is larger than {LARGEST_CASE_BYTES // 1024} kB, so it is no {kind} file; "
            "give the TOML file that names the mesh"
        )
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise SettingsError(
            f"{path} is not a text file (byte {error.start} is not UTF-8); give the TOML file that names the mesh"
        ) from error
    for number, line in enumerate(text.splitlines(), start=1):
        if line.count(".") > MOST_DOTS_IN_A_LINE and not line.lstrip().startswith("#"):
            raise SettingsError(
                f"{path} line {number} has {line.count('.')} dots (limit {MOST_DOTS_IN_A_LINE}); "
                "write one entry per line"
            )
    try:
        return tomllib.loads(text)
    except RecursionError as error:
        raise SettingsError(f"{path}: the values are nested too deeply to be a {kind}") from error
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"{path} is not valid TOML: {' '.join(str(error).split())[:200]}") from error
    except ValueError as error:
        # Python itself refuses whole numbers of thousands of digits.
        raise SettingsError(f"{path} holds a number with too many digits to read; shorten it") from error


def _shown(path: Path) -> str:
    text = str(path)
    return text if text.isprintable() and len(text) <= 300 else f"{text[:100]!r}..."


def parse_case(table: Mapping[str, Any], *, folder: str | Path, name: str, source: str | None = None) -> Case:
    """Check the content of a case file that is already parsed.

    Parameters
    ----------
    table : mapping
        The tables of the file, as `tomllib` gives them.
    folder : path
        What the mesh file's path is relative to.
    name : str
        Name of the case.
    source : str, optional
        What to call the file in a message; by default the name.

    Raises
    ------
    SettingsError
        An entry is wrong, missing or unknown; the message names its place and the remedy.
    """
    try:
        document = CaseDocument.model_validate(dict(table))
    except ValidationError as error:
        raise SettingsError(f"{source or name}: {validation_sentence(error, table)}") from error
    except RecursionError as error:
        raise SettingsError(f"{source or name}: the values are nested too deeply to be a case") from error
    return Case(name, Path(folder), document)


# From pydantic's list of errors to one sentence. The first error decides: an unknown key before all others,
# since a misspelt key is also a missing one.


def validation_sentence(
    error: ValidationError,
    table: Mapping[str, Any],
    *,
    root: tuple[str, ...] = (),
    document: type[BaseModel] | None = None,
) -> str:
    """The first of pydantic's errors on `table` as a sentence with its place, checked against `document`."""
    document = document or CaseDocument
    items = error.errors(include_url=False)
    # An entry that may be left out is also reported as not being None, which says nothing.
    items = [item for item in items if item["type"] != "none_required"] or items
    first = min(items, key=lambda item: item["type"] != "extra_forbidden")
    location = root + first["loc"]
    if location and location[-1] == "[key]":
        location = (*location[:-2], "name")
    if first["type"] in {"missing", "too_long"} and location and isinstance(location[-1], int):
        location = location[:-1]
    more = f" ({len(items) - 1} more error{'s' * (len(items) > 2)})" if len(items) > 1 else ""
    return f"{_place(location, table)}{_complaint(first, location, document)}{more}"


def _complaint(item: Any, location: tuple[int | str, ...], document: type[BaseModel]) -> str:
    kind, value = item["type"], item["input"]
    example = _example(location, document)
    if kind == "extra_forbidden":
        return _unknown(location, document)
    if kind == "value_error":
        key = next((str(part) for part in reversed(location) if isinstance(part, str)), "")
        message = str(item["ctx"]["error"]).removeprefix(f"{key} ")
        joint = " " if message.startswith(("is ", "has ", "'")) else ": "
        return f"{joint}{message}"
    if kind in {"tuple_type", "list_type"} and len(location) == 1 and location[0] in LISTED_SECTIONS:
        head = str(location[0])
        return f" is {_shortened(value)}; each {LISTED_SECTIONS[head]} is a table of its own, headed by [[{head}]]"
    if kind in {"tuple_type", "too_long"} or (kind == "missing" and isinstance(value, list | tuple)):
        if _is_list_of_another_kind(location, document):
            return f" is {_shortened(value)}; it should be a list; {example}"
        return f" is {_shortened(value)}; it should be a list of three numbers, like [100.0, 0.0, -620.0]"
    if kind == "missing":
        return f" is missing; {example or 'add it'}"
    if kind in {"model_type", "dict_type"}:
        return f" is {_shortened(value)}; it should be a table; {example}"
    wanted = item["msg"].replace("Input should", "it should")
    return f" is {_shortened(value)}; {wanted[0].lower()}{wanted[1:]}" + (f"; {example}" if example else "")


def _place(location: tuple[int | str, ...], table: Mapping[str, Any]) -> str:
    """Where in the file: `[motion] diffusion`, `[[window]] 'neck' disc.radius`."""
    if not location:
        return "the file"
    head, rest = str(location[0]), location[1:]
    if head in LISTED_SECTIONS:
        if not rest:
            return f"[[{head}]]"
        number, *keys = rest
        entry: Any = None
        entries = table.get(head)
        if isinstance(entries, list | tuple) and isinstance(number, int) and number < len(entries):
            entry = entries[number]
        name = entry.get("name") if isinstance(entry, Mapping) else None
        known = isinstance(name, str) and 0 < len(name) <= LONGEST_NAME and name.isprintable()
        label = repr(name) if known else f"number {number + 1}" if isinstance(number, int) else str(number)
        return " ".join([f"[[{head}]]", label, _dotted(keys)]).rstrip()
    if not rest:
        # A misplaced plain key at the top reads as what it is, a table's name in brackets.
        value = table.get(head)
        return _shortened_key(head) if head in table and not isinstance(value, Mapping) else f"[{_shortened_key(head)}]"
    return f"[{_shortened_key(head)}] {_dotted(rest)}"


def _dotted(keys: Sequence[int | str]) -> str:
    text = ""
    for key in keys:
        text += f"[{key}]" if isinstance(key, int) else f".{_shortened_key(key)}"
    return text.removeprefix(".")


def _unknown(location: tuple[int | str, ...], document: type[BaseModel]) -> str:
    key, known = str(location[-1]), list(_known_keys(location[:-1], document))
    near = difflib.get_close_matches(key[:LONGEST_NAME], known, n=1, cutoff=0.6)
    if near:
        return f" is not known; did you mean {near[0]!r}?"
    homes = [name for name in _fields_of(document) if key in _known_keys((name,), document)]
    if homes:
        return f" is not known here; it belongs in {' or '.join(_brackets(name) for name in homes)}"
    return f" is not known; known here: {', '.join(known)}"


def _fields_of(model: type[BaseModel]) -> dict[str, Any]:
    return {field.alias or name: field for name, field in model.model_fields.items()}


def _field_at(location: Sequence[int | str], document: type[BaseModel]) -> tuple[Any, type[BaseModel] | None]:
    """The field at a place of the file and the model of its content, as far as there are any."""
    field: Any = None
    model: type[BaseModel] | None = document
    for key in location:
        if isinstance(key, int):
            continue
        field = _fields_of(model).get(key) if model is not None else None
        model = _model_in(field.annotation) if field is not None else None
    return field, model


def _model_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((model for part in get_args(annotation) if (model := _model_in(part)) is not None), None)


def _known_keys(location: Sequence[int | str], document: type[BaseModel]) -> Sequence[str]:
    _, model = _field_at(location, document)
    return list(_fields_of(model)) if model is not None else []


def _example(location: tuple[int | str, ...], document: type[BaseModel]) -> str:
    field, model = _field_at(location, document)
    if field is None:
        return ""
    key = str(next(part for part in reversed(location) if isinstance(part, str)))
    if field.examples:
        example = field.examples[0]
        return f"write {key} = {_toml(example)}"
    if model is not None:
        return f"{_brackets(key)} takes {', '.join(_fields_of(model))}"
    return ""


def _is_list_of_another_kind(location: Sequence[int | str], document: type[BaseModel]) -> bool:
    """Whether the example of the field says that it is a list and no position."""
    field, _ = _field_at(location, document)
    example = field.examples[0] if field is not None and field.examples else None
    return isinstance(example, list) and not all(isinstance(value, float) for value in example)


def _brackets(key: str) -> str:
    return f"[[{key}]]" if key in LISTED_SECTIONS else f"[{key}]"


def _toml(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    return f'"{value}"' if isinstance(value, str) else str(value)


def _shortened(value: Any) -> str:
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, list | tuple) and len(value) > 6:
        return f"a list of {len(value)}"
    if isinstance(value, int) and not isinstance(value, bool) and abs(value) >= 10**18:
        return "a number of more than 18 digits"
    text = repr(value)
    return text if len(text) <= LONGEST_NAME else f"{text[:40]}..."


def _shortened_key(key: str) -> str:
    return key if len(key) <= LONGEST_NAME and key.isprintable() else f"{key[:40]!r}..."
