"""Significance: published small-sample and false-alarm numbers, and nulls that hold what they claim."""

import numpy as np
import pytest
from scipy import stats

from xcorr.errors import CoverageError
from xcorr.significance import (
    Calibration,
    SearchVolume,
    at_velocity,
    calibrate,
    combined_global_p,
    davies_p,
    effective_size,
    global_p,
    held_out,
    peak,
    ring_positions,
    student_t_threshold,
    velocity_curvature,
    verdict,
)

Q5, Q3 = 2.866516e-7, 1.349898e-3  # one-sided normal tails beyond 5 and 3


# ---------------------------------------------------------------- published numbers


@pytest.mark.parametrize(
    ("radius", "five", "three"),
    [
        (1, 62.27, 7.252),
        (2, 10.68, 4.007),
        (3, 7.949, 3.604),
        (4, 6.974, 3.431),
        (5, 6.480, 3.335),
        (10, 5.631, 3.153),
        (20, 5.296, 3.074),
    ],
)
def test_small_sample_thresholds(radius, five, three):
    """Mawet et al. 2014, ApJ 792, 97, eq. 9, computed independently; n = round(2 pi r)."""
    n_null = round(2 * np.pi * radius) - 1
    assert student_t_threshold(Q5, n_null) == pytest.approx(five, rel=5e-4)  # four printed digits
    assert student_t_threshold(Q3, n_null) == pytest.approx(three, rel=5e-4)


def test_student_threshold_becomes_gaussian_and_refuses_nonsense():
    assert student_t_threshold(Q5, 10**7) == pytest.approx(5.0, abs=1e-4)
    for bad in ((Q5, 1), (0.0, 10), (1.0, 10)):
        with pytest.raises(CoverageError):
            student_t_threshold(*bad)


@pytest.mark.parametrize(
    ("trials", "five", "three"),
    [(10, 5.427, 3.642), (100, 5.824, 4.197), (1000, 6.198, 4.692), (10_000, 6.551, 5.143)],
)
def test_trials(trials, five, three):
    """Local thresholds that N independent trials need for a global 5 and 3 sigma (Sidak)."""
    assert stats.norm.isf(global_p(stats.norm.sf(five), trials)) == pytest.approx(5.0, abs=2e-3)
    assert stats.norm.isf(global_p(stats.norm.sf(three), trials)) == pytest.approx(3.0, abs=2e-3)


def test_four_sigma_in_a_thousand_trials():
    assert global_p(stats.norm.sf(4.0), 1000) == pytest.approx(3.12e-2, rel=2e-3)
    assert global_p(1e-30, 10) == pytest.approx(1e-29, rel=1e-6)  # no loss of digits


def test_davies_numbers():
    """R = 4000, +-1000 km/s, sqrt(lambda2) = 0.0218 per km/s: computed elsewhere from the formula."""
    for level, bound in ((2.5, 0.311), (3.0, 0.0784), (3.5, 0.0154)):
        assert davies_p(level, 2000.0, 0.0218**2) == pytest.approx(bound, rel=0.01)
    assert davies_p(-3.0, 2000.0, 0.0218**2) == 1.0


def test_davies_bounds_a_gaussian_process():
    """Monte Carlo with a Gaussian autocorrelation: never above the bound, and close to it."""
    rng = np.random.default_rng(11)
    step, sigma = 5.0, 1.0 / 0.0218  # lambda2 = 1 / sigma^2
    n = 401
    pad = 60
    kernel = np.exp(-0.5 * (np.arange(-pad, pad + 1) * step / (sigma / np.sqrt(2))) ** 2)
    kernel /= np.sqrt(np.sum(kernel**2))
    white = rng.standard_normal((6000, n + 2 * pad))
    transform = np.fft.rfft(white, axis=1) * np.fft.rfft(kernel, n + 2 * pad)
    process = np.fft.irfft(transform, n + 2 * pad, axis=1)[:, 2 * pad :]
    assert process.std() == pytest.approx(1.0, abs=0.01)
    maxima = process.max(axis=1)
    for level, published in ((2.5, 0.272), (3.0, 0.0736)):
        fraction = np.mean(maxima > level)
        error = np.sqrt(published * (1 - published) / 6000)
        assert fraction == pytest.approx(published, abs=4 * error)  # the same Monte Carlo done elsewhere
        assert fraction < davies_p(level, 2000.0, 0.0218**2) + 4 * error
    correlation = np.corrcoef(process, rowvar=False)
    # from finite differences of one step: 1 - (step / sigma)^2 / 4, below the Monte-Carlo error
    assert velocity_curvature(correlation, step) == pytest.approx(0.0218**2, rel=0.03)


# ---------------------------------------------------------------- effective size


def test_effective_size_identities():
    assert effective_size(np.eye(7)) == pytest.approx(7.0)
    assert effective_size(np.ones((7, 7))) == pytest.approx(1.0)
    blocks = np.kron(np.eye(3), np.ones((4, 4)))
    assert effective_size(blocks) == pytest.approx(3.0)
    assert effective_size(5.0 * blocks) == pytest.approx(3.0)  # the scale does not matter
    rng = np.random.default_rng(0)
    a, b = (x @ x.T for x in (rng.standard_normal((5, 9)), rng.standard_normal((4, 9))))
    whole = np.kron(a, b)
    assert effective_size(a, b) == pytest.approx(np.trace(whole) ** 2 / np.trace(whole @ whole))


def test_effective_size_is_that_of_the_sample_variance():
    """Satterthwaite: the mean square of a correlated sample scatters like a chi-square of nu_eff."""
    rng = np.random.default_rng(3)
    lags = np.abs(np.subtract.outer(np.arange(60), np.arange(60)))
    correlation = np.exp(-0.5 * (lags / 3.0) ** 2)
    root = np.linalg.cholesky(correlation + 1e-9 * np.eye(60))
    squares = np.mean((rng.standard_normal((20_000, 60)) @ root.T) ** 2, axis=1)
    # variance of chi2_nu / nu is 2 / nu; 20,000 samples of it: 2 per cent
    assert 2.0 / squares.var() == pytest.approx(effective_size(correlation), rel=0.06)


# ---------------------------------------------------------------- calibration


def test_a_calibrated_null_has_unit_variance_and_the_claimed_tail():
    rng = np.random.default_rng(5)
    n, trials = 12, 20_000
    sample = 0.7 + 1.6 * rng.standard_normal((trials, n + 1))
    snr, p = np.empty(trials), np.empty(trials)
    for i, values in enumerate(sample):
        law = calibrate(values[:n, None], np.eye(1), np.eye(n))
        snr[i], p[i] = law.snr(values[n]), law.p_local(values[n])
    assert law.nu_eff == pytest.approx(n - 1)
    assert snr.mean() == pytest.approx(0.0, abs=4 / np.sqrt(trials))
    # a t variable of 11 degrees of freedom has a kurtosis of 6 / 7: error of the std 0.6 per cent
    assert snr.std() == pytest.approx(1.0, abs=0.02)
    for level in (0.1, 0.01):
        error = np.sqrt(level * (1 - level) / trials)
        assert np.mean(p < level) == pytest.approx(level, abs=4 * error)
    # control: without the Student law the tail is far heavier than claimed
    naive = np.array([stats.norm.sf((v[n] - v[:n].mean()) / v[:n].std(ddof=1)) for v in sample])
    assert np.mean(naive < 0.001) > 3 * 0.001


def test_calibration_of_correlated_values():
    """Of 40 velocities only some are independent: the spread is unbiased, the size the effective one."""
    rng = np.random.default_rng(6)
    lags = np.abs(np.subtract.outer(np.arange(40), np.arange(40)))
    correlation = np.exp(-0.5 * (lags / 4.0) ** 2)
    root = np.linalg.cholesky(correlation + 1e-9 * np.eye(40))
    laws = [calibrate(rng.standard_normal((6, 40)) @ root.T, correlation, np.eye(6)) for _ in range(400)]
    size = effective_size(correlation, np.eye(6))
    assert laws[0].nu_eff == pytest.approx(size - 1)
    assert laws[0].n_null == 6
    # mean of 400 variances, each with 2 / size relative variance
    assert np.mean([law.std**2 for law in laws]) == pytest.approx(1.0, abs=4 * np.sqrt(2 / size / 400) + 0.02)


def test_calibration_skips_broken_positions_and_refuses_too_few():
    rng = np.random.default_rng(7)
    null = rng.standard_normal((10, 5))
    broken = np.vstack([null, np.full(5, np.nan)])
    law, expected = calibrate(broken, np.eye(5), np.eye(11)), calibrate(null, np.eye(5), np.eye(10))
    assert (law.mean, law.std, law.nu_eff, law.n_null) == (
        expected.mean,
        expected.std,
        expected.nu_eff,
        expected.n_null,
    )
    with pytest.raises(CoverageError, match="too few independent"):
        calibrate(null[:2, :1], np.eye(1), np.eye(2))
    with pytest.raises(CoverageError):
        calibrate(np.full((4, 5), np.nan), np.eye(5), np.eye(4))


def test_a_held_out_position_does_not_calibrate_itself():
    rng = np.random.default_rng(8)
    null = rng.standard_normal((10, 1))
    null[4] = 30.0
    out = held_out(null, np.eye(1), np.eye(10))
    others = np.delete(null, 4)
    expected = (30.0 - others.mean()) / Calibration(0, others.std(ddof=1), 8.0, 9, "").scale
    assert out[4, 0] == pytest.approx(expected)
    assert out[4, 0] > 15
    # control: with itself in the sample it cannot exceed (n - 1) / sqrt(n) standard deviations
    assert calibrate(null, np.eye(1), np.eye(10)).snr(null[4, 0]) < 9 / np.sqrt(10)


# ---------------------------------------------------------------- global probabilities


def test_volume_counts_everything_searched():
    one = SearchVolume(2000.0, 0.0218**2, 1, 1)
    p = stats.norm.sf(5.0)
    assert one.p_global(p) == pytest.approx(davies_p(5.0, 2000.0, 0.0218**2), rel=1e-6)
    many = SearchVolume(2000.0, 0.0218**2, 3, 100)
    assert many.p_global(p) == pytest.approx(300 * one.p_global(p), rel=1e-2)
    assert SearchVolume(0.0, 0.0, 1, 1).p_global(p) == pytest.approx(p)


def test_exceeded_nulls_are_never_outdone():
    """p = (1 + k) / (1 + n): once k nulls are as high, no analytic tail may claim less."""
    maxima = np.array([1.0, 2.0, 3.0, 6.5, np.nan])
    p, extrapolated, exceeding = combined_global_p(1e-12, 6.0, maxima, 1)
    assert (p, extrapolated, exceeding) == (pytest.approx(2 / 5), False, 1)
    p, _, _ = combined_global_p(1e-12, 6.0, maxima, 3)
    assert p == pytest.approx(1 - (1 - 2 / 5) ** 3)
    assert combined_global_p(0.9, 6.0, maxima, 1)[0] == 0.9  # an honest worse value stays
    p, extrapolated, exceeding = combined_global_p(1e-12, 7.0, maxima, 1)
    assert (p, extrapolated, exceeding) == (1e-12, True, 0)
    assert not combined_global_p(0.5, 7.0, maxima, 1)[1]  # what the nulls can show themselves
    assert combined_global_p(1e-3, 5.0, np.zeros(0), 1) == (1e-3, True, 0)


@pytest.mark.parametrize(
    ("p", "exceeding", "conditional", "offset", "expected"),
    [
        (2.8e-7, 0, 3.0, 0.0, "detected"),
        (2.8e-7, 1, 3.0, 0.0, "evidence"),  # a null as high
        (3.0e-7, 0, 9.0, 0.0, "evidence"),  # above 2.9e-7
        (1.35e-3, 0, 9.0, 0.0, "evidence"),
        (1.36e-3, 0, 9.0, 0.0, "not detected"),
        (1e-20, 0, 2.9, 0.0, "ambiguous"),  # the others explain it
        (1e-20, 0, float("nan"), 0.0, "ambiguous"),
        (1e-20, 0, 9.0, 38.0, "ambiguous"),  # beyond max(3 x 5, 0.5 x 75) km/s from the strongest
        (1e-20, 0, 9.0, 37.0, "detected"),
        (1e-20, 0, 9.0, -37.0, "detected"),
        (float("nan"), 0, 9.0, 0.0, "not detected"),
        (0.5, 0, 1.0, 500.0, "not detected"),
    ],
)
def test_verdicts(p, exceeding, conditional, offset, expected):
    assert verdict(p, exceeding, conditional, 20.0 + offset, 5.0, 20.0, 75.0) == expected


def test_a_large_velocity_error_widens_the_tolerance():
    assert verdict(1e-20, 0, 9.0, 55.0, 20.0, 0.0, 75.0) == "detected"
    assert verdict(1e-20, 0, 9.0, 65.0, 20.0, 0.0, 75.0) == "ambiguous"


# ---------------------------------------------------------------- curves and positions


def test_peak_and_interpolation_are_exact_for_parabolas():
    velocity = np.arange(-100.0, 101.0, 10.0)
    curve = 7.0 - ((velocity - 13.4) / 25.0) ** 2
    v, height, index = peak(velocity, curve)
    assert (v, height, index) == (pytest.approx(13.4), pytest.approx(7.0), 11)
    assert at_velocity(velocity, curve, -37.7) == pytest.approx(7.0 - ((-37.7 - 13.4) / 25.0) ** 2)
    assert at_velocity(velocity, np.stack([curve, 2 * curve]), 3.0).shape == (2,)
    assert peak(velocity, velocity)[0] == 100.0  # at the edge the grid value
    assert peak(velocity, np.where(velocity == 0, np.nan, curve))[2] == 11
    assert peak(velocity[:1], np.array([4.0])) == (-100.0, 4.0, 0)
    assert at_velocity(velocity[:2], np.array([1.0, 2.0]), -91.0) == 2.0


def positions(**changes):
    base = {"shape": (24, 24), "usable": np.ones((24, 24), bool), "centre_xy": (11.5, 12.0)}
    base |= {"target_xy": (17.0, 9.0), "sources": (), "fwhm": 2.5, "want": 60}
    return ring_positions(**(base | changes))


def test_null_positions_are_companion_free_and_begin_at_the_same_separation():
    found = positions()
    assert len(found) >= 30
    from_target = np.hypot(found[:, 0] - 17.0, found[:, 1] - 9.0)
    assert from_target.min() >= 2.0 * 2.5 - 1e-9
    own = np.hypot(17.0 - 11.5, 9.0 - 12.0)
    separation = np.hypot(found[:, 0] - 11.5, found[:, 1] - 12.0)
    on_ring = np.abs(separation - own) < 1e-6
    assert on_ring[:3].all()
    assert np.all(np.diff(on_ring.astype(int)) <= 0)  # the target's own ring first
    assert np.all(separation > 1.5 * 2.5 - 1e-9)
    ring = found[on_ring]
    neighbours = np.hypot(*(ring[1:] - ring[:-1]).T)
    assert neighbours.min() > 0.95 * 2.5


def test_null_positions_avoid_masks_and_other_sources():
    usable = np.ones((24, 24), bool)
    usable[:, :8] = False
    found = positions(usable=usable, sources=((6.0, 18.0, 2.0), (16.0, 18.0, 2.0)))
    assert len(found)
    assert np.all(found[:, 0] > 7)
    assert np.hypot(found[:, 0] - 16.0, found[:, 1] - 18.0).min() >= 2.0 + 1.5 * 2.5
    assert len(positions(usable=np.zeros((24, 24), bool))) == 0


def test_null_positions_without_a_star_fill_a_grid_of_the_same_phase():
    found = positions(centre_xy=None, target_xy=(17.3, 9.8), fwhm=3.0)
    assert len(found) >= 20
    steps = (found - [17.3, 9.8]) / 3.0
    assert steps == pytest.approx(np.round(steps), abs=1e-9)
    assert np.hypot(found[:, 0] - 17.3, found[:, 1] - 9.8).min() >= 2.0 * 3.0 - 1e-9
