"""Several surfaces under one rule, and several runs side by side."""

from __future__ import annotations

import json
from typing import Annotated, Any

from fastapi import APIRouter, Query, Request, Response
from fastapi.concurrency import run_in_threadpool

from bemescape.errors import SettingsError
from bemescape.service.api.parts import REFUSALS, Id, Me, Parts, Service, json_body
from bemescape.service.api.runs import csv_answer
from bemescape.service.models import Study
from bemescape.service.orders import ORDER_EXAMPLE, checked_order
from bemescape.service.problems import Refusal
from bemescape.service.records import ComparisonRecord, StudyRecord, short_answer, study_record, study_row

__all__ = ["router"]

router = APIRouter(responses=REFUSALS)
_MOST_SURFACES = 500
_MOST_COMPARED = 8
_EXAMPLE = {
    "name": "two conditions",
    "surfaces": ["0123456789abcdef", "fedcba9876543210"],
    "rule": {key: value for key, value in ORDER_EXAMPLE.items() if key not in ("surface", "name")},
}
_STUDY_BODY = {
    "requestBody": {
        "required": True,
        "content": {
            "application/json": {
                "schema": {
                    "type": "object",
                    "properties": {
                        "name": {"type": "string"},
                        "surfaces": {"type": "array", "items": {"type": "string"}, "minItems": 1},
                        "rule": {"type": "object", "description": "motion, window, accuracy and start of a case file"},
                    },
                    "required": ["surfaces", "rule"],
                    "additionalProperties": False,
                },
                "example": _EXAMPLE,
            }
        },
    }
}


@router.post("/studies", status_code=202, tags=["studies"], openapi_extra=_STUDY_BODY)
async def add_study(request: Request, parts: Parts, me: Me) -> StudyRecord:
    """Queue one run for each surface, all under the same rule; a surface that fails does not stop the others."""
    body = await json_body(request)

    def queue() -> StudyRecord:
        if not isinstance(body, dict) or not {"surfaces", "rule"} <= set(body) <= {"name", "surfaces", "rule"}:
            raise SettingsError("a study takes surfaces and rule, and may have a name")
        surfaces, rule, name = body["surfaces"], body["rule"], body.get("name", "study")
        if not (isinstance(surfaces, list) and 0 < len(surfaces) <= _MOST_SURFACES):
            raise SettingsError(f"surfaces should be a list of 1 to {_MOST_SURFACES} ids")
        if not all(isinstance(entry, str) for entry in surfaces) or len(set(surfaces)) < len(surfaces):
            raise SettingsError("surfaces should be ids, each once")
        if not isinstance(rule, dict) or "surface" in rule:
            raise SettingsError("rule should be an object with motion, window, accuracy and start of a case file")
        if not (isinstance(name, str) and 0 < len(name.strip()) <= 60 and name.isprintable()):
            raise SettingsError("name should be 1 to 60 printable characters")
        orders = []
        for surface_id in surfaces:
            checked = checked_order(parts.store, parts.settings.limits, me, {**rule, "surface": surface_id})
            orders.append((checked.surface_id, checked.name, checked.table))
        parts.store.check_room(me, 0)
        _, study = parts.store.add_runs(me, orders, (name, rule))
        if study is None:
            raise RuntimeError("a study was asked for and not made")
        return _record(parts, me, study)

    record = await run_in_threadpool(queue)
    parts.jobs.wake()
    return record


def _record(parts: Service, me: str, study: Study) -> StudyRecord:
    surfaces = {surface.id: surface for surface in parts.store.surfaces(me)}
    runs = parts.store.runs(me, study_id=study.id)
    return study_record(study, [study_row(run, surfaces[run.surface_id]) for run in runs])


@router.get("/studies", tags=["studies"])
def list_studies(parts: Parts, me: Me) -> list[StudyRecord]:
    """Your studies, newest first."""
    return [_record(parts, me, study) for study in parts.store.studies(me)]


@router.get("/studies/{study_id}", tags=["studies"])
def get_study(study_id: Id, parts: Parts, me: Me) -> StudyRecord:
    """One study with a row for each surface."""
    return _record(parts, me, parts.store.study(me, study_id))


@router.get(
    "/studies/{study_id}/table.csv",
    tags=["studies"],
    response_class=Response,
    responses={200: {"content": {"text/csv": {}}}},
)
def study_table(study_id: Id, parts: Parts, me: Me) -> Response:
    """The rows of a study as CSV, with a column for the share of each opening."""
    record = _record(parts, me, parts.store.study(me, study_id))
    windows = sorted({name for row in record.rows for name in row["shares"] or {}})
    keys = [key for key in (record.rows[0] if record.rows else {}) if key != "shares"]
    rows: list[list[Any]] = [[*keys, *(f"share {name}" for name in windows)]]
    rows += [
        [*(row[key] for key in keys), *((row["shares"] or {}).get(name) for name in windows)] for row in record.rows
    ]
    return csv_answer(rows, "table.csv")


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
