"""Broadening of a spectrum on its own grid: Gaussian line-spread function and stellar rotation."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xcorr.errors import InputError
from xcorr.kernels.banded_lsf import gaussian_gather, rotation_gather, trapezoid_cells
from xcorr.spectral.channels import ascending
from xcorr.units import FWHM_PER_SIGMA, LIGHT_KM_S, to_plain

# Gaussian kernels end here: 6e-7 of the area lies beyond, and the rest is renormalised.
REACH_SIGMA = 5.0
# Below two samples per FWHM a sampled Gaussian has neither the right width nor area.
SAMPLES_PER_FWHM = 2.0


def sigma_um(wavelength_um: NDArray[np.float64], resolving_power: Any) -> NDArray[np.float64]:
    """Gaussian sigma in micrometre, R = lambda / FWHM, one per wavelength.

    Raises
    ------
    InputError
        R not positive and finite, or of the wrong length.
    """
    resolving = to_plain(resolving_power, "")
    if resolving.shape not in ((), wavelength_um.shape):
        raise InputError("resolving power must be one number or one per sample", f"shape {resolving.shape}")
    if not np.all(np.isfinite(resolving)) or np.any(resolving <= 0):
        raise InputError("resolving power must be positive", f"{np.min(resolving)}", "give R = lambda/FWHM")
    return np.ascontiguousarray(wavelength_um / (resolving * FWHM_PER_SIGMA))


def check_sampling(sigma: NDArray[np.float64], step: NDArray[np.float64]) -> None:
    """Raise InputError where the grid has fewer than two samples per FWHM."""
    sampling = float(np.min(sigma * FWHM_PER_SIGMA / step))
    if sampling < SAMPLES_PER_FWHM * (1.0 - 1e-6):
        raise InputError(
            "the wavelength grid is too coarse for the resolving power",
            f"{sampling:.2f} samples per FWHM",
            f"use a grid with at least {SAMPLES_PER_FWHM:g}",
        )


def convolve_lsf(wavelength_um: Any, flux: ArrayLike, resolving_power: Any) -> NDArray[np.float64]:
    """Convolve a spectrum with a Gaussian line-spread function on its own grid.

    The width belongs to the output sample, FWHM = lambda / R. Within five sigma of the ends the kernel is cut
    and renormalised. FWHM = 2.3548 sigma; at R = 4000 that is 74.95 km/s.

    Parameters
    ----------
    wavelength_um : array_like or Quantity (n,)
        Ascending wavelengths, micrometre, any spacing with at least two samples per FWHM.
    flux : array_like (n,)
        Flux density, finite.
    resolving_power : float or array_like (n,)
        R = lambda / FWHM.

    Returns
    -------
    float64 array (n,)

    Raises
    ------
    InputError
        Grid, flux or R unusable, or the grid too coarse.
    """
    wavelength, values = _spectrum(wavelength_um, flux)
    sigma = sigma_um(wavelength, resolving_power)
    cell = trapezoid_cells(wavelength)
    check_sampling(sigma[1:-1], cell[1:-1])
    out = np.empty_like(values)
    gaussian_gather(wavelength, cell, values, sigma, REACH_SIGMA, out)
    return out


def rotational_broadening(
    wavelength_um: Any, flux: ArrayLike, vsini_km_s: float, epsilon: float = 0.6
) -> NDArray[np.float64]:
    """Broaden a spectrum by rotation with Gray's profile and linear limb darkening.

    Gray, The Observation and Analysis of Stellar Photospheres, ch. 18: with x = c dlambda / (lambda v sin i),
    G(x) = [2 (1 - eps) sqrt(1 - x^2) + (pi eps / 2)(1 - x^2)] / [pi (1 - eps / 3)].

    The profile is integrated over the cell of each sample, which adds h^2/12 to its variance (h the sample
    step); an unresolved rotation leaves the spectrum as it is. Limb darkening does not vary with wavelength.

    Parameters
    ----------
    wavelength_um : array_like or Quantity (n,)
        Ascending wavelengths, micrometre.
    flux : array_like (n,)
        Flux density, finite.
    vsini_km_s : float or Quantity
        Projected equatorial velocity, km/s; 0 returns a copy.
    epsilon : float
        Linear limb-darkening coefficient, 0 to 1.

    Returns
    -------
    float64 array (n,)

    Raises
    ------
    InputError
        Negative velocity, or epsilon outside 0..1.
    """
    wavelength, values = _spectrum(wavelength_um, flux)
    vsini = float(to_plain(vsini_km_s, "km/s"))
    if not 0.0 <= vsini < LIGHT_KM_S:
        raise InputError("v sin i must be zero or positive", f"{vsini:g} km/s", "give km/s")
    if not 0.0 <= epsilon <= 1.0:
        raise InputError("limb darkening must lie between 0 and 1", f"{epsilon:g}")
    out = values.copy()
    if vsini > 0.0:
        middle = 0.5 * (wavelength[1:] + wavelength[:-1])
        bounds = np.concatenate([wavelength[:1], middle, wavelength[-1:]])
        rotation_gather(wavelength, bounds, values, vsini / LIGHT_KM_S, float(epsilon), out)
    return out


def _spectrum(wavelength_um: Any, flux: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Checked wavelengths and flux, contiguous float64."""
    wavelength = ascending(wavelength_um, at_least=3)
    values = np.ascontiguousarray(to_plain(flux, "") if not hasattr(flux, "unit") else flux.value, np.float64)
    if values.shape != wavelength.shape:
        raise InputError("flux must have one value per wavelength", f"{values.shape} for {wavelength.size}")
    if not np.all(np.isfinite(values)):
        raise InputError(
            "flux holds non-finite values", "NaN or inf", "interpolate over them or cut them off"
        )
    return wavelength, values
