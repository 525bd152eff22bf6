"""Variances that are not made of the noisy data themselves, outliers, and how claimed errors compare.

Weights taken from the noisy samples bias the null (they favour the low ones). The claimed variances
are therefore regressed on the fitted model, channel by channel over the spaxels, which keeps
detector, background and photon noise and loses the noise of the single sample.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import generic_filter1d, median_filter, uniform_filter1d

MAD_TO_SIGMA = 1.4826
MEDIAN_OF_CHI2 = 0.454936
"""Of one degree of freedom."""
OUTLIER_SIGMA = 6.0
EXCESS_SIGMA = 4.0
SMOOTH_CHANNELS = 31
RING_SPAXELS = 20
"""Spaxels at a companion's separation that stand for the noise under it."""
MIN_SPAXELS = 30
"""Fewer spaxels than this cannot support a regression over the field."""


def robust_sigma(values: NDArray, axis: int | None = None) -> NDArray:
    """1.4826 times the median absolute value (zero-mean residuals), NaN ignored."""
    return MAD_TO_SIGMA * np.nanmedian(np.abs(values), axis=axis)


def model_variance(
    claimed: NDArray[np.float32],
    usable: NDArray[np.bool_],
    model: NDArray[np.float32],
    *,
    smooth: bool = False,
) -> NDArray[np.float32]:
    """Claimed variances smoothed by a linear law in the fitted model: k_p (alpha m + beta) per channel.

    Parameters
    ----------
    claimed : float32 array (n_spaxel, n_wave)
    usable : bool array (n_spaxel, n_wave)
    model : float32 array (n_spaxel, n_wave)
        Fitted starlight.
    smooth : bool
        Smooth alpha (photon noise) and beta (background) along wavelength too: for claims that are squared
        residuals, of which a channel has too few.

    Returns
    -------
    float32 array (n_spaxel, n_wave), positive
    """
    # in relative terms, so that bright spaxels do not rule the fit of the faint ones
    scale = _spaxel_median(claimed, usable)
    inverse = np.divide(1.0, scale, out=np.zeros_like(scale), where=scale > 0).astype(np.float32)
    alpha, beta = _channel_line(claimed, model, usable, inverse)
    if smooth:
        alpha, beta = (median_filter(a, SMOOTH_CHANNELS, mode="nearest") for a in (alpha, beta))
    return _scaled_law(alpha, beta, model, claimed, usable, scale)


def _spaxel_median(values: NDArray, usable: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Median over usable channels of each spaxel, 0 where none; by rows, so that no plane is copied."""
    return np.array(
        [np.median(row[ok]) if ok.any() else 0.0 for row, ok in zip(values, usable, strict=True)], float
    )


def _channel_line(
    claimed: NDArray, model: NDArray, usable: NDArray, inverse: NDArray
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Slope and intercept of claimed against model in each channel, weights inverse^2, both kept >= 0."""
    n_wave = claimed.shape[1]
    alpha, beta = np.empty(n_wave), np.empty(n_wave)
    for begin in range(0, n_wave, 64):
        part = slice(begin, begin + 64)
        weight = usable[:, part] * inverse[:, None].astype(np.float64) ** 2
        m, v = model[:, part].astype(np.float64), claimed[:, part].astype(np.float64)
        total = weight.sum(axis=0) + 1e-300
        mean_m, mean_v = (weight * m).sum(axis=0) / total, (weight * v).sum(axis=0) / total
        spread = (weight * (m - mean_m) ** 2).sum(axis=0)
        slope = (weight * (m - mean_m) * (v - mean_v)).sum(axis=0) / np.maximum(spread, 1e-300)
        slope = np.where(spread > 0, np.maximum(slope, 0.0), 0.0)
        intercept = mean_v - slope * mean_m
        through_origin = (weight * m * v).sum(axis=0) / np.maximum((weight * m * m).sum(axis=0), 1e-300)
        negative = intercept < 0
        alpha[part] = np.where(negative, np.maximum(through_origin, 0.0), slope)
        beta[part] = np.where(negative, 0.0, intercept)
    return alpha, beta


def _scaled_law(
    alpha: NDArray, beta: NDArray, model: NDArray, claimed: NDArray, usable: NDArray, scale: NDArray
) -> NDArray[np.float32]:
    """Evaluate the law, scaled spaxel by spaxel to the claimed level, never below a tenth of it."""
    out = np.empty(model.shape, np.float32)
    for p in range(len(out)):
        if scale[p] <= 0:
            out[p] = 1.0
            continue
        law = alpha * np.maximum(model[p], 0.0) + beta
        ok = usable[p] & (law > 0)
        ratio = np.median(claimed[p][ok] / law[ok]) if ok.any() else 1.0
        out[p] = np.maximum(ratio * law, 0.1 * scale[p])
    return out


def scatter_variance(
    residual: NDArray[np.float32], usable: NDArray[np.bool_], model: NDArray[np.float32]
) -> NDArray[np.float32]:
    """Variances from the scatter of the residuals, where a file gives none.

    With a field of spaxels: the law of `model_variance` fitted to squared residuals. For one or a few
    spaxels: a running robust scatter over 51 channels.
    """
    squares = residual.astype(np.float32) ** 2
    if len(residual) >= MIN_SPAXELS:
        clipped = np.minimum(squares, 9.0 * _row_scale(residual, usable)[:, None] ** 2).astype(np.float32)
        # the law is scaled by medians, and the median of a chi-square variable is 0.455 of its mean
        return model_variance((clipped / MEDIAN_OF_CHI2).astype(np.float32), usable, model, smooth=True)
    return np.stack([running_variance(row, ok) for row, ok in zip(residual, usable, strict=True)])


def _row_scale(residual: NDArray, usable: NDArray) -> NDArray[np.float64]:
    return np.array(
        [
            MAD_TO_SIGMA * np.median(np.abs(row[ok])) if ok.any() else 0.0
            for row, ok in zip(residual, usable, strict=True)
        ]
    )


def running_variance(residual: NDArray, usable: NDArray[np.bool_], width: int = 51) -> NDArray[np.float32]:
    """Running robust variance along one spectrum, (n_wave,)."""
    values = np.where(usable, np.abs(residual), np.nan).astype(np.float64)

    def medians(line: NDArray, out: NDArray) -> None:
        windows = np.lib.stride_tricks.sliding_window_view(line, width)
        full = np.isfinite(windows).any(axis=1)
        out[:] = 0.0
        out[full] = np.nanmedian(windows[full], axis=1)

    scale = np.empty_like(values)
    generic_filter1d(values, medians, width, output=scale, mode="nearest")
    positive = scale[scale > 0]
    floor = 0.1 * np.median(positive) if positive.size else 1.0
    smooth = uniform_filter1d(np.maximum(scale, floor), width, mode="nearest")
    return (MAD_TO_SIGMA * smooth).astype(np.float32) ** 2


@dataclass(frozen=True)
class NoiseAudit:
    """Claimed errors against the scatter of the residuals.

    Attributes
    ----------
    scatter_over_claimed : float
        Median over spaxels of robust residual sigma over claimed sigma.
    neighbour_channel, neighbour_spaxel : float
        Correlation coefficient of normalised residuals with the next channel and the next spaxel in x or y.
    flagged_fraction : float
        Samples taken out as outliers.
    """

    scatter_over_claimed: float
    neighbour_channel: float
    neighbour_spaxel: float
    flagged_fraction: float


def flag_outliers(
    residual: NDArray[np.float32], weights: NDArray[np.float32], *, limit: float = OUTLIER_SIGMA
) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    """Samples beyond `limit` robust sigma of their own spaxel, and each spaxel's scatter over claimed sigma.

    The scale is never taken below the claimed one: Gaussian noise loses 2e-9 of its samples.

    Returns
    -------
    outlier : bool array (n_spaxel, n_wave)
    scale : float64 array (n_spaxel,), 1 where nothing is usable
    """
    outlier = np.zeros(residual.shape, bool)
    scale = np.ones(len(residual))
    for p, (row, weight) in enumerate(zip(residual, weights, strict=True)):
        ok = weight > 0
        if ok.sum() < 20:
            continue
        normalised = np.abs(row[ok]) * np.sqrt(weight[ok])
        scale[p] = MAD_TO_SIGMA * np.median(normalised)
        outlier[p, ok] = normalised > limit * max(scale[p], 1.0)
    return outlier, scale


def excess_scatter(
    residual: NDArray[np.float32], weights: NDArray[np.float32]
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """How far channels and spaxels scatter beyond the weights, where that is significant.

    Sky-line residuals make whole channels worse than claimed, speckle residuals whole spaxels.

    Parameters
    ----------
    residual, weights : float32 arrays (n_spaxel, n_wave)

    Returns
    -------
    channel : float32 array (n_wave,)
    spaxel : float32 array (n_spaxel,)
        Factors >= 1 on sigma; exactly 1 where the excess is below EXCESS_SIGMA times its own error, so that
        weights do not follow the noise.
    """
    n_spaxel, n_wave = residual.shape
    spaxel = np.ones(n_spaxel)
    for p, (row, weight) in enumerate(zip(residual, weights, strict=True)):
        ok = weight > 0
        if ok.sum() >= MIN_SPAXELS:
            spaxel[p] = MAD_TO_SIGMA * np.median(np.abs(row[ok]) * np.sqrt(weight[ok]))
    typical = np.median(spaxel)
    spaxel = _significant(spaxel / typical, np.count_nonzero(weights, axis=1))
    channel = np.ones(n_wave)
    for i in range(n_wave):
        ok = weights[:, i] > 0
        if ok.sum() >= MIN_SPAXELS:
            scaled = np.abs(residual[ok, i]) * np.sqrt(weights[ok, i]) / (spaxel[ok] * typical)
            channel[i] = MAD_TO_SIGMA * np.median(scaled)
    channel = _significant(channel, np.count_nonzero(weights, axis=0))
    return channel.astype(np.float32), spaxel.astype(np.float32)


def like_their_ring(
    factor: NDArray[np.float32], kept: NDArray[np.bool_], star_xy: tuple[float, float] | None
) -> NDArray[np.float32]:
    """Factors with those of excluded spaxels replaced by the typical one of kept spaxels at their separation.

    A bright companion's own lines are not noise, but the noise under it is that of its surroundings: left at
    one, the target would scatter more than the nulls that calibrate it (measured: 1.57 for an excess of 1.6).

    Parameters
    ----------
    factor : float32 array (n_spaxel,)
    kept : bool array (ny, nx)
    star_xy : (x, y) or None
        None: the typical factor of the field.
    """
    flat = kept.ravel()
    if flat.all() or not flat.any():
        return factor
    out = factor.copy()
    if star_xy is None:
        out[~flat] = np.median(factor[flat])
        return out
    rows, columns = np.indices(kept.shape)
    separation = np.hypot(columns - star_xy[0], rows - star_xy[1]).ravel()
    own = np.flatnonzero(flat)
    for p in np.flatnonzero(~flat):
        nearest = own[np.argsort(np.abs(separation[own] - separation[p]), kind="stable")[:RING_SPAXELS]]
        out[p] = np.median(factor[nearest])
    return out


def _significant(factor: NDArray, count: NDArray) -> NDArray[np.float64]:
    """Factors above one by more than EXCESS_SIGMA errors of a scaled MAD (1.17 / sqrt(n)), others one."""
    limit = 1.0 + EXCESS_SIGMA * 1.17 / np.sqrt(np.maximum(count, 1))
    return np.where(factor > limit, factor, 1.0)


def audit(
    residual: NDArray[np.float32],
    weights: NDArray[np.float32],
    shape: tuple[int, int],
    scale: NDArray[np.float64],
    flagged_fraction: float,
) -> NoiseAudit:
    """Scatter over claimed errors and the correlation with the next channel and spaxel.

    Parameters
    ----------
    residual, weights : float32 arrays (n_spaxel, n_wave)
    shape : (ny, nx)
    scale : array (n_spaxel,)
        From `flag_outliers`.
    """
    ny, nx = shape
    good = np.count_nonzero(weights, axis=1) > 0.5 * np.max(np.count_nonzero(weights, axis=1))
    rows = np.flatnonzero(good)[:: max(1, int(good.sum() // 400))]
    channel = [_correlation(residual[p], weights[p], residual[p], weights[p], 1) for p in rows]
    spaxel = [
        _correlation(residual[p], weights[p], residual[p + step], weights[p + step], 0)
        for p in rows
        for step, inside in ((1, p % nx < nx - 1), (nx, p // nx < ny - 1))
        if inside and good[p + step]
    ]
    return NoiseAudit(
        float(np.median(scale[good])),
        float(np.mean(channel)) if channel else float("nan"),
        float(np.mean(spaxel)) if spaxel else float("nan"),
        flagged_fraction,
    )


def _correlation(a: NDArray, weight_a: NDArray, b: NDArray, weight_b: NDArray, lag: int) -> float:
    """Mean product of normalised residuals over their mean squares."""
    x = a * np.sqrt(weight_a)
    y = b * np.sqrt(weight_b)
    x, y = (x[:-lag], y[lag:]) if lag else (x, y)
    both = (x != 0) & (y != 0)
    if both.sum() < 20:
        return 0.0
    return float(np.sum(x[both] * y[both]) / np.sqrt(np.sum(x[both] ** 2) * np.sum(y[both] ** 2)))
