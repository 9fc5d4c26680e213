import dataclasses

import numpy as np
import pytest
from matplotlib import colormaps
from matplotlib.colors import to_rgb
from skimage.color import deltaE_ciede2000, rgb2lab

from bemescape.viz.scales import (
    MAP_NAME,
    WINDOW,
    bar_length_um,
    density_scale,
    map_colours,
    round_ticks,
    time_colours,
)


@pytest.mark.parametrize("width", [0.013, 0.4, 1.0, 3.3, 9.99, 10.0, 77.0, 1234.5])
def test_a_scale_bar_is_1_2_or_5_times_a_power_of_ten_and_fills_a_tenth_to_a_quarter_of_the_view(width):
    length = bar_length_um(width)
    digit = length / 10.0 ** np.floor(np.log10(length) + 1e-12)
    assert min(abs(digit - allowed) for allowed in (1.0, 2.0, 5.0)) < 1e-9
    # The series' largest step is 2.5, so the bar is longer than a quarter divided by 2.5.
    assert width * 0.25 / 2.5 < length <= width * 0.25 * (1 + 1e-9)


@pytest.mark.parametrize(("factor", "unit"), [(1e3, "s"), (1.0, "ms"), (1e-3, "µs"), (1e-6, "ns")])
def test_the_colour_bar_takes_the_unit_that_fits_the_slowest_time(spine, factor, unit):
    slower = dataclasses.replace(spine, panel_time_s=spine.panel_time_s * factor)
    scale = time_colours(slower)
    assert scale.label == f"mean escape time ({unit})"
    # The slowest place of the made-up spine takes 17 ms: 17 of whatever unit.
    assert scale.high / scale.factor == pytest.approx(spine.panel_time_s.max() * 1e3, rel=1e-12)


def test_a_scale_starts_at_0_where_the_neck_is_fast(spine):
    scale = time_colours(spine)
    assert scale.low == 0.0
    assert not scale.clipped


def test_a_scale_of_an_almost_even_wall_starts_at_its_fastest_part_and_says_so(make_ball):
    even = make_ball()
    times = even.panel_time_s.copy()
    wall = np.flatnonzero(even.panel_window < 0)
    times[wall[0]] = 1e-4  # one fast panel at the rim must not stretch the scale
    scale = time_colours(dataclasses.replace(even, panel_time_s=times))
    assert 0.0099 < scale.low < 0.0106
    assert scale.clipped


def test_a_logarithmic_scale_starts_above_0(spine):
    scale = time_colours(spine, "log")
    assert scale.log
    assert 0.0 < scale.low < scale.high
    middle = np.sqrt(scale.low * scale.high)
    assert scale.position(np.array([scale.low, middle, scale.high])) == pytest.approx([0.0, 0.5, 1.0])


def test_exit_density_has_another_map_than_the_time(spine):
    assert density_scale(spine).map_name != time_colours(spine).map_name
    assert density_scale(spine).log


def test_colours_are_those_of_the_named_matplotlib_map(spine):
    scale = time_colours(spine)
    places = np.arange(0, 256, 15) / 255.0
    expected = 255.0 * colormaps[MAP_NAME](places)[:, :3]
    found = map_colours(scale, scale.low + places * (scale.high - scale.low))
    # Rounded to whole numbers.
    assert np.abs(found.astype(float) - expected).max() <= 0.51


def test_the_map_is_perceptually_uniform():
    """Lightness (CIE L*, by scikit-image) rises in nearly equal steps, so grey prints order it too."""
    lab = rgb2lab(colormaps[MAP_NAME](np.linspace(0.0, 1.0, 33))[None, :, :3])[0]
    steps = np.diff(lab[:, 0])
    assert steps.min() > 0.7 * steps.mean()
    assert steps.max() < 1.3 * steps.mean()


# Machado, Oliveira & Fernandes (2009), IEEE TVCG 15:1291, doi:10.1109/TVCG.2009.113; severity 1.0.
COLOUR_VISION = {
    "full": np.eye(3),
    "no red cones": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "no green cones": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
    "no blue cones": np.array(
        [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]]
    ),
}


def seen(rgb, vision):
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    mixed = np.clip(linear @ COLOUR_VISION[vision].T, 0.0, 1.0)
    return np.where(mixed <= 0.0031308, 12.92 * mixed, 1.055 * mixed ** (1 / 2.4) - 0.055)


@pytest.mark.parametrize("vision", COLOUR_VISION)
def test_windows_stand_out_from_every_time_for_every_kind_of_colour_vision(vision):
    times = colormaps[MAP_NAME](np.linspace(0.0, 1.0, 64))[:, :3]
    window = np.array(to_rgb(WINDOW))[None]
    difference = deltaE_ciede2000(rgb2lab(seen(times, vision)[None]), rgb2lab(seen(window, vision)[None]))
    # A CIEDE2000 difference of 2 is just noticeable; 25 cannot be missed.
    assert difference.min() > 25.0


@pytest.mark.parametrize(("low", "high"), [(0.0, 17.4), (0.97, 1.0), (12.0, 13.1), (0.0, 1.0), (0.0, 999.0)])
def test_ticks_are_round_inside_the_ends_and_four_to_eleven(low, high):
    ticks = round_ticks(low, high)
    assert 4 <= len(ticks) <= 11
    assert ticks[0] >= low - 1e-9
    assert ticks[-1] <= high + 1e-9


@pytest.mark.parametrize(("low", "high"), [(0.01, 100.0), (0.3, 7.0), (1.0, 3.0), (2.0, 2000.0)])
def test_logarithmic_ticks_are_at_least_two(low, high):
    ticks = round_ticks(low, high, log=True)
    assert 2 <= len(ticks) <= 12
    assert all(low <= tick <= high for tick in ticks)


def test_one_tiny_panel_at_a_rim_does_not_stretch_the_scale_of_exit_density(make_ball):
    ball = make_ball(subdivisions=4)
    density = ball.panel_exit_density_per_um2.copy()
    usual = density.max()
    density[np.flatnonzero(ball.panel_window == 0)[0]] = 1e4 * usual
    scale = density_scale(dataclasses.replace(ball, panel_exit_density_per_um2=density))
    assert scale.high == pytest.approx(usual)
    assert scale.clipped_above
    assert not scale.clipped
