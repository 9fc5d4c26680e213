"""Reading, checking and healing closed surfaces."""

from bemescape.surface.heal import Change, HealReport, heal_surface
from bemescape.surface.health import Finding, HealthReport, check_surface
from bemescape.surface.read import read_surface, read_unhealed
from bemescape.surface.surface import Surface

__all__ = [
    "Change",
    "Finding",
    "HealReport",
    "HealthReport",
    "Surface",
    "check_surface",
    "heal_surface",
    "read_surface",
    "read_unhealed",
]
