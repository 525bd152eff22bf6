"""Line-spread function and rotation: widths, areas, and the published rotation profile."""

import numpy as np
import pytest
from scipy.integrate import quad

from xcorr.errors import InputError
from xcorr.kernels import reference_lsf
from xcorr.kernels.banded_lsf import gaussian_gather, rotation_cdf, rotation_gather, trapezoid_cells
from xcorr.spectral import convolve_lsf, doppler_shift, log_grid, rotational_broadening
from xcorr.units import FWHM_PER_SIGMA, LIGHT_KM_S


def spike(n_side=4000, resolving=400_000.0):
    """A grid around 2.3 um, velocities on it, and a line of unit area in km/s at its middle."""
    grid = 2.3 * np.exp(np.arange(-n_side, n_side + 1) / resolving)
    velocity = np.log(grid / 2.3) * LIGHT_KM_S
    flux = np.zeros(grid.size)
    flux[n_side] = resolving / LIGHT_KM_S
    return grid, velocity, flux


def moments(velocity, profile):
    step = velocity[1] - velocity[0]
    area = profile.sum() * step
    mean = (profile * velocity).sum() * step / area
    return area, mean, (profile * (velocity - mean) ** 2).sum() * step / area


@pytest.mark.parametrize(
    ("resolving", "fwhm", "sigma"),
    [(4000, 74.948, 31.828), (2700, 111.03, 47.15), (5000, 59.96, 25.46), (5577, 53.75, 22.83)],
)
def test_lsf_width(resolving, fwhm, sigma):
    # FWHM = c / R = 2.3548200450 sigma (definition), computed values to the digits given
    grid, velocity, flux = spike()
    profile = convolve_lsf(grid, flux, resolving)
    area, mean, variance = moments(velocity, profile)
    # five sigma are kept, 2e-5 of the variance is lost; width by output sample: sigma/c of skew
    assert area == pytest.approx(1.0, abs=1e-6)
    assert abs(mean) < 0.02
    assert np.sqrt(variance) == pytest.approx(sigma, rel=2e-4)
    half = velocity[profile >= 0.5 * profile.max()]
    assert half[-1] - half[0] == pytest.approx(fwhm, abs=2 * (velocity[1] - velocity[0]))
    assert fwhm == pytest.approx(FWHM_PER_SIGMA * sigma, rel=2e-4)


def test_lsf_widths_add_in_quadrature():
    grid, velocity, flux = spike()
    twice = convolve_lsf(grid, convolve_lsf(grid, flux, 4000), 3000)
    assert moments(velocity, twice)[2] == pytest.approx(31.8282**2 + 42.4376**2, rel=1e-4)


def test_resolving_power_per_sample():
    grid = log_grid(2.0, 2.4, 60_000)
    flux = np.ones(grid.size)
    lines = np.searchsorted(grid, [2.1, 2.3])
    flux[lines] -= 1.0
    varying = convolve_lsf(grid, flux, np.where(grid < 2.2, 3000.0, 6000.0))
    for value, part in ((3000.0, grid < 2.19), (6000.0, grid > 2.21)):
        np.testing.assert_array_equal(varying[part], convolve_lsf(grid, flux, value)[part])


def test_convolution_commutes_with_the_shift():
    # shift in = shift out: exact on a constant-ln-lambda grid, where a shift is a roll
    grid = log_grid(2.2, 2.3, 150_000)
    flux = 1.0 - np.exp(-0.5 * ((grid / 2.25 - 1.0) * 3e5 / 4.0) ** 2)
    once = convolve_lsf(grid, flux, 4000.0)
    rolled = convolve_lsf(grid, np.roll(flux, 137), 4000.0)
    np.testing.assert_allclose(rolled[800:-800], np.roll(once, 137)[800:-800], atol=1e-13)
    shifted = convolve_lsf(doppler_shift(grid, 300.0), flux, 4000.0)
    np.testing.assert_allclose(shifted, once, rtol=1e-12)


@pytest.mark.parametrize(
    ("epsilon", "peak", "at_half", "variance"),
    # G(0), G(0.5) and the variance from Gray's formula in closed form
    [(0.0, 0.6366198, 0.5513289, 0.25), (0.6, 0.6933099, 0.5569144, 0.225), (1.0, 0.75, 0.5625, 0.20)],
)
def test_rotation_profile(epsilon, peak, at_half, variance):
    vsini = 100.0
    grid, velocity, flux = spike()
    profile = rotational_broadening(grid, flux, vsini, epsilon) * vsini
    area, mean, width = moments(velocity, profile / vsini)
    assert area == pytest.approx(1.0, abs=1e-9)
    assert abs(mean) < 0.03  # the width belongs to the output sample: v sin i / c of skew
    # cells of 0.75 km/s: (h / vsini)^2 / 12 is 5e-6; the skew is 3e-4 of a width
    assert profile[4000] == pytest.approx(peak, abs=2e-5)
    assert np.interp(0.5 * vsini, velocity, profile) == pytest.approx(at_half, abs=2e-4)
    assert width / vsini**2 == pytest.approx(variance, rel=1e-4)
    assert np.all(profile[np.abs(velocity) > vsini + 1.0] == 0.0)


def test_rotation_cdf_is_the_integral_of_the_profile():
    for x in (-0.9, -0.3, 0.0, 0.7):
        value, _ = quad(reference_lsf.rotation_profile, -1.0, x, args=(0.6,))
        assert rotation_cdf(x, 0.6) == pytest.approx(value, abs=1e-9)


def test_no_rotation_and_unresolved_rotation_change_nothing():
    grid = log_grid(2.2, 2.21, 100_000)
    flux = np.random.default_rng(1).normal(1.0, 0.1, grid.size)
    np.testing.assert_array_equal(rotational_broadening(grid, flux, 0.0), flux)
    np.testing.assert_allclose(rotational_broadening(grid, flux, 0.1), flux, rtol=1e-12)


def test_slow_twins():
    rng = np.random.default_rng(2)
    grid = np.sort(rng.uniform(2.2, 2.201, 300))
    cell, flux = trapezoid_cells(grid), rng.normal(size=300)
    sigma = grid / rng.uniform(5000.0, 20000.0, 300) / FWHM_PER_SIGMA
    out = np.empty(300)
    gaussian_gather(grid, cell, flux, sigma, 5.0, out)
    np.testing.assert_allclose(
        out, reference_lsf.gaussian_convolution(grid, cell, flux, sigma, 5.0), rtol=1e-11, atol=1e-12
    )
    grid, flux, out = np.linspace(2.2, 2.2008, 80), flux[:80].copy(), np.empty(80)
    bounds = np.concatenate([grid[:1], 0.5 * (grid[1:] + grid[:-1]), grid[-1:]])
    rotation_gather(grid, bounds, flux, 1.5e-4, 0.6, out)
    slow = reference_lsf.rotation_convolution(grid, flux, 1.5e-4, 0.6)
    np.testing.assert_allclose(out, slow, atol=1e-8)  # quadrature of the square-root edge


def test_bad_input():
    grid = log_grid(2.2, 2.3, 5_000)
    flux = np.ones(grid.size)
    with pytest.raises(InputError, match="too coarse"):
        convolve_lsf(grid, flux, 4000.0)
    with pytest.raises(InputError, match="must be positive"):
        convolve_lsf(grid, flux, 0.0)
    with pytest.raises(InputError, match="ascend"):
        convolve_lsf(grid[::-1], flux, 1000.0)
    with pytest.raises(InputError, match="one value per wavelength"):
        convolve_lsf(grid, flux[1:], 1000.0)
    with pytest.raises(InputError, match="non-finite"):
        convolve_lsf(grid, np.where(grid > 2.25, np.nan, 1.0), 1000.0)
    with pytest.raises(InputError, match="v sin i"):
        rotational_broadening(grid, flux, -1.0)
    with pytest.raises(InputError, match="limb darkening"):
        rotational_broadening(grid, flux, 10.0, 1.5)
