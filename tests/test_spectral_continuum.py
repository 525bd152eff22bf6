"""Penalised splines: no bias where there are data, a bridge where there are none."""

import numpy as np

from xcorr.spectral.continuum import smooth_basis, tukey_weights, upper_envelope

WAVELENGTH = np.linspace(2.0, 2.4, 1200)
ORDER = np.zeros(1200, int)


def test_splines_sum_to_one_and_reproduce_a_cubic():
    basis = smooth_basis(WAVELENGTH, ORDER, 0.02)
    np.testing.assert_allclose(basis.columns.sum(axis=1), 1.0, rtol=1e-12)
    x = np.log(WAVELENGTH / 2.2)
    cubic = 1.0 + 3.0 * x - 20.0 * x**2 + 100.0 * x**3
    coefficients, _ = basis.solve(cubic, np.ones(1200))
    # the bridge weighs 1e-6 of the data
    np.testing.assert_allclose(basis.columns @ coefficients, cubic, atol=1e-6)


def test_residuals_come_from_the_basis():
    rng = np.random.default_rng(8)
    basis = smooth_basis(WAVELENGTH, ORDER, 0.02)
    data, root = rng.normal(size=1200), rng.uniform(0.5, 2.0, 1200)
    factor = rng.uniform(0.2, 1.0, 1200)
    coefficients, q = basis.solve(data, root, factor)
    direct = root * (data - factor * (basis.columns @ coefficients))
    np.testing.assert_allclose(root * data - q @ (q.T @ (root * data)), direct, atol=1e-11)


def test_a_gap_is_bridged_and_an_empty_order_is_zero():
    wavelength = np.concatenate([WAVELENGTH, np.linspace(2.5, 2.6, 300)])
    order = np.repeat([0, 1], [1200, 300])
    basis = smooth_basis(wavelength, order, 0.01)
    used = (order == 0) & ((wavelength < 2.1) | (wavelength > 2.25))
    coefficients, _ = basis.solve(2.0 * wavelength, used.astype(float))
    curve = basis.columns @ coefficients
    np.testing.assert_allclose(curve[:1200], 2.0 * WAVELENGTH, rtol=2e-3)
    np.testing.assert_allclose(curve[1200:], 0.0, atol=1e-6)


def test_number_of_splines_is_shared_by_span():
    wavelength = np.concatenate([np.linspace(2.0, 2.2, 400), np.linspace(2.3, 2.4, 200)])
    basis = smooth_basis(wavelength, np.repeat([0, 1], [400, 200]), 0.02, knots=15)
    first = np.count_nonzero(np.any(basis.columns[:400] > 0, axis=0))
    assert (first, basis.columns.shape[1]) == (10, 15)


def test_tukey():
    weight = tukey_weights(np.array([0.0, 2.0, 10.0, 0.0, 0.0, 4.685]), np.ones(6))
    np.testing.assert_allclose(weight, [1.0, 0.0, 0.0, 0.0, 0.0, 0.0])  # beside a rejected one: suspect
    assert tukey_weights(np.array([0.0, 2.0, 0.0]), np.ones(3))[1] == (1.0 - (2.0 / 4.685) ** 2) ** 2


def test_the_envelope_stays_above_absorption():
    rng = np.random.default_rng(9)
    continuum = 3.0 - WAVELENGTH
    lines = 1.0 - 0.5 * (rng.random(1200) < 0.3)
    curve = upper_envelope(smooth_basis(WAVELENGTH, ORDER, 0.05), continuum * lines, np.ones(1200, bool))
    assert abs(np.mean(curve / continuum) - 1.0) < 0.03
    assert np.mean(continuum * lines / continuum) < 0.87
