"""What the service says of surfaces, runs and studies: models of its JSON."""

from __future__ import annotations

import json
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from bemescape.service.models import Run, Study, Surface
from bemescape.study.table import MEASURES

__all__ = [
    "ComparisonRecord",
    "DemoRecord",
    "PositionsRecord",
    "Problem",
    "RunRecord",
    "SessionRecord",
    "StudyEntry",
    "StudyRecord",
    "SurfaceRecord",
    "finite",
    "run_record",
    "short_answer",
    "study_entry",
    "study_record",
    "surface_record",
]

State = Literal["queued", "running", "done", "failed", "cancelled"]
Part = Literal["none", "waiting", "running", "done", "failed"]


class _Record(BaseModel):
    model_config = ConfigDict(extra="forbid")


class Problem(BaseModel):
    """Why something is refused."""

    detail: str = Field(examples=["there is no run '0123456789abcdef'; it may have been deleted"])


class SessionRecord(_Record):
    """Who asks, and what the service allows."""

    token_needed: bool
    signed_in: bool
    ready: bool = Field(description="whether the workers are up")
    version: str
    limits: dict[str, float | None]


class SurfaceRecord(_Record):
    """An uploaded surface."""

    id: str = Field(examples=["0123456789abcdef"])
    name: str
    created: float = Field(description="seconds since 1970")
    unit: str | list[str]
    heal: str
    demo: str | None
    sha256: str
    faces: int
    vertices: int
    unit_um: list[float] = Field(description="µm per unit of the file along x, y, z")
    bounds_um: list[list[float]]
    volume_um3: float | None
    area_um2: float | None
    solvable: bool
    reason: str | None = Field(description="why it cannot be solved")
    health: dict[str, Any] | None = Field(description="state of the mesh as it was read")
    health_lines: list[str]
    healing: dict[str, Any] | None = Field(description="what was changed; null: nothing")
    healing_lines: list[str]
    label_arrays: list[dict[str, Any]]


class PositionsRecord(_Record):
    """An uploaded list of positions."""

    id: str
    name: str
    rows: int


class RunRecord(_Record):
    """One solve."""

    id: str = Field(examples=["0123456789abcdef"])
    name: str
    surface: str
    study: str | None
    state: State
    reason: str | None = Field(description="why it failed or was cancelled")
    fault: Literal["input", "no answer", "service"] | None = Field(description="what a failed run failed by")
    created: float
    started: float | None
    finished: float | None
    attempts: int
    before_it: int | None = Field(default=None, description="your runs that are computed before it")
    progress: dict[str, Any] | None = Field(default=None, description="the last event of a run that computes")
    pictures: Part
    opinion: Part = Field(description="second opinion by another method")
    opinion_text: str | None
    order: dict[str, Any]
    answer: dict[str, Any] | None = Field(default=None, description="mean time, error and shares of a finished run")
    files: list[str] = Field(default_factory=list)


class StudyEntry(_Record):
    """A study in a list."""

    id: str
    name: str
    created: float
    runs: dict[str, int] = Field(description="state -> number of runs", examples=[{"done": 11, "running": 1}])


class StudyRecord(StudyEntry):
    """One rule for several surfaces, with a row for each."""

    rule: dict[str, Any]
    subjects: Literal["medians", "mixed model"]
    columns: dict[str, str] = Field(description="measured columns of the rows -> what they say")
    rows: list[dict[str, Any]]


class DemoRecord(_Record):
    """A demo shape and the case that goes with it."""

    name: str
    title: str
    text: str
    unit: str
    case: dict[str, Any]


class ComparisonRecord(_Record):
    """Several finished runs side by side."""

    rows: list[dict[str, Any]]
    low_s: float = Field(description="one colour scale for all: from here")
    high_s: float


def finite(value: Any) -> Any:
    """NaN and infinity, which JSON does not know, become null."""
    if isinstance(value, float):
        return value if value - value == 0.0 else None
    if isinstance(value, dict):
        return {key: finite(entry) for key, entry in value.items()}
    if isinstance(value, list):
        return [finite(entry) for entry in value]
    return value


def surface_record(surface: Surface) -> SurfaceRecord:
    """Of a row."""
    return SurfaceRecord(
        id=surface.id,
        name=surface.name,
        created=surface.created,
        unit=json.loads(surface.unit),
        heal=surface.heal,
        demo=surface.demo,
        **finite(json.loads(surface.report)),
    )


def run_record(
    run: Run,
    *,
    files: list[str] | None = None,
    before_it: int | None = None,
    progress: dict[str, Any] | None = None,
) -> RunRecord:
    """Of a row."""
    return RunRecord(
        id=run.id,
        name=run.name,
        surface=run.surface_id,
        study=run.study_id,
        state=run.state,  # type: ignore[arg-type]
        reason=run.reason,
        fault=run.fault,  # type: ignore[arg-type]
        created=run.created,
        started=run.started,
        finished=run.finished,
        attempts=run.attempts,
        before_it=before_it,
        progress=progress,
        pictures=run.pictures,  # type: ignore[arg-type]
        opinion=run.opinion,  # type: ignore[arg-type]
        opinion_text=run.opinion_text,
        order=json.loads(run.order),
        answer=None if run.summary is None else short_answer(json.loads(run.summary)),
        files=files or [],
    )


def short_answer(summary: dict[str, Any]) -> dict[str, Any]:
    """What a list of results shows."""
    kept = (
        "mean_time_s", "relative_error", "target_met", "diffusion_um2_s", "volume_um3", "area_um2", "escape_time_sd_s",
        "slowest_time_s", "panels", "wall_s",
    )  # fmt: skip
    crosscheck = summary["checks"]["crosscheck"]
    return {
        **{key: summary[key] for key in kept},
        "shares": {window["name"]: window["share"] for window in summary["windows"]},
        "agrees": None if crosscheck is None else crosscheck["agrees"],
    }


def study_entry(study: Study, states: dict[str, int]) -> StudyEntry:
    """Of a row and the states of its runs."""
    return StudyEntry(id=study.id, name=study.name, created=study.created, runs=states)


def study_record(study: Study, states: dict[str, int], rows: list[dict[str, Any]]) -> StudyRecord:
    """Of a row and its runs."""
    return StudyRecord(
        id=study.id,
        name=study.name,
        created=study.created,
        runs=states,
        rule=json.loads(study.rule),
        subjects=study.subjects,  # type: ignore[arg-type]
        columns=dict(MEASURES),
        rows=finite(rows),
    )
