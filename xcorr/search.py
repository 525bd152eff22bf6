"""Matched filter over position, velocity and template, as matrix products.

Templates are projected once per exposure with the mean weights (t~ = P_mean t). With W, r the weights
and starlight residuals of the spaxels of a PSF and a their profile,

    num(v)      = [sum_p a W r]' t~(v)
    info_ij(v)  = [sum_p a^2 W]' t~_i t~_j - sum_p a^2 c_i' c_j,     c = L^-1 N'W t~

and the companion continuum columns are eliminated position by position. num and info of positions,
exposures and spaxels simply add (DESIGN of the program, docs/method.md).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from xcorr.kernels.projection import sum_of_products, whiten_overlaps
from xcorr.kernels.summation import eliminate_continuum, psf_sums, weighted_gather
from xcorr.psf import Stamps
from xcorr.starlight import Nuisance, StarlightFit

CORRECTION_STEP = 4
"""The correction of info is computed on every 4th velocity and splined (info error 4e-5, 4e-4 with gaps)."""
CONTINUUM_RIDGE = 1e-6
DEGENERATE = 1e7
"""Variance inflation of the joint fit above which a template cannot be told from the others (float32 sums: 1e-7)."""
CONTINUUM_RANK = 1e-7
"""Relative norm under which a projected companion continuum column is spanned by the starlight."""
SPAXEL_BLOCK = 512
"""Fixed, whatever the number of jobs: other block sizes give other last bits."""


@dataclass(frozen=True)
class ProjectedTemplates:
    """Templates of one exposure after projection with the mean weights.

    Attributes
    ----------
    columns : float32 array (n_molecule, n_velocity, n_wave)
    continuum : float32 array (n_continuum, n_wave)
        Companion continuum columns, orthonormal in the mean metric; rank-deficient ones dropped.
    """

    columns: NDArray[np.float32]
    continuum: NDArray[np.float32]

    @property
    def pairs(self) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Indices (left, right) of the molecule pairs i <= j, in the order used everywhere."""
        return np.triu_indices(self.columns.shape[0])


def project_templates(
    columns: NDArray[np.float64],
    continuum: NDArray[np.float64],
    weights: NDArray[np.float64],
    nuisance: Nuisance,
) -> ProjectedTemplates:
    """Project template and companion continuum columns with the mean weights.

    Parameters
    ----------
    columns : float64 array (n_molecule, n_velocity, n_wave)
    continuum : float64 array (n_continuum, n_wave)
    weights : float64 array (n_wave,)
        Mean weights.
    nuisance : Nuisance

    Notes
    -----
    The templates are made orthogonal to the continuum columns as well. That changes nothing after
    those are eliminated, and keeps the float32 cross terms small.
    """
    n_wave = columns.shape[-1]
    root = np.sqrt(weights)
    dense = nuisance.dense() * root[:, None]
    norms = np.linalg.norm(dense, axis=0)
    dense = dense[:, norms > 0] / norms[norms > 0]
    left, singular, _ = np.linalg.svd(dense, full_matrices=False)
    basis = left[:, singular > 1e-12 * singular[0]]

    def orthogonal(rows: NDArray, to: NDArray) -> NDArray:
        return rows - (rows @ to) @ to.T

    shared = continuum * root
    raw = np.linalg.norm(shared, axis=1)
    shared = orthogonal(orthogonal(shared, basis), basis)[raw > 0] / raw[raw > 0, None]
    _, strength, right = np.linalg.svd(shared, full_matrices=False)
    kept = right[strength > CONTINUUM_RANK]
    flat = columns.reshape(-1, n_wave) * root
    flat = orthogonal(orthogonal(flat, basis), kept.T)
    inverse = np.divide(1.0, root, out=np.zeros_like(root), where=root > 0)
    return ProjectedTemplates(
        np.ascontiguousarray((flat * inverse).reshape(columns.shape), np.float32),
        np.ascontiguousarray(kept * inverse, np.float32),
    )


def support_overlaps(
    weights: NDArray[np.float32], nuisance: Nuisance, flat: NDArray[np.float32]
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """N'W t~ for a block of spaxels: one small product on the support of each spline.

    Returns arrays (n_spline, n_spaxel, n_column) and (n_extra, n_spaxel, n_column).
    """
    splines, products = nuisance.splines, nuisance.products
    overlaps = np.zeros((splines.n_spline, len(weights), len(flat)), np.float32)
    for k in range(splines.n_spline):
        channels = np.flatnonzero((splines.start <= k) & (k <= splines.start + 3))
        if channels.size == 0:
            continue
        support = slice(channels[0], channels[-1] + 1)
        offset = k - splines.start[support]
        column = np.where(
            (offset >= 0) & (offset <= 3),
            np.take_along_axis(products[support], np.clip(offset, 0, 3)[:, None], axis=1)[:, 0],
            0.0,
        ).astype(np.float32)
        np.matmul(weights[:, support] * column, flat[:, support].T, out=overlaps[k])
    extras = np.empty((len(nuisance.extras), len(weights), len(flat)), np.float32)
    for j, column in enumerate(nuisance.extras.astype(np.float32)):
        np.matmul(weights * column, flat.T, out=extras[j])
    return overlaps, extras


@dataclass(frozen=True)
class Corrections:
    """Products of whitened overlaps c_i'c_j of every spaxel, on the coarse velocity grid.

    Attributes
    ----------
    molecules : float32 array (n_spaxel, n_pair, n_coarse)
    cross : float32 array (n_spaxel, n_molecule * n_continuum, n_coarse)
    continuum : float32 array (n_spaxel, n_continuum, n_continuum)
    interpolation : float64 array (n_coarse, n_velocity)
        Cubic-spline interpolation to the full grid, as a matrix.
    """

    molecules: NDArray[np.float32]
    cross: NDArray[np.float32]
    continuum: NDArray[np.float32]
    interpolation: NDArray[np.float64]


def velocity_interpolation(n_velocity: int, step: int) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Coarse grid indices and the matrix (n_coarse, n_velocity) that splines back to the full grid."""
    if n_velocity < 4 * step:
        return np.arange(n_velocity), np.eye(n_velocity)
    coarse = np.unique(np.append(np.arange(0, n_velocity, step), n_velocity - 1))
    return coarse, CubicSpline(coarse, np.eye(coarse.size))(np.arange(n_velocity)).T


def corrections(
    weights: NDArray[np.float32],
    fit: StarlightFit,
    nuisance: Nuisance,
    templates: ProjectedTemplates,
    *,
    step: int = CORRECTION_STEP,
    diagonal_only: bool = False,
) -> Corrections:
    """How much energy of each projected template its own starlight fit takes, spaxel by spaxel.

    Parameters
    ----------
    weights : float32 array (n_spaxel, n_wave)
    fit : StarlightFit
        Of the same spaxels and weights.
    step : int
        Velocity stride.
    diagonal_only : bool
        Only i = j pairs and no continuum (solo maps without companion continuum).
    """
    n_molecule, n_velocity, n_wave = templates.columns.shape
    n_spaxel, n_continuum = len(weights), 0 if diagonal_only else len(templates.continuum)
    coarse, interpolation = velocity_interpolation(n_velocity, step)
    n_coarse = coarse.size
    flat = np.vstack([templates.columns[:, coarse].reshape(-1, n_wave), templates.continuum[:n_continuum]])
    left, right = (np.arange(n_molecule),) * 2 if diagonal_only else templates.pairs
    molecules = np.empty((n_spaxel, left.size, n_coarse), np.float32)
    cross = np.empty((n_spaxel, n_molecule * n_continuum, n_coarse), np.float32)
    continuum = np.empty((n_spaxel, n_continuum, n_continuum), np.float32)
    for begin in range(0, n_spaxel, SPAXEL_BLOCK):
        block = slice(begin, min(begin + SPAXEL_BLOCK, n_spaxel))
        overlaps, extras = support_overlaps(weights[block], nuisance, flat)
        whiten_overlaps(
            overlaps, extras, fit.band[block], fit.scale[block], fit.border[block], fit.corner[block],
            fit.corner_scale[block],
        )  # fmt: skip
        rows = np.concatenate([overlaps, extras]) if len(extras) else overlaps
        sum_of_products(rows, left, right, n_coarse, molecules[block])
        if n_continuum:
            own = rows[:, :, n_molecule * n_coarse :]
            whole = rows[:, :, : n_molecule * n_coarse].reshape(len(rows), -1, n_molecule, n_coarse)
            product = np.einsum("kpmv,kpu->pmuv", whole, own, optimize=True)
            cross[block] = product.reshape(len(product), -1, n_coarse)
            continuum[block] = np.einsum("kpu,kpw->puw", own, own)
    return Corrections(molecules, cross, continuum, interpolation)


def spaxel_maps(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    nuisance: Nuisance,
    templates: ProjectedTemplates,
    fit: StarlightFit,
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """num and info of every spaxel on its own (no PSF, no companion continuum).

    Returns
    -------
    num, info : float32 arrays (n_spaxel, n_molecule, n_velocity)
    """
    n_molecule, n_velocity, n_wave = templates.columns.shape
    flat = templates.columns.reshape(-1, n_wave)
    num = (weights * fit.residual) @ flat.T
    info = weights @ (flat * flat).T
    taken = corrections(weights, fit, nuisance, templates, diagonal_only=True)
    shape = (len(spectra), n_molecule, n_velocity)
    info = info.reshape(shape)
    np.subtract(info, taken.molecules @ taken.interpolation.astype(np.float32), out=info)
    return num.reshape(shape), info


@dataclass(frozen=True)
class PositionSums:
    """num and info of every position, companion continuum eliminated; sums of exposures add.

    Attributes
    ----------
    num : float64 array (n_position, n_molecule, n_velocity)
    info : float64 array (n_position, n_pair, n_velocity)
        Pairs i <= j of `ProjectedTemplates.pairs`.
    """

    num: NDArray[np.float64]
    info: NDArray[np.float64]

    def __add__(self, other: PositionSums) -> PositionSums:
        return PositionSums(self.num + other.num, self.info + other.info)

    @property
    def n_molecule(self) -> int:
        """Number of templates."""
        return self.num.shape[1]

    @property
    def diagonal(self) -> NDArray[np.float64]:
        """info of each template alone, (n_position, n_molecule, n_velocity)."""
        left, right = np.triu_indices(self.n_molecule)
        return self.info[:, left == right]

    def subset(self, members: tuple[int, ...]) -> PositionSums:
        """The sums of some of the templates."""
        left, right = np.triu_indices(self.n_molecule)
        inside = np.isin(left, members) & np.isin(right, members)
        return PositionSums(self.num[:, list(members)], self.info[:, inside])

    def matrix(self) -> NDArray[np.float64]:
        """Full information matrices (n_position, n_velocity, n_molecule, n_molecule)."""
        left, right = np.triu_indices(self.n_molecule)
        n_position, _, n_velocity = self.info.shape
        full = np.empty((n_position, n_velocity, self.n_molecule, self.n_molecule))
        full[:, :, left, right] = full[:, :, right, left] = np.moveaxis(self.info, 1, 2)
        return full

    def solo_snr(self) -> NDArray[np.float64]:
        """num / sqrt(info), NaN without information, (n_position, n_molecule, n_velocity)."""
        info = self.diagonal
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(info > 0, self.num / np.sqrt(info), np.nan)

    def solo_amplitude(self) -> NDArray[np.float64]:
        """num / info, NaN without information."""
        info = self.diagonal
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(info > 0, self.num / info, np.nan)

    def joint(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Amplitudes and errors of the joint fit at a common velocity, both shaped like num.

        Directions without information (two equal templates, or none) give an infinite error.
        """
        matrix = self.matrix()
        diagonal = np.einsum("...ii->...i", matrix)
        scale = np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
        scaled = matrix / (scale[..., :, None] * scale[..., None, :])
        # 1e-10 on the unit diagonal: equal templates then share the amplitude with a huge error
        scaled[..., range(self.n_molecule), range(self.n_molecule)] = np.where(diagonal > 0, 1 + 1e-10, 1.0)
        inverse = np.linalg.inv(scaled)
        right = np.moveaxis(self.num, 1, 2) / scale
        amplitude = np.einsum("...ij,...j->...i", inverse, right) / scale
        error = np.sqrt(np.einsum("...ii->...i", inverse)) / scale
        # a direction that only the ridge holds has no information: its S/N would be rounding over rounding
        degenerate = np.einsum("...ii->...i", inverse) > DEGENERATE
        error = np.where((diagonal > 0) & ~degenerate, error, np.inf)
        return np.moveaxis(amplitude, 2, 1), np.moveaxis(error, 2, 1)


def position_sums(
    weights: NDArray[np.float32],
    residual: NDArray[np.float32],
    stamps: Stamps,
    templates: ProjectedTemplates,
    taken: Corrections,
) -> PositionSums:
    """Sum over the PSF of every position and eliminate the companion continuum.

    Parameters
    ----------
    weights, residual : float32 arrays (n_spaxel, n_wave)
    stamps : Stamps
        n_position of them; callers bound the memory by calling in blocks.
    templates : ProjectedTemplates
    taken : Corrections
        Of all spaxels.
    """
    n_molecule, n_velocity, n_wave = templates.columns.shape
    n_position, n_continuum = len(stamps.spaxels), len(templates.continuum)
    first = np.empty((n_position, n_wave), np.float32)
    second = np.empty((n_position, n_wave), np.float32)
    psf_sums(residual, weights, stamps.spaxels, stamps.profiles, stamps.node, stamps.fraction, first, second)
    left, right = templates.pairs
    num = (first @ templates.columns.reshape(-1, n_wave).T).reshape(n_position, n_molecule, n_velocity)
    info = np.empty((n_position, left.size, n_velocity))
    for pair, (i, j) in enumerate(zip(left, right, strict=True)):
        info[:, pair] = second @ (templates.columns[i] * templates.columns[j]).T
    cross = np.empty((n_position, n_molecule, n_continuum, n_velocity))
    for i in range(n_molecule):
        for u in range(n_continuum):
            cross[:, i, u] = second @ (templates.columns[i] * templates.continuum[u]).T
    continuum = np.empty((n_position, n_continuum, n_continuum))
    for u in range(n_continuum):
        continuum[:, u] = second @ (templates.continuum * templates.continuum[u]).T
    _subtract_corrections(info, cross, continuum, stamps, taken)
    num = num.astype(np.float64)
    eliminate_continuum(
        num,
        info,
        cross,
        (first @ templates.continuum.T).astype(np.float64),
        continuum,
        left,
        right,
        CONTINUUM_RIDGE,
    )
    return PositionSums(num, info)


def _subtract_corrections(
    info: NDArray, cross: NDArray, continuum: NDArray, stamps: Stamps, taken: Corrections
) -> None:
    """PSF-sum of the spaxel corrections: small, so the mean square of the profile will do."""
    share = (stamps.profiles.astype(np.float64) ** 2).mean(axis=2)

    def over_stamps(table: NDArray[np.float32]) -> NDArray[np.float64]:
        size = int(np.prod(table.shape[1:]))
        out = np.empty((len(share), size))
        weighted_gather(stamps.spaxels, share, table.reshape(len(table), size), out)
        return out.reshape(len(share), *table.shape[1:])

    info -= over_stamps(taken.molecules) @ taken.interpolation
    if cross.shape[2]:
        cross -= (over_stamps(taken.cross) @ taken.interpolation).reshape(cross.shape)
        continuum -= over_stamps(taken.continuum)
