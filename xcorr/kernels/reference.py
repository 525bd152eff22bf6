"""Slow, obvious twins of the search kernels, in plain NumPy and double precision.

Each routine says the same thing as its fast counterpart in one or two lines of algebra; tests
hold the two together.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def project(columns: NDArray, nuisance: NDArray, weights: NDArray) -> NDArray:
    """P columns, with P = I - N (N'WN)^-1 N'W, by QR of sqrt(W) N.

    Parameters
    ----------
    columns : array (n_wave,) or (n_wave, n_column)
    nuisance : array (n_wave, n_nuisance)
    weights : array (n_wave,)
        Zero where masked; the result is returned times (weight > 0).
    """
    root = np.sqrt(weights)
    used = np.any(nuisance[weights > 0] != 0.0, axis=0)
    q, _ = np.linalg.qr(root[:, None] * nuisance[:, used])
    scaled = (columns.T * root).T
    scaled = scaled - q @ (q.T @ scaled)
    inverse = np.divide(1.0, root, out=np.zeros_like(root), where=root > 0)
    return (scaled.T * inverse).T


def matched_filter(
    spectrum: NDArray, weights: NDArray, nuisance: NDArray, templates: NDArray
) -> tuple[NDArray, NDArray]:
    """num = t'WPy and info = t'WPt of every template column of one spaxel.

    Parameters
    ----------
    spectrum, weights : array (n_wave,)
    nuisance : array (n_wave, n_nuisance)
    templates : array (n_column, n_wave)

    Returns
    -------
    num, info : arrays (n_column,)
    """
    num = np.empty(len(templates))
    info = np.empty(len(templates))
    residual = project(spectrum.astype(np.float64), nuisance, weights)
    for i, template in enumerate(templates.astype(np.float64)):
        projected = project(template, nuisance, weights)
        num[i] = np.sum(projected * weights * residual)
        info[i] = np.sum(weights * projected**2)
    return num, info


def joint_filter(
    spectra: NDArray, weights: NDArray, nuisance: NDArray, psf: NDArray, shared: NDArray
) -> tuple[NDArray, NDArray]:
    """Right side and normal matrix of columns shared by the spaxels of a PSF.

    Parameters
    ----------
    spectra, weights, psf : arrays (n_spaxel, n_wave)
    nuisance : array (n_wave, n_nuisance)
        Starlight columns, free in every spaxel.
    shared : array (n_column, n_wave)
        Template and companion continuum columns, one coefficient for all spaxels.

    Returns
    -------
    right : array (n_column,)
    matrix : array (n_column, n_column)
    """
    n_column = len(shared)
    right, matrix = np.zeros(n_column), np.zeros((n_column, n_column))
    for spectrum, weight, profile in zip(spectra, weights, psf, strict=True):
        columns = project((shared * profile).T, nuisance, weight)
        right += columns.T @ (weight * project(spectrum.astype(np.float64), nuisance, weight))
        matrix += columns.T @ (weight[:, None] * columns)
    return right, matrix


def psf_sums(
    residual: NDArray, weights: NDArray, spaxels: NDArray, profiles: NDArray
) -> tuple[NDArray, NDArray]:
    """PSF-weighted sums over spaxels of W r and of W, for every position.

    Parameters
    ----------
    residual, weights : arrays (n_spaxel, n_wave)
    spaxels : int array (n_position, n_stamp)
        Spaxel indices, -1 for none.
    profiles : array (n_position, n_stamp, n_wave)

    Returns
    -------
    first : array (n_position, n_wave), sum of a w r
    second : array (n_position, n_wave), sum of a^2 w
    """
    n_position, n_stamp = spaxels.shape
    first = np.zeros((n_position, residual.shape[1]))
    second = np.zeros_like(first)
    for q in range(n_position):
        for s in range(n_stamp):
            p = spaxels[q, s]
            if p >= 0:
                first[q] += profiles[q, s] * weights[p] * residual[p]
                second[q] += profiles[q, s] ** 2 * weights[p]
    return first, second
