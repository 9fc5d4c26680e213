"""Arrangements of equal windows on candidate sites: tables, search, and the reduced model that makes them cheap."""

from __future__ import annotations

from bemescape.arrangements.exploration import Exploration, ExplorationSummary
from bemescape.arrangements.run import explore

__all__ = ["Exploration", "ExplorationSummary", "explore"]
