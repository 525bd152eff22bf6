"""Variances from the model, outliers and the audit of claimed errors."""

import numpy as np
import pytest

from xcorr.noise import (
    audit,
    flag_outliers,
    model_variance,
    robust_sigma,
    running_variance,
    scatter_variance,
)

N_SPAXEL, N_WAVE = 144, 300


def scene(seed=1, level=150.0, read=36.0):
    """Photon and read noise: (model, true variance, noisy data)."""
    rng = np.random.default_rng(seed)
    bright = np.exp(rng.normal(0, 0.7, (N_SPAXEL, 1)))
    model = level * bright * (1 + 0.3 * np.sin(np.arange(N_WAVE) / 9.0))
    variance = model + read
    return model.astype(np.float32), variance, model + np.sqrt(variance) * rng.standard_normal(model.shape)


def noisy_variance(data, read=36.0):
    """What a file that takes the noise from its own counts claims."""
    return np.maximum(data, 1.0).astype(np.float32) + np.float32(read)


def test_model_variance_is_exact_for_a_linear_law():
    model, variance, _ = scene()
    usable = np.random.default_rng(2).random(model.shape) > 0.05
    found = model_variance(variance.astype(np.float32), usable, model)
    assert found.dtype == np.float32
    assert found / variance == pytest.approx(1.0, abs=1e-4)  # float32 planes


def test_model_variance_loses_the_noise_of_the_single_sample():
    model, variance, data = scene()
    claimed = noisy_variance(data)
    found = model_variance(claimed, np.ones(model.shape, bool), model)
    # two numbers a channel from 144 spaxels: sqrt(2 / 144) = 0.12 of the scatter, more at the bright end
    assert np.std(found / variance - 1) < 0.2 * np.std(claimed / variance - 1)
    assert np.mean(found / variance) == pytest.approx(1.0, abs=0.01)
    # the correlation with the noise itself is what biases a null
    noise = (data - model) / np.sqrt(variance)
    assert abs(np.corrcoef(noise.ravel(), (claimed / variance).ravel())[0, 1]) > 0.8  # control
    # a sample is one of 144 in its channel: sqrt(2 / 144)
    assert abs(np.corrcoef(noise.ravel(), (found / variance).ravel())[0, 1]) < 0.15


def null_of_amplitudes(weights_of, seed, template):
    """Mean S/N of a template with positive mean, fitted to noise alone in every spaxel."""
    model, variance, data = scene(seed)
    weights = weights_of(model, variance, data)
    num = ((data - model) * weights) @ template
    info = weights @ template**2
    return np.mean(num / np.sqrt(info))


def test_weights_from_noisy_data_bias_the_null_and_model_weights_do_not():
    """Low samples get more weight: at ~150 electrons the mean S/N of a null drops by a good part of a sigma.

    Without starlight fit and for a positive template: sqrt(n) times the mean of noise / sqrt(counts) over weights
    that fall as the noise rises, a whole sigma for 300 channels.
    """
    template = 1.0 + 0.5 * np.sin(np.arange(N_WAVE) / 3.0)
    ways = {
        "true": lambda model, variance, data: 1 / variance,
        "model": lambda model, variance, data: (
            1 / model_variance(noisy_variance(data), np.ones(model.shape, bool), model).astype(float)
        ),
        "noisy": lambda model, variance, data: 1 / noisy_variance(data).astype(float),
    }
    means = {
        name: np.mean([null_of_amplitudes(way, s, template) for s in range(8)]) for name, way in ways.items()
    }
    error = 1 / np.sqrt(8 * N_SPAXEL)
    assert abs(means["true"]) < 4 * error
    assert abs(means["model"]) < 4 * error
    assert means["noisy"] < -0.5


def test_variance_from_scatter_where_a_file_gives_none():
    model, variance, data = scene(level=400.0)
    residual = (data - model).astype(np.float32)
    found = scatter_variance(residual, np.ones(model.shape, bool), model)
    ratio = found / variance
    # a line fitted to 144 squares in each channel: relative error sqrt(2 / 144) = 0.12 and more at the ends
    assert np.median(ratio) == pytest.approx(1.0, abs=0.05)
    assert np.percentile(np.abs(ratio - 1), 90) < 0.5
    few = scatter_variance(residual[:3], np.ones((3, N_WAVE), bool), model[:3])
    assert np.median(few / variance[:3]) == pytest.approx(1.0, abs=0.25)


def test_running_variance_follows_a_change_of_noise_and_survives_masks():
    rng = np.random.default_rng(4)
    sigma = np.where(np.arange(2000) < 1000, 1.0, 3.0)
    residual = sigma * rng.standard_normal(2000)
    usable = rng.random(2000) > 0.1
    usable[400:480] = False  # longer than the window
    residual[~usable] = 1e6
    found = running_variance(residual, usable, 101)
    # medians of 90 samples, smoothed: 10 per cent each
    assert np.mean(found[100:380]) == pytest.approx(1.0, abs=0.2)
    assert np.mean(found[1150:1900]) == pytest.approx(9.0, rel=0.15)
    assert np.all(np.isfinite(found))
    assert np.all(found > 0)


def test_gaussian_noise_is_not_flagged_and_wild_samples_are():
    rng = np.random.default_rng(5)
    residual = rng.standard_normal((50, 1000)).astype(np.float32)
    weights = np.ones_like(residual)
    outlier, scale = flag_outliers(residual, weights)
    assert not outlier.any()  # 50,000 samples, 2e-9 each
    assert scale == pytest.approx(1.0, abs=0.15)  # error of a MAD of 1000: 0.037
    residual[3, 10], residual[7, 20] = 12.0, -9.0
    weights[9, 30], residual[9, 30] = 0.0, 100.0
    outlier, _ = flag_outliers(residual, weights)
    assert sorted(zip(*(i.tolist() for i in np.nonzero(outlier)), strict=True)) == [(3, 10), (7, 20)]
    # errors claimed three times too small are the scale's business, not the outliers'
    outlier, scale = flag_outliers((3 * rng.standard_normal((50, 1000))).astype(np.float32), weights)
    assert not outlier.any()
    assert scale == pytest.approx(3.0, abs=0.5)


def test_audit_measures_scale_and_neighbour_correlations():
    rng = np.random.default_rng(6)
    white = rng.standard_normal((14, 15, 402))
    # moving sums: correlation a / (1 + a^2) to the next channel, spaxels likewise
    a, b = 0.4, 0.3
    noise = white[..., 1:] + a * white[..., :-1]
    noise = noise[1:] + b * noise[:-1]
    noise /= np.sqrt((1 + a * a) * (1 + b * b))
    flat = (2 * noise).reshape(13 * 15, -1).astype(np.float32)
    weights = np.ones_like(flat)
    found = audit(flat, weights, (13, 15), flag_outliers(flat, weights)[1], 0.01)
    assert found.scatter_over_claimed == pytest.approx(2.0, rel=0.03)
    assert found.neighbour_channel == pytest.approx(a / (1 + a * a), abs=0.02)
    # half of the neighbours lie along x, where there is none
    assert found.neighbour_spaxel == pytest.approx(0.5 * b / (1 + b * b), abs=0.02)
    assert found.flagged_fraction == 0.01
    plain = rng.standard_normal(flat.shape).astype(np.float32)
    alone = audit(plain, weights, (13, 15), np.ones(len(plain)), 0.0)
    assert (alone.neighbour_channel, alone.neighbour_spaxel) == (
        pytest.approx(0, abs=0.02),
        pytest.approx(0, abs=0.02),
    )


def test_robust_sigma():
    rng = np.random.default_rng(7)
    values = rng.standard_normal(20_000)
    values[:50] = 1e6
    values[50] = np.nan
    assert robust_sigma(values) == pytest.approx(1.0, abs=0.03)
