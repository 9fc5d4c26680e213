"""The errors that a caller may catch.

EscapeError
  ├ SurfaceError, WindowError, SettingsError   (ValueError)    ask again with other input
  └ ConvergenceError, AccuracyError            (RuntimeError)  input fine, answer not good enough

A message is one sentence or two with the value, the limit, the place and the remedy; it never needs a
traceback to be understood.
"""

from __future__ import annotations

from typing import Any

__all__ = [
    "AccuracyError",
    "ConvergenceError",
    "EscapeError",
    "SettingsError",
    "SurfaceError",
    "WindowError",
]


class EscapeError(Exception):
    """Base of every error that this package raises on purpose."""


class SurfaceError(EscapeError, ValueError):
    """A surface cannot be read, or cannot be healed into a closed one.

    Attributes
    ----------
    faces : tuple of int
        Numbers of the offending faces of the file, as far as they are known (at most a few dozen).
    """

    def __init__(self, message: str, *, faces: tuple[int, ...] = ()) -> None:
        super().__init__(message)
        self.faces = faces


class WindowError(EscapeError, ValueError):
    """A window misses the wall, overlaps another, or cannot be resolved."""


class SettingsError(EscapeError, ValueError):
    """A quantity, an option or a line of a case file is wrong."""


class ConvergenceError(EscapeError, RuntimeError):
    """The iteration stopped above its tolerance.

    Attributes
    ----------
    residuals : tuple of float
        Relative residual after each iteration.
    """

    def __init__(self, message: str, *, residuals: tuple[float, ...] = ()) -> None:
        super().__init__(message)
        self.residuals = residuals


class AccuracyError(EscapeError, RuntimeError):
    """A solved case fails its own checks and is not handed out.

    Attributes
    ----------
    best : object or None
        The last result, for inspection only.
    """

    def __init__(self, message: str, *, best: Any = None) -> None:
        super().__init__(message)
        self.best = best
