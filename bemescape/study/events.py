"""What a running study tells whoever watches: one plain dictionary per event, ready for JSON."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

__all__ = ["StudyEvent", "StudyEvents", "unheard"]

#: Key "event" says which: planned, damaged, started, finished, failed, worker_lost, progress, written, stopped.
StudyEvent = Mapping[str, Any]

#: Receives events in the calling thread, in the order they happen; may raise KeyboardInterrupt to stop the study.
StudyEvents = Callable[[StudyEvent], None]


def unheard(_event: StudyEvent) -> None:
    """Ignore every event."""
