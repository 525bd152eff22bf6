"""From sums at the target and at null positions to calibrated S/N, probabilities and verdicts."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from xcorr.engine import Sums, conditional_snr
from xcorr.errors import CoverageError, Note
from xcorr.results import MoleculeResult, NullSummary
from xcorr.search import PositionSums
from xcorr.significance import (
    FAMILY_P,
    MIN_NULL_POSITIONS,
    Calibration,
    SearchVolume,
    at_velocity,
    calibrate,
    combined_global_p,
    held_out,
    peak,
    velocity_curvature,
    verdict,
)

FAR_ELEMENTS = 2.0
"""Velocities beyond this many resolution elements from the fitted signal count as far."""
NEGATIVE_SNR = -4.0
"""Calibrated S/N below which a negative amplitude is warned of."""
ZERO_POINT_ELEMENTS = 0.02
"""Wavelength zero-point error without tellurics to check it, in resolution elements (common practice, no
source)."""


@dataclass(frozen=True)
class Evidence:
    """What the search left: the input of the verdicts.

    Attributes
    ----------
    names : tuple of str
    velocity_km_s : array (n_velocity,)
        All velocities with sums; the null of an extracted spectrum reaches beyond the searched ones.
    searched : slice
        Those that were searched.
    target : Sums
        One position.
    gram : array (n_molecule, n_velocity, n_molecule, n_velocity)
        Full information matrix at the target.
    nulls : Sums or None
        Null positions; None for an extracted spectrum.
    position_correlation : array (n_null, n_null)
    n_positions : int
        Positions searched: 1 unless blind.
    resolution_km_s : float
    zero_point_err_km_s : float
        Of the wavelengths, NaN where nothing tells.
    systemic_velocity_km_s : float or None
    """

    names: tuple[str, ...]
    velocity_km_s: NDArray[np.float64]
    searched: slice
    target: Sums
    gram: NDArray[np.float64]
    nulls: Sums | None
    position_correlation: NDArray[np.float64]
    n_positions: int
    resolution_km_s: float
    zero_point_err_km_s: float
    systemic_velocity_km_s: float | None

    @property
    def step_km_s(self) -> float:
        """Velocity step."""
        return float(self.velocity_km_s[1] - self.velocity_km_s[0]) if self.velocity_km_s.size > 1 else 1.0

    @property
    def searched_km_s(self) -> NDArray[np.float64]:
        """The searched velocities."""
        return self.velocity_km_s[self.searched]

    def correlation(self, m: int) -> NDArray[np.float64]:
        """Correlation of the null S/N of molecule m between velocities, (n_velocity, n_velocity)."""
        own = self.gram[m, :, m]
        scale = np.sqrt(np.maximum(np.diagonal(own), 1e-300))
        return own / scale[:, None] / scale[None, :]


@dataclass(frozen=True)
class Curves:
    """Raw and calibrated curves at the target, (n_molecule, n_velocity)."""

    raw: NDArray[np.float64]
    solo: NDArray[np.float64]
    conditional: NDArray[np.float64]
    raw_conditional: NDArray[np.float64]
    signal_free: NDArray[np.float64]
    null_raw: NDArray[np.float64] | None
    null_maxima: NDArray[np.float64]
    laws: tuple[Calibration, ...]
    conditional_laws: tuple[Calibration, ...]
    far_excess: NDArray[np.float64]


def fitted_signal(target: Sums, index: int) -> NDArray[np.float64]:
    """Amplitudes (n_molecule,) of the joint fit at one velocity; 0 outside the first set of rivals."""
    members = list(target.rivals[0])
    amplitude, _ = target.joint.subset(target.rivals[0]).joint()
    out = np.zeros(target.num.shape[1])
    # equal templates share the amplitude: their sum is the signal although neither has an error of its own
    out[members] = np.where(
        target.joint.subset(target.rivals[0]).diagonal[0, :, index] > 0, amplitude[0, :, index], 0.0
    )
    return out


def remove_signal(evidence: Evidence, index: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Raw solo and conditional S/N at the target after the joint fit at one velocity is taken out.

    Returns
    -------
    solo, conditional : arrays (n_molecule, n_velocity)
    """
    target = evidence.target
    taken = np.einsum("mvn,n->mv", evidence.gram[:, :, :, index], fitted_signal(target, index))
    with np.errstate(invalid="ignore", divide="ignore"):
        solo = (target.num[0] - taken) / np.sqrt(target.info[0])
    left = PositionSums(target.joint.num - taken[None], target.joint.info)
    return solo, conditional_snr(left, target.rivals)[0]


def _far(evidence: Evidence, index: int) -> NDArray[np.bool_]:
    distance = np.abs(evidence.velocity_km_s - evidence.velocity_km_s[index])
    return distance > FAR_ELEMENTS * evidence.resolution_km_s


def _far_law(curve: NDArray, far: NDArray[np.bool_], correlation: NDArray) -> Calibration | None:
    """Law of the far velocities of one curve; None where they hold fewer than three independent values."""
    good = far & np.isfinite(curve)
    if not good.any():
        return None
    try:
        law = calibrate(curve[good][None], correlation[np.ix_(good, good)], np.eye(1), "far velocities")
    except CoverageError:
        return None
    return Calibration(law.mean, law.std, law.nu_eff, max(1, round(law.nu_eff + 1.0)), law.family)


def _law(
    null: NDArray | None, signal_free: NDArray, far: NDArray, correlation: NDArray, positions: NDArray
) -> Calibration:
    """Null law of one statistic: companion-free positions, else far velocities, else the claimed errors.

    Far velocities of the target see what the templates do not explain of a real companion, so they would let
    a signal inflate its own null; where there are positions they only serve as a check (note null-families-differ).
    """
    if null is not None and np.isfinite(null).all(axis=1).sum() >= MIN_NULL_POSITIONS:
        return calibrate(null, correlation, positions)
    law = _far_law(signal_free, far, correlation)
    if law is None:
        # no null at all: the claimed errors, trusted like three values
        return Calibration(0.0, 1.0, 3.0, 0, "claimed")
    return law


def _excess(law: Calibration, far: Calibration | None) -> float:
    """Spread at far velocities of the target over that of the positions where significantly wider, else 1."""
    if far is None or law.family != "positions":
        return 1.0
    ratio = far.std / law.std
    return ratio if stats.f.sf(ratio**2, max(far.nu_eff, 1.0), max(law.nu_eff, 1.0)) < FAMILY_P else 1.0


def calibrated_curves(evidence: Evidence) -> Curves:
    """Calibrate the curves at the target; the fitted signal never inflates its own null."""
    raw = evidence.target.snr()[0]
    raw_conditional = evidence.target.conditional()[0]
    null = None if evidence.nulls is None else evidence.nulls.snr()
    null_conditional = None if evidence.nulls is None else evidence.nulls.conditional()
    index = _strongest_index(raw, evidence.searched)
    far = _far(evidence, index)
    signal_free, signal_free_conditional = remove_signal(evidence, index)
    laws, conditional_laws, maxima, excess = [], [], [], []
    for m in range(len(evidence.names)):
        correlation = evidence.correlation(m)
        own = None if null is None else null[:, m]
        own_conditional = None if null_conditional is None else null_conditional[:, m]
        law = _law(own, signal_free[m], far, correlation, evidence.position_correlation)
        laws.append(law)
        excess.append(_excess(law, _far_law(signal_free[m], far, correlation)))
        conditional_laws.append(
            _law(own_conditional, signal_free_conditional[m], far, correlation, evidence.position_correlation)
        )
        if own is None:
            maxima.append(np.array([np.nanmax(law.snr(signal_free[m][far]))]) if far.any() else np.zeros(0))
        else:
            calibrated = held_out(own, correlation, evidence.position_correlation)
            kept = calibrated[np.isfinite(calibrated).all(axis=1)]
            maxima.append(kept.max(axis=1) if len(kept) else np.zeros(0))
    length = max(len(one) for one in maxima)
    padded = np.full((len(maxima), length), np.nan)
    for m, one in enumerate(maxima):
        padded[m, : len(one)] = one
    return Curves(
        raw=raw,
        solo=np.stack([law.snr(raw[m]) for m, law in enumerate(laws)]),
        conditional=np.stack([law.snr(raw_conditional[m]) for m, law in enumerate(conditional_laws)]),
        raw_conditional=raw_conditional,
        signal_free=signal_free,
        null_raw=null,
        null_maxima=padded,
        laws=tuple(laws),
        conditional_laws=tuple(conditional_laws),
        far_excess=np.array(excess),
    )


def _strongest_index(raw: NDArray, searched: slice) -> int:
    """Grid velocity of the highest raw S/N of any molecule."""
    filled = np.where(np.isfinite(raw), raw, -np.inf)[:, searched]
    return int(np.unravel_index(np.argmax(filled), filled.shape)[1]) + (searched.start or 0)


def judge(
    evidence: Evidence,
    curves: Curves,
    *,
    descriptions: Sequence[str],
    units: Sequence[str],
    masked_fraction: NDArray,
    captured: float,
    scatter: float,
    position_xy: tuple[float, float] | None,
) -> tuple[tuple[MoleculeResult, ...], list[Note]]:
    """One `MoleculeResult` per template, and the doubts."""
    grid, window = evidence.searched_km_s, evidence.searched
    peaks = [peak(grid, curve[window]) for curve in curves.solo]
    strongest = peaks[int(np.argmax([height for _, height, _ in peaks]))][0]
    notes: list[Note] = []
    results = []
    for m, name in enumerate(evidence.names):
        law = curves.laws[m]
        velocity, snr, index = peaks[m]
        curvature = velocity_curvature(evidence.correlation(m), evidence.step_km_s)
        raw = float(law.mean + snr * law.scale)
        p_local = law.p_local(raw)
        span = float(np.ptp(grid))
        volume = SearchVolume(span, curvature, len(evidence.names), evidence.n_positions)
        p_global, extrapolated, exceeding = combined_global_p(
            volume.p_global(p_local), snr, curves.null_maxima[m], len(evidence.names) * evidence.n_positions
        )
        info = float(at_velocity(evidence.velocity_km_s, evidence.target.info[0, m], velocity))
        amplitude = raw / np.sqrt(info) if info > 0 else np.nan
        conditional = float(at_velocity(evidence.velocity_km_s, curves.conditional[m], velocity))
        error = _velocity_error(snr, curvature, evidence)
        systemic = evidence.systemic_velocity_km_s
        at_systemic = (
            float(at_velocity(evidence.velocity_km_s, curves.solo[m], systemic))
            if systemic is not None and grid[0] <= systemic <= grid[-1]
            else np.nan
        )
        if index in (0, grid.size - 1) and grid.size > 2 and snr > 4:
            notes.append(
                Note(
                    "velocity-at-edge",
                    f"{name} peaks at the edge of the velocity range: widen [search].velocity_km_s",
                )
            )
        # close to the signal, what the grid velocity leaves of it is negative too
        elsewhere = np.abs(grid - strongest) > evidence.resolution_km_s
        signal_free = np.where(elsewhere, law.snr(curves.signal_free[m][window]), np.inf)
        lowest = float(np.nanmin(signal_free))
        if lowest < NEGATIVE_SNR:
            at = grid[int(np.nanargmin(signal_free))]
            notes.append(
                Note(
                    "negative-amplitude",
                    f"{name} reaches S/N {lowest:.1f} at {at:.0f} km/s: no absorber does that",
                )
            )
        # where the negative side is the stronger one, the peak is its side lobe
        depth = -float(np.nanmin(curves.solo[m][window])) - max(-NEGATIVE_SNR, snr)
        results.append(
            MoleculeResult(
                name=name,
                template=descriptions[m],
                snr=snr,
                snr_raw=raw,
                snr_conditional=snr if len(evidence.names) == 1 else conditional,
                snr_at_systemic=at_systemic,
                velocity_km_s=velocity,
                velocity_err_km_s=error,
                amplitude=amplitude,
                amplitude_err=law.scale / np.sqrt(info) if info > 0 else np.nan,
                amplitude_unit=units[m],
                p_local=p_local,
                p_global=p_global,
                p_global_is_extrapolated=extrapolated,
                n_null=law.n_null,
                nu_eff=law.nu_eff,
                null=None if evidence.nulls is None else NullSummary(law.mean, law.std),
                efficiency=_efficiency(law, captured, scatter),
                masked_fraction=float(masked_fraction[m]),
                verdict=verdict(
                    p_global, exceeding, conditional if len(evidence.names) > 1 else snr, velocity, error,
                    strongest, evidence.resolution_km_s, depth,
                ),
                position_xy=position_xy,
                extra={"null_exceeding": exceeding, "null_family": law.family, "psf_captured": captured},
            )
        )  # fmt: skip
    return tuple(results), notes


def _velocity_error(snr: float, curvature: float, evidence: Evidence) -> float:
    """1 / (S/N sqrt(lambda_2)) from the template's own autocorrelation, and the zero point in quadrature."""
    if not (snr > 0 and curvature > 0):
        return float("nan")
    zero = evidence.zero_point_err_km_s
    if not np.isfinite(zero):
        zero = ZERO_POINT_ELEMENTS * evidence.resolution_km_s
    return float(np.hypot(1.0 / (snr * np.sqrt(curvature)), zero))


def _efficiency(law: Calibration, captured_squares: float, scatter: float) -> float:
    """Calibrated S/N over the limit of the same columns, white noise of the measured scatter, and the whole PSF.

    Not above one: a null sample that scatters less than the samples it is made of does so by chance.
    """
    return float(min(1.0, np.sqrt(captured_squares) * scatter / law.scale))
