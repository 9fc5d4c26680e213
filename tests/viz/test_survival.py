"""The survival curve, and what the report says of spread and ways out."""

import dataclasses

import numpy as np
import pytest
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure

from bemescape.errors import SettingsError
from bemescape.results.spread import Spread
from bemescape.results.summary import SpreadSummary, StartSummary
from bemescape.viz import write_report
from bemescape.viz.plots import survival_figure


def with_spread(spine, cv):
    nothing = np.zeros(len(spine.faces))
    return dataclasses.replace(spine, spread=Spread(nothing, nothing, spine.mean_time_s, cv, 0.004, 1e-4))


def curves(figure):
    """Legend -> points of the line."""
    return {line.get_label(): line.get_xydata() for line in figure.axes[0].lines}


def test_the_curve_falls_to_one_over_e_at_the_mean_time(spine):
    lines = curves(survival_figure(with_spread(spine, 1.1)))
    curve = next(points for label, points in lines.items() if label.startswith("exp"))
    mean_ms = 1000.0 * spine.mean_time_s
    assert np.interp(mean_ms, *curve.T) == pytest.approx(np.exp(-1.0), rel=1e-3)


def test_the_tail_has_the_mean_and_the_second_moment(spine):
    cv = 1.2
    lines = curves(survival_figure(with_spread(spine, cv)))
    tail = next(points for label, points in lines.items() if label.startswith("tail"))
    time, part = tail.T
    rate = -np.polyfit(time, np.log(part), 1)[0]
    mean_ms = 1000.0 * spine.mean_time_s
    # ∫ S dt = mean and 2 ∫ t S dt = second moment, of an exponential curve.
    assert part[0] / rate == pytest.approx(mean_ms, rel=1e-6)
    assert 2.0 * part[0] / rate**2 == pytest.approx(mean_ms**2 * (1.0 + cv**2), rel=1e-6)


def test_the_end_of_the_regime_is_marked_where_there_is_one(spine):
    def marked(cv):
        return any("falls below" in label for label in curves(survival_figure(with_spread(spine, cv))))

    assert marked(1.2)
    assert not marked(1.001)  # the bound is reached beyond the plot


def test_the_survival_of_a_result_without_second_moment_is_refused(spine):
    with pytest.raises(SettingsError, match="'spine 12' holds no second moment"):
        survival_figure(spine)


def test_the_bound_is_drawn_in_the_colour_of_the_curve(spine):
    axes = survival_figure(with_spread(spine, 1.1)).axes[0]
    assert to_rgb(axes.collections[0].get_facecolor()[0]) == to_rgb(axes.lines[0].get_color())


def test_the_report_tells_spread_and_ways_out(spine, tmp_path):
    result = dataclasses.replace(spine)
    spread = with_spread(spine, 1.2).spread
    result.__dict__["summary"] = spine.summary.model_copy(
        update={
            "escape_time_sd_s": spread.sd_s,
            "spread": SpreadSummary(
                second_moment_s2=spread.second_moment_s2,
                cv=1.2,
                sd_relative_error=0.004,
                exponential_within=spread.exponential_within,
                tail_time_s=spread.tail_time_s,
                statement="One rate does not describe it <here>.",
                balance=1e-4,
            ),
            "start_details": {
                "release site": StartSummary(
                    kind="point",
                    mean_time_s=0.0141,
                    escape_time_sd_s=0.0133,
                    splitting={"neck": 0.75, "side pore": 0.25},
                    conditional_time_s={"neck": 0.012, "side pore": None},
                )
            },
        }
    )
    Figure(figsize=(1, 1)).savefig(tmp_path / "survival.png")
    text = write_report(result, tmp_path / "report.html", pictures=[tmp_path / "survival.png"]).read_text("utf-8")
    for wanted in ("14.808 ± 0.059 ms", "13.3 ms", "75 %", "12 ms", "nobody", "&lt;here&gt;", "Which way out"):
        assert wanted in text, wanted
    assert text.count("<img") == 1
