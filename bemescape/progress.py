"""What a long call tells its caller while it works."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

__all__ = ["Progress", "ProgressEvent", "silent"]


@dataclass(frozen=True)
class ProgressEvent:
    """One step of a long call.

    Attributes
    ----------
    stage : str
        What is being done, in words: "imprinting windows", "near field", "iterating".
    done : float or None
        Part of the stage that is done, 0 to 1; None where it cannot be known.
    detail : str
        Numbers for the reader: panels, the residual, the resolution.
    """

    stage: str
    done: float | None = None
    detail: str = ""


#: Receives events in the order they happen, in the calling thread; may raise KeyboardInterrupt to stop the work.
Progress = Callable[[ProgressEvent], None]


def silent(_event: ProgressEvent) -> None:
    """Ignore every event."""
