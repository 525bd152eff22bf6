"""Sums of a whole exposure: against a dense joint fit in double precision, and what they must not respond to."""

from dataclasses import replace

import numpy as np
import pytest

from tests.small_scenes import chosen, cubes, scene
from xcorr.columns import template_columns
from xcorr.engine import ExposureEngine, add
from xcorr.exposure import Scenery, StarlightSettings, prepare
from xcorr.kernels import reference
from xcorr.kernels.threads import limited_threads

VELOCITY = np.arange(-600.0, 601.0, 20.0)
AT = (0, 31, 32, 35)  # on and between the nodes of the splined correction; the companion is at 40 km/s
COMPANION = (("contrast", 4e-3), ("companion_velocity_km_s", 40.0), ("bad_fraction_flagged", 0.01))


def noiseless(one):
    """The first exposure without noise or flagged samples, with its true variances."""
    parts = one.exposures[0]
    nothing = np.zeros(parts.variance.shape, bool)
    return cubes(one)[0].with_changes(
        data=(parts.star + parts.companion).astype(np.float32), variance=parts.variance.copy(), mask=nothing
    )


def exposure_of(one, cube=None, **changes):
    parts = one.exposures[0]
    places = Scenery(tuple(parts.companion_xy.mean(axis=0)), tuple(parts.star_xy.mean(axis=0)))
    return prepare(cubes(one)[0] if cube is None else cube, places, StarlightSettings(**changes))


def engine_of(exposure, templates=None, velocity=VELOCITY):
    templates = chosen(("full", "A", "B")) if templates is None else templates
    return ExposureEngine(exposure, template_columns(exposure, templates, velocity))


def companion_of(one):
    return one.exposures[0].companion_xy.mean(axis=0)[None]


@pytest.fixture(scope="module")
def cool():
    """An M star, whose lines tell a smooth companion from starlight, and a companion of A and B."""
    return scene(star="M", draw=COMPANION)


@pytest.fixture(scope="module")
def engine(cool):
    return engine_of(exposure_of(cool))


def dense(engine, one, columns, weights=None):
    """(right, matrix) of columns (n, n_wave) and the companion continuum, the latter eliminated; plain algebra."""
    exposure = engine.exposure
    stamps = engine.stamps(companion_of(one))
    inside = stamps.spaxels[0] >= 0
    rows = stamps.spaxels[0][inside]
    low = stamps.profiles[0][inside][:, stamps.node].astype(float)
    high = stamps.profiles[0][inside][:, stamps.node + 1]
    profile = low + stamps.fraction * (high - low)
    data = one.cubes[0].data.reshape(one.cubes[0].shape[0], -1).T[rows]
    weights = (exposure.weights if weights is None else weights)[rows].astype(float)
    # orthonormal, so that the elimination below keeps its digits
    basis = np.linalg.qr(engine.columns.continuum.T / exposure.throughput[:, None])[0].T * exposure.throughput
    right, matrix = reference.joint_filter(
        data, weights, exposure.nuisance.dense(), profile, np.vstack([columns, basis])
    )
    n = len(columns)
    # splines without a usable channel have no information
    value, vector = np.linalg.eigh(matrix[n:, n:])
    vector = vector[:, value > 1e-12 * value[-1]]
    inverse = (vector / value[value > 1e-12 * value[-1]]) @ vector.T
    taken = matrix[:n, n:] @ inverse
    return right[:n] - taken @ right[n:], matrix[:n, :n] - taken @ matrix[n:, :n]


# ---------------------------------------------------------------- against dense algebra


def test_sums_equal_a_dense_joint_fit(engine, cool):
    """Chromatic PSF at a sub-pixel place, masks, own starlight in each spaxel, shared companion continuum.

    Splined corrections and the mean square of the profile: 1e-3 of info; S/N to 0.02 of 30.
    """
    sums = engine.sums(companion_of(cool))
    conditional = sums.conditional()[0]
    for v in AT:
        right, matrix = dense(engine, cool, engine.columns.columns[:, v])
        info = np.diag(matrix)
        assert sums.info[0, :, v] / info == pytest.approx(1.0, abs=1e-3)
        assert sums.snr()[0, :, v] == pytest.approx(right / np.sqrt(info), abs=0.02)
        # A and B are rivals; the spectrum of everything stands alone
        covariance = np.linalg.inv(matrix[1:, 1:])
        joint = covariance @ right[1:] / np.sqrt(np.diag(covariance))
        assert conditional[1:, v] == pytest.approx(joint, abs=0.02)
        assert conditional[0, v] == pytest.approx(right[0] / np.sqrt(info[0]), abs=0.02)


def test_joint_information_equals_the_dense_one(engine, cool):
    sums = engine.sums(companion_of(cool))
    full = sums.joint.matrix()[0]
    for v in AT:
        _, matrix = dense(engine, cool, engine.columns.columns[:, v])
        scale = np.sqrt(np.diag(matrix))
        assert np.max(np.abs(full[v] - matrix) / np.outer(scale, scale)) < 1e-3


def test_gram_is_the_information_between_velocities(engine, cool):
    gram = engine.gram(companion_of(cool))
    sums = engine.sums(companion_of(cool))
    for m in range(3):
        # the same numbers by the route without splined corrections
        assert np.diagonal(gram[m, :, m]) == pytest.approx(sums.info[0, m], rel=1e-3)
        assert gram[m, :, m] == pytest.approx(gram[m, :, m].T, rel=1e-4, abs=1e-4 * float(gram[m].max()))
    columns = np.concatenate([engine.columns.columns[1, [30, 33]], engine.columns.columns[2, [30, 40]]])
    _, matrix = dense(engine, cool, columns)
    index = [(1, 30), (1, 33), (2, 30), (2, 40)]
    found = np.array([[gram[a][b][c][d] for c, d in index] for a, b in index])
    scale = np.sqrt(np.diag(matrix))
    assert np.max(np.abs(found - matrix) / np.outer(scale, scale)) < 1e-3


def test_gram_predicts_how_a_signal_spreads_over_velocity(cool):
    """The noiseless response is amplitude x gram column: how the fitted signal is taken out of its own null."""
    engine = engine_of(exposure_of(cool, noiseless(cool)), chosen(("full",)))
    sums, gram = engine.sums(companion_of(cool)), engine.gram(companion_of(cool))[0, :, 0]
    at = 32
    expected = sums.amplitude()[0, 0, at] * gram[:, at]
    # PSF fitted, not known: a few per cent of the peak
    assert np.max(np.abs(sums.num[0, 0] - expected)) < 0.03 * sums.num[0, 0, at]


# ---------------------------------------------------------------- templates of different coverage


def test_coverage_groups_are_kept_apart(cool):
    exposure = exposure_of(cool)
    full, a, b = chosen(("full", "A", "B"))
    short = replace(b, covered=b.wavelength_um > 2.29)
    engine = engine_of(exposure, (full, a, short))
    assert len(engine.solo) == 2
    sums, alone = engine.sums(companion_of(cool)), engine_of(exposure, (full, a)).sums(companion_of(cool))
    # a template of less coverage takes nothing from the others
    assert sums.num[0, :2] == pytest.approx(alone.num[0], rel=1e-4, abs=1e-3 * np.abs(alone.num).max())
    assert sums.info[0, :2] == pytest.approx(alone.info[0], rel=1e-5)
    covered = engine.columns.covered[2]
    assert 0.5 < covered.mean() < 0.75
    restricted = np.where(covered, exposure.weights, 0)
    for v in AT:
        right, matrix = dense(engine, cool, engine.columns.columns[:, v], restricted)
        info = np.diag(matrix)
        # alone on its own channels, and all together on the common ones
        assert sums.info[0, 2, v] / info[2] == pytest.approx(1.0, abs=2e-3)
        assert sums.snr()[0, 2, v] == pytest.approx(right[2] / np.sqrt(info[2]), abs=0.02)
        joint = sums.joint.matrix()[0, v]
        assert np.max(np.abs(joint - matrix) / np.sqrt(np.outer(info, info))) < 2e-3
    gram = engine.gram(companion_of(cool))
    for m in range(3):
        assert np.diagonal(gram[m, :, m]) == pytest.approx(sums.info[0, m], rel=2e-3)


# ---------------------------------------------------------------- what must not respond


def response(companion_knots):
    """What a featureless companion adds to the S/N: the same noise with and without it, largest of any velocity."""
    one = scene("flat", star="M", draw=COMPANION)
    cube = cubes(one)[0]
    without = cube.with_changes(data=np.where(cube.mask, 0, cube.data - one.exposures[0].companion))
    snr = [
        engine_of(exposure_of(one, own, companion_knots=companion_knots)).sums(companion_of(one)).snr()[0]
        for own in (cube, without)
    ]
    return np.abs(snr[0] - snr[1]).max(axis=1)


def test_a_featureless_companion_gives_no_response():
    """At a contrast where a companion with lines has a S/N of 33. Weights differ a little: 0.1 of 3 sigma."""
    assert np.all(response(6) < 0.3)


def test_without_continuum_columns_it_does():
    """Control: a featureless companion fills the star's lines, which the templates are not orthogonal to."""
    found = response(0)
    assert found[0] > 5
    assert found[1] > 2


def test_starlight_alone_gives_no_response():
    """Speckles and halo, no companion, no noise: the star's lines leave nothing at any place of the field."""
    one = scene(star="M", draw=(("contrast", 0.0),))
    engine = engine_of(exposure_of(one, noiseless(one)))
    y, x = np.mgrid[1:15:2, 1:15:2]
    snr = engine.sums(np.stack([x.ravel(), y.ravel()], axis=1).astype(float)).snr()
    assert np.nanmax(np.abs(snr)) < 0.5


def test_masked_samples_do_not_matter(cool):
    cube = cubes(cool)[0]
    assert cube.mask.any()
    wild = np.where(cube.mask, np.float32(3e7), cube.data)
    variance = np.where(cube.mask, np.float32(1e-3), cube.variance)
    one = engine_of(exposure_of(cool)).sums(companion_of(cool))
    two = engine_of(exposure_of(cool, cube.with_changes(data=wild, variance=variance))).sums(
        companion_of(cool)
    )
    assert np.array_equal(one.num, two.num)
    assert np.array_equal(one.info, two.info)


@pytest.mark.parametrize("exponent", [-17, -3, 5])
def test_flux_scale_leaves_snr_and_amplitude(cool, exponent):
    """Other units of flux (kept by a power of two so that rounding does not differ)."""
    cube = cubes(cool)[0]
    k = np.float32(2.0**exponent)
    scaled = cube.with_changes(data=k * cube.data, variance=k * k * cube.variance)
    one = engine_of(exposure_of(cool)).sums(companion_of(cool))
    two = engine_of(exposure_of(cool, scaled)).sums(companion_of(cool))
    assert two.snr() == pytest.approx(one.snr(), abs=2e-3)
    assert two.amplitude()[0, :, 32] == pytest.approx(one.amplitude()[0, :, 32], rel=1e-4)


# ---------------------------------------------------------------- bookkeeping


def test_blocks_and_neighbours_do_not_change_a_position(engine, cool):
    """A position's sums do not depend on which others are asked for with it, beyond the last bits."""
    here = companion_of(cool)
    y, x = np.mgrid[0:16, 0:16]
    everywhere = np.vstack([here, np.stack([x.ravel(), y.ravel()], axis=1)])
    many, one = engine.sums(everywhere), engine.sums(here)
    assert many.info[0] == pytest.approx(one.info[0], rel=1e-5)
    assert many.snr()[0] == pytest.approx(one.snr()[0], abs=1e-3)
    kept = np.full((len(everywhere), 3, VELOCITY.size), np.nan)

    def keep(block, num, info):
        kept[block] = num / np.sqrt(info)

    engine.solo_sums(everywhere, keep)
    assert np.array_equal(kept, many.snr())


def test_threads_give_the_same_bits(cool):
    found = []
    for jobs in (1, 2):
        with limited_threads(jobs):
            found.append(engine_of(exposure_of(cool)).sums(companion_of(cool)))
    assert np.array_equal(found[0].num, found[1].num)
    assert np.array_equal(found[0].joint.info, found[1].joint.info)


def test_exposures_add(engine, cool):
    one = engine.sums(companion_of(cool))
    total = add([one, one, one])
    assert total.snr() == pytest.approx(np.sqrt(3) * one.snr())
    assert total.conditional() == pytest.approx(np.sqrt(3) * one.conditional())
    assert total.amplitude() == pytest.approx(one.amplitude())


def test_extracted_residual_spectrum(engine, cool):
    """PSF-weighted residuals: per channel the least-squares flux of the companion, in data units."""
    flux, variance = engine.spectrum(companion_of(cool))
    parts = cool.exposures[0]
    good = np.isfinite(flux)
    assert good.mean() > 0.99
    exposure = engine.exposure
    nuisance = exposure.nuisance.dense()
    # the fitted PSF holds the core, the same fraction for star and companion
    core = exposure.star_image.flux.mean() / parts.star_spectrum.mean()
    expected = core * reference.project(parts.companion_spectrum, nuisance, exposure.mean_weights)
    found = np.where(good, flux, 0.0)
    # error of the slope: 1 / S/N of all lines, 40; spaxels have weights of their own
    assert (expected @ found) / (expected @ expected) == pytest.approx(1.0, abs=0.1)
    normalised = (found - expected)[good] / np.sqrt(variance[good])
    # 46 of 600 degrees of freedom are fitted
    assert np.std(normalised) == pytest.approx(0.96, abs=0.1)


def test_nothing_usable_is_nan(cool):
    cube, here = cubes(cool)[0], companion_of(cool)
    rows, columns = np.indices(cube.shape[1:])
    mask = cube.mask | (np.hypot(columns - here[0, 0], rows - here[0, 1]) < 4.2)
    engine = engine_of(exposure_of(cool, cube.with_changes(mask=mask)))
    sums = engine.sums(here)
    assert np.all(np.isnan(sums.snr()))
    assert np.all(np.isnan(sums.conditional()))
    assert not np.any(engine.gram(here))  # an exposure that misses the companion adds nothing
    assert np.all(np.isfinite(engine.sums(np.array([[3.0, 11.0]])).snr()))
