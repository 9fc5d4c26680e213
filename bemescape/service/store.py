"""The database: what there is, whose it is and in which state; every change is one transaction.

Files are written before the row that names them and deleted after it, under one lock, so that at any moment a row has
its file. What a crash leaves over is swept at the next start.
"""

from __future__ import annotations

import fcntl
import json
import secrets
import threading
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal, TypeVar

from sqlalchemy import create_engine, delete, event, func, select, text, union, update
from sqlalchemy.orm import Session, sessionmaker

from bemescape.errors import SettingsError
from bemescape.service.files import Files
from bemescape.service.models import SCHEMA, Base, Blob, PositionList, Run, RunFile, Study, Surface
from bemescape.service.problems import Refusal
from bemescape.service.settings import Limits
from bemescape.service.tasks import STUDY_ROW

__all__ = ["ATTEMPTS", "FINISHED", "NewStudy", "Store"]

_Entry = TypeVar("_Entry", Surface, Run, Study, PositionList)

#: A run that was computing when the service or its worker died is begun once more, then given up.
ATTEMPTS = 2
FINISHED = ("done", "failed", "cancelled")
INTERRUPTED = "it was computing when the service or its worker stopped, {count} times; start it again, or ask for less"


@dataclass(frozen=True)
class NewStudy:
    """What is asked of a study: its rule, and the group and subject of each surface by id."""

    name: str
    rule: Mapping[str, Any]
    labels: Mapping[str, Mapping[str, str]]
    subjects: str


class Store:
    """All that the service remembers.

    Raises
    ------
    SettingsError
        Another service uses the folder, or it cannot be written.
    """

    def __init__(self, folder: Path, limits: Limits) -> None:
        self._limits = limits
        self.files = Files(folder)
        self._lock = threading.RLock()
        self._folder_lock = _only_one(folder / "in_use")
        self._engine = create_engine(f"sqlite:///{folder / 'service.sqlite'}", connect_args={"timeout": 30.0})
        event.listen(self._engine, "connect", _prepare_connection)
        event.listen(self._engine, "begin", _begin_writing)
        self._sessions = sessionmaker(self._engine, expire_on_commit=False)
        self._reader = sessionmaker(self._engine.execution_options(reads_only=True), expire_on_commit=False)
        self._prepare()

    def close(self) -> None:
        """Let go of the folder."""
        self._engine.dispose()
        self._folder_lock.close()

    def _prepare(self) -> None:
        with self._engine.begin() as connection:
            found = connection.execute(text("PRAGMA user_version")).scalar_one()
            if found not in (0, SCHEMA):
                raise SettingsError(
                    f"the data folder was written by another version (tables {found}, these are {SCHEMA}); give "
                    "another folder with --data"
                )
            Base.metadata.create_all(connection)
            connection.execute(text(f"PRAGMA user_version = {SCHEMA}"))

    @contextmanager
    def _writing(self) -> Iterator[Session]:
        with self._lock, self._sessions.begin() as session:
            yield session

    @contextmanager
    def _reading(self) -> Iterator[Session]:
        with self._reader() as session:
            yield session

    # -- start -------------------------------------------------------------------------------------

    def recover(self) -> list[str]:
        """After a start: runs that were computing wait again or fail, left-over files go. Runs that wait again."""
        with self._writing() as session:
            again = []
            for run in session.scalars(select(Run).where(Run.state == "running")):
                if self._again_or_failed(run):
                    again.append(run.id)
            for column in ("pictures", "opinion"):
                session.execute(update(Run).where(getattr(Run, column) == "running").values({column: "waiting"}))
            known = set(session.scalars(select(Blob.sha256)))
            self.files.sweep(known)
            return again

    def integrity(self) -> str:
        """What SQLite says of the database: "ok"."""
        with self._reading() as session:
            return str(session.execute(text("PRAGMA integrity_check")).scalar_one())

    @staticmethod
    def _again_or_failed(run: Run) -> bool:
        if run.attempts < ATTEMPTS:
            run.state, run.started = "queued", None
            return True
        run.state, run.finished = "failed", time.time()
        run.reason, run.fault = INTERRUPTED.format(count=run.attempts), "service"
        return False

    # -- files -------------------------------------------------------------------------------------

    def _keep(self, session: Session, data: bytes) -> str:
        sha256 = self.files.write(data)
        if session.get(Blob, sha256) is None:
            session.add(Blob(sha256=sha256, size=len(data)))
            session.flush()
        return sha256

    def _drop_unused(self, session: Session, checksums: set[str]) -> set[str]:
        """Forget files that nothing names any more; they are deleted when the transaction is through."""
        session.flush()
        used: set[str] = set()
        for column in (
            Surface.file_sha256,
            Surface.mesh_sha256,
            Surface.healed_sha256,
            PositionList.file_sha256,
            RunFile.sha256,
        ):
            used |= set(session.scalars(select(column).where(column.in_(checksums))))
        unused = checksums - used
        session.execute(delete(Blob).where(Blob.sha256.in_(unused)))
        return unused

    def bytes_of(self, owner: str) -> int:
        """Bytes that an owner keeps."""
        with self._reading() as session:
            named = union(
                select(Surface.file_sha256).where(Surface.owner == owner),
                select(Surface.mesh_sha256).where(Surface.owner == owner),
                select(Surface.healed_sha256).where(Surface.owner == owner),
                select(PositionList.file_sha256).where(PositionList.owner == owner),
                select(RunFile.sha256).join(Run, Run.id == RunFile.run_id).where(Run.owner == owner),
            ).subquery()
            size = select(func.coalesce(func.sum(Blob.size), 0)).where(Blob.sha256.in_(select(named.c[0])))
            return int(session.execute(size).scalar_one())

    def check_room(self, owner: str, more: int) -> None:
        """Refuse what would pass the owner's limit."""
        used = self.bytes_of(owner)
        if used + more > self._limits.owner_bytes:
            raise Refusal(
                413,
                f"{used / 1e9:.3g} GB are kept for you and {more / 1e9:.3g} GB more would pass the limit of "
                f"{self._limits.owner_bytes / 1e9:.3g} GB; delete runs or surfaces first",
            )

    # -- surfaces and positions --------------------------------------------------------------------

    def add_surface(
        self,
        owner: str,
        *,
        name: str,
        suffix: str,
        unit: Any,
        heal: str,
        data: bytes,
        found: Mapping[str, Any],
        demo: str | None = None,
    ) -> Surface:
        """Keep an uploaded surface that could be read."""
        with self._writing() as session:
            surface = Surface(
                id=_new_id(),
                owner=owner,
                name=name,
                created=time.time(),
                suffix=suffix,
                unit=json.dumps(unit),
                heal=heal,
                report=json.dumps(found["report"]),
                demo=demo,
                file_sha256=self._keep(session, data),
                mesh_sha256=self._keep(session, found["mesh"]),
                healed_sha256=None if found["healed"] is None else self._keep(session, found["healed"]),
            )
            session.add(surface)
        return surface

    def surfaces(self, owner: str) -> Sequence[Surface]:
        """Surfaces of an owner, newest first."""
        with self._reading() as session:
            return session.scalars(select(Surface).where(Surface.owner == owner).order_by(Surface.created.desc())).all()

    def surface(self, owner: str, surface_id: str) -> Surface:
        """One surface, or a refusal."""
        with self._reading() as session:
            return _owned(session.get(Surface, surface_id), owner, "surface", surface_id)

    def demo_surface(self, owner: str, demo: str) -> Surface | None:
        """The surface an owner has made of a demo before."""
        with self._reading() as session:
            return session.scalars(select(Surface).where(Surface.owner == owner, Surface.demo == demo)).first()

    def delete_surface(self, owner: str, surface_id: str, *, with_runs: bool) -> None:
        """Delete a surface; its runs too, if that is said."""
        with self._lock:
            with self._writing() as session:
                surface = _owned(session.get(Surface, surface_id), owner, "surface", surface_id)
                runs = session.scalars(select(Run).where(Run.surface_id == surface_id)).all()
                if runs and not with_runs:
                    raise Refusal(
                        409,
                        f"{len(runs)} run{'s' * (len(runs) > 1)} of this surface would go with it; delete them first, "
                        "or ask with with_runs=true",
                        runs=[run.id for run in runs],
                    )
                _refuse_active(runs)
                checksums = self._forget_runs(session, runs)
                checksums |= {
                    name for name in (surface.file_sha256, surface.mesh_sha256, surface.healed_sha256) if name
                }
                session.delete(surface)
                unused = self._drop_unused(session, checksums)
            self.files.remove(unused)

    def add_positions(self, owner: str, name: str, data: bytes, rows: int) -> PositionList:
        """Keep a CSV file of positions."""
        with self._writing() as session:
            entry = PositionList(
                id=_new_id(), owner=owner, name=name, created=time.time(), rows=rows,
                file_sha256=self._keep(session, data),
            )  # fmt: skip
            session.add(entry)
        return entry

    def positions(self, owner: str, list_id: str) -> PositionList:
        """One list of positions, or a refusal."""
        with self._reading() as session:
            return _owned(session.get(PositionList, list_id), owner, "list of positions", list_id)

    # -- runs --------------------------------------------------------------------------------------

    def add_runs(
        self, owner: str, orders: Sequence[tuple[str, str, Mapping[str, Any]]], study: NewStudy | None = None
    ) -> tuple[list[Run], Study | None]:
        """Queue runs, given as surface, name and order; of one study or of none."""
        with self._writing() as session:
            waiting = session.scalar(
                select(func.count()).select_from(Run).where(Run.owner == owner, Run.state == "queued")
            ) or 0  # fmt: skip
            if waiting + len(orders) > self._limits.queued_runs:
                raise Refusal(
                    429,
                    f"{waiting} of your runs wait and {len(orders)} more would pass the limit of "
                    f"{self._limits.queued_runs}; come back when some are done",
                )
            now = time.time()
            record = None
            if study is not None:
                record = Study(
                    id=_new_id(), owner=owner, name=study.name, created=now, rule=json.dumps(study.rule),
                    labels=json.dumps(study.labels), subjects=study.subjects,
                )  # fmt: skip
                session.add(record)
                session.flush()
            runs = [
                Run(
                    id=_new_id(),
                    owner=owner,
                    surface_id=surface_id,
                    study_id=None if record is None else record.id,
                    name=name,
                    order=json.dumps(order),
                    # Told apart, so that those of one study keep their order.
                    created=now + 1e-6 * number,
                    state="queued",
                )
                for number, (surface_id, name, order) in enumerate(orders)
            ]
            for surface_id in {run.surface_id for run in runs}:
                _owned(session.get(Surface, surface_id), owner, "surface", surface_id)
            session.add_all(runs)
        return runs, record

    def runs(self, owner: str, *, surface_id: str | None = None, study_id: str | None = None) -> Sequence[Run]:
        """Runs of an owner, newest first; those of a study as they were asked for."""
        query = select(Run).where(Run.owner == owner)
        if surface_id is not None:
            query = query.where(Run.surface_id == surface_id)
        if study_id is not None:
            query = query.where(Run.study_id == study_id)
        with self._reading() as session:
            order = Run.created if study_id is not None else Run.created.desc()
            return session.scalars(query.order_by(order).limit(2000)).all()

    def run(self, owner: str, run_id: str) -> Run:
        """One run, or a refusal."""
        with self._reading() as session:
            return _owned(session.get(Run, run_id), owner, "run", run_id)

    def place_in_queue(self, run: Run) -> int:
        """Runs of the same owner that are computed before it."""
        with self._reading() as session:
            return (
                session.scalar(
                    select(func.count()).select_from(Run).where(
                        Run.owner == run.owner, Run.state == "queued", Run.created < run.created
                    )
                )
                or 0
            )  # fmt: skip

    def run_files(self, run_id: str) -> dict[str, str]:
        """Name -> checksum of the files of a run."""
        with self._reading() as session:
            return dict(session.execute(select(RunFile.name, RunFile.sha256).where(RunFile.run_id == run_id)).all())

    def cancel(self, owner: str, run_id: str) -> Run:
        """A waiting run is cancelled at once; one that computes stays "running" until its worker has stopped."""
        with self._writing() as session:
            run = _owned(session.get(Run, run_id), owner, "run", run_id)
            if run.state in FINISHED:
                raise Refusal(409, f"this run is {run.state} already; there is nothing to cancel")
            if run.state == "queued":
                run.state, run.finished, run.reason = "cancelled", time.time(), "cancelled while it waited"
        return run

    def delete_run(self, owner: str, run_id: str) -> None:
        """Delete a run that is over, with its files."""
        with self._lock:
            with self._writing() as session:
                run = _owned(session.get(Run, run_id), owner, "run", run_id)
                _refuse_active([run])
                unused = self._drop_unused(session, self._forget_runs(session, [run]))
            self.files.remove(unused)

    def delete_old(self, now: float) -> int:
        """Delete runs that were over longer ago than the limit; answer with their number."""
        if self._limits.keep_days is None:
            return 0
        oldest = now - 86400.0 * self._limits.keep_days
        with self._lock:
            with self._writing() as session:
                runs = session.scalars(select(Run).where(Run.state.in_(FINISHED), Run.finished < oldest)).all()
                runs = [run for run in runs if "running" not in (run.pictures, run.opinion)]
                unused = self._drop_unused(session, self._forget_runs(session, runs))
            self.files.remove(unused)
        return len(runs)

    @staticmethod
    def _forget_runs(session: Session, runs: Sequence[Run]) -> set[str]:
        ids = [run.id for run in runs]
        checksums = set(session.scalars(select(RunFile.sha256).where(RunFile.run_id.in_(ids))))
        session.execute(delete(RunFile).where(RunFile.run_id.in_(ids)))
        session.execute(delete(Run).where(Run.id.in_(ids)))
        return checksums

    # -- studies -----------------------------------------------------------------------------------

    def studies(self, owner: str) -> Sequence[Study]:
        """Studies of an owner, newest first."""
        with self._reading() as session:
            return session.scalars(select(Study).where(Study.owner == owner).order_by(Study.created.desc())).all()

    def study(self, owner: str, study_id: str) -> Study:
        """One study, or a refusal."""
        with self._reading() as session:
            return _owned(session.get(Study, study_id), owner, "study", study_id)

    def study_states(self, owner: str) -> dict[str, dict[str, int]]:
        """Study id -> state -> number of its runs."""
        query = select(Study.id, Run.state, func.count()).join(Run, Run.study_id == Study.id)
        found: dict[str, dict[str, int]] = {}
        with self._reading() as session:
            for study_id, state, count in session.execute(
                query.where(Study.owner == owner).group_by(Study.id, Run.state)
            ):
                found.setdefault(study_id, {})[state] = count
        return found

    def study_rows(self, study_id: str) -> dict[str, str]:
        """Run id -> checksum of what was measured of it for the study's table."""
        query = (
            select(RunFile.run_id, RunFile.sha256)
            .join(Run, Run.id == RunFile.run_id)
            .where(Run.study_id == study_id, RunFile.name == STUDY_ROW)
        )
        with self._reading() as session:
            return dict(session.execute(query).all())

    def delete_study(self, owner: str, study_id: str) -> None:
        """Delete a study and its runs."""
        with self._lock:
            with self._writing() as session:
                study = _owned(session.get(Study, study_id), owner, "study", study_id)
                runs = session.scalars(select(Run).where(Run.study_id == study_id)).all()
                _refuse_active(runs)
                checksums = self._forget_runs(session, runs)
                session.delete(study)
                unused = self._drop_unused(session, checksums)
            self.files.remove(unused)

    # -- the queue ---------------------------------------------------------------------------------

    def next_to_solve(self) -> Run | None:
        """Claim the next run in fair order: the owner who computes least, then who waited longest since a start."""
        with self._writing() as session:
            queued = session.execute(
                select(Run.owner, func.min(Run.created)).where(Run.state == "queued").group_by(Run.owner)
            ).all()
            if not queued:
                return None
            busy: dict[str, int] = dict(
                session.execute(select(Run.owner, func.count()).where(Run.state == "running").group_by(Run.owner)).all()
            )
            last: dict[str, float] = dict(
                session.execute(select(Run.owner, func.max(Run.started)).group_by(Run.owner)).all()  # type: ignore[arg-type]
            )
            owner, created = min(queued, key=lambda row: (busy.get(row[0], 0), last.get(row[0]) or 0.0, row[1]))
            run = session.scalars(
                select(Run).where(Run.owner == owner, Run.state == "queued", Run.created == created)
            ).first()
            if run is not None:
                run.state, run.started, run.attempts = "running", time.time(), run.attempts + 1
        return run

    def any_queued(self) -> bool:
        """Whether a run waits."""
        with self._reading() as session:
            return session.scalars(select(Run.id).where(Run.state == "queued").limit(1)).first() is not None

    def next_to_draw(self) -> Run | None:
        """Claim the next run whose pictures wait."""
        with self._writing() as session:
            return self._claim(session, "pictures")

    def next_to_check(self) -> Run | None:
        """Claim the next run whose second opinion waits; None while any run waits or computes."""
        with self._writing() as session:
            busy = session.scalar(
                select(func.count()).select_from(Run).where(Run.state.in_(("queued", "running")))
            )  # fmt: skip
            return None if busy else self._claim(session, "opinion")

    @staticmethod
    def _claim(session: Session, column: str) -> Run | None:
        run = session.scalars(
            select(Run).where(getattr(Run, column) == "waiting", Run.state == "done").order_by(Run.finished)
        ).first()
        if run is not None:
            setattr(run, column, "running")
        return run

    def solved(self, run_id: str, files: Mapping[str, bytes], summary: str, *, second_opinion: bool) -> None:
        """A run is done; its files are there before it says so."""
        with self._writing() as session:
            run = session.get(Run, run_id)
            if run is None or run.state != "running":
                return
            self._put_files(session, run_id, files)
            run.state, run.finished, run.summary, run.reason = "done", time.time(), summary, None
            run.pictures = "waiting"
            run.opinion = "waiting" if second_opinion else "none"

    def _put_files(self, session: Session, run_id: str, files: Mapping[str, bytes]) -> set[str]:
        replaced = set()
        for name, data in files.items():
            sha256 = self._keep(session, data)
            entry = session.get(RunFile, (run_id, name))
            if entry is None:
                session.add(RunFile(run_id=run_id, name=name, sha256=sha256))
            elif entry.sha256 != sha256:
                replaced.add(entry.sha256)
                entry.sha256 = sha256
        return replaced

    def ended(self, run_id: str, state: str, reason: str, fault: str | None) -> None:
        """A run failed, by whose fault, or was cancelled."""
        with self._writing() as session:
            run = session.get(Run, run_id)
            if run is not None and run.state == "running":
                run.state, run.finished, run.reason, run.fault = state, time.time(), reason, fault

    def interrupted(self, run_id: str) -> str | None:
        """The worker of a run died: it waits again, or fails. Its new state; None if it was not computing."""
        with self._writing() as session:
            run = session.get(Run, run_id)
            if run is None or run.state != "running":
                return None
            self._again_or_failed(run)
            return run.state

    def put_back(self, run_id: str, column: Literal["state", "pictures", "opinion"]) -> None:
        """What was claimed could not be begun, or is to be begun once more: it waits again, as if never claimed."""
        with self._writing() as session:
            run = session.get(Run, run_id)
            if run is None or getattr(run, column) != "running":
                return
            if column == "state":
                run.state, run.started, run.attempts = "queued", None, run.attempts - 1
            else:
                setattr(run, column, "waiting")

    def drawn(self, run_id: str, files: Mapping[str, bytes] | None) -> None:
        """Pictures are there, or could not be made (None)."""
        with self._lock:
            with self._writing() as session:
                run = session.get(Run, run_id)
                if run is None:
                    return
                replaced = self._put_files(session, run_id, files or {})
                run.pictures = "failed" if files is None else "done"
                unused = self._drop_unused(session, replaced)
            self.files.remove(unused)

    def checked(
        self, run_id: str, state: str, statement: str | None, files: Mapping[str, bytes] | None = None,
        summary: str | None = None,
    ) -> None:  # fmt: skip
        """A second opinion is there ("done"), could not be had ("failed") or has to wait again ("waiting")."""
        with self._lock:
            with self._writing() as session:
                run = session.get(Run, run_id)
                if run is None:
                    return
                replaced = self._put_files(session, run_id, files or {})
                run.opinion, run.opinion_text = state, statement
                if summary is not None:
                    run.summary, run.pictures = summary, "waiting"  # the report tells of it
                unused = self._drop_unused(session, replaced)
            self.files.remove(unused)


def _new_id() -> str:
    return secrets.token_hex(8)


def _owned(entry: _Entry | None, owner: str, kind: str, entry_id: str) -> _Entry:
    """What belongs to another owner is as unknown as what does not exist."""
    if entry is None or entry.owner != owner:
        raise Refusal(404, f"there is no {kind} {entry_id[:16]!r}; it may have been deleted")
    return entry


def _refuse_active(runs: Sequence[Run]) -> None:
    active = [run for run in runs if run.state in ("queued", "running")]
    if active:
        raise Refusal(
            409,
            f"run {active[0].name!r} is {active[0].state}; cancel it first",
            runs=[run.id for run in active],
        )


def _only_one(path: Path) -> Any:
    """A lock that ends with the process, however it ends."""
    stream = path.open("w")
    try:
        fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        stream.close()
        raise SettingsError(
            f"another service uses the data folder {path.parent}; stop it, or give another folder with --data"
        ) from error
    return stream


def _prepare_connection(connection: Any, _record: Any) -> None:
    # SQLAlchemy begins transactions itself, see `_begin_writing`.
    connection.isolation_level = None
    for line in ("journal_mode = WAL", "synchronous = NORMAL", "foreign_keys = ON", "busy_timeout = 30000"):
        connection.execute(f"PRAGMA {line}")


def _begin_writing(connection: Any) -> None:
    """Take the write lock at once: a transaction that reads first and then has to wait could fail half-way."""
    reads_only = connection.get_execution_options().get("reads_only", False)
    connection.exec_driver_sql("BEGIN" if reads_only else "BEGIN IMMEDIATE")
