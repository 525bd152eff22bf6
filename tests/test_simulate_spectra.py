"""The simulator's Doppler shift, rotation, line-spread function and pixel integration."""

import numpy as np
import pytest
from scipy.special import ndtr

from xcorr.errors import CoverageError
from xcorr.simulate import spectra
from xcorr.units import FWHM_PER_SIGMA, LIGHT_KM_S

CENTRES = np.linspace(2.0, 2.2, 400)
EDGES = spectra.edges_of(CENTRES)
GRID = spectra.log_grid(2.0, 2.2, 200_000)


def forest(wavelength_um, count=300, seed=1):
    """Random Gaussian absorption lines of 5e-5 um FWHM."""
    rng = np.random.default_rng(seed)
    flux = np.ones(wavelength_um.size)
    for centre, depth in zip(rng.uniform(1.98, 2.22, count), rng.uniform(0.1, 0.6, count), strict=True):
        flux -= depth * np.exp(-0.5 * ((wavelength_um - centre) / 2.1e-5) ** 2)
    return flux


def test_cell_means_are_exact_for_straight_lines_between_samples():
    x = np.array([0.0, 1.0, 1.5, 4.0])
    y = np.array([2.0, 0.0, 3.0, 1.0])
    edges = np.array([0.25, 0.5, 1.2, 3.0])
    fine = np.linspace(0.25, 3.0, 2_750_001)
    values = np.interp(fine, x, y)
    for k, mean in enumerate(spectra.cell_means(x, y, edges)):
        inside = (fine >= edges[k]) & (fine <= edges[k + 1])
        # trapezoid on a grid of 1e-6: kinks leave 1e-6
        assert mean == pytest.approx(
            np.trapezoid(values[inside], fine[inside]) / np.ptp(edges[k : k + 2]), abs=3e-6
        )


def test_flux_is_conserved():
    flux = forest(GRID)
    edges = np.linspace(GRID[100], GRID[-100], 37)
    sums = (spectra.cell_means(GRID, flux, edges) * np.diff(edges)).sum()
    inside = slice(100, -99)
    assert sums == pytest.approx(np.trapezoid(flux[inside], GRID[inside]), rel=1e-12)


@pytest.mark.parametrize("as_array", [False, True])
def test_gaussian_line_through_gaussian_lsf_and_pixel(as_array):
    """A Gaussian line stays Gaussian with added variances; its channel means are error functions."""
    resolving, centre, sigma = 3000.0, 2.10037, 2e-4
    line = np.exp(-0.5 * ((GRID - centre) / sigma) ** 2) / (sigma * np.sqrt(2 * np.pi))
    given = np.full(CENTRES.size, resolving) if as_array else resolving
    got = spectra.to_channels(GRID, line, EDGES, given)
    total = np.hypot(sigma, centre / resolving / FWHM_PER_SIGMA)
    expected = np.diff(ndtr((EDGES - centre) / total)) / np.diff(EDGES)
    # The LSF is Gaussian in ln(lambda) here, in lambda there: they differ by order sigma/lambda = 1e-4.
    assert np.abs(got - expected).max() < 4e-4 * expected.max()


def test_other_code_for_the_same_operation_agrees():
    """The search's banded operator, written independently: two programs, one answer."""
    from xcorr.spectral import LsfOperator

    flux = forest(GRID)
    for resolving in (4000.0, np.linspace(3000.0, 5000.0, CENTRES.size)):
        other = LsfOperator.build(GRID, CENTRES, resolving).apply(flux)
        mine = spectra.to_channels(GRID, flux, EDGES, resolving)
        # Lines are 8 % deep on average; Gaussian in ln(lambda) against lambda leaves parts in 1e4 of that.
        assert np.abs(other - mine).max() < 1e-4


def test_resolving_power_changes_the_width():
    """Control: a 20 % error of R is far outside the agreement above."""
    flux = forest(GRID)
    difference = spectra.to_channels(GRID, flux, EDGES, 4000.0) - spectra.to_channels(
        GRID, flux, EDGES, 3200.0
    )
    assert np.abs(difference).max() > 5e-3


@pytest.mark.parametrize(("velocity", "metres"), [(30.0, 1.501), (100.0, 16.68)])
def test_doppler_is_relativistic(velocity, metres):
    """Relativistic minus classical shift, computed in double precision from the formula."""
    excess = (spectra.doppler_factor(velocity) - 1.0) * LIGHT_KM_S - velocity
    assert excess * 1e3 == pytest.approx(metres, abs=5e-3)  # as published, rounded


def test_barycentric_value_is_added_to_the_measured_one():
    """(1+z_bary) = (1+z_obs)(1+z_B): a source at rest is measured at -z_B."""
    assert spectra.doppler_factor(0.0, 20.0) == pytest.approx(1.0 / (1.0 + 20.0 / LIGHT_KM_S), rel=1e-14)


@pytest.mark.parametrize("velocity", [-300.0, -41.3, 7.7, 500.0])
def test_shift_in_is_shift_out(velocity):
    """The centroid of a line in the channels tells the velocity put in, to a hundredth of a grid step."""
    rest, sigma = 2.1, 3e-5
    source = np.linspace(2.09, 2.11, 8001)
    line = np.exp(-0.5 * ((source - rest) / sigma) ** 2)
    padded_x = np.concatenate([[1.9], source, [2.3]])
    padded_y = np.concatenate([[0.0], line, [0.0]])
    placed = spectra.place(padded_x, padded_y, GRID, spectra.doppler_factor(velocity))
    fine = np.linspace(2.0, 2.2, 1000)
    channels = spectra.to_channels(GRID, placed, spectra.edges_of(fine), 4000.0)
    # 2.6 channels per FWHM: the aliasing of the centroid is below exp(-2 (pi 1.1)**2) of a channel.
    centroid = (channels * fine).sum() / channels.sum()
    measured = (centroid / rest - 1.0) * LIGHT_KM_S
    expected = (spectra.doppler_factor(velocity) - 1.0) * LIGHT_KM_S
    assert measured == pytest.approx(expected, abs=0.02)


@pytest.mark.parametrize(("limb", "variance"), [(0.0, 0.25), (0.6, 0.225), (1.0, 0.20)])
def test_rotation_profile(limb, variance):
    """Area 1 and variance of Gray's profile in units of vsini squared (from the formula)."""
    vsini = 80.0
    spike = np.zeros(GRID.size)
    spike[GRID.size // 2] = 1.0
    profile = spectra.rotate(GRID, spike, vsini, limb)
    velocity = np.log(GRID / GRID[GRID.size // 2]) * LIGHT_KM_S
    assert profile.sum() == pytest.approx(1.0, abs=1e-12)
    # Cells of 1.5 km/s add step**2 / 12, below 1e-3 of the variance.
    assert (profile * velocity**2).sum() / vsini**2 == pytest.approx(variance, rel=1e-3)


def test_short_spectrum_is_refused():
    with pytest.raises(CoverageError, match="must cover"):
        spectra.place(CENTRES[50:], np.ones(350), GRID, needed_um=(2.0, 2.2))
