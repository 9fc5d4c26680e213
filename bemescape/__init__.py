"""Escape times of diffusing molecules from measured 3D shapes, by boundary elements.

>>> import bemescape
>>> bemescape.Window.disc("pore", centre=(0, 0, 1), radius="50 nm").name
'pore'
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from bemescape.arrangements import Exploration, explore
    from bemescape.case import Case, read_case
    from bemescape.errors import (
        AccuracyError,
        ConvergenceError,
        EscapeError,
        SettingsError,
        SurfaceError,
        WindowError,
    )
    from bemescape.escape import SolverSettings, solve_escape
    from bemescape.prepared_surface import PreparedSurface, prepare
    from bemescape.progress import ProgressEvent
    from bemescape.remote import connect
    from bemescape.results.result import EscapeResult
    from bemescape.results.starts import Ball
    from bemescape.results.summary import summary_schema
    from bemescape.study.document import Study, read_study, study_schema
    from bemescape.study.run import StudyResult, run_study
    from bemescape.surface import Surface, check_surface, heal_surface, read_surface
    from bemescape.threads import use_threads
    from bemescape.version import __version__
    from bemescape.warm import warm_up
    from bemescape.windows.window import Window

#: Public name -> the module that holds it; loaded on first use, so that `bemescape --help` answers at once.
_HOME = {
    "AccuracyError": "bemescape.errors",
    "Ball": "bemescape.results.starts",
    "Case": "bemescape.case",
    "ConvergenceError": "bemescape.errors",
    "EscapeError": "bemescape.errors",
    "EscapeResult": "bemescape.results.result",
    "Exploration": "bemescape.arrangements",
    "PreparedSurface": "bemescape.prepared_surface",
    "ProgressEvent": "bemescape.progress",
    "SettingsError": "bemescape.errors",
    "SolverSettings": "bemescape.escape",
    "Study": "bemescape.study.document",
    "StudyResult": "bemescape.study.run",
    "Surface": "bemescape.surface",
    "SurfaceError": "bemescape.errors",
    "Window": "bemescape.windows.window",
    "WindowError": "bemescape.errors",
    "__version__": "bemescape.version",
    "check_surface": "bemescape.surface",
    "connect": "bemescape.remote",
    "explore": "bemescape.arrangements",
    "heal_surface": "bemescape.surface",
    "prepare": "bemescape.prepared_surface",
    "read_case": "bemescape.case",
    "read_study": "bemescape.study.document",
    "read_surface": "bemescape.surface",
    "run_study": "bemescape.study.run",
    "solve_escape": "bemescape.escape",
    "study_schema": "bemescape.study.document",
    "summary_schema": "bemescape.results.summary",
    "use_threads": "bemescape.threads",
    "warm_up": "bemescape.warm",
}

__all__ = [
    "AccuracyError",
    "Ball",
    "Case",
    "ConvergenceError",
    "EscapeError",
    "EscapeResult",
    "Exploration",
    "PreparedSurface",
    "ProgressEvent",
    "SettingsError",
    "SolverSettings",
    "Study",
    "StudyResult",
    "Surface",
    "SurfaceError",
    "Window",
    "WindowError",
    "__version__",
    "check_surface",
    "connect",
    "explore",
    "heal_surface",
    "prepare",
    "read_case",
    "read_study",
    "read_surface",
    "run_study",
    "solve_escape",
    "study_schema",
    "summary_schema",
    "use_threads",
    "warm_up",
]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'bemescape' has no attribute {name!r}")
    return getattr(importlib.import_module(_HOME[name]), name)
