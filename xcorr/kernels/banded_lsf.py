"""Kernels of the line-spread function: banded rows, their product with spectra, shifts, broadening.

All loops are serial and release the GIL; callers put blocks of columns on threads, so that the bits do not
depend on the number of threads. The slow twins are in `xcorr.kernels.reference_lsf`.
"""

from __future__ import annotations

import math

import numpy as np

from xcorr.kernels.jit import jit

# Sums may be reordered for vector units, but NaN keep their meaning (no "nnan").
REORDER = {"reassoc", "contract"}
_SQRT_HALF = math.sqrt(0.5)
_INV_SQRT_2PI = 1.0 / math.sqrt(2.0 * math.pi)


@jit
def fill_rows(
    wavelength_hi,  # (n_hi,) um, ascending
    cell,  # (n_hi,) um, trapezoid weight of each sample
    edges,  # (n_wave, 2) um, pixel edges
    sigma,  # (n_wave,) um, Gaussian sigma of the LSF
    starts,  # (n_wave,) first sample of each row
    offsets,  # (n_wave + 1,) where each row begins in `weights`
    weights,  # out: Gaussian integrated over the pixel, each row sums to one
    slopes,  # out: d weights / d ln R, each row sums to zero
):
    """Weights of a Gaussian LSF convolved with the pixel box, at the samples of the fine grid."""
    for row in range(starts.size):
        low, high, width = edges[row, 0], edges[row, 1], sigma[row]
        first, begin = starts[row], offsets[row]
        n = offsets[row + 1] - begin
        total, total_slope = 0.0, 0.0
        for k in range(n):
            sample = first + k
            a = (low - wavelength_hi[sample]) / width
            b = (high - wavelength_hi[sample]) / width
            # Differences of erfc on the far side, so that the tails do not cancel.
            if a > 0.0:
                box = 0.5 * (math.erfc(a * _SQRT_HALF) - math.erfc(b * _SQRT_HALF))
            else:
                box = 0.5 * (math.erfc(-b * _SQRT_HALF) - math.erfc(-a * _SQRT_HALF))
            bell_a = _INV_SQRT_2PI * math.exp(-0.5 * a * a)
            bell_b = _INV_SQRT_2PI * math.exp(-0.5 * b * b)
            weight = box * cell[sample]
            slope = (b * bell_b - a * bell_a) * cell[sample]
            weights[begin + k] = weight
            slopes[begin + k] = slope
            total += weight
            total_slope += slope
        for k in range(begin, begin + n):
            slopes[k] = (slopes[k] - weights[k] * total_slope / total) / total
            weights[k] /= total


@jit(fastmath=REORDER)
def banded_product(
    starts,  # (n_wave,)
    offsets,  # (n_wave + 1,)
    weights,  # (n_weights,)
    spectra,  # (n_columns, n_hi)
    out,  # (n_columns, n_wave); 0 where a row is empty
):
    """Rows of weights times spectra; one pass over the weights serves all columns of the block."""
    for row in range(starts.size):
        first, begin = starts[row], offsets[row]
        n = offsets[row + 1] - begin
        for column in range(spectra.shape[0]):
            total = 0.0
            for k in range(n):
                total += weights[begin + k] * spectra[column, first + k]
            out[column, row] = total


@jit(fastmath=REORDER)
def shift_and_multiply(
    flux,  # (n_template,) on a constant-ln-lambda grid
    position,  # (n_hi,) index of each fine-grid sample on the template grid, at rest
    shifts,  # (n_columns,) ln(1 + z) in grid steps
    factor,  # (n_hi,) what the shifted flux is multiplied by
    out,  # (n_columns, n_hi)
):
    """Shifted flux by 4-point Lagrange interpolation, times a factor; the ends are held constant."""
    last = flux.size - 3
    for column in range(shifts.size):
        shift = shifts[column]
        for k in range(position.size):
            place = position[k] - shift
            i = min(max(math.floor(place), 1), last)
            f = min(max(place - i, -1.0), 2.0)
            f_minus, f_plus, f_two = f - 1.0, f + 1.0, f - 2.0
            value = f_plus * f_two * f_minus * 0.5 * flux[i] - f_plus * f * f_two * 0.5 * flux[i + 1]
            value += f * f_minus * (f_plus * flux[i + 2] - f_two * flux[i - 1]) / 6.0
            out[column, k] = value * factor[k]


@jit
def gaussian_gather(
    wavelength,  # (n,) um, ascending
    cell,  # (n,) um, trapezoid weight of each sample
    flux,  # (n,)
    sigma,  # (n,) um, at the output sample
    reach,  # sigmas at which the kernel ends
    out,  # (n,)
):
    """Convolution with a Gaussian whose width belongs to the output sample; renormalised at the ends."""
    first = 0
    for j in range(wavelength.size):
        centre, width = wavelength[j], sigma[j]
        low, high = centre - reach * width, centre + reach * width
        while first > 0 and wavelength[first - 1] >= low:
            first -= 1
        while wavelength[first] < low:
            first += 1
        k, total, norm = first, 0.0, 0.0
        while k < wavelength.size and wavelength[k] <= high:
            u = (wavelength[k] - centre) / width
            weight = math.exp(-0.5 * u * u) * cell[k]
            total += weight * flux[k]
            norm += weight
            k += 1
        out[j] = total / norm


@jit
def rotation_cdf(x, epsilon):
    """Integral of Gray's rotation profile from -1 to x, linear limb darkening `epsilon`."""
    if x <= -1.0:
        return 0.0
    if x >= 1.0:
        return 1.0
    disc = (1.0 - epsilon) * (x * math.sqrt(1.0 - x * x) + math.asin(x))
    limb = 0.5 * math.pi * epsilon * (x - x * x * x / 3.0)
    return 0.5 + (disc + limb) / (math.pi * (1.0 - epsilon / 3.0))


@jit
def rotation_gather(
    wavelength,  # (n,) um, ascending
    bounds,  # (n + 1,) um, midpoints between samples and the two ends
    flux,  # (n,)
    beta,  # v sin i / c
    epsilon,  # linear limb darkening
    out,  # (n,)
):
    """Convolution with Gray's rotation profile, integrated over each cell; renormalised at the ends."""
    first = 0
    for j in range(wavelength.size):
        centre = wavelength[j]
        half = beta * centre
        while bounds[first + 1] <= centre - half:
            first += 1
        k, total, norm = first, 0.0, 0.0
        lower = rotation_cdf((bounds[k] - centre) / half, epsilon)
        while k < wavelength.size and bounds[k] < centre + half:
            upper = rotation_cdf((bounds[k + 1] - centre) / half, epsilon)
            total += (upper - lower) * flux[k]
            norm += upper - lower
            lower = upper
            k += 1
        out[j] = total / norm


def trapezoid_cells(wavelength):
    """Trapezoid weight of each sample of an ascending grid, (n,)."""
    cell = np.empty_like(wavelength)
    cell[1:-1] = 0.5 * (wavelength[2:] - wavelength[:-2])
    cell[0] = 0.5 * (wavelength[1] - wavelength[0])
    cell[-1] = 0.5 * (wavelength[-1] - wavelength[-2])
    return cell
