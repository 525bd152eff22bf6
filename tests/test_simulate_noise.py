"""Noise of the simulator: its variance, correlations and the inverse used by the information limit."""

import numpy as np
import pytest

from xcorr.simulate import Correlation, SceneFactory, SceneSettings
from xcorr.simulate.detector import photon_noise

SMALL = SceneSettings(
    wavelength_range_um=(2.1, 2.2), n_wave=400, nx=16, ny=14, transmission="synthetic", contrast=0.0
)  # fmt: skip
CORRELATED = Correlation(rho_channel=0.35, slow_fraction=0.3, slow_scale_channels=8.0, rho_y=0.29, rho_x=0.12)


def unit_noise(scene):
    exposure = scene.exposures[0]
    return (scene.cubes[0].data - exposure.star) / np.sqrt(exposure.variance)


def test_scatter_matches_the_variance_plane():
    """Pull of width 1 in the mean and in every decile of brightness."""
    scene = SceneFactory(SMALL).draw(seed=5)
    cube = scene.cubes[0]
    pull = unit_noise(scene)
    assert np.array_equal(cube.variance, scene.exposures[0].variance)
    n = pull.size
    assert abs(pull.mean()) < 4.0 / np.sqrt(n)
    assert abs(pull.var() - 1.0) < 4.0 * np.sqrt(2.0 / n)
    brightness = np.argsort(cube.variance, axis=None).reshape(10, -1)
    for part in brightness:
        assert abs(pull.ravel()[part].var() - 1.0) < 4.5 * np.sqrt(2.0 / part.size)


def test_variance_is_photons_background_and_read_noise():
    settings = {"gain": 2.5, "background_electrons": 40.0, "read_noise_electrons": 7.0}
    exposure = SceneFactory(SMALL).draw(**settings).exposures[0]
    electrons = exposure.star.astype(float) * 2.5
    assert np.allclose(exposure.variance, (electrons + 40.0 + 49.0) / 2.5**2, rtol=1e-5)


def test_poisson_noise_has_the_same_variance_and_is_skewed():
    rng = np.random.default_rng(3)
    electrons = np.full((200, 20, 20), 9.0, np.float32)
    noise = photon_noise(rng, electrons, 1.0)
    assert abs(noise.var() - 1.0) < 0.02
    # Third moment of Poisson counts is the mean: 9 / 10**1.5 = 0.285; Monte-Carlo error 0.01.
    assert (noise**3).mean() == pytest.approx(9.0 / 10.0**1.5, abs=0.04)


@pytest.mark.parametrize(
    "correlation", [Correlation(rho_channel=0.35), CORRELATED, Correlation(rho_y=0.29, rho_x=0.12)]
)
def test_correlations_are_as_asked(correlation):
    field = correlation.draw(np.random.default_rng(8), (1600, 40, 40)).astype(float)
    n_effective = field.size * (1.0 - correlation.rho_slow if correlation.slow_fraction else 0.3)
    error = 4.0 / np.sqrt(n_effective)
    assert abs(field.var() - 1.0) < np.sqrt(2.0) * error
    for lag in (1, 2, 5, 12):
        found = (field[lag:] * field[:-lag]).mean()
        assert found == pytest.approx(float(correlation.along_wave(np.array(lag))), abs=error)
    assert (field[:, 1:] * field[:, :-1]).mean() == pytest.approx(correlation.rho_y, abs=error)
    assert (field[:, :, 1:] * field[:, :, :-1]).mean() == pytest.approx(correlation.rho_x, abs=error)
    diagonal = (field[:, 1:, 1:] * field[:, :-1, :-1]).mean()
    assert diagonal == pytest.approx(correlation.rho_y * correlation.rho_x, abs=error)


@pytest.mark.parametrize("correlation", [Correlation(rho_channel=0.35), CORRELATED, Correlation()])
def test_banded_inverse_equals_the_dense_one(correlation):
    n = 70
    dense = correlation.along_wave(np.subtract.outer(np.arange(n), np.arange(n)).astype(float))
    values = np.random.default_rng(1).standard_normal((n, 3))
    assert correlation.solve_wave(values) == pytest.approx(np.linalg.solve(dense, values), abs=1e-11)


def test_noisy_error_plane_is_biased_by_the_noise():
    """The trap of weights from the data: with them, a negative excursion gets the larger weight."""
    truth = SceneFactory(SMALL).draw(seed=5)
    noisy = SceneFactory(SMALL).draw(seed=5, error_plane="noisy")
    assert np.array_equal(truth.cubes[0].data, noisy.cubes[0].data)
    pull = unit_noise(noisy)
    assert (noisy.cubes[0].variance - truth.cubes[0].variance)[pull > 1].min() > 0
    assert SceneFactory(SMALL).draw(error_plane="none").cubes[0].variance is None


def test_bad_samples_are_flagged_or_wild():
    changes = {"bad_fraction_flagged": 0.02, "bad_fraction_unflagged": 0.01}
    scene = SceneFactory(SMALL).draw(**changes)
    cube, exposure = scene.cubes[0], scene.exposures[0]
    n = cube.mask.size
    assert cube.mask.mean() == pytest.approx(0.02, abs=4 * np.sqrt(0.02 / n))
    hidden = exposure.bad & ~cube.mask
    assert hidden.mean() == pytest.approx(0.01, abs=4 * np.sqrt(0.01 / n))
    assert np.all(cube.data[cube.mask] == 0.0)
    assert np.all(cube.variance[cube.mask] == 1.0)
    assert np.all(unit_noise(scene)[hidden] > 10.0)
    assert np.abs(unit_noise(scene)[~exposure.bad]).max() < 6.0


def test_saturated_core_clips_and_is_flagged():
    level = 5000.0
    flagged = SceneFactory(SMALL).draw(saturation_electrons=level)
    assert flagged.cubes[0].mask.any()
    assert flagged.cubes[0].data.max() <= level
    hidden = SceneFactory(SMALL).draw(saturation_electrons=level, saturation_flagged=False)
    assert not hidden.cubes[0].mask.any()
    assert np.all(hidden.cubes[0].data[flagged.cubes[0].mask] > 0.9 * level)
    assert np.array_equal(hidden.exposures[0].bad, flagged.cubes[0].mask)
