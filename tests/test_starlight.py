"""The starlight fit: equal to a QR solve with masks, gaps, orders and additive background."""

import numba
import numpy as np
import pytest
from scipy.interpolate import BSpline

from xcorr.errors import InputError
from xcorr.kernels.reference import project
from xcorr.kernels.threads import limited_threads
from xcorr.starlight import fit_spaxels, mean_weights, nuisance_model, spline_basis

N_WAVE = 900
WAVE = np.linspace(2.0, 2.4, N_WAVE)
ONE_ORDER = np.zeros(N_WAVE, np.int16)
GAP = slice(300, 500)  # longer than the support of a spline at 40 knots


def star(seed=1):
    rng = np.random.default_rng(seed)
    return 1.0 + 0.3 * np.sin(WAVE * 40) + 0.06 * rng.standard_normal(N_WAVE)


def observed(n_spaxel=12, seed=2, gap=True):
    """Spectra whose levels span two decades, 1 % random masks, a gap of 200 channels."""
    rng = np.random.default_rng(seed)
    level = np.exp(rng.normal(0, 1.0, (n_spaxel, 1)))
    model = level * star() * (1.0 + 0.2 * np.sin(15 * WAVE + rng.uniform(0, 6, (n_spaxel, 1))))
    variance = model + 0.3
    data = 100 * model + np.sqrt(variance) * rng.standard_normal(model.shape)
    weights = np.where(rng.random(model.shape) < 0.01, 0.0, 1.0 / variance)
    if gap:
        weights[:, GAP] = 0.0
    return data.astype(np.float32), weights.astype(np.float32)


def nuisance(order=ONE_ORDER, **changes):
    return nuisance_model(WAVE, order, star(), **({"knots": 40} | changes))


def twin(data, weights, model):
    """Residuals by QR in double precision, spaxel by spaxel."""
    dense = model.dense()
    return np.array(
        [
            project(y.astype(float), dense, w.astype(float)) * (w > 0)
            for y, w in zip(data, weights, strict=True)
        ]
    )


def assert_same_residuals(found, expected, weights):
    # the data are of the order of 1e4 sigma^(1/2) and stored in float32 (6e-8): a thousandth of sigma
    assert np.max(np.abs(found - expected) * np.sqrt(weights)) < 1e-3


# ---------------------------------------------------------------- splines


def test_splines_sum_to_one_and_match_a_general_spline():
    basis = spline_basis(WAVE, ONE_ORDER, 20)
    assert basis.n_spline == 20
    assert basis.dense().sum(axis=1) == pytest.approx(1.0, abs=1e-14)
    x = np.log(WAVE)
    knots = np.concatenate([[x[0]] * 3, np.linspace(x[0], x[-1], 18), [x[-1]] * 3])
    coefficients = np.random.default_rng(0).standard_normal(20)
    assert basis.dense() @ coefficients == pytest.approx(BSpline(knots, coefficients, 3)(x), abs=1e-12)


def test_orders_get_splines_of_their_own():
    order = np.repeat([0, 1, 2], N_WAVE // 3).astype(np.int16)
    overlapping = np.concatenate(
        [np.linspace(2.0, 2.2, 300), np.linspace(2.1, 2.3, 300), np.linspace(2.3, 2.32, 300)]
    )
    basis = spline_basis(overlapping, order, 40)
    dense = basis.dense()
    for o in range(3):
        inside = np.any(dense[order == o] != 0, axis=0)
        assert not np.any(dense[order != o][:, inside])  # no spline reaches into another order
        assert inside.sum() >= 4
    assert dense.sum(axis=1) == pytest.approx(1.0, abs=1e-14)


# ---------------------------------------------------------------- the fit


@pytest.mark.parametrize("gap", [False, True])
def test_residuals_equal_the_qr_solve(gap):
    data, weights = observed(gap=gap)
    fit = fit_spaxels(data, weights, nuisance())
    assert np.all(np.isfinite(fit.residual))
    assert np.all(fit.residual[weights == 0] == 0.0)
    assert_same_residuals(fit.residual, twin(data, weights, nuisance()), weights)


def test_the_comparison_notices_another_weighting():
    """Control: an unweighted fit is far outside the tolerance used above."""
    data, weights = observed()
    wrong = twin(data, (weights > 0).astype(float), nuisance())
    right = twin(data, weights, nuisance())
    assert np.max(np.abs(wrong - right) * np.sqrt(weights)) > 0.05


def test_several_orders():
    order = np.repeat([0, 1, 2], N_WAVE // 3).astype(np.int16)
    data, weights = observed(gap=False)
    model = nuisance(order)
    assert_same_residuals(fit_spaxels(data, weights, model).residual, twin(data, weights, model), weights)


@pytest.mark.parametrize("gap", [False, True])
def test_additive_background_and_modes(gap):
    data, weights = observed(gap=gap)
    mode = np.cos(90 * WAVE)[None]
    model = nuisance(background_knots=6, modes=mode)
    assert len(model.extras) == 7
    data = data + (30 + 10 * WAVE + 5 * mode[0]).astype(np.float32)
    fit = fit_spaxels(data, weights, model)
    assert_same_residuals(fit.residual, twin(data, weights, model), weights)
    # control: without them the background stays in the residuals
    left = fit_spaxels(data, weights, nuisance()).residual
    assert np.std(left * np.sqrt(weights)) > 1.5 * np.std(fit.residual * np.sqrt(weights))


def test_background_that_is_starlight_is_refused():
    """s = 1 makes star splines and background splines the same columns."""
    data, weights = observed(gap=False)
    flat = nuisance_model(WAVE, ONE_ORDER, np.ones(N_WAVE), knots=40, background_knots=6)
    with pytest.raises(InputError, match="indistinguishable") as caught:
        fit_spaxels(data, weights, flat)
    assert "background_knots" in caught.value.do
    # a star with lines is told apart
    fit_spaxels(data, weights, nuisance(background_knots=6))


def test_masked_values_do_not_matter():
    """A masked channel is a zero weight: NaN-free whatever lies under it."""
    data, weights = observed()
    wild = np.where(weights == 0, np.float32(1e30), data)
    first, second = fit_spaxels(data, weights, nuisance()), fit_spaxels(wild, weights, nuisance())
    assert np.array_equal(first.residual, second.residual)


def test_a_spaxel_without_weight_is_inert():
    data, weights = observed()
    weights[3] = 0.0
    fit = fit_spaxels(data, weights, nuisance())
    others = np.delete(np.arange(len(data)), 3)
    assert not np.any(fit.residual[3])
    for value in (fit.residual, fit.band, fit.scale):
        assert np.all(np.isfinite(value))
    alone = fit_spaxels(data[others], weights[others], nuisance())
    assert np.array_equal(fit.residual[others], alone.residual)


def test_starlight_is_annihilated_and_flux_scales():
    _, weights = observed()
    model = nuisance()
    coefficients = np.random.default_rng(3).uniform(0.5, 2.0, (len(weights), 40))
    pure = (coefficients @ model.dense().T).astype(np.float32)
    residual = fit_spaxels(pure, weights, model).residual
    # float32 rounding of the input is all that may be left
    assert np.max(np.abs(residual)) < 3e-7 * np.max(pure)
    data, _ = observed()
    once = fit_spaxels(data, weights, model).residual
    thousand = fit_spaxels(np.float32(1024) * data, weights / np.float32(1024**2), model).residual
    # powers of two are exact in the data; the normal equations scale exactly as well
    assert np.array_equal(thousand, np.float32(1024) * once)


def test_residuals_fitted_again_are_the_data_fitted_again():
    """P is linear and annihilates N, so refitting residuals with other weights equals refitting the data."""
    data, weights = observed()
    rng = np.random.default_rng(5)
    other = (weights * rng.uniform(0.5, 2.0, weights.shape)).astype(np.float32)
    first = fit_spaxels(data, weights, nuisance())
    again = fit_spaxels(first.residual, other, nuisance())
    assert_same_residuals(again.residual, twin(data, other, nuisance()), other)


def test_in_place_saves_the_plane_and_changes_nothing():
    data, weights = observed()
    expected = fit_spaxels(data.copy(), weights, nuisance()).residual
    fit = fit_spaxels(data, weights, nuisance(), in_place=True)
    assert fit.residual is data
    assert np.array_equal(fit.residual, expected)


def test_inputs_are_left_alone():
    data, weights = observed()
    copies = data.copy(), weights.copy()
    for array in (data, weights):
        array.flags.writeable = False  # what a process pool hands over
    fit_spaxels(data, weights, nuisance(background_knots=4))
    assert np.array_equal(data, copies[0])
    assert np.array_equal(weights, copies[1])


@pytest.mark.skipif(numba.config.NUMBA_NUM_THREADS < 2, reason="one thread only")
@pytest.mark.parametrize("background", [0, 5])
def test_threads_give_the_same_bits(background):
    data, weights = observed(n_spaxel=40)
    found = []
    for jobs in (1, 2):
        with limited_threads(jobs):
            assert numba.get_num_threads() == jobs
            found.append(fit_spaxels(data, weights, nuisance(background_knots=background)))
    assert np.array_equal(found[0].residual, found[1].residual)
    assert np.array_equal(found[0].band, found[1].band)


def test_threads_are_given_back():
    before = numba.get_num_threads()
    with pytest.raises(ZeroDivisionError), limited_threads(1):
        raise ZeroDivisionError
    assert numba.get_num_threads() == before


def test_mean_weights():
    _, weights = observed()
    shape = weights.astype(float)
    expected = np.mean(shape / shape.mean(axis=1, keepdims=True), axis=0)
    assert mean_weights(weights) == pytest.approx(expected, rel=1e-6)
    weights[2] = 0.0
    assert np.all(np.isfinite(mean_weights(weights)))
    with pytest.raises(InputError, match="usable"):
        mean_weights(np.zeros_like(weights))
