"""Scenes: fluxes, positions, velocities, frames, and the order of transmission and line-spread function."""

import json

import numpy as np
import pytest

from xcorr.errors import CoverageError, SettingsError
from xcorr.simulate import SceneFactory, SceneSettings, demo_scene, simulate_scene
from xcorr.simulate.sources import BRACKETT_GAMMA_UM
from xcorr.units import LIGHT_KM_S

RANGE = (2.25, 2.38)


def spectrum(seed=2, low=2.22, high=2.41):
    wave = np.exp(np.arange(np.log(low), np.log(high), 1 / 200_000))
    rng, flux = np.random.default_rng(seed), 1.0 + 3.0 * (wave - 2.3)
    for centre, depth in zip(rng.uniform(low, high, 150), rng.uniform(0.1, 0.9, 150), strict=True):
        flux *= 1.0 - depth * np.exp(-0.5 * ((wave - centre) / 3e-5) ** 2)
    return wave, flux


def settings(**changes):
    base = {"wavelength_range_um": RANGE, "n_wave": 400, "nx": 16, "ny": 16, "transmission": "synthetic"}
    base |= {"contrast": 2e-3, "companion_offset_xy": (3.3, -2.1)} | changes
    return SceneSettings(**base)


def test_same_seed_same_bits_and_other_seed_other_noise():
    first = simulate_scene(settings(seed=3, bad_fraction_flagged=0.01), spectrum())
    factory = SceneFactory(settings(bad_fraction_flagged=0.01), spectrum())
    factory.draw(seed=8)
    again, other = factory.draw(seed=3), factory.draw(seed=4)
    assert np.array_equal(first.cubes[0].data, again.cubes[0].data)
    assert np.array_equal(first.cubes[0].mask, again.cubes[0].mask)
    assert first.truth == again.truth
    assert not np.array_equal(again.cubes[0].data, other.cubes[0].data)


def test_truth_survives_json():
    truth = simulate_scene(settings(), spectrum()).truth
    assert json.loads(json.dumps(truth))["contrast"] == truth["contrast"] == 2e-3


def test_contrast_is_the_flux_ratio_outside_the_atmosphere():
    scene = simulate_scene(settings(transmission="none", star_electrons=5e5, gain=2.0), spectrum())
    exposure = scene.exposures[0]
    assert exposure.star_spectrum.mean() == pytest.approx(5e5 / 2.0, rel=1e-9)
    assert exposure.companion_spectrum.mean() / exposure.star_spectrum.mean() == pytest.approx(2e-3, rel=1e-9)
    assert exposure.companion_psf.sum(axis=(1, 2)).max() < 1.0


def test_star_over_transmission_has_mean_one():
    """The amplitude's convention: after division by T, to the cross terms of unresolved lines."""
    exposure = simulate_scene(settings(), spectrum()).exposures[0]
    ratio = exposure.star_spectrum / exposure.continuum_spectrum / 1e6
    assert ratio.mean() == pytest.approx(1.0, abs=1e-3)


def test_companion_moves_by_its_velocity_and_the_observatory():
    """A narrow companion line appears at (1+v)/(1+z_B) in the observatory frame and at (1+v) in the other."""
    wave = np.exp(np.arange(np.log(2.22), np.log(2.41), 1 / 200_000))
    line = np.exp(-0.5 * ((wave - 2.3) / 2e-4) ** 2)

    def centroid(**changes):
        base = {"transmission": "none", "companion_velocity_km_s": 90.0, "barycentric_velocity_km_s": (25.0,)}
        scene = simulate_scene(settings(**(base | changes)), (wave, line))
        found = scene.exposures[0].companion_spectrum
        return ((found * scene.cubes[0].wavelength_um).sum() / found.sum() / 2.3 - 1.0) * LIGHT_KM_S

    # Relativistic: 90 km/s is 1 + z = 1 + 90.0135 / c. Centroids of 2.6 channels per FWHM: 0.05 km/s.
    assert centroid() == pytest.approx(
        (1 + 90.0135 / LIGHT_KM_S) / (1 + 25 / LIGHT_KM_S) * LIGHT_KM_S - LIGHT_KM_S, abs=0.05
    )
    assert centroid(frame="barycentric") == pytest.approx(90.0135, abs=0.05)


def test_tellurics_stay_in_the_observatory():
    """A barycentric-frame channel at lambda sees the atmosphere at lambda / (1 + z_B): lines move by +z_B."""

    def continuum(**changes):
        return simulate_scene(settings(**changes)).exposures[0].continuum_spectrum

    still = continuum()
    assert np.array_equal(continuum(barycentric_velocity_km_s=(28.0,)), still)
    moved = continuum(frame="barycentric", barycentric_velocity_km_s=(28.0,))
    shift = 1.0 + 28.0 / LIGHT_KM_S
    right = continuum(wavelength_range_um=(RANGE[0] / shift, RANGE[1] / shift))
    wrong = continuum(wavelength_range_um=(RANGE[0] * shift, RANGE[1] * shift))
    # The lines are sampled on grids of another phase: 1e-3; the wrong sign is a hundred times that.
    assert np.abs(moved - right).max() < 1e-3
    assert np.abs(moved - wrong).max() > 0.05


def test_transmission_before_the_lsf_is_not_the_same_as_after():
    """Control for the order: unresolved lines make the two differ by far more than rounding."""
    exposure = simulate_scene(settings(), spectrum()).exposures[0]
    clear = simulate_scene(settings(transmission="none"), spectrum()).exposures[0]
    after = clear.companion_spectrum * exposure.continuum_spectrum / clear.continuum_spectrum
    difference = exposure.companion_spectrum / after - 1.0
    assert np.abs(difference).max() > 0.02
    # The order does not matter where there is nothing to resolve: a featureless companion.
    wave = np.array(spectrum()[0])
    flat = simulate_scene(settings(), (wave, np.ones(wave.size))).exposures[0]
    assert flat.companion_spectrum == pytest.approx(2e3 * flat.continuum_spectrum, rel=1e-6)


def test_field_rotation_turns_the_companion_and_keeps_its_sky_position():
    from astropy.wcs import WCS

    scene = simulate_scene(
        settings(n_exposures=2, rotation_deg=(0.0, 30.0), dither_xy_pixels=((0.0, 0.0), (0.7, -0.4))),
        spectrum(),
    )
    sky = []
    for cube, exposure in zip(scene.cubes, scene.exposures, strict=True):
        star = exposure.star_xy.mean(axis=0)
        companion = exposure.companion_xy.mean(axis=0)
        assert np.hypot(*(companion - star)) == pytest.approx(np.hypot(3.3, 2.1), abs=1e-9)
        sky.append(WCS(dict(cube.celestial_header)).all_pix2world([companion], 0)[0])
    assert sky[0] == pytest.approx(sky[1], abs=1e-9)
    dx, dy = (scene.exposures[1].companion_xy - scene.exposures[1].star_xy)[0]
    angle = np.rad2deg(np.arctan2(dy, dx))
    assert angle == pytest.approx(np.rad2deg(np.arctan2(-2.1, 3.3)) + 30.0, abs=1e-9)


def test_refraction_moves_star_and_companion_alike():
    exposure = simulate_scene(settings(drift_xy_pixels=(0.8, -0.5)), spectrum()).exposures[0]
    for track in (exposure.star_xy, exposure.companion_xy):
        assert track[-1] - track[0] == pytest.approx([0.8, -0.5], abs=1e-12)


def test_a_star_has_brackett_gamma():
    star = SceneSettings(wavelength_range_um=(2.1, 2.24), n_wave=400, transmission="none", contrast=0.0)
    scene = simulate_scene(star)
    wave, flux = scene.cubes[0].wavelength_um, scene.exposures[0].star_spectrum
    assert (
        abs(wave[np.argmin(flux / np.interp(wave, wave[[0, -1]], flux[[0, -1]]))] - BRACKETT_GAMMA_UM) < 1e-3
    )


def test_m_star_shows_the_co_heads():
    """Drop at the 2-0 head, 2.2935 um (Kleinmann & Hall 1986, from memory; also from Dunham terms)."""
    star = SceneSettings(
        wavelength_range_um=(2.26, 2.34), n_wave=300, transmission="none", contrast=0.0, star="M", nx=4, ny=4
    )  # fmt: skip
    scene = simulate_scene(star)
    wave, flux = scene.cubes[0].wavelength_um, scene.exposures[0].star_spectrum
    before = flux[(wave > 2.288) & (wave < 2.2925)].mean()
    after = flux[(wave > 2.2945) & (wave < 2.2985)].mean()
    assert 0.55 < after / before < 0.9


def test_star_outside_the_field():
    scene = simulate_scene(settings(star_xy=(-7.0, 8.0), companion_offset_xy=(15.0, 0.0)), spectrum())
    image = scene.cubes[0].data.mean(axis=0)
    assert image[8, 0] > 3 * image[8, 15]


def test_demo_scene_is_what_the_quick_start_says():
    scene = demo_scene(seed=2)
    assert len(scene.cubes) == 2
    assert scene.cubes[0].shape == (1200, 20, 20)
    assert scene.truth["ideal_snr"] == pytest.approx(15.0, rel=1e-3)


@pytest.mark.parametrize(
    "changes",
    [
        {"ideal_snr": 5.0},
        {"contrast": None},
        {"grid_resolving_power": 5e4},
        {"star": "G"},
        {"n_exposures": 3, "rotation_deg": (1.0, 2.0)},
        {"resolving_power": 0.0},
        {"background_electrons": 0.0, "read_noise_electrons": 0.0},
        {"wavelength_range_um": (2.4, 2.3)},
    ],
)
def test_wrong_settings_are_named(changes):
    with pytest.raises(SettingsError, match="scene: "):
        settings(**changes)


def test_companion_must_cover_the_range():
    with pytest.raises(CoverageError, match="must cover"):
        simulate_scene(settings(), spectrum(low=2.3))


def test_factory_refuses_what_it_would_not_render():
    with pytest.raises(SettingsError, match="new SceneFactory"):
        SceneFactory(settings(), spectrum()).draw(resolving_power=2000.0)
