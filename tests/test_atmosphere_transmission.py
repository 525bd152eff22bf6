"""The Earth's transmission: scaling with water and airmass, and its range."""

import numpy as np
import pytest
from astropy import units as u

from xcorr.atmosphere import load_transmission
from xcorr.errors import CoverageError, InputError


@pytest.fixture(scope="module")
def k_band():
    return load_transmission((2.0, 2.4))


def test_reference_conditions_are_the_product(k_band):
    product = np.prod(list(k_band.molecules.values()), axis=0)
    np.testing.assert_allclose(k_band.at(), product, rtol=1e-9, atol=1e-15)
    assert k_band.airmass == 1.0
    assert k_band.pwv_mm > 0


def test_beer_lambert(k_band):
    one, two = k_band.at(), k_band.at(airmass=2.0)
    np.testing.assert_allclose(two, one**2, rtol=1e-9, atol=1e-300)
    dry, wet = k_band.at(water=0.0), k_band.at(water=3.0)
    np.testing.assert_allclose(wet, dry * k_band.molecules["H2O"] ** 3, rtol=1e-9, atol=1e-300)
    assert np.all(wet <= one + 1e-15)
    assert np.all(one <= dry + 1e-15)
    np.testing.assert_array_equal(k_band.at(airmass=0.0), 1.0)


def test_range_and_units(k_band):
    assert 2.0 <= k_band.wavelength_um[0] < k_band.wavelength_um[-1] <= 2.4
    other = load_transmission((2000, 2400) * u.nm)
    np.testing.assert_array_equal(other.wavelength_um, k_band.wavelength_um)
    whole = load_transmission()
    assert whole.wavelength_um[0] == pytest.approx(1.4, abs=1e-3)
    assert whole.wavelength_um[-1] == pytest.approx(2.5, abs=1e-3)
    with pytest.raises(CoverageError, match=r"1\.400"):
        load_transmission((3.0, 4.0))


def test_the_familiar_windows(k_band):
    # K is clear near 2.2 um; CO2 blocks at 2.01 and 2.06 um (HITRAN band positions)
    transmission = k_band.at()
    wavelength = k_band.wavelength_um
    assert transmission[(wavelength > 2.12) & (wavelength < 2.24)].mean() > 0.95
    assert k_band.molecules["CO2"][(wavelength > 2.002) & (wavelength < 2.02)].mean() < 0.7


def test_arrays_are_read_only(k_band):
    with pytest.raises(ValueError, match="read-only"):
        k_band.molecules["H2O"][0] = 0.0


@pytest.mark.parametrize("changed", [{"water": -1.0}, {"airmass": -0.1}, {"airmass": np.nan}])
def test_bad_input(k_band, changed):
    with pytest.raises(InputError):
        k_band.at(**changed)
