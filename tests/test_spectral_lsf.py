"""The banded line-spread operator against its slow twin and against brute force on a ten times finer grid."""

import numpy as np
import pytest
from scipy.special import ndtr

from xcorr.errors import InputError
from xcorr.kernels import reference_lsf
from xcorr.kernels.banded_lsf import banded_product, trapezoid_cells
from xcorr.spectral import LsfOperator, channel_edges, convolve_lsf, log_grid, to_channels
from xcorr.units import FWHM_PER_SIGMA

GRID = log_grid(2.20, 2.30, 300_000)
CHANNELS = np.linspace(2.21, 2.29, 300)
LINES = np.random.default_rng(4).uniform([2.2, 0.2], [2.3, 3.0], (200, 2))


def forest(wavelength, fwhm_km_s=4.0):
    """exp(-tau) of Gaussian lines, the same for any grid."""
    tau = np.zeros(wavelength.size)
    for centre, depth in LINES:
        near = slice(*np.searchsorted(wavelength, [centre * (1 - 5e-5), centre * (1 + 5e-5)]))
        u = (wavelength[near] / centre - 1.0) * 299792.458 * FWHM_PER_SIGMA / fwhm_km_s
        tau[near] += depth * np.exp(-0.5 * u**2)
    return np.exp(-tau)


@pytest.fixture(scope="module")
def operator():
    return LsfOperator.build(GRID, CHANNELS, 4000.0)


def test_rows_equal_the_slow_twin(operator):
    cell = trapezoid_cells(GRID)
    derivative = operator.derivative_resolving_power()
    for row in (0, 57, 299):
        low, high = operator.edges_um[row]
        sigma = CHANNELS[row] / 4000.0 / FWHM_PER_SIGMA
        band = slice(operator.offsets[row], operator.offsets[row + 1])
        dense, dense_slope = np.zeros(GRID.size), np.zeros(GRID.size)
        support = slice(operator.starts[row], operator.starts[row] + band.stop - band.start)
        dense[support], dense_slope[support] = operator.weights[band], derivative.weights[band]
        slow = reference_lsf.lsf_row(GRID, cell, low, high, sigma)
        slope = reference_lsf.lsf_row_slope(GRID, cell, low, high, sigma) / 4000.0
        # the band ends at five sigma beyond the pixel: 6e-7 of the area
        np.testing.assert_allclose(dense, slow, atol=1e-6 * slow.max())
        np.testing.assert_allclose(dense_slope, slope, atol=2e-5 * np.abs(slope).max())


@pytest.mark.parametrize("dtype", [np.float32, np.float64, ">f8"])
@pytest.mark.parametrize("jobs", [1, 2, 3])
def test_product_equals_the_slow_twin(operator, dtype, jobs):
    spectra = np.random.default_rng(5).normal(size=(19, GRID.size)).astype(dtype)
    slow = reference_lsf.banded_product(operator.starts, operator.offsets, operator.weights, spectra)
    fast = operator.apply(spectra, jobs=jobs)
    np.testing.assert_allclose(fast, slow, rtol=1e-11, atol=1e-14)
    np.testing.assert_array_equal(fast, operator.apply(spectra, jobs=1))
    np.testing.assert_array_equal(operator.apply(spectra[3]), fast[3])


def test_nan_reach_only_the_channels_that_see_them(operator):
    flux = np.ones(GRID.size)
    flux[8_000] = np.nan
    seen = (operator.starts <= 8_000) & (operator.starts + np.diff(operator.offsets) > 8_000)
    np.testing.assert_array_equal(np.isnan(operator.apply(flux)), seen)
    assert 0 < seen.sum() < 20


def test_against_brute_force_on_a_ten_times_finer_grid(operator):
    # independent code: Gaussian smoothing sample by sample, then the integral over the pixel
    fine = log_grid(2.20, 2.30, 3_000_000)
    spectrum = forest(fine)
    edges = channel_edges(CHANNELS)
    expected = np.empty(40)
    rows = np.arange(130, 170)
    cell = np.gradient(fine)
    for i, row in enumerate(rows):
        sigma = CHANNELS[row] / 4000.0 / FWHM_PER_SIGMA
        weight = ndtr((edges[row, 1] - fine) / sigma) - ndtr((edges[row, 0] - fine) / sigma)
        expected[i] = np.sum(weight * spectrum * cell) / np.sum(weight * cell)
    found = operator.apply(forest(GRID))[rows]
    assert np.std(expected) > 0.02
    # five-sigma truncation, 6e-7 of a structure of order one
    np.testing.assert_allclose(found, expected, atol=1e-6)


def test_same_as_smoothing_and_binning(operator):
    spectrum = forest(GRID)
    steps = to_channels(GRID, convolve_lsf(GRID, spectrum, 4000.0), channel_edges(CHANNELS))
    # there the width follows the output sample, here the channel: half a pixel, 6e-5 of sigma
    np.testing.assert_allclose(operator.apply(spectrum), steps, atol=2e-5)


def test_constant_and_straight_spectra_pass_unchanged(operator):
    np.testing.assert_allclose(operator.apply(np.ones(GRID.size)), 1.0, rtol=1e-13)
    # symmetric LSF: a slope keeps its value at the channel centre
    np.testing.assert_allclose(operator.apply(GRID), CHANNELS, rtol=1e-9)


def test_widths_of_lsf_and_pixel_add():
    # variance of LSF plus w^2/12 of the pixel (definition of a box), R by channel
    resolving = np.linspace(3000.0, 6000.0, CHANNELS.size)
    operator = LsfOperator.build(GRID, CHANNELS, resolving)
    pixel = CHANNELS[1] - CHANNELS[0]
    for row in (10, 150, 290):
        band = slice(operator.offsets[row], operator.offsets[row + 1])
        start = operator.starts[row]
        offset = GRID[start : start + band.stop - band.start] - CHANNELS[row]
        sigma = CHANNELS[row] / resolving[row] / FWHM_PER_SIGMA
        variance = np.sum(operator.weights[band] * offset**2)
        assert variance == pytest.approx(sigma**2 + pixel**2 / 12.0, rel=1e-4)


def test_first_order_in_resolving_power(operator):
    # R 8 % off: the first order must remove most of the change (RECIPES: 4.4 % of amplitude to 0.3 %)
    spectrum = forest(GRID)
    at, changed = operator.apply(spectrum), LsfOperator.build(GRID, CHANNELS, 4320.0).apply(spectrum)
    corrected = at + 320.0 * operator.derivative_resolving_power().apply(spectrum)
    before, after = np.std(changed - at), np.std(changed - corrected)
    assert after < 0.1 * before
    # and it is the derivative: a tenth of the step leaves a hundredth of the error
    small = LsfOperator.build(GRID, CHANNELS, 4032.0).apply(spectrum)
    tiny = np.std(small - at - 32.0 * operator.derivative_resolving_power().apply(spectrum))
    assert tiny == pytest.approx(after / 100.0, rel=0.2)


def test_overlapping_orders_are_just_rows():
    first, second = np.linspace(2.21, 2.26, 100), np.linspace(2.24, 2.29, 100)
    both = LsfOperator.build(
        GRID, np.concatenate([first, second]), 4000.0, order=np.repeat([0, 1], 100)
    ).apply(forest(GRID))
    np.testing.assert_array_equal(both[:100], LsfOperator.build(GRID, first, 4000.0).apply(forest(GRID)))
    np.testing.assert_array_equal(both[100:], LsfOperator.build(GRID, second, 4000.0).apply(forest(GRID)))


def test_uncovered_channels_are_reported_and_empty():
    operator = LsfOperator.build(GRID, np.linspace(2.19, 2.25, 200), 4000.0)
    out = operator.apply(np.ones(GRID.size))
    reach = 5.0 * 2.2 / 4000.0 / FWHM_PER_SIGMA
    np.testing.assert_array_equal(operator.covered, operator.edges_um[:, 0] - reach > GRID[0] - 1e-7)
    np.testing.assert_array_equal(out == 0.0, ~operator.covered)
    assert 10 < np.count_nonzero(~operator.covered) < 60


def test_the_operator_cannot_be_changed(operator):
    with pytest.raises(ValueError, match="read-only"):
        operator.weights[0] = 1.0


def test_bad_input(operator):
    with pytest.raises(InputError, match="too coarse"):
        LsfOperator.build(log_grid(2.2, 2.3, 5000), CHANNELS, 4000.0)
    with pytest.raises(InputError, match="must be positive"):
        LsfOperator.build(GRID, CHANNELS, 0.0)
    with pytest.raises(InputError, match="one number or one per sample"):
        LsfOperator.build(GRID, CHANNELS, np.full(7, 4000.0))
    with pytest.raises(InputError, match="fine grid"):
        operator.apply(np.ones(7))


def test_empty_rows_give_zero():
    out = np.full((1, 2), np.nan)
    banded_product(np.array([0, 0]), np.array([0, 0, 1]), np.array([2.0]), np.array([[3.0, 4.0]]), out)
    np.testing.assert_array_equal(out, [[0.0, 6.0]])
