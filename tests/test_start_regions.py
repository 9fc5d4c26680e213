"""Start regions of a case file: a patch of the wall or a ball inside."""

import tomllib

import numpy as np
import pytest

from bemescape import Ball, SettingsError, Surface, Window
from bemescape.case import parse_case

CASE = """
[surface]
file = "bouton.ply"
unit = "nm"
[motion]
diffusion = "20 um^2/s"
[[window]]
name = "neck"
disc = { centre = [100.0, 0, -620.0], radius = "60 nm" }
[start]
points = { vesicle = [10, 20, 30] }
ways_out = ["neck"]
[[start.region]]
name = "release face"
disc = { centre = [0, 0, 300], radius = "80 nm" }
[[start.region]]
name = "contact"
labels = { array = "label", value = 2 }
[[start.region]]
name = "cloud"
ball = { centre = [0, 50, 0], radius = "100 nm" }
"""


def parsed(text):
    return parse_case(tomllib.loads(text), folder=".", name="bouton")


def test_regions_are_read_into_package_units():
    surface = Surface(np.eye(3), [[0, 1, 2]], unit_um=(0.001, 0.001, 0.001))
    case = parsed(CASE)
    starts = case.start_um(surface)
    assert list(starts) == ["vesicle", "release face", "contact", "cloud"]
    assert starts["release face"] == Window.disc("release face", centre=(0.0, 0.0, 0.3), radius=0.08)
    assert starts["contact"] == Window.labels("contact", array="label", value=2)
    assert starts["cloud"] == Ball((0.0, 0.05, 0.0), 0.1)
    assert case.document.start.ways_out == ("neck",)


@pytest.mark.parametrize(
    ("before", "after", "message"),
    [
        (
            'ball = { centre = [0, 50, 0], radius = "100 nm" }',
            "",
            r"\[start\] region\[2\].*has no kind",
        ),
        (
            'labels = { array = "label", value = 2 }',
            'labels = { array = "label", value = 2 }\nball = { centre = [0, 0, 0], radius = "1 nm" }',
            r"region\[1\].*has labels and ball",
        ),
        ('name = "cloud"', 'name = "vesicle"', r"\[start\] has 2 starts named 'vesicle'"),
        ('radius = "100 nm"', 'radius = "100"', "radius"),
        ("ball =", "bal =", "did you mean 'ball'"),
    ],
)
def test_a_mistake_in_a_region_is_told_with_its_place(before, after, message):
    assert before in CASE
    with pytest.raises(SettingsError, match=message):
        parsed(CASE.replace(before, after))
