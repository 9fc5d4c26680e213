"""Quantities: what a person may type, and what is refused."""

import math
import string

import numpy as np
import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bemescape.errors import SettingsError
from bemescape.units import (
    diffusion_um2_s,
    format_length,
    format_time,
    fraction,
    length_um,
    permeability_um_s,
    quantity,
    unit_scale_um,
)


@pytest.mark.parametrize(
    ("text", "micrometres"),
    [("60 nm", 0.06), ("60nm", 0.06), ("1.5e-3 mm", 1.5), ("2 µm", 2.0), ("2 μm", 2.0), ("2 micron", 2.0)],
)
def test_lengths_in_common_spellings_are_exact(text, micrometres):
    assert length_um(text) == micrometres


@pytest.mark.parametrize(
    "text",
    [
        "20 um^2/s",
        "20 um**2/s",
        "20 um2/s",
        "20 µm²/s",
        "20 µm² s⁻¹",
        "20 um^2*s^-1",
        "20 um²·s⁻¹",
        "2e-7 cm^2/s",
    ],
)
def test_one_diffusion_coefficient_in_many_spellings(text):
    assert diffusion_um2_s(text) == 20.0


@pytest.mark.parametrize(
    "text",
    [
        "",
        "  ",
        "nm",
        "[",
        "%",
        "\x00",
        "nan nm",
        "inf nm",
        "1e400 nm",
        "1e-400 nm",
        "-3 nm",
        "0 nm",
        "1,5 nm",
        "1 2 nm",
        "1 nm; import os",
        "3 nm + 2 nm",
        "60 nm/2",
        "sqrt(2) nm",
        "0x10 nm",
        "6_0 nm",
        "٣ nm",
        "60 NM",
        "60",
        "25 degC",
        "20 s",
        "1 nm^2",
        "nm nm",
        "9**9**9 nm",
        "1 nm**9**9**9",
        "1 nm^99",
        "0 A^0",
        "__class__",
        "1 nm.__class__",
        "(" * 5000 + "1 nm" + ")" * 5000,
        "9" * 100_000 + " nm",
    ],
)
def test_text_that_is_no_length_is_refused_with_its_name(text):
    with pytest.raises(SettingsError, match="radius of the neck") as caught:
        length_um(text, "radius of the neck")
    assert len(str(caught.value)) < 200
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    "value", [True, np.True_, None, [1.0], object(), math.nan, math.inf, 0, -1.0, 10**400, 1j, b"60 nm"]
)
def test_values_that_are_no_length_are_refused(value):
    with pytest.raises(SettingsError, match="length"):
        length_um(value)


def test_plain_numbers_are_taken_in_package_units_without_rounding():
    third = 1.0 / 3.0
    assert length_um(third) == third
    assert length_um(np.int64(2)) == 2.0
    assert diffusion_um2_s(np.float32(0.5)) == 0.5


def test_quantities_of_another_registry_and_format_are_converted():
    other = pint.UnitRegistry()
    other.formatter.default_format = ".1f~P"  # would print 0.0 µm
    assert length_um(other.Quantity(0.01, "um")) == 0.01
    assert length_um(quantity(12.0, "nm")) == 0.012
    with pytest.raises(SettingsError, match="not a quantity in um"):
        length_um(other.Quantity(np.ones(3), "um"))


def test_a_permeability_may_be_infinite_but_not_nan_or_negative():
    assert permeability_um_s("inf") == permeability_um_s(None) == permeability_um_s(math.inf) == math.inf
    assert permeability_um_s("1 mm/s") == 1000.0
    for wrong in (math.nan, "-1 um/s", -math.inf, 0.0):
        with pytest.raises(SettingsError, match="permeability"):
            permeability_um_s(wrong)


@pytest.mark.parametrize("value", ["0.5 %", "0.5%", "0.5 percent", "0.005", 0.005, "5e-3"])
def test_half_a_percent_in_every_spelling(value):
    assert fraction(value) == 0.005


@pytest.mark.parametrize("value", ["0 %", "100 %", 0, 1.0, "5", "nan", "% 5", "0.5 %%", "1 nm", True, math.nan])
def test_what_does_not_lie_between_0_and_1_is_refused(value):
    with pytest.raises(SettingsError, match="target"):
        fraction(value, "target")


def test_the_unit_of_a_file_is_a_name_or_a_length():
    assert unit_scale_um("nm") == 0.001
    assert unit_scale_um("4 nm") == 0.004
    for wrong in ("voxel", "s", "", "0 nm", "4 nm 4 nm"):
        with pytest.raises(SettingsError, match="unit of the file"):
            unit_scale_um(wrong)


def test_times_and_lengths_are_printed_in_the_unit_that_reads_best():
    assert [format_time(t) for t in (53.1, 0.0123456, 2e-6, 3.5e-9, 0.0)] == [
        "53.1 s",
        "12.35 ms",
        "2 µs",
        "3.5 ns",
        "0 s",
    ]
    assert [format_length(x) for x in (0.06, 2.5, 0.0)] == ["60 nm", "2.5 µm", "0 µm"]


@settings(max_examples=300, deadline=2000)
@given(
    st.text(max_size=30)
    | st.text(alphabet=string.digits + ".*^/()e+- nmuscµ²", max_size=30)
    | st.from_regex(r"[0-9]{1,3}(\*\*[0-9]{1,9}){1,4} ?nm", fullmatch=True)
)
def test_any_text_is_a_positive_finite_length_or_refused_at_once(text):
    try:
        value = length_um(text)
    except SettingsError:
        return
    assert math.isfinite(value)
    assert value > 0.0
