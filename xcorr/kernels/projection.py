"""The starlight fit of every spaxel and the exact correction of projected template energies.

Nuisance columns of one spaxel are N = [star * B_k | X_j]: cubic B-splines times the star's
spectrum, banded in k, and a few dense extra columns (additive background, modes). With
T~ = P_mean T, the templates projected once with mean weights, every spaxel needs only

    num  = (W r)' T~                      exact, because P_p N = 0
    info = T~' W T~ - |L^-1 N' W T~|^2    with L the Cholesky factor of its own N'WN

The second term is a small correction, so that float32 products keep full accuracy.
"""

import numpy as np
from numba import prange

from xcorr.kernels.jit import jit

RIDGE = 1e-10
"""Added to the unit diagonal of the scaled normal matrix: a masked run longer than a spline's
support leaves a singular block, and this ridge changes info by 7e-7 at most (measured)."""


@jit
def _band_normal(weights, basis, start, band, right, spectrum):
    """Accumulate N'WN (lower band, 4 diagonals) and N'Wy of one spaxel."""
    for i in range(start.size):
        w = weights[i]
        if w == 0.0:
            continue
        first = start[i]
        for m in range(4):
            wm = w * basis[i, m]
            right[first + m] += wm * spectrum[i]
            for n in range(m + 1):
                band[first + m, m - n] += wm * basis[i, n]


@jit
def _scale_and_factor(band, scale, ridge):
    """Scale to unit diagonal, add the ridge, factor in place; empty columns become inert."""
    n_spline = band.shape[0]
    for k in range(n_spline):
        scale[k] = 1.0 / np.sqrt(band[k, 0]) if band[k, 0] > 0.0 else 0.0
    for k in range(n_spline):
        band[k, 0] = 1.0 + ridge
        for d in range(1, 4):
            if k - d >= 0:
                band[k, d] *= scale[k] * scale[k - d]
            else:
                band[k, d] = 0.0
    for k in range(n_spline):
        for d in range(min(3, k), -1, -1):
            j = k - d
            total = band[k, d]
            for m in range(1, 4 - d):
                if j - m >= 0:
                    total -= band[k, d + m] * band[j, m]
            if d > 0:
                band[k, d] = total / band[j, 0]
            else:
                band[k, 0] = np.sqrt(max(total, ridge))


@jit
def _forward(band, vector):
    """Solve L x = vector in place."""
    for k in range(band.shape[0]):
        total = vector[k]
        for d in range(1, 4):
            if k - d >= 0:
                total -= band[k, d] * vector[k - d]
        vector[k] = total / band[k, 0]


@jit
def _backward(band, vector):
    """Solve L' x = vector in place."""
    n_spline = band.shape[0]
    for k in range(n_spline - 1, -1, -1):
        total = vector[k]
        for d in range(1, 4):
            if k + d < n_spline:
                total -= band[k + d, d] * vector[k + d]
        vector[k] = total / band[k, 0]


@jit
def _dense_factor(matrix):
    """Cholesky in place of a small scaled matrix; returns the smallest pivot before its root."""
    n = matrix.shape[0]
    smallest = 1.0
    for i in range(n):
        for j in range(i + 1):
            total = matrix[i, j]
            for m in range(j):
                total -= matrix[i, m] * matrix[j, m]
            if i == j:
                smallest = min(smallest, total)
                matrix[i, i] = np.sqrt(max(total, 1e-300))
            else:
                matrix[i, j] = total / matrix[j, j]
    return smallest


@jit(parallel=True)
def fit_starlight(
    spectra,  # (n_spaxel, n_wave) float32
    weights,  # (n_spaxel, n_wave) float32, zero where masked
    basis,  # (n_wave, 4) float64: star * the four non-zero splines of each channel
    start,  # (n_wave,) int: index of the first of them
    n_spline,
    extras,  # (n_extra, n_wave) float64, may be empty
    ridge,
    residual,  # (n_spaxel, n_wave) float32 out: y - N c, zero where masked; may be spectra itself
    band,  # (n_spaxel, n_spline, 4) float64 out: Cholesky factor of the scaled N'WN
    scale,  # (n_spaxel, n_spline) float64 out: scaling of the spline columns
    border,  # (n_spaxel, n_extra, n_spline) float64 out: L^-1 of the scaled N'WX
    corner,  # (n_spaxel, n_extra, n_extra) float64 out: Cholesky factor of the Schur complement, scaled
    corner_scale,  # (n_spaxel, n_extra) float64 out
    pivot,  # (n_spaxel,) float64 out: smallest scaled pivot of the Schur complement, 1 without extras
):
    """Weighted least-squares fit of N to every spaxel."""
    n_spaxel, n_wave = spectra.shape
    n_extra = extras.shape[0]
    for p in prange(n_spaxel):
        coefficients = np.zeros(n_spline)
        own_band = band[p]
        own_band[:] = 0.0
        _band_normal(weights[p], basis, start, own_band, coefficients, spectra[p])
        _scale_and_factor(own_band, scale[p], ridge)
        for k in range(n_spline):
            coefficients[k] *= scale[p, k]
        _forward(own_band, coefficients)
        extra_coefficients = np.zeros(n_extra)
        pivot[p] = 1.0
        if n_extra > 0:
            _eliminate_extras(
                spectra[p],
                weights[p],
                basis,
                start,
                extras,
                own_band,
                scale[p],
                coefficients,
                border[p],
                corner[p],
                corner_scale[p],
                extra_coefficients,
                pivot,
                p,
            )
        _backward(own_band, coefficients)
        for k in range(n_spline):
            coefficients[k] *= scale[p, k]
        for i in range(n_wave):
            if weights[p, i] == 0.0:
                residual[p, i] = 0.0
                continue
            first = start[i]
            value = np.float64(spectra[p, i])
            for m in range(4):
                value -= coefficients[first + m] * basis[i, m]
            for j in range(n_extra):
                value -= extra_coefficients[j] * extras[j, i]
            residual[p, i] = value


@jit
def _eliminate_extras(
    spectrum,
    weights,
    basis,
    start,
    extras,
    band,
    scale,
    forward_right,
    border,
    corner,
    corner_scale,
    extra_coefficients,
    pivot,
    p,
):
    """Schur complement of the extra columns; updates the forward-substituted right side in place."""
    n_extra, n_wave = extras.shape
    border[:] = 0.0
    right = np.zeros(n_extra)
    for j in range(n_extra):
        for i in range(n_wave):
            wx = weights[i] * extras[j, i]
            if wx == 0.0:
                continue
            right[j] += wx * spectrum[i]
            for m in range(4):
                border[j, start[i] + m] += wx * basis[i, m]
        for k in range(scale.size):
            border[j, k] *= scale[k]
        _forward(band, border[j])
    for j in range(n_extra):
        energy = 0.0
        for i in range(n_wave):
            energy += weights[i] * extras[j, i] ** 2
        corner_scale[j] = 1.0 / np.sqrt(energy) if energy > 0.0 else 0.0
    for j in range(n_extra):
        for l in range(j + 1):
            total = 0.0
            for i in range(n_wave):
                total += weights[i] * extras[j, i] * extras[l, i]
            for k in range(scale.size):
                total -= border[j, k] * border[l, k]
            corner[j, l] = total * corner_scale[j] * corner_scale[l]
            corner[l, j] = 0.0
            if j == l:
                corner[j, j] = total * corner_scale[j] ** 2 if corner_scale[j] > 0.0 else 1.0
        for k in range(scale.size):
            right[j] -= border[j, k] * forward_right[k]
        right[j] *= corner_scale[j]
    pivot[p] = _dense_factor(corner)
    for j in range(n_extra):
        total = right[j]
        for l in range(j):
            total -= corner[j, l] * extra_coefficients[l]
        extra_coefficients[j] = total / corner[j, j]
    for j in range(n_extra - 1, -1, -1):
        total = extra_coefficients[j]
        for l in range(j + 1, n_extra):
            total -= corner[l, j] * extra_coefficients[l]
        extra_coefficients[j] = total / corner[j, j]
    for j in range(n_extra):
        extra_coefficients[j] *= corner_scale[j]
        for k in range(scale.size):
            forward_right[k] -= border[j, k] * extra_coefficients[j]


@jit(parallel=True)
def whiten_overlaps(
    overlaps,  # (n_spline, n_spaxel, n_column) float32, in and out: N'WT~ -> L^-1 N'WT~
    extra_overlaps,  # (n_extra, n_spaxel, n_column) float32, in and out: likewise for X
    band,  # (n_spaxel, n_spline, 4)
    scale,  # (n_spaxel, n_spline)
    border,  # (n_spaxel, n_extra, n_spline)
    corner,  # (n_spaxel, n_extra, n_extra)
    corner_scale,  # (n_spaxel, n_extra)
):
    """Forward substitution of many columns at once, one spaxel a task."""
    n_spline, n_spaxel, n_column = overlaps.shape
    n_extra = extra_overlaps.shape[0]
    for p in prange(n_spaxel):
        for k in range(n_spline):
            inverse = np.float32(1.0 / band[p, k, 0])
            own = np.float32(scale[p, k]) * inverse
            row = overlaps[k, p]
            for c in range(n_column):
                row[c] *= own
            for d in range(1, min(3, k) + 1):
                factor = np.float32(band[p, k, d]) * inverse
                before = overlaps[k - d, p]
                for c in range(n_column):
                    row[c] -= factor * before[c]
        for j in range(n_extra):
            row = extra_overlaps[j, p]
            for k in range(n_spline):
                factor = np.float32(border[p, j, k])
                done = overlaps[k, p]
                for c in range(n_column):
                    row[c] -= factor * done[c]
            inverse = np.float32(1.0 / corner[p, j, j])
            own = np.float32(corner_scale[p, j]) * inverse
            for c in range(n_column):
                row[c] *= own
            for l in range(j):
                factor = np.float32(corner[p, j, l]) * inverse
                before = extra_overlaps[l, p]
                for c in range(n_column):
                    row[c] -= factor * before[c]


@jit(parallel=True)
def sum_of_products(
    whitened,  # (n_row, n_spaxel, n_group * n_point) float32
    left,  # (n_pair,) int: group of the first factor
    right,  # (n_pair,) int: group of the second
    n_point,
    out,  # (n_spaxel, n_pair, n_point) float32
):
    """Sum over rows of the products of two groups of columns: the correction of each pair."""
    n_row, n_spaxel, _ = whitened.shape
    for p in prange(n_spaxel):
        for q in range(left.size):
            first, second = left[q] * n_point, right[q] * n_point
            target = out[p, q]
            target[:] = 0.0
            for k in range(n_row):
                row = whitened[k, p]
                for v in range(n_point):
                    target[v] += row[first + v] * row[second + v]
