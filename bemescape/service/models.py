"""The tables of the database."""

from __future__ import annotations

from sqlalchemy import ForeignKey, Index
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column

__all__ = ["SCHEMA", "Base", "Blob", "PositionList", "Run", "RunFile", "Study", "Surface"]

#: Raised when the tables change; a database of another number is refused rather than guessed at.
SCHEMA = 2


class Base(DeclarativeBase):
    """All tables."""


class Blob(Base):
    """A file in the data folder, named by its checksum."""

    __tablename__ = "blobs"
    sha256: Mapped[str] = mapped_column(primary_key=True)
    size: Mapped[int]


class Surface(Base):
    """An uploaded surface that could be read."""

    __tablename__ = "surfaces"
    id: Mapped[str] = mapped_column(primary_key=True)
    owner: Mapped[str] = mapped_column(index=True)
    name: Mapped[str]
    created: Mapped[float]
    suffix: Mapped[str]
    unit: Mapped[str]  # JSON, as in a case file
    heal: Mapped[str]
    report: Mapped[str]  # JSON: what `tasks.read_upload` found
    demo: Mapped[str | None]
    file_sha256: Mapped[str] = mapped_column(ForeignKey("blobs.sha256"))
    mesh_sha256: Mapped[str] = mapped_column(ForeignKey("blobs.sha256"))
    healed_sha256: Mapped[str | None] = mapped_column(ForeignKey("blobs.sha256"))


class PositionList(Base):
    """An uploaded CSV file of positions."""

    __tablename__ = "position_lists"
    id: Mapped[str] = mapped_column(primary_key=True)
    owner: Mapped[str] = mapped_column(index=True)
    name: Mapped[str]
    created: Mapped[float]
    rows: Mapped[int]
    file_sha256: Mapped[str] = mapped_column(ForeignKey("blobs.sha256"))


class Study(Base):
    """One rule for several surfaces."""

    __tablename__ = "studies"
    id: Mapped[str] = mapped_column(primary_key=True)
    owner: Mapped[str] = mapped_column(index=True)
    name: Mapped[str]
    created: Mapped[float]
    rule: Mapped[str]  # JSON: motion, window, accuracy and start of a case file
    labels: Mapped[str]  # JSON: surface id -> group and subject
    subjects: Mapped[str]  # how subjects are compared, as in a study file


class Run(Base):
    """One solve: its order, its state and its answer."""

    __tablename__ = "runs"
    id: Mapped[str] = mapped_column(primary_key=True)
    owner: Mapped[str]
    surface_id: Mapped[str] = mapped_column(ForeignKey("surfaces.id"), index=True)
    study_id: Mapped[str | None] = mapped_column(ForeignKey("studies.id"), index=True)
    name: Mapped[str]
    order: Mapped[str]  # JSON, as in a case file
    created: Mapped[float]
    started: Mapped[float | None]
    finished: Mapped[float | None]
    state: Mapped[str]  # queued | running | done | failed | cancelled
    reason: Mapped[str | None]
    fault: Mapped[str | None]  # of a failed run: input | no answer | service
    attempts: Mapped[int] = mapped_column(default=0)
    summary: Mapped[str | None]  # JSON
    pictures: Mapped[str] = mapped_column(default="none")  # none | waiting | running | done | failed
    opinion: Mapped[str] = mapped_column(default="none")  # none | waiting | running | done | failed
    opinion_text: Mapped[str | None]
    __table_args__ = (Index("runs_by_owner_and_state", "owner", "state"), Index("runs_by_state", "state"))


class RunFile(Base):
    """One file of a finished run."""

    __tablename__ = "run_files"
    run_id: Mapped[str] = mapped_column(ForeignKey("runs.id"), primary_key=True)
    name: Mapped[str] = mapped_column(primary_key=True)
    sha256: Mapped[str] = mapped_column(ForeignKey("blobs.sha256"), index=True)
