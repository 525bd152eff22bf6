"""The line-spread operator: fine grid to channels, resolution and pixel integration in one banded product."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xcorr.errors import InputError
from xcorr.kernels.banded_lsf import banded_product, fill_rows, trapezoid_cells
from xcorr.spectral.blocks import for_each_block
from xcorr.spectral.broadening import REACH_SIGMA, check_sampling, sigma_um
from xcorr.spectral.channels import ascending, channel_edges, edge_pairs
from xcorr.units import to_plain

# Columns of one task: enough to share the weights, few enough to stay in cache.
COLUMNS_PER_BLOCK = 8


@dataclass(frozen=True)
class LsfOperator:
    """channel{ LSF (x) spectrum } as a banded matrix; made by `LsfOperator.build`.

    Row j holds the normalised Gaussian LSF (FWHM = lambda_j / R_j) convolved with pixel j, at the samples of
    the fine grid with trapezoid weights, out to five sigma beyond the pixel. R may differ by channel; several
    orders are simply more rows.

    Attributes
    ----------
    wavelength_hi_um : float64 array (n_hi,)
        Fine grid, ascending, micrometre.
    wavelength_um : float64 array (n_wave,)
        Channel centres, micrometre.
    edges_um : float64 array (n_wave, 2)
        Channel edges, micrometre.
    resolving_power : float64 array (n_wave,)
        R = lambda / FWHM.
    covered : bool array (n_wave,)
        False where the fine grid does not hold the whole row: that row is empty and its product 0.
    starts : int64 array (n_wave,)
        First fine-grid sample of each row.
    offsets : int64 array (n_wave + 1,)
        Where each row begins in `weights`.
    weights : float64 array (n_weights,)
        Rows, each of sum one (of sum zero for a derivative).
    slopes : float64 array (n_weights,)
        d weights / d ln R.
    """

    wavelength_hi_um: NDArray[np.float64]
    wavelength_um: NDArray[np.float64]
    edges_um: NDArray[np.float64]
    resolving_power: NDArray[np.float64]
    covered: NDArray[np.bool_]
    starts: NDArray[np.int64]
    offsets: NDArray[np.int64]
    weights: NDArray[np.float64]
    slopes: NDArray[np.float64]

    def __post_init__(self) -> None:
        for array in vars(self).values():
            array.flags.writeable = False

    @classmethod
    def build(
        cls,
        wavelength_hi_um: Any,
        wavelength_um: Any,
        resolving_power: Any,
        *,
        order: ArrayLike | None = None,
        edges_um: Any = None,
    ) -> LsfOperator:
        """Make the operator.

        Parameters
        ----------
        wavelength_hi_um : array_like or Quantity (n_hi,)
            Fine grid, ascending, at least two samples per FWHM.
        wavelength_um : array_like or Quantity (n_wave,)
            Channel centres, ascending within each order.
        resolving_power : float or array_like (n_wave,)
            R = lambda / FWHM.
        order : array_like of int (n_wave,), optional
            Order index, see `channel_edges`.
        edges_um : array_like or Quantity (n_wave, 2), optional
            Channel edges; from `channel_edges` without it.

        Raises
        ------
        InputError
            Grids, orders or R unusable, or the fine grid too coarse.
        """
        grid = np.array(ascending(wavelength_hi_um, "the fine grid", at_least=3))
        centres = np.array(to_plain(wavelength_um, "um"))
        edges = channel_edges(centres, order) if edges_um is None else np.array(edge_pairs(edges_um))
        if edges.shape != (centres.size, 2):
            raise InputError(
                "one pair of edges per channel needed", f"{edges.shape} for {centres.size} channels"
            )
        sigma = sigma_um(centres, resolving_power)
        low, high = edges[:, 0] - REACH_SIGMA * sigma, edges[:, 1] + REACH_SIGMA * sigma
        covered = (low >= grid[0]) & (high <= grid[-1])
        starts = np.searchsorted(grid, low)
        stops = np.where(covered, np.searchsorted(grid, high, side="right"), starts)
        offsets = np.concatenate([[0], np.cumsum(stops - starts)]).astype(np.int64)
        cell = trapezoid_cells(grid)
        if np.any(covered):
            middle = np.clip(np.searchsorted(grid, centres[covered]), 1, grid.size - 2)
            check_sampling(sigma[covered], cell[middle])
        weights, slopes = np.empty(offsets[-1]), np.empty(offsets[-1])
        fill_rows(grid, cell, edges, sigma, starts, offsets, weights, slopes)
        resolving = np.broadcast_to(to_plain(resolving_power, ""), centres.shape).copy()
        return cls(grid, centres, edges, resolving, covered, starts, offsets, weights, slopes)

    @property
    def is_log(self) -> bool:
        """True where the fine grid has a constant step in ln lambda."""
        step = np.diff(np.log(self.wavelength_hi_um))
        return bool(np.ptp(step) < 1e-6 * step.mean())

    def apply(self, flux_hi: ArrayLike, *, jobs: int | None = None) -> NDArray[np.float64]:
        """Spectra on the fine grid to channels.

        Parameters
        ----------
        flux_hi : array_like (n_hi,) or (n_columns, n_hi)
            Spectra on the fine grid. NaN spread to every channel that sees them.
        jobs : int, optional
            Threads; the bits of the result do not depend on it. Default: numba's thread count.

        Returns
        -------
        float64 array (n_wave,) or (n_columns, n_wave)
            0 where not `covered`.
        """
        flux = np.ascontiguousarray(flux_hi, dtype=np.float64)
        columns = np.atleast_2d(flux)
        if columns.ndim != 2 or columns.shape[1] != self.wavelength_hi_um.size:
            raise InputError(
                "spectra must lie on the operator's fine grid",
                f"shape {flux.shape} for {self.wavelength_hi_um.size} samples",
            )
        out = np.empty((columns.shape[0], self.starts.size))

        def task(block: slice) -> None:
            banded_product(self.starts, self.offsets, self.weights, columns[block], out[block])

        for_each_block(task, columns.shape[0], COLUMNS_PER_BLOCK, jobs)
        return out[0] if flux.ndim == 1 else out

    def derivative_resolving_power(self) -> LsfOperator:
        """The operator d/dR: its product with a spectrum is the change of each channel per unit of its R.

        First-order correction: t(R + dR) = t(R) + dR * (dt/dR), for instance where R differs by spaxel.
        """
        lengths = np.diff(self.offsets)
        scale = np.repeat(1.0 / self.resolving_power, lengths)
        return replace(self, weights=self.slopes * scale, slopes=np.zeros_like(self.slopes))
