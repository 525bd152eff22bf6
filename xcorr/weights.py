"""Weights of an exposure: from claimed errors and the fitted model, never from the noisy samples themselves."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import Note
from xcorr.noise import MIN_SPAXELS, NoiseAudit, model_variance, scatter_variance
from xcorr.starlight import Nuisance, fit_spaxels

COMMON_SPREAD = 1.3
"""Scatter of sums over the field, in units of independent errors, from which a common residual is fitted."""


def first_weights(
    spectra: NDArray[np.float32], good: NDArray[np.bool_], claimed: NDArray[np.float32] | None
) -> NDArray[np.float32]:
    """Weights to begin with: claimed variances, or one level a spaxel from channel-to-channel differences."""
    if claimed is not None:
        return np.where(good, 1.0 / np.maximum(claimed, np.float32(1e-30)), np.float32(0.0))
    weights = np.zeros(spectra.shape, np.float32)
    for p, (row, ok) in enumerate(zip(spectra, good, strict=True)):
        if ok.sum() > 20:
            step = np.diff(row[ok].astype(np.float64))
            level = 1.4826 * np.median(np.abs(step)) / np.sqrt(2.0)
            weights[p, ok] = 1.0 / max(level**2, 1e-30)
    return weights


def model_weights(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    claimed: NDArray[np.float32] | None,
    nuisance: Nuisance,
) -> NDArray[np.float32]:
    """One iteration: weights from the fitted model instead of from the noisy data."""
    good = weights > 0
    if claimed is not None and len(spectra) < MIN_SPAXELS:
        return weights
    residual = fit_spaxels(spectra, weights, nuisance).residual
    bad = ~good
    if claimed is None:
        model = spectra - residual
        model[bad] = 0.0
        variance = scatter_variance(residual, good, model)
    else:
        # planes are reused here and below: this is where the memory peaks
        model = np.subtract(spectra, residual, out=residual)
        model[bad] = 0.0
        variance = model_variance(claimed, good, model)
    np.maximum(variance, np.float32(1e-30), out=variance)
    np.divide(np.float32(1.0), variance, out=variance)
    variance[bad] = 0.0
    return variance


def with_common_residual(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    nuisance: Nuisance,
    kept: NDArray[np.bool_],
    notes: list[Note],
) -> Nuisance:
    """The residual spectrum that all spaxels share, as one more column, where it is there.

    Without a star that carries it, what the sky subtraction left is common to the field and adds up in a PSF sum.
    A median over companion-free spaxels: a companion that nobody told of is a small minority.
    """
    residual = fit_spaxels(spectra, weights, nuisance).residual
    good = (weights > 0) & kept[:, None]
    count = good.sum(axis=0)
    enough = count >= MIN_SPAXELS
    if not enough.any():
        return nuisance
    normalised = np.where(good, residual * np.sqrt(weights), np.nan)[:, enough]
    spread = np.sqrt(np.nanmean(np.square(np.nansum(normalised, axis=0)) / count[enough]))
    if spread < COMMON_SPREAD:
        return nuisance
    common = np.zeros(spectra.shape[1])
    common[enough] = np.nanmedian(np.where(good, residual, np.nan)[:, enough], axis=0)
    notes.append(
        Note(
            "common-residual",
            f"the field shares a residual spectrum (sums over spaxels scatter {spread:.1f} times their error); it is "
            "fitted in every spaxel",
        )
    )
    return replace(nuisance, extras=np.vstack([nuisance.extras, common]))


def audit_notes(audited: NoiseAudit, cube: Cube) -> list[Note]:
    notes = []
    ratio = audited.scatter_over_claimed
    if cube.variance is not None and not 0.8 <= ratio <= 1.25:
        notes.append(
            Note(
                "errors-differ",
                f"residuals of {cube.source or 'the exposure'} scatter {ratio:.2f} times the claimed errors; "
                "significance is calibrated on nulls, not on the claim",
            )
        )
    correlations = [f"{audited.neighbour_channel:.2f} with the next channel"]
    if np.isfinite(audited.neighbour_spaxel):
        correlations.append(f"{audited.neighbour_spaxel:.2f} with the next spaxel")
    if audited.neighbour_channel > 0.1 or audited.neighbour_spaxel > 0.1:
        notes.append(
            Note(
                "noise-correlated",
                f"residuals correlate by {' and '.join(correlations)}; the null calibration takes this up",
            )
        )
    return notes
