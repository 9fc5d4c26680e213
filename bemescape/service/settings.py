"""What the service may be told at its start, checked before anything is opened."""

from __future__ import annotations

import hashlib
import ipaddress
import stat
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from bemescape.errors import SettingsError

__all__ = ["LOCAL_OWNER", "Limits", "Settings", "is_loopback", "read_tokens"]

#: Whose work it is where nobody has to show a token.
LOCAL_OWNER = "local"
_SHORTEST_TOKEN, _LONGEST_TOKEN = 16, 200
_LARGEST_TOKEN_FILE = 64 * 1024


@dataclass(frozen=True)
class Limits:
    """What one request or one owner may take.

    Attributes
    ----------
    upload_bytes : int
        Largest file.
    faces : int
        Most faces of a surface.
    panels : int
        Most panels that a run may ask for.
    run_s : float
        Longest time a run may compute.
    read_s : float
        Longest time reading and checking a surface, or drawing a preview, may take.
    queued_runs : int
        Most runs of one owner that wait.
    owner_bytes : int
        Most bytes that one owner keeps.
    keep_days : float or None
        Finished runs older than this are deleted; None keeps them.
    streams : int
        Most progress streams of one owner at a time.
    """

    upload_bytes: int = 100_000_000
    faces: int = 1_000_000
    panels: int = 400_000
    run_s: float = 4 * 3600.0
    read_s: float = 120.0
    queued_runs: int = 500
    owner_bytes: int = 20_000_000_000
    keep_days: float | None = None
    streams: int = 100


@dataclass(frozen=True)
class Settings:
    """One service.

    Attributes
    ----------
    data : Path
        Folder of the database and the files; made if need be, used by one service at a time.
    host, port : str, int
    tokens : mapping of str to str
        Owner -> token. Empty: whoever reaches the service works as one owner, which only loopback allows.
    scheduler : str or None
        Address of a dask scheduler; None starts workers on this machine.
    slots : int
        Runs that compute at a time.
    second_opinion : bool
        Whether finished runs are cross-checked while nothing else waits.
    limits : Limits

    Raises
    ------
    SettingsError
        The host is not loopback and there is no token; a number is out of range.
    """

    data: Path
    host: str = "127.0.0.1"
    port: int = 8000
    tokens: Mapping[str, str] = field(default_factory=dict, repr=False)
    scheduler: str | None = None
    slots: int = 2
    second_opinion: bool = True
    limits: Limits = field(default_factory=Limits)

    def __post_init__(self) -> None:
        if not 0 <= self.port <= 65535:
            raise SettingsError(f"the port is {self.port}; it must lie between 0 (any free one) and 65535")
        if not 1 <= self.slots <= 256:
            raise SettingsError(f"{self.slots} runs at a time cannot be; give 1 to 256")
        if not (self.tokens or is_loopback(self.host)):
            raise SettingsError(
                f"host {self.host} can be reached from other machines, so the service needs tokens there; give a "
                "file of them with --token-file, or keep to 127.0.0.1"
            )


def is_loopback(host: str) -> bool:
    """Whether only this machine reaches the host.

    >>> is_loopback("127.0.0.1"), is_loopback("localhost"), is_loopback("0.0.0.0")
    (True, True, False)
    """
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host.strip("[]")).is_loopback
    except ValueError:
        return False


def read_tokens(path: Path) -> dict[str, str]:
    """Tokens of a file, one a line: `name token`, or the token alone. Blank lines and lines after # are left out.

    Raises
    ------
    SettingsError
        The file cannot be read, others may read it, or a token is short or given twice.
    """
    try:
        mode = path.stat().st_mode
        data = path.read_bytes() if path.is_file() else b""
    except OSError as error:
        raise SettingsError(f"token file {path} cannot be read: {error.strerror or error}") from error
    if mode & (stat.S_IRGRP | stat.S_IROTH | stat.S_IWGRP | stat.S_IWOTH):
        raise SettingsError(f"token file {path} is open to other users (mode {mode & 0o777:o}); make it private: 600")
    if len(data) > _LARGEST_TOKEN_FILE or not data.isascii():
        raise SettingsError(f"token file {path} is no short list of plain-text tokens; write one a line")
    tokens: dict[str, str] = {}
    for number, line in enumerate(data.decode("ascii").splitlines(), start=1):
        words = line.split("#", 1)[0].split()
        if not words:
            continue
        if len(words) > 2:
            raise SettingsError(f"line {number} of the token file has {len(words)} words; write: name token")
        token = words[-1]
        if not _SHORTEST_TOKEN <= len(token) <= _LONGEST_TOKEN:
            raise SettingsError(
                f"the token on line {number} has {len(token)} characters; give {_SHORTEST_TOKEN} to {_LONGEST_TOKEN}, "
                "made at random"
            )
        owner = words[0] if len(words) == 2 else hashlib.sha256(token.encode()).hexdigest()[:12]
        if owner in tokens or token in tokens.values():
            raise SettingsError(f"line {number} of the token file repeats a name or a token; give each once")
        tokens[owner] = token
    if not tokens:
        raise SettingsError(f"token file {path} holds no token; write one a line")
    return tokens
