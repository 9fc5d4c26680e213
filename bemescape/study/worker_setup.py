"""Loaded by every local worker when it starts: Ctrl-C is for the study's own process, which ends the workers."""

from __future__ import annotations

import signal
import threading

__all__: list[str] = []

if threading.current_thread() is threading.main_thread():
    signal.signal(signal.SIGINT, signal.SIG_IGN)
