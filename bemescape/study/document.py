"""The study file: shapes, one rule for their windows, motion, accuracy and sweeps, as TOML."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import BeforeValidator, Field, ValidationError, WithJsonSchema, field_validator, model_validator

from bemescape.case import (
    AccuracySection,
    FileName,
    LengthUnit,
    MotionSection,
    Name,
    Section,
    WindowSection,
    read_toml,
    validation_sentence,
)
from bemescape.errors import SettingsError
from bemescape.units import diffusion_um2_s, length_um, permeability_um_s

__all__ = ["Study", "StudyDocument", "read_study", "study_schema"]

#: Values of one sweep; more are a slip of the keyboard.
MOST_VALUES = 1000


#: One pattern or several.
_Patterns = Annotated[
    tuple[FileName, ...],
    BeforeValidator(lambda value: (value,) if isinstance(value, str) else value),
    WithJsonSchema(
        {
            "oneOf": [{"type": "string"}, {"type": "array", "items": {"type": "string"}, "minItems": 1}],
            "description": "mesh files; * and ** stand for any name",
            "examples": ["control/*.ply"],
        }
    ),
    Field(min_length=1),
]
_WholeNumber = Annotated[int, Field(strict=True)]


class ShapesSection(Section):
    """A set of shapes: mesh files by pattern, or a CSV list of them. Paths are relative to the study file."""

    files: _Patterns | None = Field(
        default=None, description="mesh files; * and ** stand for any name", examples=["control/*.ply"]
    )
    listed: FileName | None = Field(
        default=None, alias="list", description="CSV with a column 'file'", examples=["shapes.csv"]
    )
    unit: LengthUnit | None = Field(default=None, examples=["nm"])
    group: Name | None = Field(default=None, examples=["control"])
    subject: Name | None = Field(default=None, description="animal, cell or donor", examples=["animal 1"])
    heal: Literal["none", "auto", "rebuild"] = Field(default="auto", examples=["auto"])

    @model_validator(mode="after")
    def _has_one_source(self) -> Self:
        if (self.files is None) == (self.listed is None):
            given = "neither files nor list" if self.files is None else "files and list"
            raise SettingsError(f"has {given}; give exactly one of them")
        return self


class SweepSection(Section):
    """Lists of values; every combination is solved for every shape."""

    diffusion: tuple[str, ...] = Field(default=(), examples=[["10 um^2/s", "20 um^2/s"]])
    radius: tuple[str, ...] = Field(default=(), examples=[["25 nm", "50 nm"]])
    permeability: tuple[str, ...] = Field(default=(), examples=[["1 um/s", "inf"]])
    count: tuple[_WholeNumber, ...] = Field(default=(), examples=[[10, 20, 40]])
    seed: tuple[_WholeNumber, ...] = Field(default=(), examples=[[1, 2, 3]])
    window: Name | None = Field(
        default=None, description="the one window whose radius, permeability, count or seed is swept; all by default"
    )

    @field_validator("diffusion", "radius", "permeability")
    @classmethod
    def _each_has_its_unit(cls, values: tuple[str, ...], info: Any) -> tuple[str, ...]:
        for value in values:
            SWEPT[info.field_name].parse(value)
        return values

    @field_validator("diffusion", "radius", "permeability", "count", "seed")
    @classmethod
    def _each_is_another(cls, values: tuple[Any, ...], info: Any) -> tuple[Any, ...]:
        if len(values) > MOST_VALUES:
            raise SettingsError(f"has {len(values)} values (limit {MOST_VALUES}); sweep in several studies")
        parsed = [SWEPT[info.field_name].parse(value) for value in values]
        for number, value in enumerate(parsed):
            if value in parsed[:number]:
                raise SettingsError(f"has the value {values[number]!r} twice; name each once")
        return values


@dataclass(frozen=True)
class Swept:
    """What can be swept: its column in the table, its letter in a case's name, and its parser."""

    column: str
    letter: str
    parse: Any


#: Key of `[sweep]` -> column of the table and parser to µm, s.
SWEPT: Mapping[str, Swept] = {
    "diffusion": Swept("diffusion_um2_s", "D", diffusion_um2_s),
    "radius": Swept("swept_radius_um", "a", lambda value: length_um(value, "radius")),
    "permeability": Swept("swept_permeability_um_s", "kappa", permeability_um_s),
    "count": Swept("swept_count", "count", int),
    "seed": Swept("swept_seed", "seed", int),
}


class StatisticsSection(Section):
    """How groups are compared."""

    subjects: Literal["medians", "mixed model"] = Field(
        default="medians",
        description="with a subject column: compare the medians of subjects, or fit a mixed model",
        examples=["medians"],
    )
    resamples: int = Field(default=9999, strict=True, ge=99, le=1_000_000, examples=[9999])
    seed: int = Field(default=0, strict=True, ge=0, le=2**32 - 1, examples=[1])


class StudyDocument(Section):
    """The content of a study file."""

    shapes: tuple[ShapesSection, ...] = Field(min_length=1)
    motion: MotionSection | None = None
    window: tuple[WindowSection, ...] = ()
    accuracy: AccuracySection = AccuracySection()
    sweep: SweepSection = SweepSection()
    statistics: StatisticsSection = StatisticsSection()

    @model_validator(mode="after")
    def _something_moves(self) -> Self:
        if self.motion is None and not self.sweep.diffusion:
            raise SettingsError('has no [motion]; write diffusion = "20 um^2/s" there, or a list in [sweep]')
        return self


def study_schema() -> dict[str, Any]:
    """JSON schema (draft 2020-12) of a study file, for editors that check TOML."""
    return StudyDocument.model_json_schema()


@dataclass(frozen=True)
class Study:
    """A checked study file.

    Attributes
    ----------
    name : str
        The file's name without `.toml` and `.study`.
    folder : Path
        What paths in it are relative to.
    document : StudyDocument
    table : mapping
        The file as written, whose window rules go into every case unchanged.
    """

    name: str
    folder: Path
    document: StudyDocument
    table: Mapping[str, Any]


def read_study(path: str | Path) -> Study:
    """Read and check a study file; the shapes it names are looked up by `bemescape.study.plan.plan_study`.

    Raises
    ------
    SettingsError
        There is no such file, it is not TOML, or a line of it is wrong; the message names the place.
    """
    path = Path(path)
    table = read_toml(path, "study")
    try:
        document = StudyDocument.model_validate(table)
    except ValidationError as error:
        raise SettingsError(f"{path}: {validation_sentence(error, table, document=StudyDocument)}") from error
    return Study(path.stem.removesuffix(".study"), path.parent, document, table)
