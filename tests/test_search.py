"""The matched filter by matrix products: equal to dense double-precision algebra, spaxel and PSF alike."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter1d

from xcorr.kernels import reference
from xcorr.kernels.summation import psf_sums, weighted_gather
from xcorr.kernels.threads import limited_threads
from xcorr.psf import make_stamps, moffat_of_width
from xcorr.search import (
    PositionSums,
    corrections,
    position_sums,
    project_templates,
    spaxel_maps,
    velocity_interpolation,
)
from xcorr.starlight import fit_spaxels, mean_weights, nuisance_model

N_WAVE, N_SPAXEL, N_MOLECULE, N_VELOCITY = 900, 25, 2, 33
WAVE = np.linspace(2.0, 2.4, N_WAVE)
ORDER = np.zeros(N_WAVE, np.int16)
SHAPE = (5, 5)


def problem(seed=1, gap=True, **changes):
    """Star, template columns smooth in velocity, spectra, weights with 1 % masks and a 200-channel gap."""
    rng = np.random.default_rng(seed)
    star = 1.0 + 0.3 * np.sin(WAVE * 40) + 0.06 * rng.standard_normal(N_WAVE)
    lines = gaussian_filter1d(rng.standard_normal((N_MOLECULE, N_WAVE + 200)), 2.0, axis=1)
    grid = np.arange(N_WAVE)
    columns = star * np.array(
        [
            [1 + np.interp(grid + 0.25 * v, np.arange(lines.shape[1]), own) for v in range(N_VELOCITY)]
            for own in lines
        ]
    )
    level = np.exp(rng.normal(0, 0.5, (N_SPAXEL, 1)))
    model = level * star * (1 + 0.2 * np.sin(15 * WAVE + rng.uniform(0, 6, (N_SPAXEL, 1))))
    variance = model + 0.3
    data = 100 * model + np.sqrt(variance) * rng.standard_normal(model.shape)
    weights = np.where(rng.random(model.shape) < 0.01, 0.0, 1.0 / variance)
    if gap:
        weights[:, 400:600] = 0.0
    nuisance = nuisance_model(WAVE, ORDER, star, **({"knots": 40} | changes))
    return columns, data.astype(np.float32), weights.astype(np.float32), nuisance


def continuum_columns(n=5):
    """Smooth columns of a companion: unlike starlight, without the star's lines."""
    return np.array([(5 * (WAVE - 2.2)) ** k for k in range(n)])


def maps(columns, data, weights, nuisance):
    fit = fit_spaxels(data, weights, nuisance)
    templates = project_templates(columns, np.zeros((0, N_WAVE)), mean_weights(weights), nuisance)
    return templates, fit, spaxel_maps(data, weights, nuisance, templates, fit)


CHECKED = ([0, 11, 24], slice(None), [0, 1, 2, 3, 4, 9, 18, 31, 32])
"""Spaxels and velocities for the slow twin, between and on the nodes of the splined correction."""


def dense_maps(columns, data, weights, nuisance):
    """num and info of the `CHECKED` by QR, every column for itself."""
    rows, _, velocities = CHECKED
    flat, dense = columns[:, velocities].reshape(-1, N_WAVE), nuisance.dense()
    with limited_threads(1):
        found = [reference.matched_filter(data[p], weights[p].astype(float), dense, flat) for p in rows]
    shape = (len(rows), len(columns), len(velocities))
    return tuple(np.array(part).reshape(shape) for part in zip(*found, strict=True))


def checked(values):
    return values[CHECKED[0]][:, :, CHECKED[2]]


# ---------------------------------------------------------------- single spaxels


@pytest.mark.parametrize(
    ("gap", "changes"),
    [(False, {}), (True, {}), (False, {"background_knots": 6}), (True, {"background_knots": 6})],
)
def test_spaxel_maps_equal_the_qr_twin(gap, changes):
    columns, data, weights, nuisance = problem(gap=gap, **changes)
    templates, fit, (num, info) = maps(columns, data, weights, nuisance)
    expected_num, expected_info = dense_maps(columns, data, weights, nuisance)
    # the correction is splined over every 4th velocity: 4e-5 measured, 4e-4 with gaps
    assert np.max(np.abs(checked(info) / expected_info - 1)) < 5e-4
    # float32 products of a thousand samples: 1e-4 of a standard deviation
    assert np.max(np.abs(checked(num) - expected_num) / np.sqrt(expected_info)) < 1e-3
    assert np.all(np.isfinite(num))
    assert num.dtype == info.dtype == np.float32
    # at every velocity, info is limited by float32 alone
    flat = templates.columns.reshape(-1, N_WAVE)
    exact = corrections(weights, fit, nuisance, templates, step=1, diagonal_only=True)
    found = (weights @ (flat * flat).T).reshape(info.shape) - exact.molecules @ exact.interpolation
    assert np.max(np.abs(checked(found) / expected_info - 1)) < 1e-5


def test_the_correction_matters():
    """Control: without the second term of info both tolerances above are missed."""
    columns, data, weights, nuisance = problem()
    templates, _, _ = maps(columns, data, weights, nuisance)
    flat = templates.columns.reshape(-1, N_WAVE)
    raw = (weights @ (flat * flat).T).reshape(N_SPAXEL, N_MOLECULE, N_VELOCITY)
    assert np.max(np.abs(checked(raw) / dense_maps(columns, data, weights, nuisance)[1] - 1)) > 1e-3


def test_projection_with_mean_weights_does_not_change_num():
    """P_p N = 0 whatever the weights: any other projection weights give the same num."""
    columns, data, weights, nuisance = problem(gap=False)
    fit = fit_spaxels(data, weights, nuisance)
    found = []
    for shape in (mean_weights(weights), np.linspace(0.2, 3.0, N_WAVE)):
        templates = project_templates(columns, np.zeros((0, N_WAVE)), shape, nuisance)
        found.append(spaxel_maps(data, weights, nuisance, templates, fit))
    sigma = np.sqrt(found[0][1])
    assert np.max(np.abs(found[0][0] - found[1][0]) / sigma) < 2e-3  # float32
    assert found[1][1] == pytest.approx(found[0][1], rel=1e-3)


def test_flux_scale_leaves_snr():
    columns, data, weights, nuisance = problem()
    _, _, (num, info) = maps(columns, data, weights, nuisance)
    k = np.float32(1000.0)
    _, _, (num_k, info_k) = maps(columns, k * data, weights / k**2, nuisance)
    assert num_k / np.sqrt(info_k) == pytest.approx(num / np.sqrt(info), abs=1e-3)


def test_a_masked_channel_is_a_zero_weight():
    columns, data, weights, nuisance = problem()
    weights[:, 100:140] = 0.0
    one = maps(columns, data, weights, nuisance)[2]
    wild = np.where(weights == 0, np.float32(1e9), data)
    two = maps(columns, wild, weights, nuisance)[2]
    assert np.array_equal(one[0], two[0])
    assert np.array_equal(one[1], two[1])


def test_velocity_interpolation_is_exact_on_its_nodes_and_for_cubics():
    coarse, matrix = velocity_interpolation(41, 4)
    assert coarse[0] == 0
    assert coarse[-1] == 40
    cubic = np.arange(41.0) ** 3 - 7 * np.arange(41.0)
    assert cubic[coarse] @ matrix == pytest.approx(cubic, rel=1e-9, abs=1e-6)
    short, same = velocity_interpolation(7, 4)
    assert np.array_equal(short, np.arange(7))
    assert np.array_equal(same, np.eye(7))


# ---------------------------------------------------------------- sums over a PSF


def stamps_at(positions, usable=None):
    usable = np.ones(SHAPE, bool) if usable is None else usable
    return make_stamps(moffat_of_width(1.7, WAVE), np.array(positions, float), SHAPE, WAVE, usable)


def dense_profiles(stamps):
    """Profiles at every channel, (n_position, n_stamp, n_wave)."""
    low = stamps.profiles[:, :, stamps.node]
    return low + stamps.fraction * (stamps.profiles[:, :, stamps.node + 1] - low)


def dense_joint(stamps, q, columns, data, weights, nuisance):
    """(right, matrix) of all `columns` (n, n_wave) shared by the PSF of position q."""
    inside = stamps.spaxels[q] >= 0
    rows = stamps.spaxels[q][inside]
    profile = dense_profiles(stamps)[q][inside].astype(float)
    return reference.joint_filter(data[rows], weights[rows].astype(float), nuisance.dense(), profile, columns)


def test_psf_sums_equal_their_twin():
    _, data, weights, _ = problem()
    stamps = stamps_at([[2.3, 1.8], [0.1, 4.2]])
    stamps.profiles[:, :, 1] *= np.float32(1.3)  # a profile that changes with wavelength
    first, second = np.empty((2, N_WAVE), np.float32), np.empty((2, N_WAVE), np.float32)
    psf_sums(data, weights, stamps.spaxels, stamps.profiles, stamps.node, stamps.fraction, first, second)
    expected = reference.psf_sums(data.astype(float), weights, stamps.spaxels, dense_profiles(stamps))
    assert first == pytest.approx(expected[0], rel=1e-5, abs=1e-5)
    assert second == pytest.approx(expected[1], rel=1e-5)
    assert np.any(stamps.spaxels[1] == -1)  # the second position lies at the edge


def test_weighted_gather_equals_a_loop():
    rng = np.random.default_rng(4)
    table = rng.standard_normal((6, 3)).astype(np.float32)
    spaxels = np.array([[0, 5, -1], [-1, -1, -1]])
    share = rng.random((2, 3))
    out = np.full((2, 3), 99.0)
    weighted_gather(spaxels, share, table, out)
    assert out[0] == pytest.approx(share[0, 0] * table[0] + share[0, 1] * table[5])
    assert not out[1].any()


@pytest.mark.parametrize("n_continuum", [0, 5])
def test_position_sums_equal_a_dense_joint_fit(n_continuum):
    """Sub-pixel position, own starlight in every spaxel, companion continuum shared by the PSF."""
    columns, data, weights, nuisance = problem(gap=False)
    shared = continuum_columns(n_continuum) if n_continuum else np.zeros((0, N_WAVE))
    stamps = stamps_at([[2.3, 1.8], [3.4, 3.1]])
    fit = fit_spaxels(data, weights, nuisance)
    templates = project_templates(columns, shared, mean_weights(weights), nuisance)
    sums = position_sums(
        weights, fit.residual, stamps, templates, corrections(weights, fit, nuisance, templates)
    )
    for q in range(2):
        for v in (0, 13, 32):
            full = np.vstack([columns[:, v], shared])
            right, matrix = dense_joint(stamps, q, full, data, weights, nuisance)
            # eliminate the continuum: Schur complement in double precision
            right, matrix = eliminated(right, matrix, N_MOLECULE)
            info = np.array([matrix[0, 0], matrix[0, 1], matrix[1, 1]])
            scale = np.sqrt(np.array([info[0] * info[0], info[0] * info[2], info[2] * info[2]]))
            # splined corrections and the mean square of the profile: 1e-3 of info
            assert np.max(np.abs(sums.info[q, :, v] - info) / scale) < 1e-3
            assert np.max(np.abs(sums.num[q, :, v] - right) / np.sqrt(info[[0, 2]])) < 5e-3
            amplitude, error = sums.joint()
            covariance = np.linalg.inv(matrix)
            snr = covariance @ right / np.sqrt(np.diag(covariance))
            assert amplitude[q, :, v] / error[q, :, v] == pytest.approx(snr, abs=1e-2)


def eliminated(right, matrix, n):
    if len(right) == n:
        return right, matrix
    # unit diagonal first: the columns are powers of a wavelength near 2
    scale = 1 / np.sqrt(np.diag(matrix))
    matrix, right = matrix * np.outer(scale, scale), right * scale
    taken = matrix[:n, n:] @ np.linalg.pinv(matrix[n:, n:], rcond=1e-12, hermitian=True)
    own = matrix[:n, :n] - taken @ matrix[n:, :n]
    return (right[:n] - taken @ right[n:]) / scale[:n], own / np.outer(scale[:n], scale[:n])


def test_threads_give_the_same_bits():
    columns, data, weights, nuisance = problem()
    stamps = stamps_at([[2.3, 1.8], [3.4, 3.1], [0.0, 0.0]])
    templates = project_templates(columns, continuum_columns(), mean_weights(weights), nuisance)
    found = []
    for jobs in (1, 2):
        with limited_threads(jobs):
            fit = fit_spaxels(data, weights, nuisance)
            taken = corrections(weights, fit, nuisance, templates)
            found.append(position_sums(weights, fit.residual, stamps, templates, taken))
    assert np.array_equal(found[0].num, found[1].num)
    assert np.array_equal(found[0].info, found[1].info)


def test_continuum_spanned_by_starlight_is_dropped():
    """reference = "none": s = 1, so smooth companion columns are starlight columns already."""
    columns, _, weights, _ = problem()
    flat = nuisance_model(WAVE, ORDER, np.ones(N_WAVE), knots=40)
    templates = project_templates(columns, continuum_columns(4), mean_weights(weights), flat)
    assert len(templates.continuum) == 0
    star = problem()[3]
    kept = project_templates(columns, continuum_columns(4), mean_weights(weights), star)
    assert len(kept.continuum) == 4


# ---------------------------------------------------------------- the algebra of sums


def random_sums(seed=0, n=3, equal=False):
    rng = np.random.default_rng(seed)
    factor = rng.standard_normal((4, 5, n, n + 2))
    if equal:
        factor[..., 1, :] = factor[..., 0, :]
    matrix = factor @ np.swapaxes(factor, -1, -2)
    left, right = np.triu_indices(n)
    num = np.moveaxis(np.einsum("qvij,qvj->qvi", matrix, rng.standard_normal((4, 5, n))), 2, 1)
    return PositionSums(num, np.moveaxis(matrix[:, :, left, right], 2, 1)), matrix


def test_joint_fit_is_the_linear_solve():
    sums, matrix = random_sums()
    assert np.array_equal(sums.matrix(), matrix)
    amplitude, error = sums.joint()
    covariance = np.linalg.inv(matrix)
    expected = np.einsum("qvij,qjv->qiv", covariance, sums.num)
    assert amplitude == pytest.approx(expected, rel=1e-6, abs=1e-8)
    assert error == pytest.approx(np.moveaxis(np.sqrt(np.einsum("qvii->qvi", covariance)), 2, 1), rel=1e-6)


def test_equal_templates_share_without_failing():
    sums, _ = random_sums(equal=True)
    sums.num[:, 1] = sums.num[:, 0]
    amplitude, error = sums.joint()
    assert np.all(np.isfinite(amplitude))
    assert amplitude[:, 0] == pytest.approx(amplitude[:, 1], rel=1e-3, abs=1e-6)
    assert np.all(np.abs(amplitude[:, 0]) / error[:, 0] < 1e-2)  # neither can be claimed


def test_no_information_is_nan_or_infinite():
    sums, _ = random_sums()
    sums.info[0] = 0.0
    sums.num[0] = 0.0
    assert np.all(np.isnan(sums.solo_snr()[0]))
    assert np.all(np.isnan(sums.solo_amplitude()[0]))
    assert np.all(np.isinf(sums.joint()[1][0]))
    assert np.all(np.isfinite(sums.solo_snr()[1:]))


def test_sums_add_and_subsets_are_parts():
    one, matrix = random_sums(1)
    two, _ = random_sums(2)
    total = one + two
    assert total.num == pytest.approx(one.num + two.num)
    assert np.array_equal(one.subset((0, 2)).matrix(), matrix[:, :, [0, 2]][..., [0, 2]])
    twice = one + one
    assert twice.solo_snr() == pytest.approx(np.sqrt(2) * one.solo_snr())
    assert twice.solo_amplitude() == pytest.approx(one.solo_amplitude())
