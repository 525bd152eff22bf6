"""From raw S/N to a calibrated one, and from that to local and global false-alarm probabilities.

A null sample holds raw S/N at companion-free positions (same PSF footprint and mask) over all searched
velocities, or, for an extracted spectrum, at velocities far from the fitted signal after that signal
was taken out. Its mean and standard deviation calibrate; its effective size nu_eff decides how far
the tail is trusted (Student's t).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from xcorr.errors import CoverageError

MIN_NULL_POSITIONS = 6
TARGET_KEEP_OUT_FWHM = 2.0
"""Null positions stay this far from the target. The filters of a Gaussian PSF then overlap by 0.4 per cent: a companion
of S/N 100 adds 0.4 to the nearest of them."""
SNR_CEILING_P = 1e-300
"""Probabilities below this are reported as this."""
FAMILY_P = 0.01
"""Two null families differ when an F-test says so at this level."""


def student_t_threshold(false_positive: float, n_null: int) -> float:
    """Threshold, in standard deviations of `n_null` null values, of a given false-positive probability.

    Mawet et al. 2014 (ApJ 792, 97), eq. 9: the t quantile of n_null - 1 degrees of freedom times
    sqrt(1 + 1/n_null).

    Parameters
    ----------
    false_positive : float
        One-sided probability, 0 < p < 1.
    n_null : int
        Number of independent null values, >= 2 (2 pi r - 1 resolution elements at r).
    """
    if n_null < 2 or not 0.0 < false_positive < 1.0:
        raise CoverageError(
            "a Student threshold needs two null values and a probability between 0 and 1",
            f"n_null = {n_null}, p = {false_positive}",
        )
    return float(stats.t.isf(false_positive, n_null - 1) * np.sqrt(1.0 + 1.0 / n_null))


def global_p(p_local: float, n_trials: float) -> float:
    """Sidak: probability that the best of `n_trials` independent looks reaches `p_local`."""
    return float(-np.expm1(n_trials * np.log1p(-min(p_local, 1.0 - 1e-16))))


def davies_p(level: float, span: float, curvature: float) -> float:
    """Bound on P(max over a span > level) of a unit Gaussian process.

    Davies 1977 (Biometrika 64, 247), eq. 3.7, from the expected upcrossings of Rice 1945.

    Parameters
    ----------
    level : float
        Standard deviations.
    span : float
        Searched range, km/s.
    curvature : float
        lambda_2, minus the second derivative of the autocorrelation at 0, (km/s)^-2.
    """
    upcrossings = span * np.sqrt(max(curvature, 0.0)) / (2.0 * np.pi) * np.exp(-0.5 * level**2)
    return float(min(1.0, stats.norm.sf(level) + upcrossings))


def effective_size(*correlations: NDArray) -> float:
    """nu_eff = tr(G)^2 / tr(G^2) of a sample whose covariance is the Kronecker product of these."""
    size = 1.0
    for matrix in correlations:
        size *= np.trace(matrix) ** 2 / np.sum(matrix**2)
    return float(size)


def velocity_curvature(correlation: NDArray, step_km_s: float) -> float:
    """lambda_2 from the correlation of neighbouring velocities: 2 (1 - rho) / step^2, (km/s)^-2."""
    if len(correlation) < 2:
        return 0.0
    rho = np.clip(np.diagonal(correlation, 1), -1.0, 1.0)
    return float(np.mean(2.0 * (1.0 - rho)) / step_km_s**2)


@dataclass(frozen=True)
class Calibration:
    """Null law of one statistic.

    Attributes
    ----------
    mean, std : float
        Of the raw S/N in the null sample.
    nu_eff : float
        Effective number of independent null values, less one for the mean.
    n_null : int
        Number of null searches (positions, or far velocities of an extracted spectrum).
    family : str
        "positions", "far velocities", or "claimed" where no null exists.
    """

    mean: float
    std: float
    nu_eff: float
    n_null: int
    family: str

    @property
    def scale(self) -> float:
        """Raw S/N per unit of calibrated S/N: unit variance for a new null value at the same footing.

        A new value is t-distributed with nu_eff degrees of freedom, whose standard deviation is
        sqrt(nu / (nu - 2)); it is divided out, so that nulls have unit variance and real signals stay
        proportional to their raw S/N. The tail is left to `p_local`.
        """
        nu = max(self.nu_eff, 3.0)
        return self.std * np.sqrt(1.0 + 1.0 / nu) * np.sqrt(nu / (nu - 2.0))

    def snr(self, raw: NDArray | float) -> NDArray:
        """Calibrated S/N."""
        return (np.asarray(raw, float) - self.mean) / self.scale

    def p_local(self, raw: float) -> float:
        """One-sided Student probability of a raw S/N at a fixed position and velocity."""
        nu = max(self.nu_eff, 3.0)
        value = (raw - self.mean) / (self.std * np.sqrt(1.0 + 1.0 / nu))
        return float(max(stats.t.sf(value, nu), SNR_CEILING_P))


def calibrate(
    null: NDArray, velocity_correlation: NDArray, position_correlation: NDArray, family: str = "positions"
) -> Calibration:
    """Mean, spread and effective size of a null sample.

    Parameters
    ----------
    null : array (n_position, n_velocity)
        Raw S/N, NaN where there is none.
    velocity_correlation : array (n_velocity, n_velocity)
    position_correlation : array (n_position, n_position)

    Raises
    ------
    CoverageError
        If the sample holds fewer than three independent values.
    """
    used = np.isfinite(null).all(axis=1)
    values = null[used]
    size = (
        effective_size(velocity_correlation, position_correlation[np.ix_(used, used)]) if used.any() else 0.0
    )
    if size < 3.0:
        raise CoverageError(
            "too few independent null values to calibrate the S/N",
            f"{size:.1f} from {int(used.sum())} positions",
            "search a wider velocity range or a larger field",
        )
    # divisor: the mean takes one of `size` independent values
    mean = float(values.mean())
    std = float(np.sqrt(np.mean((values - mean) ** 2) * size / (size - 1.0)))
    return Calibration(mean, std, size - 1.0, int(used.sum()), family)


def held_out(null: NDArray, velocity_correlation: NDArray, position_correlation: NDArray) -> NDArray:
    """Null curves calibrated by all other positions, (n_position, n_velocity); NaN where not possible."""
    out = np.full(null.shape, np.nan)
    for i in range(len(null)):
        others = np.delete(np.arange(len(null)), i)
        if others.size < 2:
            continue
        try:
            law = calibrate(null[others], velocity_correlation, position_correlation[np.ix_(others, others)])
        except CoverageError:
            continue
        out[i] = law.snr(null[i])
    return out


@dataclass(frozen=True)
class SearchVolume:
    """Everything that was searched, for the global probability.

    Attributes
    ----------
    span_km_s : float
    curvature : float
        lambda_2 of the template on these data, (km/s)^-2.
    n_templates : int
    n_positions : int
        1 where the position was given; in a blind search every position of the map, which counts overlapping
        ones as independent and is on the safe side.
    """

    span_km_s: float
    curvature: float
    n_templates: int
    n_positions: int

    def p_global(self, p_local: float) -> float:
        """Analytic global p: Davies over velocity, Sidak over positions and templates."""
        level = float(stats.norm.isf(p_local))
        over_velocity = davies_p(level, self.span_km_s, self.curvature)
        return global_p(over_velocity, self.n_templates * self.n_positions)


def combined_global_p(
    analytic: float, snr: float, null_maxima: NDArray, n_trials: int
) -> tuple[float, bool, int]:
    """Global p that never claims less than the null maxima show.

    Parameters
    ----------
    analytic : float
    snr : float
        Calibrated S/N of the claim.
    null_maxima : array (n_null,)
        Maximum over velocity of each held-out, calibrated null search.
    n_trials : int
        Further trials (templates x positions) that a null maximum does not contain.

    Returns
    -------
    p : float
    extrapolated : bool
        True if p is below what the nulls alone can show.
    exceeding : int
        Null searches at least as high.
    """
    maxima = null_maxima[np.isfinite(null_maxima)]
    exceeding = int(np.sum(maxima >= snr))
    empirical = global_p((1 + exceeding) / (1 + maxima.size), n_trials)
    if exceeding:
        return max(analytic, empirical), False, exceeding
    return analytic, bool(analytic < empirical), 0


def ring_positions(
    shape: tuple[int, int],
    usable: NDArray[np.bool_],
    centre_xy: tuple[float, float] | None,
    target_xy: tuple[float, float],
    sources: tuple[tuple[float, float, float], ...],
    fwhm: float,
    *,
    want: int = 60,
) -> NDArray[np.float64]:
    """Companion-free positions at the target's separation first, then at the nearest other separations.

    Parameters
    ----------
    shape : (ny, nx)
    usable : bool array (ny, nx)
    centre_xy : (x, y) or None
        The star; None: a grid over the whole field.
    target_xy : (x, y)
    sources : tuple of (x, y, radius)
    fwhm : float
        Pixels; neighbours are one FWHM apart.
    want : int
        Rings are added until this many are found or the field is exhausted.

    Returns
    -------
    float64 array (n_position, 2)
    """
    found: list[tuple[float, float]] = []
    if centre_xy is None:
        rings = [_grid(shape, target_xy, fwhm)]
    else:
        separation = float(np.hypot(target_xy[0] - centre_xy[0], target_xy[1] - centre_xy[1]))
        offsets = sorted(np.arange(-40, 41), key=abs)
        radii = [separation + k * fwhm for k in offsets if separation + k * fwhm > 1.5 * fwhm or k == 0]
        rings = [_ring(centre_xy, radius, target_xy, fwhm) for radius in radii]
    for ring in rings:
        found += [
            position for position in ring if _is_free(position, shape, usable, target_xy, sources, fwhm)
        ]
        if len(found) >= want:
            break
    return np.array(found, float).reshape(-1, 2)


def _ring(
    centre: tuple[float, float], radius: float, target: tuple[float, float], fwhm: float
) -> list[tuple[float, float]]:
    """Positions one FWHM apart on a circle, phased by the target's angle."""
    count = max(1, int(2.0 * np.pi * radius / fwhm))
    start = np.arctan2(target[1] - centre[1], target[0] - centre[0])
    angles = start + 2.0 * np.pi * np.arange(count) / count
    return [(centre[0] + radius * np.cos(a), centre[1] + radius * np.sin(a)) for a in angles]


def _grid(shape: tuple[int, int], target: tuple[float, float], fwhm: float) -> list[tuple[float, float]]:
    """Grid over the field with the target's sub-pixel phase."""
    ny, nx = shape
    step = max(1.0, np.round(fwhm))
    xs = np.arange(target[0] % step, nx, step)
    ys = np.arange(target[1] % step, ny, step)
    return [(float(x), float(y)) for y in ys for x in xs]


def _is_free(
    position: tuple[float, float],
    shape: tuple[int, int],
    usable: NDArray[np.bool_],
    target: tuple[float, float],
    sources: tuple[tuple[float, float, float], ...],
    fwhm: float,
) -> bool:
    """Inside the field by a FWHM, well away from the target and other sources, on usable spaxels."""
    ny, nx = shape
    x, y = position
    if not (0.5 * fwhm <= x <= nx - 1 - 0.5 * fwhm and 0.5 * fwhm <= y <= ny - 1 - 0.5 * fwhm):
        return False
    if np.hypot(x - target[0], y - target[1]) < TARGET_KEEP_OUT_FWHM * fwhm:
        return False
    if any(np.hypot(x - sx, y - sy) < radius + 1.5 * fwhm for sx, sy, radius in sources):
        return False
    low_x, low_y = round(x) - 1, round(y) - 1
    around = usable[max(low_y, 0) : low_y + 3, max(low_x, 0) : low_x + 3]
    return bool(around.mean() > 0.7)


def peak(velocity_km_s: NDArray, curve: NDArray) -> tuple[float, float, int]:
    """Maximum of a curve refined by a parabola through three points.

    Returns
    -------
    velocity : float
        km/s.
    height : float
    index : int
        Grid point of the maximum.
    """
    filled = np.where(np.isfinite(curve), curve, -np.inf)
    i = int(np.argmax(filled))
    if i in (0, len(curve) - 1) or not np.all(np.isfinite(curve[i - 1 : i + 2])):
        return float(velocity_km_s[i]), float(filled[i]), i
    left, middle, right = curve[i - 1 : i + 2]
    bend = left - 2.0 * middle + right
    if bend >= 0:
        return float(velocity_km_s[i]), float(middle), i
    shift = float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5))
    step = velocity_km_s[i + 1] - velocity_km_s[i]
    return float(velocity_km_s[i] + shift * step), float(middle - 0.25 * (left - right) * shift), i


def at_velocity(velocity_km_s: NDArray, curves: NDArray, value_km_s: float) -> NDArray:
    """Quadratic interpolation of curves (..., n_velocity) at one velocity."""
    n = velocity_km_s.size
    if n < 3:
        return curves[..., int(np.argmin(np.abs(velocity_km_s - value_km_s)))]
    step = velocity_km_s[1] - velocity_km_s[0]
    i = int(np.clip(np.round((value_km_s - velocity_km_s[0]) / step), 1, n - 2))
    x = (value_km_s - velocity_km_s[i]) / step
    low, middle, high = curves[..., i - 1], curves[..., i], curves[..., i + 1]
    return middle + 0.5 * x * (high - low) + 0.5 * x**2 * (high - 2.0 * middle + low)


def verdict(
    p_global: float,
    exceeding: int,
    snr_conditional: float,
    velocity_km_s: float,
    velocity_err_km_s: float,
    strongest_velocity_km_s: float,
    resolution_km_s: float,
    negative_excess: float = 0.0,
) -> str:
    """The four verdicts of the summary.

    detected: p_global <= 2.9e-7, no null as high, conditional S/N >= 3, velocity within max(3 sigma, half a
    resolution element) of the strongest molecule; ambiguous: p_global <= 1.35e-3 but one of the other two
    tests fails; evidence: p_global <= 1.35e-3; not detected otherwise.
    """
    if not p_global <= 1.35e-3:
        return "not detected"
    # without an error (a single velocity, no curvature) half a resolution element decides
    tolerance = float(np.nanmax([3.0 * velocity_err_km_s, 0.5 * resolution_km_s]))
    agrees = abs(velocity_km_s - strongest_velocity_km_s) <= tolerance
    side_lobe = negative_excess > 0.0
    if not (agrees and snr_conditional >= 3.0) or side_lobe:
        return "ambiguous"
    return "detected" if p_global <= 2.9e-7 and exceeding == 0 else "evidence"
