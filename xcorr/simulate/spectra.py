"""High-resolution spectra to detector channels: the simulator's own Doppler, LSF and pixel code.

Nothing here is shared with the search. A spectrum is a set of samples joined by straight lines;
it is averaged over cells by its exact cumulative integral, smoothed by a Gaussian whose transfer
function is applied with an FFT on a grid on which the LSF has a constant width, and averaged over
the channels by the same cumulative integral. (The search multiplies by a banded matrix instead.)
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import CoverageError, InputError
from xcorr.units import FWHM_PER_SIGMA, LIGHT_KM_S

Array = NDArray[np.float64]

# Room beside the channels for 1000 km/s and the wings of the LSF.
MARGIN = 0.006


def log_grid(low_um: float, high_um: float, resolving_power: float) -> Array:
    """Wavelengths (um) from below `low_um` to above `high_um`, constant step 1/R in ln(wavelength)."""
    low, high = np.log(low_um * (1.0 - MARGIN)), np.log(high_um * (1.0 + MARGIN))
    return np.exp(np.linspace(low, high, int(np.ceil((high - low) * resolving_power)) + 1))


def edges_of(centres: Array) -> Array:
    """Edges (n + 1,) half-way between centres (n,), the outer ones mirrored."""
    inner = 0.5 * (centres[1:] + centres[:-1])
    first, last = 2.0 * centres[0] - inner[0], 2.0 * centres[-1] - inner[-1]
    return np.concatenate([[first], inner, [last]])


def cell_means(x: Array, y: Array, edges: Array) -> Array:
    """Mean over each cell of the function that joins (x, y) with straight lines.

    Parameters
    ----------
    x, y : arrays (m,)
        Samples, x strictly ascending. Outside, the end values continue.
    edges : array (n + 1,)

    Returns
    -------
    array (n,)
        Exact up to rounding: sums times cell widths reproduce the integral.
    """
    step = np.diff(x)
    cumulative = np.concatenate([[0.0], np.cumsum(0.5 * step * (y[1:] + y[:-1]))])
    left = np.clip(np.searchsorted(x, edges, side="right") - 1, 0, x.size - 2)
    inside = np.clip(edges, x[0], x[-1])
    along = inside - x[left]
    slope = (y[left + 1] - y[left]) / step[left]
    integral = cumulative[left] + along * (y[left] + 0.5 * slope * along)
    integral += np.minimum(edges - x[0], 0.0) * y[0] + np.maximum(edges - x[-1], 0.0) * y[-1]
    return np.diff(integral) / np.diff(edges)


def doppler_factor(velocity_km_s: float, barycentric_velocity_km_s: float = 0.0) -> float:
    """Observed over rest wavelength for a source velocity in the barycentric frame.

    Relativistic, (1 + z_observed) = (1 + z_velocity) / (1 + z_B): z_B is what has to be ADDED to a
    measured velocity.
    """
    beta = velocity_km_s / LIGHT_KM_S
    return float(np.sqrt((1.0 + beta) / (1.0 - beta)) / (1.0 + barycentric_velocity_km_s / LIGHT_KM_S))


def rotate(wavelength_um: Array, flux: Array, vsini_km_s: float, limb_darkening: float = 0.6) -> Array:
    """Broaden a spectrum on a log grid by rotation (Gray, The Observation and Analysis of Stellar
    Photospheres, 3rd ed., eq. 18.14; from memory).

    The kernel is integrated over each grid step, so that a vsini below the step does nothing.
    """
    if vsini_km_s <= 0:
        return flux
    step_km_s = LIGHT_KM_S * np.log(wavelength_um[1] / wavelength_um[0])
    half = int(np.ceil(vsini_km_s / step_km_s)) + 1
    fine = 64
    x = (np.arange((2 * half + 1) * fine) + 0.5) / fine - half - 0.5
    inside = np.maximum(1.0 - (x * step_km_s / vsini_km_s) ** 2, 0.0)
    shape = 2.0 * (1.0 - limb_darkening) * np.sqrt(inside) + 0.5 * np.pi * limb_darkening * inside
    kernel = shape.reshape(-1, fine).sum(axis=1)
    return np.convolve(np.pad(flux, half, mode="edge"), kernel / kernel.sum(), mode="valid")


def _gaussian_filter(values: Array, sigma_steps: float) -> Array:
    """Gaussian smoothing by its transfer function, the ends continued by their values."""
    pad = int(np.ceil(8.0 * sigma_steps)) + 1
    padded = np.pad(values, pad, mode="edge")
    frequency = np.fft.rfftfreq(padded.size)
    transfer = np.exp(-2.0 * (np.pi * sigma_steps * frequency) ** 2)
    return np.fft.irfft(np.fft.rfft(padded) * transfer, padded.size)[pad:-pad]


def to_channels(wavelength_um: Array, flux: Array, edges_um: Array, resolving_power: float | Array) -> Array:
    """Gaussian LSF, then the mean over each channel.

    Parameters
    ----------
    wavelength_um, flux : arrays (m,)
        On a grid of constant step in ln(wavelength), as `log_grid` makes it.
    edges_um : array (n + 1,)
        Channel edges.
    resolving_power : float or array (n,)
        R = lambda / FWHM; per channel, it is joined by straight lines between the channel centres.

    Returns
    -------
    array (n,)
        Channel means of the flux density.
    """
    log_step = np.log(wavelength_um[-1] / wavelength_um[0]) / (wavelength_um.size - 1)
    if np.ndim(resolving_power) == 0:
        smooth = _gaussian_filter(flux, 1.0 / (float(resolving_power) * FWHM_PER_SIGMA * log_step))
        return cell_means(wavelength_um, smooth, edges_um)
    # Where R changes: a coordinate in which the LSF is a unit Gaussian, du = R dln(lambda) / FWHM.
    local = np.interp(wavelength_um, 0.5 * (edges_um[1:] + edges_um[:-1]), resolving_power)
    per_step = local * FWHM_PER_SIGMA * log_step
    u = np.concatenate([[0.0], np.cumsum(0.5 * (per_step[1:] + per_step[:-1]))])
    even = np.linspace(0.0, u[-1], int(np.ceil(u[-1] / per_step.min())) + 1)
    warped = np.interp(even, u, wavelength_um)
    resampled = cell_means(wavelength_um, flux, edges_of(warped))
    return cell_means(warped, _gaussian_filter(resampled, 1.0 / (even[1] - even[0])), edges_um)


def place(
    source_um: Array,
    flux: Array,
    grid_um: Array,
    factor: float = 1.0,
    *,
    needed_um: tuple[float, float] | None = None,
) -> Array:
    """A spectrum, shifted by a wavelength `factor`, as cell means on the grid.

    Raises
    ------
    CoverageError
        If the shifted spectrum leaves part of `needed_um` uncovered.
    """
    shifted = source_um * factor
    if needed_um is not None and (shifted[0] > needed_um[0] or shifted[-1] < needed_um[1]):
        raise CoverageError(
            f"spectrum must cover {needed_um[0]:.4f} to {needed_um[1]:.4f} um at its velocity",
            f"{shifted[0]:.4f} to {shifted[-1]:.4f} um",
            "give a longer spectrum or a narrower range",
        )
    return cell_means(shifted, flux, edges_of(grid_um))


def check_spectrum(source_um: Array, flux: Array, what: str) -> None:
    """Raise InputError unless a source spectrum is finite, ascending and of one length."""
    if source_um.ndim != 1 or source_um.shape != flux.shape or source_um.size < 16:
        raise InputError(
            f"{what} needs one wavelength per flux and 16 samples", f"{source_um.shape}, {flux.shape}"
        )
    if not (np.all(np.isfinite(source_um)) and np.all(np.isfinite(flux)) and np.all(np.diff(source_um) > 0)):
        raise InputError(f"{what} must be finite with ascending wavelengths", "NaN or descending", "clean it")
