"""Doppler factors: relativity, composition, and the barycentric factor."""

import numpy as np
import pytest
from astropy import constants
from astropy import units as u
from hypothesis import given
from hypothesis import strategies as st

from xcorr.errors import InputError
from xcorr.spectral import (
    compose_velocities,
    doppler_factor,
    doppler_shift,
    observed_velocity,
    velocity_of_factor,
)
from xcorr.units import LIGHT_KM_S

velocities = st.floats(-3000.0, 3000.0)


def test_light():
    assert constants.c.to_value("km/s") == LIGHT_KM_S  # exact by definition of the metre


@pytest.mark.parametrize(("velocity", "difference_m_s"), [(30.0, 1.501), (100.0, 16.68)])
def test_relativistic_minus_classical(velocity, difference_m_s):
    # special relativity, computed in double precision: v^2 / 2c; 4 digits
    excess = (doppler_shift(1.0, velocity) - 1.0) * LIGHT_KM_S - velocity
    assert excess * 1e3 == pytest.approx(difference_m_s, rel=5e-4)


@given(velocities, velocities)
def test_composed_velocity_is_the_product_of_factors(one, two):
    both = doppler_factor(compose_velocities(one, two))
    assert both == pytest.approx(float(doppler_factor(one) * doppler_factor(two)), rel=1e-14)


@given(velocities)
def test_shift_there_and_back(velocity):
    assert doppler_shift(doppler_shift(2.3, velocity), -velocity) == pytest.approx(2.3, rel=1e-15)
    assert velocity_of_factor(doppler_factor(velocity)) == pytest.approx(velocity, abs=1e-9)


def test_astropy_agrees():
    # astropy's relativistic equivalency as independent reference
    expected = (2.3 * u.um).to_value(u.um)
    shifted = doppler_shift(2.3, 812.5) * u.um
    back = shifted.to_value(u.km / u.s, u.doppler_relativistic(expected * u.um))
    assert back == pytest.approx(812.5, rel=1e-9)


def test_observed_velocity_undoes_the_barycentric_factor():
    # (1 + z_bary) = (1 + z_obs)(1 + z_B), Wright & Eastman (2014): z_B linear, velocities relativistic
    seen = observed_velocity(np.array([-50.0, 0.0, 30.0]), 20.0)
    product = doppler_factor(seen) * (1.0 + 20.0 / LIGHT_KM_S)
    np.testing.assert_allclose(product, doppler_factor([-50.0, 0.0, 30.0]), rtol=1e-15)
    # moving towards an object at rest (a positive correction) shows it approaching
    assert seen[1] == pytest.approx(-20.0, abs=2e-3)


def test_units_and_errors():
    assert doppler_shift(23000 * u.AA, 30000 * u.m / u.s) == pytest.approx(float(doppler_shift(2.3, 30.0)))
    with pytest.raises(InputError, match="slower than light"):
        doppler_shift(2.3, 3.0e5)
