"""The nuisance model of one exposure: starlight with the star's own lines, times smooth modulations.

Columns of a spaxel: s(lambda) B_k(lambda), s the star's observed spectrum, B_k cubic B-splines, and
optional additive columns (background splines, systematic modes). Their W-orthogonal projection is
the only filter of the search.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline

from xcorr.errors import InputError
from xcorr.kernels.projection import RIDGE, fit_starlight

CONDITION_LIMIT = 1e10
"""Scaled condition number above which additive background and starlight cannot be told apart."""


@dataclass(frozen=True)
class SplineBasis:
    """Cubic B-splines, uniform in ln(wavelength) over each order.

    Attributes
    ----------
    start : int64 array (n_wave,)
        Index of the first of the four splines that are non-zero at a channel.
    values : float64 array (n_wave, 4)
        Their values; they sum to one.
    n_spline : int
    """

    start: NDArray[np.int64]
    values: NDArray[np.float64]
    n_spline: int

    def dense(self) -> NDArray[np.float64]:
        """The same as a matrix (n_wave, n_spline)."""
        matrix = np.zeros((self.start.size, self.n_spline))
        rows = np.arange(self.start.size)
        for m in range(4):
            matrix[rows, self.start + m] = self.values[:, m]
        return matrix


def spline_basis(wavelength_um: NDArray, order: NDArray, n_spline: int) -> SplineBasis:
    """Cubic B-splines over the used range, `n_spline` of them shared out among the orders by ln(wavelength).

    Parameters
    ----------
    wavelength_um : array (n_wave,)
        Ascending within each order.
    order : int array (n_wave,)
    n_spline : int
        At least 4 an order is used.
    """
    logarithm = np.log(wavelength_um)
    orders = np.unique(order)
    spans = np.array([np.ptp(logarithm[order == o]) for o in orders])
    shares = np.maximum(4, np.round(n_spline * spans / spans.sum()).astype(int))
    if orders.size == 1:
        shares[0] = max(4, n_spline)
    start = np.empty(wavelength_um.size, np.int64)
    values = np.empty((wavelength_um.size, 4))
    offset = 0
    for o, share in zip(orders, shares, strict=True):
        rows = np.flatnonzero(order == o)
        x = logarithm[rows]
        inner = np.linspace(x[0], x[-1], share - 2)
        knots = np.concatenate([[x[0]] * 3, inner, [x[-1]] * 3])
        matrix = BSpline.design_matrix(x, knots, 3).tocsr()
        first = np.clip(np.searchsorted(knots, x, side="right") - 4, 0, share - 4)
        dense = matrix.toarray()
        values[rows] = np.take_along_axis(dense, first[:, None] + np.arange(4), axis=1)
        start[rows] = first + offset
        offset += share
    return SplineBasis(start, values, offset)


@dataclass(frozen=True)
class Nuisance:
    """Columns N common to all spaxels of an exposure.

    Attributes
    ----------
    splines : SplineBasis
    star : float64 array (n_wave,)
        The star's spectrum s; ones for ``reference = "none"``.
    extras : float64 array (n_extra, n_wave)
        Dense additive columns, may be empty.
    """

    splines: SplineBasis
    star: NDArray[np.float64]
    extras: NDArray[np.float64]

    @property
    def products(self) -> NDArray[np.float64]:
        """Non-zero values of star * B_k, (n_wave, 4)."""
        return self.splines.values * self.star[:, None]

    @property
    def n_column(self) -> int:
        """Number of columns."""
        return self.splines.n_spline + len(self.extras)

    def dense(self) -> NDArray[np.float64]:
        """N as a matrix (n_wave, n_column)."""
        return np.hstack([self.splines.dense() * self.star[:, None], self.extras.T])


def nuisance_model(
    wavelength_um: NDArray,
    order: NDArray,
    star: NDArray,
    *,
    knots: int,
    background_knots: int = 0,
    modes: NDArray | None = None,
) -> Nuisance:
    """Put the columns together.

    Parameters
    ----------
    wavelength_um, order, star : arrays (n_wave,)
    knots : int
        Number of star splines over the used range.
    background_knots : int
        Number of additive background splines, 0 for none.
    modes : array (n_mode, n_wave), optional
        Systematic modes as additive columns.
    """
    extras = [np.zeros((0, wavelength_um.size))]
    if background_knots:
        extras.append(spline_basis(wavelength_um, order, background_knots).dense().T)
    if modes is not None:
        extras.append(np.asarray(modes, float))
    splines = spline_basis(wavelength_um, order, knots)
    return Nuisance(splines, np.asarray(star, float), np.ascontiguousarray(np.vstack(extras)))


@dataclass(frozen=True)
class StarlightFit:
    """Residuals and factors of the fit of every spaxel (shapes in `kernels.projection`)."""

    residual: NDArray[np.float32]
    band: NDArray[np.float64]
    scale: NDArray[np.float64]
    border: NDArray[np.float64]
    corner: NDArray[np.float64]
    corner_scale: NDArray[np.float64]


def fit_spaxels(
    spectra: NDArray[np.float32],
    weights: NDArray[np.float32],
    nuisance: Nuisance,
    *,
    in_place: bool = False,
) -> StarlightFit:
    """Fit the nuisance columns to every spaxel by weighted least squares.

    Parameters
    ----------
    spectra : float32 array (n_spaxel, n_wave)
    weights : float32 array (n_spaxel, n_wave)
        1 / variance, zero where masked.
    nuisance : Nuisance
    in_place : bool
        Overwrite `spectra` with the residuals, to save a plane of memory. Fitting residuals again with other
        weights is the same as fitting the data, because the projection is linear and annihilates N.

    Raises
    ------
    InputError
        If additive background and starlight are indistinguishable (scaled condition above 1e10): a
        ridge would hide it and put a featureless star's S/N off by several units.
    """
    n_spaxel = len(spectra)
    n_spline, n_extra = nuisance.splines.n_spline, len(nuisance.extras)
    fit = StarlightFit(
        residual=spectra if in_place else np.empty_like(spectra),
        band=np.empty((n_spaxel, n_spline, 4)),
        scale=np.empty((n_spaxel, n_spline)),
        border=np.empty((n_spaxel, n_extra, n_spline)),
        corner=np.empty((n_spaxel, n_extra, n_extra)),
        corner_scale=np.empty((n_spaxel, n_extra)),
    )
    pivot = np.ones(n_spaxel)
    # with additive background a ridge on the star splines biases the S/N (RIDGE is for empty runs only)
    ridge = RIDGE if n_extra == 0 else 1e-15
    fit_starlight(
        spectra,
        weights,
        nuisance.products,
        nuisance.splines.start,
        n_spline,
        nuisance.extras,
        ridge,
        fit.residual,
        fit.band,
        fit.scale,
        fit.border,
        fit.corner,
        fit.corner_scale,
        pivot,
    )
    usable = np.any(weights > 0, axis=1)
    if n_extra and np.any(pivot[usable] < 1.0 / CONDITION_LIMIT):
        worst = float(pivot[usable].min())
        raise InputError(
            "background and starlight are indistinguishable",
            f"a scaled condition of {1.0 / max(worst, 1e-300):.1e}",
            "lower [starlight].background_knots or set it to 0",
        )
    return fit


def mean_weights(weights: NDArray[np.float32]) -> NDArray[np.float64]:
    """Mean over spaxels of the weights, each spaxel scaled to mean one, (n_wave,)."""
    totals = weights.mean(axis=1, dtype=np.float64)
    usable = totals > 0
    if not np.any(usable):
        raise InputError("no spaxel has a usable sample", "all masked", "check the quality and error planes")
    inverse = np.zeros_like(totals)
    inverse[usable] = 1.0 / totals[usable]
    return (inverse.astype(np.float32) @ weights).astype(np.float64) / usable.sum()
