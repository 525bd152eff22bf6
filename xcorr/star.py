"""The star's spectrum: from the brightest spaxels of the exposure, by weighted iteration.

The spectrum multiplies every starlight column, so its own noise is common to all spaxels and the
companion's light in it lowers the amplitude; both are kept small here and are reported.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.starlight import fit_spaxels, nuisance_model

BRIGHT_FRACTION = 0.05
"""Spaxels brighter than this fraction of the brightest usable one make the reference."""
ITERATIONS = 4


@dataclass(frozen=True)
class StarSpectrum:
    """The reference spectrum s and where it came from.

    Attributes
    ----------
    flux : float64 array (n_wave,)
        Mean one over usable channels; 0 where it is not known.
    variance : float64 array (n_wave,)
    scale : float
        Data units per unit of `flux`, summed over the reference spaxels.
    spaxels : int64 array (n_used,)
        Indices y * nx + x; empty for a file or none.
    """

    flux: NDArray[np.float64]
    variance: NDArray[np.float64]
    scale: float
    spaxels: NDArray[np.int64]

    @property
    def known(self) -> NDArray[np.bool_]:
        """Channels where the star is measured, (n_wave,)."""
        return self.flux != 0


def choose_spaxels(
    white: NDArray, usable_fraction: NDArray, excluded: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Brightest spaxels without the companion and other sources.

    Parameters
    ----------
    white : array (ny, nx)
        Mean image.
    usable_fraction : array (ny, nx)
        Fraction of usable channels; saturated cores fall out by their quality flags.
    excluded : bool array (ny, nx)

    Raises
    ------
    InputError
        If no usable spaxel is left.
    """
    candidates = (usable_fraction > 0.8) & ~excluded & np.isfinite(white)
    if not np.any(candidates):
        raise InputError(
            "no usable spaxel to take the star's spectrum from",
            "all masked, excluded or flagged in over a fifth of their channels",
            "give [starlight].reference as a file, or check the quality plane",
        )
    peak = np.max(white[candidates])
    if not peak > 0:
        raise InputError(
            "the brightest spaxels hold no positive flux",
            f"a maximum of {peak:.3g}",
            'set [starlight].reference to a file or to "none"',
        )
    return np.flatnonzero((candidates & (white >= BRIGHT_FRACTION * peak)).ravel())


def extract_star(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    wavelength_um: NDArray,
    order: NDArray,
    spaxels: NDArray[np.int64],
    *,
    knots: int,
) -> StarSpectrum:
    """Common spectrum of the reference spaxels, each with its own smooth modulation.

    Parameters
    ----------
    spectra, weights : float32 arrays (n_spaxel, n_wave)
    wavelength_um, order : arrays (n_wave,)
    spaxels : int array
        Which of them make the reference.
    knots : int
        Splines of the modulation.

    Notes
    -----
    Alternates y_p ~ s * m_p with m_p in the splines and s = sum_p w m_p y_p / sum_p w m_p^2, so that a masked
    sample leaves no step in s.
    """
    data, weight = spectra[spaxels], weights[spaxels]
    modulation = np.maximum(np.average(data, axis=1, weights=weight + 1e-30 * weight.max()), 1e-30)[:, None]
    modulation = np.broadcast_to(modulation, data.shape).astype(np.float64)
    star = np.ones(wavelength_um.size)
    for iteration in range(ITERATIONS + 1):
        energy = np.sum(weight * modulation**2, axis=0)
        product = np.sum(weight * modulation * data, axis=0)
        star = np.divide(product, energy, out=np.zeros_like(product), where=energy > 0)
        # a channel where the star has next to no light carries no starlight column
        star[star < 1e-4 * np.median(star[star > 0])] = 0.0
        if iteration == ITERATIONS:
            break
        kept = (weight * (star > 0)).astype(np.float32)
        nuisance = nuisance_model(wavelength_um, order, star, knots=knots)
        residual = fit_spaxels(data, kept, nuisance).residual
        model = np.where(kept > 0, data - residual, 0.0)
        modulation = np.divide(model, star, out=np.zeros_like(model, dtype=np.float64), where=star > 0)
    variance = np.divide(1.0, energy, out=np.zeros_like(energy), where=energy > 0)
    mean = float(star[star > 0].mean())
    total = float(np.sum(modulation[:, star > 0].mean(axis=1)))
    return StarSpectrum(star / mean, variance / mean**2, mean * total, spaxels)


def companion_share(profile_sum: float, contrast: float, halo: float) -> float:
    """Companion light in the reference, eps = contrast * (its PSF in the reference spaxels) / (star there).

    Parameters
    ----------
    profile_sum : float
        Sum of the companion's flux-normalised PSF over the reference spaxels.
    contrast : float
        Companion-to-star flux ratio.
    halo : float
        Fraction of the star's flux in the reference spaxels.
    """
    return contrast * profile_sum / halo if halo > 0 else np.inf
