"""The demo shapes that come with the package."""

from __future__ import annotations

import tomllib
from functools import cache
from importlib.resources import files

from bemescape.service.records import DemoRecord

__all__ = ["demo", "demos"]

_DEMOS = ("bouton", "spine", "nucleus", "mitochondrion")


@cache
def _records() -> dict[str, DemoRecord]:
    return {name: _read(name) for name in _DEMOS}


def _read(name: str) -> DemoRecord:
    text = (files("bemescape.demos") / f"{name}.toml").read_text(encoding="utf-8")
    case = tomllib.loads(text)
    # The first line of each case says what is asked.
    title, _, question = text.splitlines()[0].removeprefix("# ").partition(":")
    unit = case.pop("surface")["unit"]
    return DemoRecord(name=name, title=title.strip(), text=question.strip().rstrip("."), unit=unit, case=case)


def demos() -> list[DemoRecord]:
    """All demos, without their meshes."""
    return list(_records().values())


def demo(name: str) -> tuple[DemoRecord, bytes] | None:
    """One demo and its mesh; None for an unknown name."""
    record = _records().get(name)
    if record is None:
        return None
    return record, (files("bemescape.demos") / f"{name}.ply").read_bytes()
