"""Finished cases on disk: each appears whole or not at all, and is believed only while its checksums hold.

`cases/NAME-KEY/` holds the result folder of a case and `record.json`: the row of the table, the size and checksum of
every file, and a checksum of itself. The folder is written under another name, flushed to the disk, and renamed in one
step. What lies under another name, or fails its checksums, never counts and is written anew.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import re
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

from bemescape.errors import SettingsError
from bemescape.study.work import Outcome

__all__ = ["Damage", "StoredCase", "StudyStore", "write_atomically"]

CASES, RECORD, LOCK = "cases", "record.json", ".lock"
#: Begins the name of everything that is not finished yet.
STAGING = ".writing-"
_FORMAT = "bemescape study record 1"
_KEY_LETTERS = 16


@dataclass(frozen=True)
class StoredCase:
    """A finished case: its key, its folder, its row of the table, and how long the worker had it."""

    key: str
    folder: Path
    values: Mapping[str, Any]
    seconds: float
    worker: str


@dataclass(frozen=True)
class Damage:
    """A stored case that is not believed, and why."""

    folder: Path
    reason: str


class StudyStore:
    """The finished cases of one study; one run at a time writes into it.

    Parameters
    ----------
    folder : Path
        The study's own folder; made if need be.

    Raises
    ------
    SettingsError
        The folder cannot be written, holds something else, or another run is using it.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = Path(folder)
        self._refuse_foreign_folder()
        with _writing(self.folder):
            (self.folder / CASES).mkdir(parents=True, exist_ok=True)
            self._lock = _locked(self.folder / LOCK)
            for left in [*self.folder.glob(f"{STAGING}*"), *(self.folder / CASES).glob(f"{STAGING}*")]:
                _remove(left)

    def __enter__(self) -> StudyStore:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Let other runs write."""
        self._lock.close()

    def finished(self, keys: Mapping[str, str]) -> tuple[dict[str, StoredCase], list[Damage]]:
        """The stored cases among `keys` (key -> name), and those that are damaged."""
        whole: dict[str, StoredCase] = {}
        damaged = []
        for key, name in keys.items():
            folder = self._folder_of(key, name)
            if not folder.exists():
                continue
            try:
                whole[key] = read_stored(folder, key)
            except (OSError, ValueError, KeyError, TypeError, RecursionError) as error:
                damaged.append(Damage(folder, " ".join(str(error).split())[:200] or type(error).__name__))
        return whole, damaged

    def put(self, outcome: Outcome, name: str) -> StoredCase:
        """Store a finished case; when this returns, it survives a crash of the program or the machine.

        Raises
        ------
        SettingsError
            The folder cannot be written, for want of space for instance; nothing half-written counts.
        """
        target = self._folder_of(outcome.key, name)
        staging = target.with_name(f"{STAGING}{outcome.key[:_KEY_LETTERS]}")
        record = {
            "format": _FORMAT,
            "key": outcome.key,
            "values": outcome.values,
            "seconds": outcome.seconds,
            "worker": outcome.worker,
            "files": {file: [len(content), _sum(content)] for file, content in outcome.files.items()},
        }
        text = json.dumps(record, ensure_ascii=False)
        with _writing(self.folder):
            try:
                _remove(staging)
                staging.mkdir()
                for file, content in outcome.files.items():
                    _write_through(staging / file, content)
                body = json.dumps({"record": text, "sha256": _sum(text.encode())}, ensure_ascii=False)
                _write_through(staging / RECORD, body.encode())
                _flush_folder(staging)
                _remove(target)
                os.replace(staging, target)
                _flush_folder(target.parent)
            except OSError:
                with contextlib.suppress(OSError):
                    _remove(staging)
                raise
        return StoredCase(outcome.key, target, outcome.values, outcome.seconds, outcome.worker)

    def _folder_of(self, key: str, name: str) -> Path:
        readable = re.sub(r"[^\w.=-]+", "-", name, flags=re.ASCII).strip(".-")[:80] or "case"
        return self.folder / CASES / f"{readable}-{key[:_KEY_LETTERS]}"

    def _refuse_foreign_folder(self) -> None:
        try:
            if self.folder.exists() and not self.folder.is_dir():
                raise SettingsError(f"{self.folder} is a file, not a folder; give another one with --out")
            if not self.folder.exists() or (self.folder / CASES).is_dir():
                return
            others = sorted(entry.name for entry in self.folder.iterdir() if not entry.name.startswith("."))
        except (OSError, ValueError) as error:
            if isinstance(error, SettingsError):
                raise
            reason = getattr(error, "strerror", None) or "no such name can exist"
            raise SettingsError(f"folder {str(self.folder)[:200]!r} cannot be used: {reason}") from error
        if others:
            raise SettingsError(
                f"folder {self.folder} holds other files ({others[0]!r}, for one) and no earlier study; give a new or "
                "empty folder with --out"
            )


def read_stored(folder: Path, key: str | None = None) -> StoredCase:
    """A stored case whose record and files are whole.

    Raises
    ------
    OSError, ValueError, KeyError, TypeError
        They are not; the message says which file.
    """
    body = json.loads((folder / RECORD).read_bytes())
    text = body["record"]
    if _sum(text.encode()) != body["sha256"]:
        raise ValueError(f"{RECORD} fails its checksum")
    record = json.loads(text)
    if record["format"] != _FORMAT or (key is not None and record["key"] != key):
        raise ValueError(f"{RECORD} belongs to another case or version")
    for file, (size, checksum) in record["files"].items():
        path = folder / file
        if not path.is_file():
            raise ValueError(f"{file} is missing")
        if path.stat().st_size != size or _sum(path.read_bytes()) != checksum:
            raise ValueError(f"{file} fails its checksum")
    return StoredCase(record["key"], folder, record["values"], record["seconds"], record["worker"])


def write_atomically(path: Path, contents: bytes) -> None:
    """Replace a file in one step, so that a reader finds the old or the new one.

    Raises
    ------
    SettingsError
        The file cannot be written.
    """
    staging = path.with_name(f"{STAGING}{path.name}")
    with _writing(path.parent):
        try:
            _write_through(staging, contents)
            os.replace(staging, path)
        except OSError:
            with contextlib.suppress(OSError):
                staging.unlink(missing_ok=True)
            raise


def _sum(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def _write_through(path: Path, content: bytes) -> None:
    with path.open("wb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())


def _flush_folder(folder: Path) -> None:
    """Make renames in a folder last; systems that cannot open folders do so by themselves."""
    if os.name == "nt":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _remove(path: Path) -> None:
    if path.is_dir() and not path.is_symlink():
        shutil.rmtree(path)
    else:
        path.unlink(missing_ok=True)


def _locked(path: Path) -> IO[bytes]:
    """An open file that no other run can lock; the system lets go of it however the process ends."""
    stream = path.open("ab")
    try:
        import fcntl
    except ImportError:  # Windows: two runs would only do the same work twice
        return stream
    try:
        fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError as error:
        stream.close()
        raise SettingsError(
            f"another run is writing into {path.parent}; wait until it ends, stop it, or give another folder with --out"
        ) from error
    return stream


@contextmanager
def _writing(folder: Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise SettingsError(
            f"study folder {folder} cannot be written: {error.strerror or error}; what was finished before is whole, "
            "so make room or choose another folder, and run the same command again"
        ) from error
