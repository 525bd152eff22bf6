"""The star's spectrum: unbiased, blind to masked samples, and how much companion light it may hold."""

import numpy as np
import pytest

from xcorr.errors import InputError
from xcorr.star import choose_spaxels, companion_share, extract_star
from xcorr.starlight import spline_basis

N_WAVE = 500
WAVE = np.linspace(2.0, 2.4, N_WAVE)
ORDER = np.zeros(N_WAVE, np.int16)


def lines():
    rng = np.random.default_rng(1)
    out = 1.2 - 0.4 * (WAVE - 2.0)
    for centre in rng.uniform(2.0, 2.4, 30):
        out *= 1 - 0.6 * np.exp(-0.5 * ((WAVE - centre) / 6e-4) ** 2)
    return out


def spaxels(n=30, seed=2, noise=0.0):
    """Spaxels that share the star's spectrum, each with its own smooth modulation."""
    rng = np.random.default_rng(seed)
    level = rng.uniform(20, 1000, (n, 1))
    smooth = level * (1 + 0.3 * np.sin(12 * WAVE + rng.uniform(0, 6, (n, 1))))
    variance = smooth * lines() + 10
    data = smooth * lines() + noise * np.sqrt(variance) * rng.standard_normal((n, N_WAVE))
    return data.astype(np.float32), (1 / variance).astype(np.float32)


def shape_error(star):
    """Relative error of the lines; smooth factors, which the modulations take up, taken out."""
    ratio, smooth = star / lines(), spline_basis(WAVE, ORDER, 20).dense()
    return ratio / (smooth @ np.linalg.lstsq(smooth, ratio, rcond=None)[0]) - 1


def extract(data, weights, chosen=None):
    chosen = np.arange(len(data)) if chosen is None else chosen
    return extract_star(data, weights, WAVE, ORDER, chosen, knots=20)


def test_noiseless_spectrum_is_recovered():
    data, weights = spaxels()
    star = extract(data, weights)
    assert star.flux.mean() == pytest.approx(1.0)
    assert np.max(np.abs(shape_error(star.flux))) < 1e-5
    assert star.known.all()
    # scale: flux summed over the spaxels that were used
    assert star.scale == pytest.approx(data.sum(axis=0).mean(), rel=0.02)


def test_masked_samples_leave_no_step():
    data, weights = spaxels()
    rng = np.random.default_rng(3)
    weights = np.where(rng.random(weights.shape) < 0.2, np.float32(0), weights)
    windowed = weights.copy()
    windowed[:15, 200:260] = 0.0  # half of the spaxels miss a window
    for own, tolerance in ((weights, 1e-3), (windowed, 4e-3)):  # two iterations; converged they give 6e-4
        wild = np.where(own == 0, np.float32(1e5), data)
        assert np.max(np.abs(shape_error(extract(wild, own).flux))) < tolerance
        # control: the plain mean of the usable samples has the steps
        plain = np.array([data[own[:, i] > 0, i].mean() for i in range(N_WAVE)])
        assert np.max(np.abs(shape_error(plain / plain.mean()))) > 0.1


def test_its_variance_is_that_of_the_scatter():
    errors = []
    for seed in range(20):
        data, weights = spaxels(seed=2, noise=0.0)
        rng = np.random.default_rng(seed)
        noisy = data + (rng.standard_normal(data.shape) / np.sqrt(weights)).astype(np.float32)
        star = extract(noisy, weights)
        errors.append((star.flux - extract(data, weights).flux) / np.sqrt(star.variance))
    # 20 knots of 500 channels are taken out by the modulations
    assert np.std(errors) == pytest.approx(1.0, abs=0.05)


def test_a_channel_without_light_is_unknown():
    data, weights = spaxels()
    weights[:, 77] = 0.0
    data[:, 100:103] = 0.0  # saturated telluric cores
    star = extract(data, weights)
    assert set(np.flatnonzero(~star.known)) == {77, 100, 101, 102}
    assert np.all(np.isfinite(star.flux))
    assert np.all(star.flux >= 0)


def test_choice_of_spaxels():
    white = np.array([[100.0, 50.0, 4.0], [90.0, 6.0, np.nan], [5.0, 80.0, 100.0]])
    usable = np.ones((3, 3))
    usable[0, 0] = 0.5  # a saturated core, flagged
    companion = np.zeros((3, 3), bool)
    companion[2, 2] = True
    assert choose_spaxels(white, usable, companion).tolist() == [1, 3, 4, 6, 7]
    with pytest.raises(InputError, match="no usable spaxel"):
        choose_spaxels(white, np.zeros((3, 3)), companion)
    with pytest.raises(InputError, match="no positive flux"):
        choose_spaxels(-np.abs(white), usable, companion)


def test_companion_share():
    """eps = contrast x (its PSF there) / (star's fraction there)."""
    assert companion_share(0.02, 1e-3, 0.5) == pytest.approx(4e-5)
    assert companion_share(0.02, 1e-3, 0.0) == np.inf
