"""From sums to verdicts on sums of known law: the signal is taken out of its own null, errors are what they claim."""

import numpy as np
import pytest

from xcorr.answer import Evidence, calibrated_curves, fitted_signal, judge, remove_signal
from xcorr.engine import Sums
from xcorr.search import PositionSums

STEP, N_VELOCITY, WIDTH = 20.0, 101, 45.0
VELOCITY = STEP * (np.arange(N_VELOCITY) - 50)
CURVATURE = 1.0 / WIDTH**2  # lambda_2 of a Gaussian autocorrelation exp(-dv^2 / (2 width^2))


def gram_of(n_molecule=2, coupling=0.4, info=400.0):
    """Information between molecules and velocities: Gaussian in velocity, molecules coupled at equal velocity."""
    lag = np.subtract.outer(VELOCITY, VELOCITY)
    shape = np.exp(-0.5 * (lag / WIDTH) ** 2)
    mixing = np.full((n_molecule, n_molecule), coupling)
    np.fill_diagonal(mixing, 1.0)
    return info * np.einsum("mn,vw->mvnw", mixing, shape)


def draw(gram, rng, n):
    """n noise realisations of num with that covariance, (n, n_molecule, n_velocity)."""
    size = gram.shape[0] * gram.shape[1]
    value, vector = np.linalg.eigh(gram.reshape(size, size))
    root = vector * np.sqrt(np.clip(value, 0, None))
    return (rng.standard_normal((n, size)) @ root.T).reshape(n, *gram.shape[:2])


def sums_of(num, gram, scale=1.0):
    left, right = np.triu_indices(gram.shape[0])
    index = np.arange(N_VELOCITY)
    info = np.stack([gram[i, index, j, index] for i, j in zip(left, right, strict=True)])
    info = np.broadcast_to(info, (len(num), *info.shape)).copy()
    joint = PositionSums(scale * num, info)
    return Sums(joint.num, joint.diagonal, joint, (tuple(range(gram.shape[0])),))


def evidence(amplitudes=(0.0, 0.0), at=55, seed=2, n_null=20, noise_scale=1.0, **changes):
    """A target with a known signal, null positions, and everything else plain."""
    rng = np.random.default_rng(seed)
    gram = gram_of(len(amplitudes))
    signal = np.einsum("mvn,n->mv", gram[:, :, :, at], amplitudes)
    target = sums_of(signal[None] + noise_scale * draw(gram, rng, 1), gram)
    nulls = sums_of(noise_scale * draw(gram, rng, n_null), gram) if n_null else None
    base = {
        "names": tuple("AB"[: len(amplitudes)]),
        "velocity_km_s": VELOCITY,
        "searched": slice(0, N_VELOCITY),
        "target": target,
        "gram": gram,
        "nulls": nulls,
        "position_correlation": np.eye(max(1, n_null)),
        "n_positions": 1,
        "resolution_km_s": 75.0,
        "zero_point_err_km_s": 0.0,
        "systemic_velocity_km_s": None,
    }
    return Evidence(**(base | changes))


def judged(found):
    n = len(found.names)
    curves = calibrated_curves(found)
    molecules, notes = judge(
        found,
        curves,
        descriptions=["template"] * n,
        units=["template"] * n,
        masked_fraction=np.full(n, 0.25),
        captured=0.81,
        scatter=1.0,
        position_xy=(3.0, 4.0),
    )
    return curves, molecules, {note.code for note in notes}


# ---------------------------------------------------------------- the signal and its null


def test_the_fitted_signal_is_taken_out():
    """Signals of 30 and 20 sigma leave noise everywhere, also in their own side lobes and in each other."""
    found = evidence((1.5, 1.0))
    amplitudes = fitted_signal(found.target, 55)
    # errors of the joint fit: 1 / sqrt(400 (1 - 0.4^2)) = 0.055
    assert amplitudes == pytest.approx([1.5, 1.0], abs=4 * 0.055)
    solo, conditional = remove_signal(found, 55)
    assert np.abs(found.target.snr()[0]).max() > 30
    assert np.abs(solo).max() < 4.5
    assert np.abs(conditional).max() < 4.5
    # exactly zero where it was fitted
    assert solo[:, 55] == pytest.approx(0.0, abs=1e-7)


def test_a_strong_signal_does_not_inflate_its_own_null():
    """One spectrum, far velocities as null: the calibrated S/N of 10 and of 80 sigma are both right."""
    for amplitude in (0.5, 4.0):
        values = [judged(evidence((amplitude,), n_null=0, seed=seed))[1][0].snr for seed in range(40)]
        # the null of one curve holds 16 independent values: std good to 18 per cent, its inverse biased by 3 / 32
        assert np.mean(values) == pytest.approx(amplitude * 20.0, rel=0.15)


def test_the_calibration_takes_up_a_wrong_noise_level():
    right, wrong = (judged(evidence((1.0, 0.5), noise_scale=k, n_null=40))[1] for k in (1.0, 2.0))
    assert wrong[0].null.std == pytest.approx(2 * right[0].null.std, rel=1e-6)
    assert wrong[0].snr == pytest.approx(right[0].snr / 2, rel=0.1)
    assert wrong[0].amplitude_err == pytest.approx(2 * right[0].amplitude_err, rel=1e-6)


def test_far_velocities_check_the_positions():
    """A target whose far velocities scatter three times more than the positions is told of, not recalibrated."""
    found = evidence((0.0,))
    loud = found.target
    loud = Sums(3 * loud.num, loud.info, PositionSums(3 * loud.joint.num, loud.joint.info), loud.rivals)
    quiet, odd = calibrated_curves(found), calibrated_curves(evidence((0.0,), target=loud))
    assert quiet.far_excess.tolist() == [1.0]
    assert odd.far_excess[0] > 2
    assert odd.laws[0] == quiet.laws[0]


def test_laws_by_what_there_is():
    assert calibrated_curves(evidence((0.0,))).laws[0].family == "positions"
    assert calibrated_curves(evidence((0.0,), n_null=3)).laws[0].family == "far velocities"
    assert calibrated_curves(evidence((0.0,), n_null=0)).laws[0].family == "far velocities"
    # a search so narrow that no velocity is far: the claimed errors, with a heavy tail
    narrow = calibrated_curves(evidence((0.0,), n_null=0, resolution_km_s=5000.0)).laws[0]
    assert (narrow.family, narrow.mean, narrow.std, narrow.nu_eff, narrow.n_null) == ("claimed", 0, 1, 3, 0)
    assert narrow.p_local(5.0) > 1e-3


# ---------------------------------------------------------------- the row of the answer


def test_velocity_error_is_that_of_the_curvature():
    """1 / (S/N sqrt(lambda_2)): the scatter of the found velocity in 200 draws."""
    rng = np.random.default_rng(9)
    gram = gram_of(1)
    base = evidence((0.5,), n_null=40)  # S/N 10
    signal = 0.5 * gram[0, :, 0, 55]
    found, claimed = [], []
    for noise in draw(gram, rng, 200):
        one = evidence(
            (0.5,),
            target=sums_of((signal + noise[0])[None, None], gram),
            nulls=base.nulls,
            position_correlation=np.eye(40),
        )
        row = judged(one)[1][0]
        found.append(row.velocity_km_s - VELOCITY[55])
        claimed.append(row.velocity_err_km_s)
    expected = 1.0 / (10.0 * np.sqrt(CURVATURE))
    # finite differences over one step of 20 in 45 km/s lower the curvature by 2 per cent; 200 draws: 5 per cent
    assert np.mean(claimed) == pytest.approx(expected, rel=0.1)
    assert np.std(found) == pytest.approx(np.mean(claimed), rel=0.2)
    assert np.mean(found) == pytest.approx(0.0, abs=4 * expected / np.sqrt(200))


def test_velocity_error_has_a_floor():
    sharp = judged(evidence((50.0,), zero_point_err_km_s=2.5))[1][0]
    assert sharp.velocity_err_km_s == pytest.approx(2.5, rel=0.01)
    # nothing tells the zero point: 0.02 resolution elements
    unknown = judged(evidence((50.0,), zero_point_err_km_s=float("nan")))[1][0]
    assert unknown.velocity_err_km_s == pytest.approx(1.5, rel=0.01)


def test_the_row():
    found = evidence((1.0, 0.6), systemic_velocity_km_s=VELOCITY[55])
    curves, (a, b), notes = judged(found)
    assert not notes
    assert (a.name, b.name, a.position_xy) == ("A", "B", (3.0, 4.0))
    assert a.velocity_km_s == pytest.approx(VELOCITY[55], abs=10.0)
    # solo: what B adds to A at the same velocity, 0.4 x 0.6, is A's solo amplitude too
    assert a.amplitude == pytest.approx(1.24, abs=4 * a.amplitude_err)
    assert a.snr == pytest.approx(a.amplitude / a.amplitude_err, rel=0.05)
    # conditional: 1.0 x sqrt(400 (1 - 0.16)) = 18.3
    assert a.snr_conditional == pytest.approx(18.3, abs=4.0)
    assert b.snr_conditional == pytest.approx(11.0, abs=4.0)
    assert a.snr_at_systemic == pytest.approx(curves.solo[0, 55])
    assert a.masked_fraction == 0.25
    assert a.efficiency == pytest.approx(0.9 / curves.laws[0].scale)
    assert (a.verdict, b.verdict) == ("detected", "detected")
    assert a.n_null == 20
    assert a.p_global >= a.p_local


def test_systemic_velocity_outside_the_search_is_not_answered():
    assert np.isnan(judged(evidence((0.0,), systemic_velocity_km_s=5000.0))[1][0].snr_at_systemic)
    assert np.isnan(judged(evidence((0.0,)))[1][0].snr_at_systemic)


def test_a_molecule_that_rides_on_another_is_ambiguous():
    """B absent but coupled to A: its solo S/N is high, its conditional one is noise."""
    _, (a, b), _ = judged(evidence((2.5, 0.0)))
    assert a.verdict == "detected"
    assert b.snr > 15
    assert abs(b.snr_conditional) < 3
    assert b.verdict == "ambiguous"


def test_signals_at_different_velocities_are_ambiguous():
    gram = gram_of()
    signal = 2.0 * gram[:, :, 0, 55] + 1.0 * gram[:, :, 1, 75]
    noise = draw(gram, np.random.default_rng(2), 1)
    _, (a, b), _ = judged(evidence((0.0, 0.0), target=sums_of(signal[None] + noise, gram)))
    assert a.verdict == "detected"
    assert b.verdict == "ambiguous"


def test_noise_is_not_detected_and_everything_searched_counts():
    rows = [judged(evidence((0.0, 0.0), seed=seed))[1] for seed in range(20)]
    assert {row.verdict for pair in rows for row in pair} == {"not detected"}
    one = judged(evidence((0.25,), seed=3))[1][0]
    many = judged(evidence((0.25,), seed=3, n_positions=200))[1][0]
    assert many.p_local == one.p_local
    assert many.p_global > 10 * one.p_global


def test_doubtful_shapes_are_told():
    assert "velocity-at-edge" in judged(evidence((1.0,), at=100))[2]
    dark = evidence((0.3,))
    gram = dark.gram
    num = dark.target.joint.num - 0.6 * gram[:, :, 0, 20][None]
    assert "negative-amplitude" in judged(evidence((0.3,), target=sums_of(num, gram)))[2]
    assert not judged(dark)[2]


def test_only_the_searched_velocities_can_win():
    """A peak in the null's reach beyond the searched range is no detection."""
    _, (row,), _ = judged(evidence((2.0,), at=10, searched=slice(30, 80)))
    assert VELOCITY[30] <= row.velocity_km_s <= VELOCITY[79]
    assert row.verdict != "detected"
