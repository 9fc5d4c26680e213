"""One disc in a wall: conductance for every permeability, and the two means that curvature and neighbours need."""

import math

import numpy as np
import pytest

import exact
from bemescape.bem.disc import disc_flux


@pytest.mark.parametrize("mu", sorted(exact.ROBIN_DISC_TABLE))
def test_conductance_of_a_partly_open_disc(mu):
    # The table has ten digits, the 100 polynomials eight at the largest κ.
    assert 1.0 / (4.0 * disc_flux(mu).resistance) == pytest.approx(exact.ROBIN_DISC_TABLE[mu], rel=1e-8)


def test_a_nearly_closed_disc_has_a_uniform_flux():
    flux = disc_flux(1e-6)
    assert flux.resistance == pytest.approx(1.0 / (math.pi * 1e-6) + 8.0 / (3.0 * math.pi**2), rel=1e-9)
    # Uniform over a disc: mean of s² is ½, and of ln of the distance of two places −¼ (common practice).
    assert flux.mean_square == pytest.approx(0.5, rel=1e-6)
    assert flux.mean_log == pytest.approx(-0.25, rel=1e-6)


def test_a_wide_open_disc_becomes_the_absorbing_one():
    absorbing, open_wide = disc_flux(math.inf), disc_flux(1e8)
    assert absorbing.resistance == 0.25
    assert open_wide.resistance == pytest.approx(absorbing.resistance, rel=2e-5)  # what 100 polynomials lack
    assert open_wide.mean_square == pytest.approx(absorbing.mean_square, rel=1e-4)
    assert open_wide.mean_log == pytest.approx(absorbing.mean_log, rel=1e-3)


def test_the_mean_log_of_the_absorbing_disc_by_sampling():
    """Places with the density of an absorbing disc: s = √(1 − t²) with t uniform."""
    random = np.random.default_rng(3)
    s = np.sqrt(1.0 - random.random((2, 400_000)) ** 2)
    angle = 2.0 * np.pi * random.random(400_000)
    distance = np.sqrt(s[0] ** 2 + s[1] ** 2 - 2.0 * s[0] * s[1] * np.cos(angle))
    # Four standard errors.
    assert np.log(distance).mean() == pytest.approx(disc_flux(math.inf).mean_log, abs=4.0 * 0.6 / np.sqrt(400_000))
