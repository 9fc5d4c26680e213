"""Several surfaces under one rule, and several runs side by side."""

from __future__ import annotations

import json
import secrets
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Annotated, Any, Literal

from fastapi import APIRouter, Query, Response
from fastapi.concurrency import run_in_threadpool
from pydantic import BaseModel, ConfigDict, Field, field_validator

from bemescape.errors import SettingsError
from bemescape.service import tasks
from bemescape.service.api.parts import REFUSALS, Id, Me, Parts, Service
from bemescape.service.api.runs import csv_answer
from bemescape.service.models import Run, Study, Surface
from bemescape.service.orders import ORDER_EXAMPLE, checked_order
from bemescape.service.problems import Refusal
from bemescape.service.records import (
    ComparisonRecord,
    StudyEntry,
    StudyRecord,
    finite,
    short_answer,
    study_entry,
    study_record,
)
from bemescape.service.store import NewStudy
from bemescape.service.tasks import StudyMember
from bemescape.study.table import MEASURES

__all__ = ["router"]

router = APIRouter(responses=REFUSALS)
_MOST_SURFACES = 500
_MOST_COMPARED = 8
_EXAMPLE: dict[str, Any] = {
    "name": "two conditions",
    "surfaces": [
        {"surface": "0123456789abcdef", "group": "control", "subject": "animal 1"},
        {"surface": "fedcba9876543210", "group": "treated", "subject": "animal 2"},
    ],
    "rule": {key: value for key, value in ORDER_EXAMPLE.items() if key not in ("surface", "name")},
}


_SurfaceId = Annotated[str, Field(pattern="^[0-9a-f]{16}$", examples=["0123456789abcdef"])]


class StudySurface(BaseModel):
    """A surface of a study; `group` and `subject` as in a study file."""

    model_config = ConfigDict(extra="forbid")
    surface: _SurfaceId
    group: str = Field(default="", max_length=60)
    subject: str = Field(default="", max_length=60, description="animal, cell or donor")

    @field_validator("group", "subject")
    @classmethod
    def _printable(cls, text: str) -> str:
        if not text.isprintable():
            raise ValueError("should be printable characters")
        return text.strip()


class StudyOrder(BaseModel):
    """Several surfaces under one rule."""

    model_config = ConfigDict(extra="forbid", json_schema_extra={"example": _EXAMPLE})
    name: str = Field(default="study", min_length=1, max_length=60)
    surfaces: list[StudySurface | _SurfaceId] = Field(
        min_length=1, max_length=_MOST_SURFACES, description="or ids alone"
    )
    rule: dict[str, Any] = Field(description="motion, window, accuracy and start of a case file")
    subjects: Literal["medians", "mixed model"] = Field(
        default="medians", description="with subjects: compare their medians, or fit a mixed model"
    )


@router.post("/studies", status_code=202, tags=["studies"])
async def add_study(order: StudyOrder, parts: Parts, me: Me) -> StudyRecord:
    """Queue one run for each surface, all under the same rule; a surface that fails does not stop the others."""
    record = await run_in_threadpool(_queued, parts, me, order)
    parts.jobs.wake()
    return record


def _queued(parts: Service, me: str, order: StudyOrder) -> StudyRecord:
    chosen = [StudySurface(surface=entry) if isinstance(entry, str) else entry for entry in order.surfaces]
    if len({entry.surface for entry in chosen}) < len(chosen):
        raise SettingsError("surfaces should be named once each")
    if "surface" in order.rule or "name" in order.rule:
        raise SettingsError("rule should be an object with motion, window, accuracy and start of a case file")
    if not order.name.strip() or not order.name.isprintable():
        raise SettingsError("name should be 1 to 60 printable characters")
    orders = []
    for entry in chosen:
        checked = checked_order(parts.store, parts.settings.limits, me, {**order.rule, "surface": entry.surface})
        orders.append((checked.surface_id, checked.name, checked.table))
    parts.store.check_room(me, 0)
    labels = {entry.surface: {"group": entry.group, "subject": entry.subject} for entry in chosen}
    _, study = parts.store.add_runs(me, orders, NewStudy(order.name.strip(), order.rule, labels, order.subjects))
    if study is None:
        raise RuntimeError("a study was asked for and not made")
    return _record(parts, me, study)


@dataclass(frozen=True)
class _Member:
    """A run of a study with the surface it is of and what was measured."""

    run: Run
    surface: Surface
    labels: Mapping[str, str]
    values: Mapping[str, Any] | None

    @property
    def failure(self) -> str:
        return self.run.reason or ("" if self.run.state == "done" else f"{self.run.state}, not solved yet")


def _members(parts: Service, me: str, study: Study) -> list[_Member]:
    surfaces = {surface.id: surface for surface in parts.store.surfaces(me)}
    labels = json.loads(study.labels)
    measured = parts.store.study_rows(study.id)
    return [
        _Member(
            run,
            surfaces[run.surface_id],
            labels[run.surface_id],
            json.loads(parts.store.files.read(measured[run.id])) if run.id in measured else None,
        )
        for run in parts.store.runs(me, study_id=study.id)
    ]


def _record(parts: Service, me: str, study: Study) -> StudyRecord:
    members = _members(parts, me, study)
    rows = [
        {
            "run": member.run.id,
            "surface": member.surface.id,
            "name": member.run.name,
            **member.labels,
            "state": member.run.state,
            "reason": member.run.reason,
            **{column: (member.values or {}).get(column) for column in MEASURES},
            "shares": None if member.values is None else member.values["shares"],
        }
        for member in members
    ]
    return study_record(study, dict(Counter(member.run.state for member in members)), rows)


@router.get("/studies", tags=["studies"])
def list_studies(parts: Parts, me: Me) -> list[StudyEntry]:
    """Your studies, newest first."""
    states = parts.store.study_states(me)
    return [study_entry(study, states.get(study.id, {})) for study in parts.store.studies(me)]


@router.get("/studies/{study_id}", tags=["studies"])
def get_study(study_id: Id, parts: Parts, me: Me) -> StudyRecord:
    """One study with a row for each surface."""
    return _record(parts, me, parts.store.study(me, study_id))


async def _tabled(parts: Service, me: str, study_id: str) -> dict[str, Any]:
    """Table and statistics, made where pandas and scipy are."""

    def gathered() -> tuple[Any, ...]:
        study = parts.store.study(me, study_id)
        seen: Counter[str] = Counter()
        members = []
        for member in _members(parts, me, study):
            seen[member.run.name] += 1
            number = seen[member.run.name]
            members.append(
                StudyMember(
                    run=member.run.id,
                    shape=member.run.name if number == 1 else f"{member.run.name} ({number})",
                    group=member.labels["group"],
                    subject=member.labels["subject"],
                    mesh_sha256=member.surface.file_sha256,
                    values=member.values,
                    seconds=(member.run.finished or 0.0) - (member.run.started or 0.0),
                    failure=member.failure,
                )
            )
        return study.name, json.loads(study.rule)["motion"], study.subjects, members

    answer: dict[str, Any] = await parts.crew.ask(
        tasks.table_of_study,
        *await run_in_threadpool(gathered),
        key=f"study-{secrets.token_hex(8)}",
        timeout=parts.settings.limits.read_s,
    )
    return answer


@router.get(
    "/studies/{study_id}/table.csv",
    tags=["studies"],
    response_class=Response,
    responses={200: {"content": {"text/csv": {}}}},
)
async def study_table(study_id: Id, parts: Parts, me: Me) -> Response:
    """The rows of a study as CSV: the columns of `cases.csv` of a study file."""
    return csv_answer((await _tabled(parts, me, study_id))["csv"], "table.csv")


@router.get("/studies/{study_id}/statistics", tags=["studies"])
async def study_statistics(study_id: Id, parts: Parts, me: Me) -> dict[str, Any]:
    """Groups compared and time against shape: the content of `statistics.json` of a study file."""
    content: dict[str, Any] = finite(json.loads((await _tabled(parts, me, study_id))["statistics"]))
    return content


@router.delete("/studies/{study_id}", status_code=204, tags=["studies"])
def delete_study(study_id: Id, parts: Parts, me: Me) -> Response:
    """Delete a study with its runs."""
    parts.store.delete_study(me, study_id)
    return Response(status_code=204)


@router.get("/comparison", tags=["comparison"])
def compare(
    parts: Parts, me: Me, run: Annotated[list[str], Query(min_length=2, max_length=_MOST_COMPARED)]
) -> ComparisonRecord:
    """Two to eight finished runs beside one another, each against the first, with one colour scale for all."""
    if len(set(run)) < len(run):
        raise SettingsError("name each run once")
    rows: list[dict[str, Any]] = []
    for run_id in run:
        found = parts.store.run(me, run_id)
        if found.state != "done" or found.summary is None:
            raise Refusal(409, f"run {found.name!r} is {found.state}; only finished runs can be compared")
        answer = short_answer(json.loads(found.summary))
        first = rows[0] if rows else None
        ratio = 1.0 if first is None else answer["mean_time_s"] / first["mean_time_s"]
        error = answer["relative_error"] + (0.0 if first is None else first["relative_error"])
        rows.append(
            {
                "run": found.id,
                "surface": found.surface_id,
                "name": found.name,
                **answer,
                "ratio": ratio,
                "ratio_error": 0.0 if first is None else ratio * error,
                "differs": first is not None and abs(ratio - 1.0) > error,
            }
        )
    return ComparisonRecord(rows=rows, low_s=0.0, high_s=max(row["slowest_time_s"] for row in rows))
