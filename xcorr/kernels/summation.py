"""PSF-weighted sums over spaxels, and the elimination of the companion continuum."""

import numpy as np
from numba import prange

from xcorr.kernels.jit import jit


@jit(parallel=True)
def psf_sums(
    residual,  # (n_spaxel, n_wave) float32
    weights,  # (n_spaxel, n_wave) float32, zero where masked
    spaxels,  # (n_position, n_stamp) int, -1 for none
    profiles,  # (n_position, n_stamp, n_node) float32: PSF at the wavelength nodes
    node,  # (n_wave,) int: index of the node below each channel
    fraction,  # (n_wave,) float32: linear interpolation weight of the node above
    first,  # (n_position, n_wave) float32 out: sum of a w r
    second,  # (n_position, n_wave) float32 out: sum of a^2 w
):
    """num and info add over spaxels; so do the weighted spectra they are made of."""
    n_position, n_stamp = spaxels.shape
    n_wave = residual.shape[1]
    for q in prange(n_position):
        sum_first = np.zeros(n_wave)
        sum_second = np.zeros(n_wave)
        for s in range(n_stamp):
            p = spaxels[q, s]
            if p < 0:
                continue
            profile = profiles[q, s]
            for i in range(n_wave):
                below = profile[node[i]]
                a = below + fraction[i] * (profile[node[i] + 1] - below)
                aw = a * weights[p, i]
                sum_first[i] += aw * residual[p, i]
                sum_second[i] += a * aw
        for i in range(n_wave):
            first[q, i] = sum_first[i]
            second[q, i] = sum_second[i]


@jit(parallel=True)
def eliminate_continuum(
    num,  # (n_position, n_molecule, n_velocity) float64, in and out
    info,  # (n_position, n_pair, n_velocity) float64, in and out
    cross,  # (n_position, n_molecule, n_continuum, n_velocity) float64
    continuum_num,  # (n_position, n_continuum) float64
    continuum_info,  # (n_position, n_continuum, n_continuum) float64
    left,  # (n_pair,) int
    right,  # (n_pair,) int
    ridge,
):
    """Schur complement of the companion continuum columns at every position.

    The columns come orthonormalised in the mean metric; `ridge` (relative to the diagonal) only
    guards the last float32 digits of nearly dependent ones.
    """
    n_position, n_molecule, n_velocity = num.shape
    n_continuum = continuum_num.shape[1]
    for q in prange(n_position):
        factor = np.zeros((n_continuum, n_continuum))
        used = np.zeros(n_continuum, np.bool_)
        for i in range(n_continuum):
            diagonal = continuum_info[q, i, i]
            used[i] = diagonal > 0.0
            if not used[i]:
                factor[i, i] = 1.0
                continue
            for j in range(i + 1):
                if not used[j]:
                    continue
                total = continuum_info[q, i, j]
                if i == j:
                    total *= 1.0 + ridge
                for m in range(j):
                    total -= factor[i, m] * factor[j, m]
                if i == j:
                    factor[i, i] = np.sqrt(max(total, ridge * diagonal))
                else:
                    factor[i, j] = total / factor[j, j]
        right_side = np.zeros(n_continuum)
        for i in range(n_continuum):
            if used[i]:
                total = continuum_num[q, i]
                for m in range(i):
                    total -= factor[i, m] * right_side[m]
                right_side[i] = total / factor[i, i]
        whitened = np.zeros((n_molecule, n_continuum, n_velocity))
        for a in range(n_molecule):
            for i in range(n_continuum):
                if not used[i]:
                    continue
                for v in range(n_velocity):
                    total = cross[q, a, i, v]
                    for m in range(i):
                        total -= factor[i, m] * whitened[a, m, v]
                    whitened[a, i, v] = total / factor[i, i]
                    num[q, a, v] -= whitened[a, i, v] * right_side[i]
        for pair in range(left.size):
            for i in range(n_continuum):
                for v in range(n_velocity):
                    info[q, pair, v] -= whitened[left[pair], i, v] * whitened[right[pair], i, v]


@jit(parallel=True)
def weighted_gather(
    spaxels,  # (n_position, n_stamp) int, -1 for none
    share,  # (n_position, n_stamp) float64
    table,  # (n_spaxel, n_value) float32
    out,  # (n_position, n_value) float64 out: sum over the stamp of share * table
):
    """Sum of per-spaxel values over the stamp of every position."""
    n_position, n_stamp = spaxels.shape
    for q in prange(n_position):
        total = out[q]
        total[:] = 0.0
        for s in range(n_stamp):
            p = spaxels[q, s]
            if p < 0:
                continue
            weight = share[q, s]
            row = table[p]
            for i in range(row.size):
                total[i] += weight * row[i]
