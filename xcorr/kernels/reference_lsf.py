"""The obvious NumPy forms of the kernels in `xcorr.kernels.banded_lsf`, as truth for their tests."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from scipy.integrate import quad
from scipy.special import ndtr


def lsf_row(wavelength_hi, cell, low, high, sigma):
    """Weights of all samples (n_hi,) for one pixel, normalised to one, without truncation."""
    weight = (ndtr((high - wavelength_hi) / sigma) - ndtr((low - wavelength_hi) / sigma)) * cell
    return weight / weight.sum()


def lsf_row_slope(wavelength_hi, cell, low, high, sigma):
    """d weights / d ln R (n_hi,) by a central difference of the normalised row."""
    step = 1e-5
    wide = lsf_row(wavelength_hi, cell, low, high, sigma * np.exp(step))
    narrow = lsf_row(wavelength_hi, cell, low, high, sigma * np.exp(-step))
    return (narrow - wide) / (2.0 * step)


def banded_product(starts, offsets, weights, spectra):
    """(n_columns, n_wave) product by one dot per row."""
    out = np.zeros((spectra.shape[0], starts.size))
    for row, first in enumerate(starts):
        values = weights[offsets[row] : offsets[row + 1]]
        out[:, row] = spectra[:, first : first + values.size] @ values
    return out


def shift_and_multiply(flux, position, shifts, factor):
    """(n_columns, n_hi) shifted flux by the Lagrange polynomial through four samples, times a factor."""
    out = np.empty((len(shifts), position.size))
    for column, shift in enumerate(shifts):
        place = position - shift
        i = np.clip(np.floor(place).astype(int), 1, flux.size - 3)
        x = np.clip(place - i, -1.0, 2.0)
        value = np.zeros_like(place)
        for node in (-1, 0, 1, 2):
            others = [other for other in (-1, 0, 1, 2) if other != node]
            basis = np.prod([(x - other) / (node - other) for other in others], axis=0)
            value += basis * flux[i + node]
        out[column] = value * factor
    return out


def gaussian_convolution(wavelength, cell, flux, sigma, reach):
    """(n,) Gaussian convolution, one explicit kernel per output sample."""
    out = np.empty_like(flux)
    for j, centre in enumerate(wavelength):
        u = (wavelength - centre) / sigma[j]
        weight = np.where(np.abs(u) <= reach, np.exp(-0.5 * u**2) * cell, 0.0)
        out[j] = weight @ flux / weight.sum()
    return out


def rotation_profile(x, epsilon):
    """Gray's profile G(x), x = (lambda - lambda_0) / (lambda_0 v sin i / c), area one."""
    inside = np.clip(1.0 - np.square(x), 0.0, None)
    profile = 2.0 * (1.0 - epsilon) * np.sqrt(inside) + 0.5 * np.pi * epsilon * inside
    return profile / (np.pi * (1.0 - epsilon / 3.0))


def rotation_convolution(wavelength, flux, beta, epsilon):
    """(n,) rotation of the piecewise-constant flux, each weight by adaptive quadrature of G over its cell."""
    out = np.empty_like(flux)
    bounds = np.concatenate([wavelength[:1], 0.5 * (wavelength[1:] + wavelength[:-1]), wavelength[-1:]])
    for j, centre in enumerate(wavelength):
        x = np.clip((bounds - centre) / (centre * beta), -1.0, 1.0)
        weight = np.array([quad(rotation_profile, *cell, args=(epsilon,))[0] for cell in pairwise(x)])
        out[j] = weight @ flux / weight.sum()
    return out
