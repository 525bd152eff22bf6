"""One exposure made ready: star, throughput, weights and template columns, against the scene's noiseless parts."""

from dataclasses import replace

import numpy as np
import pytest

from tests.small_scenes import RANGE, chosen, cubes, scene, templates
from xcorr.columns import template_columns
from xcorr.errors import CoverageError, InputError
from xcorr.exposure import Scenery, StarlightSettings, excluded_spaxels, prepare
from xcorr.psf import moffat_of_width
from xcorr.star import StarSpectrum
from xcorr.throughput import planck_shape

DRAW = (("contrast", 3e-3), ("companion_velocity_km_s", 40.0))


def places(one, **changes):
    parts = one.exposures[0]
    return Scenery(tuple(parts.companion_xy.mean(axis=0)), tuple(parts.star_xy.mean(axis=0)), **changes)


def prepared(one, cube=None, scenery=None, **changes):
    cube = cubes(one)[0] if cube is None else cube
    return prepare(cube, scenery or places(one), StarlightSettings(**changes))


def codes(exposure):
    return {note.code for note in exposure.notes}


@pytest.fixture(scope="module")
def plain():
    return scene(draw=DRAW)


@pytest.fixture(scope="module")
def exposure(plain):
    return prepared(plain)


# ---------------------------------------------------------------- star and throughput


def test_planck_shape():
    """B(1000 K) at 2.2 and 4.0 um: 3343.50220 and 3277.66352 W m-2 sr-1 um-1, from the formula."""
    shape = planck_shape(np.array([2.2, 4.0]), 1000.0)
    assert shape.mean() == pytest.approx(1.0)
    assert shape[0] / shape[1] == pytest.approx(3343.50220 / 3277.66352, rel=1e-8)


def test_the_star_is_that_of_the_scene():
    one = scene(star="M", draw=DRAW)
    exposure = prepared(one)
    truth = one.exposures[0].star_spectrum
    ratio = exposure.star.flux / (truth / truth.mean())
    smooth = np.poly1d(np.polyfit(np.arange(600) / 600, ratio, 12))(np.arange(600) / 600)
    # photon noise of 1e6 electrons in the reference spaxels: 1.2e-3
    assert np.std(ratio / smooth - 1) < 2e-3
    normalised = (ratio / smooth - 1) * exposure.star.flux / np.sqrt(exposure.star.variance)
    assert np.std(normalised) == pytest.approx(1.0, abs=0.2)


@pytest.mark.parametrize("transmission", ["none", "shipped"])
def test_template_columns_are_the_companion_in_data_units(transmission):
    """Contrast times the column is the companion's spectrum at the detector, up to one factor.

    The factor is the star's flux under the fitted profile over its true one; the companion's flux is counted
    with the same profile, so that the amplitude is free of it (test_pipeline).
    """
    one = scene(
        draw=DRAW, transmission=transmission, barycentric_velocity_km_s=(20.0,), star_temperature_k=6000.0
    )
    exposure = prepared(one, star_t_eff=6000.0)
    assert exposure.amplitude_in_star_units
    columns = template_columns(exposure, chosen(("full",)), np.array([40.0]))
    truth = one.exposures[0].companion_spectrum
    ratio = 3e-3 * columns.columns[0, 0] / truth
    assert 0.7 < np.median(ratio) < 1.3
    # line by line: noise of the star's continuum, and the fitted transmission
    assert np.std(ratio / np.median(ratio)) < (0.01 if transmission == "none" else 0.02)
    # control: the lines are far deeper than that, and 60 km/s off they do not fit
    wrong = template_columns(exposure, chosen(("full",)), np.array([100.0])).columns[0, 0]
    assert np.std(3e-3 * wrong / truth) > 0.05


def test_barycentric_channels_get_the_template_unshifted_and_the_atmosphere_moved():
    one = scene(draw=DRAW, transmission="shipped", frame="barycentric", barycentric_velocity_km_s=(25.0,))
    exposure = prepared(one)
    assert exposure.template_frame_km_s == 0.0
    column = template_columns(exposure, chosen(("full",)), np.array([40.0])).columns[0, 0]
    ratio = column / one.exposures[0].companion_spectrum
    assert np.std(ratio / np.median(ratio)) < 0.02


def test_frames():
    one = scene(draw=DRAW, barycentric_velocity_km_s=(25.0,))
    cube = cubes(one)[0]
    assert prepared(one).template_frame_km_s == 25.0
    helio = prepared(one, cube.with_changes(frame="heliocentric"))
    assert (helio.template_frame_km_s, "frame-heliocentric" in codes(helio)) == (0.0, True)
    unknown = prepared(one, cube.with_changes(barycentric_velocity_km_s=None))
    assert (unknown.template_frame_km_s, "barycentric-unknown" in codes(unknown)) == (0.0, True)


def test_templates_are_normalised_by_their_reference(exposure):
    """The scale of a file does not matter; a contribution counts in units of its full spectrum."""
    full, a = chosen(("full", "A"))
    velocity = np.array([0.0, 40.0])
    one = template_columns(exposure, (full, a), velocity).columns
    scaled = (
        replace(full, flux=7.5 * full.flux, reference_flux=None),
        replace(a, flux=7.5 * a.flux, reference_flux=7.5 * a.reference_flux),
    )
    assert template_columns(exposure, scaled, velocity).columns == pytest.approx(one, rel=1e-9, abs=1e-12)
    # full - full without A is what A contributes: the columns subtract as the spectra do
    rest = replace(full, flux=full.flux - a.flux, reference_flux=full.flux)
    assert one[0] - template_columns(exposure, (rest,), velocity).columns[0] == pytest.approx(
        one[1], abs=1e-9 * np.abs(one).max()
    )
    usable = exposure.mean_weights > 0
    assert (one[0, 0] / exposure.throughput)[usable].mean() == pytest.approx(1.0, abs=1e-9)


def test_a_template_of_finite_resolution_is_not_broadened_twice(plain, exposure):
    """A template that the instrument's LSF was applied to once gives the column of the line-by-line one."""
    from xcorr.spectral import convolve_lsf

    full = templates()["full"]
    blurred = replace(
        full,
        flux=convolve_lsf(full.wavelength_um, full.flux, 8000.0),
        reference_flux=None,
        resolving_power=8000.0,
    )
    velocity = np.array([40.0])
    sharp = template_columns(exposure, (full,), velocity).columns[0, 0]
    found = template_columns(exposure, (blurred,), velocity).columns[0, 0]
    # 1 / R^2 add up exactly for Gaussians; without tellurics the order does not matter
    assert np.std(found / sharp) < 1e-3
    # control: taken as unresolved it is too smooth
    twice = template_columns(exposure, (replace(blurred, resolving_power=None),), velocity).columns[0, 0]
    assert np.std(twice / sharp) > 5e-3


def test_uncovered_channels_are_zero_and_counted(exposure):
    full = templates()["full"]
    half = replace(full, covered=full.wavelength_um > 2.30)
    columns = template_columns(exposure, (full, half), np.array([-300.0, 300.0]))
    assert columns.covered[0].all()
    edge = 2.30 * (1 + 300 / 299792.458)
    inside = exposure.wavelength_um > edge + 0.002
    assert columns.covered[1][inside].all()
    assert not columns.covered[1][exposure.wavelength_um < edge].any()
    assert not columns.columns[1][:, ~columns.covered[1]].any()
    with pytest.raises(CoverageError, match="covers too few channels"):
        template_columns(exposure, (replace(full, covered=full.wavelength_um > 2.33),), np.array([0.0]))


# ---------------------------------------------------------------- weights


def test_weights_are_those_of_the_true_variance(plain, exposure):
    truth = plain.exposures[0].variance.reshape(600, -1).T
    ratio = exposure.weights * truth
    usable = exposure.weights > 0
    # two numbers a channel from 256 spaxels, and the companion's photons
    assert np.median(ratio[usable]) == pytest.approx(1.0, abs=0.02)
    assert np.std(ratio[usable]) < 0.05


def test_weights_do_not_know_the_noise():
    """Error planes computed from the noisy counts: model variances lose the correlation, the control has it."""
    one = scene(error_plane="noisy", draw=(("star_electrons", 3e4),))
    parts, cube = one.exposures[0], one.cubes[0]
    noise = (cube.data - parts.star) / np.sqrt(parts.variance)
    relative = cube.variance / parts.variance
    # covariance of noise and relative variance: what a weighted mean is biased by
    control = np.cov(noise.ravel(), relative.ravel())[0, 1]
    weights = prepared(one).weights.T.reshape(cube.shape)
    usable = weights > 0
    found = np.cov(noise[usable], 1 / (weights[usable] * parts.variance[usable]))[0, 1]
    assert control > 0.02
    # two numbers a channel from 256 spaxels of very unequal weight leave a share of it: 0.07 measured
    assert abs(found) < 0.1 * control


def test_without_errors_the_scatter_gives_the_weights():
    one = scene(error_plane="none", draw=DRAW)
    exposure = prepared(one)
    truth = one.exposures[0].variance.reshape(600, -1).T
    ratio = (exposure.weights * truth)[exposure.weights > 0]
    assert np.median(ratio) == pytest.approx(1.0, abs=0.1)


def test_wild_samples_are_taken_out():
    one = scene(draw=(*DRAW, ("bad_fraction_flagged", 0.01), ("bad_fraction_unflagged", 0.002)))
    exposure = prepared(one)
    parts = one.exposures[0]
    weights = exposure.weights.T.reshape(one.cubes[0].shape)
    assert not weights[parts.flagged].any()
    wild = parts.bad & ~parts.flagged
    # wild values lie 20 to 200 sigma off
    assert np.mean(weights[wild] > 0) < 0.02
    # they bend the fit around them, and good neighbours go with them: 0.8 per cent measured, 0.4 per cent of S/N
    assert np.mean(weights[~parts.bad] == 0) < 0.012
    clean = prepared(one, cubes(scene(draw=DRAW))[0])
    assert clean.audit.flagged_fraction < 1e-5  # control: nothing to take out


def test_residuals_are_noise(plain, exposure):
    """Away from the companion nothing but white noise of the claimed size is left."""
    rows, columns = np.indices(exposure.shape)
    x, y = plain.exposures[0].companion_xy.mean(axis=0)
    far = (np.hypot(columns - x, rows - y) > 4).ravel()
    normalised = (exposure.residual * np.sqrt(exposure.weights))[far]
    # 40 of 600 degrees of freedom are fitted
    assert np.std(normalised) == pytest.approx(np.sqrt(560 / 600), abs=0.015)
    assert np.mean(normalised) == pytest.approx(0.0, abs=0.01)
    assert exposure.audit.scatter_over_claimed == pytest.approx(np.sqrt(560 / 600), abs=0.03)


def test_restricting_channels_fits_the_starlight_again(exposure):
    covered = np.arange(600) > 250
    part = exposure.restricted(covered)
    assert not part.weights[:, ~covered].any()
    assert not part.mean_weights[~covered].any()
    again = prepared_fit(exposure, covered)
    assert part.residual == pytest.approx(again, abs=1e-3 * float(np.abs(exposure.residual).max()))
    assert exposure.restricted(np.ones(600, bool)) is exposure


def prepared_fit(exposure, covered):
    from xcorr.kernels.reference import project

    weights = np.where(covered, exposure.weights, 0).astype(float)
    dense = exposure.nuisance.dense()
    return np.array(
        [
            project(y.astype(float), dense, w) * (w > 0)
            for y, w in zip(exposure.residual, weights, strict=True)
        ]
    )


# ---------------------------------------------------------------- states of the input


def test_resolving_power_is_asked_for(plain):
    cube = cubes(plain)[0]
    with pytest.raises(InputError, match="resolving power") as caught:
        prepared(plain, cube.with_changes(resolving_power=None))
    assert "[[exposure]].resolving_power" in caught.value.do
    varied = np.full(cube.shape, 4000.0)
    varied[:, :4] = 3000.0
    assert prepared(plain, cube.with_changes(resolving_power=varied)).resolution_km_s == pytest.approx(
        299792.458 / 4000
    )


def test_starlight_already_removed(plain):
    cube = cubes(plain)[0]
    parts = plain.exposures[0]
    removed = cube.with_changes(data=cube.data - parts.star, starlight_removed=True)
    exposure = prepared(plain, removed)
    assert "psf-assumed" in codes(exposure)
    assert np.all(exposure.star.flux == 1.0)
    assert not exposure.amplitude_in_star_units
    given = prepared(plain, removed, places(plain, psf=moffat_of_width(2.4, cube.wavelength_um)))
    assert "psf-assumed" not in codes(given)


def test_a_star_of_the_users_own(plain):
    truth = plain.exposures[0].star_spectrum
    own = StarSpectrum(truth / truth.mean(), np.full(600, 1e-8), float(truth.mean()), np.zeros(0, np.int64))
    exposure = prepared(plain, reference=own)
    assert exposure.star is own
    difference = (exposure.residual - prepared(plain).residual) * np.sqrt(exposure.weights)
    # the star measured in the field carries noise of its own: less than a spaxel's
    assert np.std(difference) < 0.3


def test_no_transmission_is_shipped_for_longer_waves(plain):
    cube = cubes(plain)[0]
    longer = cube.with_changes(wavelength_um=cube.wavelength_um + 1.5, telluric_corrected=False)
    exposure = prepared(plain, longer)
    assert "transmission-fallback" in codes(exposure)
    assert exposure.transmission_hi is None
    assert np.all(np.isfinite(exposure.transmission))
    # the star of this scene has no lines: the observed transmission is one up to its noise
    assert np.std(exposure.transmission) < 0.01


def test_declared_free_of_tellurics(plain):
    exposure = prepared(plain)
    assert exposure.telluric is None
    assert np.all(exposure.transmission == 1.0)


def test_several_orders_equal_one(plain):
    """A cube cut into two orders that do not overlap: the same weights, columns that fit each other."""
    cube = cubes(plain)[0]
    two = cube.with_changes(order=np.repeat([0, 1], 300).astype(np.int16))
    exposure, whole = prepared(plain, two), prepared(plain)
    columns = template_columns(exposure, chosen(("full",)), np.array([40.0])).columns[0, 0]
    expected = template_columns(whole, chosen(("full",)), np.array([40.0])).columns[0, 0]
    inner = np.abs(np.arange(600) - 299.5) > 10
    assert np.std((columns / expected)[inner]) < 0.01
    assert exposure.nuisance.splines.n_spline == 40


# ---------------------------------------------------------------- the star's place


def test_excluded_spaxels():
    out = excluded_spaxels((9, 9), Scenery(companion_xy=(2.0, 3.0), sources=((7.0, 7.0, 1.0),)), 2.0)
    rows, columns = np.indices((9, 9))
    expected = (np.hypot(columns - 2, rows - 3) <= 3.0) | (np.hypot(columns - 7, rows - 7) <= 1.0)
    assert np.array_equal(out, expected)


@pytest.mark.parametrize("offset", [(4.0, -3.0), (1.2, -0.5)])
def test_the_star_is_found_beside_the_companion_and_under_it(offset):
    one = scene(draw=DRAW, companion_offset_xy=offset)
    parts = one.exposures[0]
    found = prepared(one, scenery=Scenery(tuple(parts.companion_xy.mean(axis=0))))
    assert found.star_xy == pytest.approx(parts.star_xy.mean(axis=0), abs=0.05)


def test_a_bright_companion_does_not_pose_as_the_star(plain):
    """The star's core masked, the companion the brightest thing: its given place keeps it from being the star."""
    cube, parts = cubes(plain)[0], plain.exposures[0]
    rows, columns = np.indices(cube.shape[1:])
    x, y = parts.companion_xy.mean(axis=0)
    lamp = 3e5 * np.exp(-np.square(np.hypot(columns - x, rows - y)))
    bright = cube.with_changes(data=(cube.data + lamp).astype(np.float32))
    found = prepared(plain, bright, Scenery((float(x), float(y))))
    assert found.star_xy == pytest.approx(parts.star_xy.mean(axis=0), abs=0.1)


def test_range_of_the_scenes():
    assert cubes(scene(draw=DRAW))[0].wavelength_um[[0, -1]] == pytest.approx(RANGE)
