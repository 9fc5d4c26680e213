"""The machine-readable answer, `summary.json`, as a model with a published JSON schema."""

from __future__ import annotations

from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field

__all__ = [
    "CAUTION",
    "Checks",
    "CrossCheckSummary",
    "MadeWith",
    "RuleOfThumb",
    "SlowRegion",
    "SpreadSummary",
    "StartSummary",
    "Summary",
    "WalkersSummary",
    "WindowSummary",
    "summary_schema",
]


#: Stands in every report and on every answer a person reads.
CAUTION = "Research tool. Times scale with D and the segmentation; not for clinical or dosing decisions."


class _Model(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class WindowSummary(_Model):
    """One window and its part of all exits."""

    name: str
    area_um2: float = Field(gt=0, description="area of the window's panels")
    share: float = Field(description="part of all exits, start uniform in the volume; outflow * D / V, not normalised")
    permeability_um_s: float | None = Field(default=None, description="null: perfectly absorbing")
    share_error: float | None = Field(default=None, description="estimated numerical error of the share, absolute")
    conditional_time_s: float | None = Field(
        default=None, description="mean time of those who leave through it, start uniform; null: not computed"
    )
    compact: bool = Field(default=False, description="solved as a compact pore: one unknown, no panels")


class SpreadSummary(_Model):
    """How the escape time scatters, start uniform in the volume."""

    second_moment_s2: float = Field(description="mean of the squared escape time")
    cv: float = Field(description="standard deviation / mean; 1 for an exponential law, never below it")
    sd_relative_error: float = Field(description="estimated numerical error of the standard deviation, relative")
    exponential_within: float = Field(
        description="largest difference, at any time, between the part still inside and exp(-t/mean): a bound"
    )
    tail_time_s: float = Field(description="second moment / (2 mean): mean remaining time of those found inside")
    statement: str = Field(description="how close the escape is to one with a constant rate")
    balance: float = Field(description="outflow of the second moment / (2/D * integral of the time) - 1")


class StartSummary(_Model):
    """What follows from one named start."""

    kind: Literal["point", "wall patch", "ball"]
    mean_time_s: float
    escape_time_sd_s: float | None = None
    splitting: dict[str, float] | None = Field(
        default=None, description="window -> probability of leaving through it; null: not computed"
    )
    conditional_time_s: dict[str, float | None] | None = Field(
        default=None, description="window -> mean time of those who leave through it"
    )


class SlowRegion(_Model):
    """One connected part of the wall above the chosen level of time."""

    area_um2: float = Field(gt=0)
    mean_time_s: float = Field(description="area-weighted mean over the region of the time from there")
    centre_um: tuple[float, float, float] = Field(description="the panel of the region closest to its centroid")
    distance_to_window_um: float = Field(description="shortest path along the wall from the centre to a window")
    nearest_window: str


class RuleOfThumb(_Model):
    """A textbook estimate beside the computed value."""

    formula: str
    mean_time_s: float


class CrossCheckSummary(_Model):
    """The same body by a symmetric Galerkin method (bempp-cl) on a coarser mesh."""

    statement: str = Field(description="one sentence: agrees or does not, within what")
    agrees: bool = Field(description="mean time and shares differ by less than the errors of both together")
    mean_time_s: float
    shares: dict[str, float]
    relative_error: float = Field(description="estimated error of this mean_time_s, relative")
    panels: int
    difference: float = Field(description="this mean_time_s / that of the result - 1")
    allowed: float = Field(description="sum of the relative errors of both")
    share_difference: float = Field(description="absolute difference of the share that fits worst")
    share_allowed: float
    seconds: float


class WalkersSummary(_Model):
    """The same body by particles."""

    statement: str = Field(description="one sentence: agrees or does not, within what")
    agrees: bool = Field(description="mean time and shares differ by less than the errors of both together")
    mean_time_s: float
    standard_error_s: float
    shares: dict[str, float]
    share_errors: dict[str, float] = Field(description="standard errors")
    walkers: int
    lost: int = Field(description="walkers that were given up and are not counted")
    seed: int
    steps: float = Field(description="mean number of jumps")
    difference: float = Field(description="this mean_time_s / that of the result - 1")
    allowed: float = Field(description="three standard errors (more if many shares are compared) plus the error")
    share_difference: float = Field(description="absolute difference of the share that fits worst")
    share_allowed: float
    seconds: float


class Checks(_Model):
    """What the result proves of itself."""

    balance: float = Field(description="outflow through all windows * D / V - 1")
    splitting_sum: float | None = Field(
        default=None, description="largest |sum of the splitting probabilities - 1| on the wall"
    )
    splitting_share: float | None = Field(
        default=None, description="largest |volume average of a splitting probability - share of its window|"
    )
    crosscheck: CrossCheckSummary | None = Field(default=None, description="second opinion, where one was asked for")
    walkers: WalkersSummary | None = Field(default=None, description="second opinion, where one was asked for")


class MadeWith(_Model):
    """What is needed to repeat the run."""

    version: str
    mesh_sha256: str
    settings: dict[str, Any]


class Summary(_Model):
    """The answer of one solve; times in s, lengths in µm."""

    name: str
    mean_time_s: float = Field(description="mean escape time, start uniform in the volume")
    relative_error: float = Field(description="estimated numerical error of mean_time_s, relative")
    target_met: bool = Field(description="false where the panel budget ended the refinement above the target")
    diffusion_um2_s: float
    volume_um3: float
    area_um2: float
    windows: list[WindowSummary]
    escape_time_sd_s: float | None = Field(default=None, description="standard deviation of the escape time")
    spread: SpreadSummary | None = Field(default=None, description="null: not computed")
    start: dict[str, float] = Field(default_factory=dict, description="name of a start -> mean time from it, s")
    start_details: dict[str, StartSummary] = Field(
        default_factory=dict, description="name of a start -> all that was computed from it"
    )
    slowest_time_s: float = Field(description="largest mean time from any place on the wall")
    slow_regions: list[SlowRegion]
    rule_of_thumb: RuleOfThumb
    panels: int
    iterations: int
    wall_s: float = Field(description="duration of the run")
    checks: Checks
    notes: list[str] = Field(default_factory=list, description="what a reader should know: healing, budget, units")
    made_with: MadeWith


def summary_schema() -> dict[str, Any]:
    """JSON schema (draft 2020-12) of `summary.json`."""
    return Summary.model_json_schema()
