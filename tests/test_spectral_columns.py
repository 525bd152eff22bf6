"""Template columns: shifted, multiplied, through the line-spread function."""

import numpy as np
import pytest

from xcorr.errors import InputError
from xcorr.kernels import reference_lsf
from xcorr.kernels.banded_lsf import shift_and_multiply
from xcorr.spectral import LsfOperator, covered_channels, doppler_factor, log_grid, shifted_columns
from xcorr.units import FWHM_PER_SIGMA

CHANNELS = np.linspace(2.24, 2.30, 240)
VELOCITY = np.array([-733.3, -100.2, 0.0, 33.37, 333.21])
_RNG = np.random.default_rng(6)
LINES = _RNG.uniform([2.20, 0.5], [2.34, 5.0], (800, 2))
TELLURIC = _RNG.uniform([2.20, 0.1], [2.34, 3.0], (300, 2))


def spectrum(wavelength, fwhm_km_s):
    tau = np.zeros(wavelength.size)
    for centre, depth in LINES:
        near = slice(*np.searchsorted(wavelength, [centre * (1 - 4e-5), centre * (1 + 4e-5)]))
        u = (wavelength[near] / centre - 1.0) * 299792.458 * FWHM_PER_SIGMA / fwhm_km_s
        tau[near] += depth * np.exp(-0.5 * u**2)
    return np.exp(-tau)


def transmission(wavelength):
    tau = np.zeros(wavelength.size)
    for centre, depth in TELLURIC:
        near = slice(*np.searchsorted(wavelength, [centre * (1 - 1e-3), centre * (1 + 1e-3)]))
        tau[near] += depth / (1.0 + ((wavelength[near] / centre - 1.0) * 299792.458 / 1.5) ** 2)
    return np.exp(-tau)


@pytest.fixture(scope="module")
def truth():
    """Columns by evaluating the lines themselves on a grid of R = 4,000,000, no interpolation."""
    fine = log_grid(2.20, 2.34, 4e6)
    operator = LsfOperator.build(fine, CHANNELS, 4000.0)
    t = transmission(fine)
    return np.array([operator.apply(spectrum(fine / doppler_factor(v), 3.0) * t) for v in VELOCITY])


def error(columns, truth):
    return float(np.max(np.sqrt(np.mean((columns - truth) ** 2, axis=1)) / truth.std(axis=1)))


@pytest.mark.parametrize(
    ("resolving", "documented"),
    [(200_000.0, 1.4e-3), (300_000.0, 1.8e-4), (350_000.0, 7e-5), (500_000.0, 2.4e-5)],
)
@pytest.mark.parametrize("uniform_in", ["logarithm", "wavelength"])
def test_accuracy_as_documented(truth, resolving, documented, uniform_in):
    limit = 1.05 * documented  # the figures of the docstring, rounded to two digits there
    grid = log_grid(2.20, 2.34, resolving)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    own = grid if uniform_in == "logarithm" else np.linspace(2.20, 2.34, grid.size)
    columns = shifted_columns(operator, own, spectrum(own, 3.0), VELOCITY, multiply=transmission(grid))
    assert error(columns, truth) < limit
    if resolving == 350_000.0:  # the control: linear interpolation is ten times worse
        t, x = transmission(grid), np.log(own)
        linear = [
            operator.apply(np.interp(np.log(grid) - np.log(doppler_factor(v)), x, spectrum(own, 3.0)) * t)
            for v in VELOCITY
        ]
        assert error(np.array(linear), truth) > 10.0 * error(columns, truth)


def test_multiplying_after_the_lsf_is_not_the_same(truth):
    # the reason for the operator: unresolved tellurics do not commute with the LSF
    grid = log_grid(2.20, 2.34, 350_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    after = shifted_columns(operator, grid, spectrum(grid, 3.0), VELOCITY) * operator.apply(
        transmission(grid)
    )
    assert error(after, truth) > 0.05


def test_shift_in_is_shift_out():
    # a spectrum shifted by hand, at rest, equals the spectrum at that velocity: whole grid steps are exact
    grid = log_grid(2.20, 2.34, 300_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    flux = spectrum(grid, 3.0)
    velocity = 299792.458 * np.tanh(250 / 300_000)  # ln(1 + z) = 250 steps
    moved = shifted_columns(operator, grid, flux, velocity)[0]
    by_hand = shifted_columns(operator, grid * doppler_factor(velocity), flux, 0.0)[0]
    np.testing.assert_allclose(moved, by_hand, rtol=1e-9)
    np.testing.assert_allclose(moved, operator.apply(np.roll(flux, 250)), rtol=1e-8)
    assert np.std(moved - operator.apply(flux)) > 0.01


def test_slow_twin_and_ends():
    rng = np.random.default_rng(7)
    flux, position = rng.normal(size=50), np.linspace(-10.0, 60.0, 333)
    shifts, factor = np.array([-3.7, 0.0, 12.25]), rng.normal(size=333)
    out = np.empty((3, 333))
    shift_and_multiply(flux, position, shifts, factor, out)
    slow = reference_lsf.shift_and_multiply(flux, position, shifts, factor)
    np.testing.assert_allclose(out, slow, rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(out[1, 0] / factor[0], flux[0], rtol=1e-12)
    np.testing.assert_allclose(out[1, -1] / factor[-1], flux[-1], rtol=1e-12)


def test_bits_do_not_depend_on_threads():
    grid = log_grid(2.20, 2.34, 200_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    velocity = np.linspace(-500, 500, 37)
    one, *others = [
        shifted_columns(operator, grid, spectrum(grid, 3.0), velocity, multiply=transmission(grid), jobs=jobs)
        for jobs in (1, 2, 5)
    ]
    for other in others:
        np.testing.assert_array_equal(one, other)


def test_covered_channels():
    grid = log_grid(2.20, 2.34, 200_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    template = log_grid(2.2415, 2.31, 200_000)
    at_rest = covered_channels(operator, template, 0.0)
    searched = covered_channels(operator, template, [-1000.0, 0.0, 1000.0])
    assert 0 < np.count_nonzero(~at_rest) < np.count_nonzero(~searched) < CHANNELS.size
    assert not np.any(searched & ~at_rest)
    # receding light comes from shorter rest wavelengths: the blue end is lost at +1000 km/s
    assert not searched[np.searchsorted(CHANNELS, 2.2415 * (1 + 900 / 299792.458))]
    # and what is claimed as covered does not depend on anything outside the template
    flux = spectrum(template, 3.0)
    longer = np.concatenate([log_grid(2.20, 2.2415, 200_000)[:-1] * (1 - 1e-9), template])
    padded = np.concatenate([np.full(longer.size - template.size, 99.0), flux])
    for v in (-1000.0, 1000.0):
        a = shifted_columns(operator, template, flux, v)[0][searched]
        b = shifted_columns(operator, longer, padded, v)[0][searched]
        np.testing.assert_allclose(a[5:], b[5:], atol=1e-5)


def test_undefined_samples_uncover_the_channels_that_see_them():
    grid = log_grid(2.20, 2.34, 200_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    defined = np.ones(grid.size, bool)
    defined[np.searchsorted(grid, 2.27)] = False
    lost = ~covered_channels(operator, grid, 0.0, defined)
    reach = 5.0 * 2.27 / 4000.0 / FWHM_PER_SIGMA + 0.5 * (CHANNELS[1] - CHANNELS[0])
    np.testing.assert_allclose(CHANNELS[lost][[0, -1]], [2.27 - reach, 2.27 + reach], atol=3e-4)
    searched = ~covered_channels(operator, grid, [-300.0, 300.0], defined)
    swept = 600.0 / 299792.458 * 2.27 / (CHANNELS[1] - CHANNELS[0])
    assert abs(searched.sum() - lost.sum() - swept) <= 2


def test_bad_input():
    grid = log_grid(2.20, 2.34, 200_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    with pytest.raises(InputError, match="finite flux"):
        shifted_columns(operator, grid, np.full(grid.size, np.nan), 0.0)
    with pytest.raises(InputError, match="factor must lie"):
        shifted_columns(operator, grid, np.ones(grid.size), 0.0, multiply=np.ones(3))


def test_a_template_far_wider_than_the_data_or_beside_it():
    grid = log_grid(2.20, 2.34, 300_000)
    operator = LsfOperator.build(grid, CHANNELS, 4000.0)
    wide = np.linspace(1.5, 3.0, 150_000)
    narrow = wide[(wide > 2.19) & (wide < 2.35)]
    for v in (-900.0, 0.0, 900.0):
        np.testing.assert_allclose(
            shifted_columns(operator, wide, spectrum(wide, 30.0), v),
            shifted_columns(operator, narrow, spectrum(narrow, 30.0), v),
            rtol=1e-6,
        )
    beside = np.linspace(1.0, 1.1, 1000)
    np.testing.assert_allclose(shifted_columns(operator, beside, beside, 0.0), 1.1, rtol=1e-9)
    assert not np.any(covered_channels(operator, beside, 0.0))
