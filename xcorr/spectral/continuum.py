"""Smooth curves through a spectrum: penalised B-splines that bridge gaps, and robust weights."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import BSpline

Array = NDArray[np.float64]

TUKEY = 4.685  # 95 % efficiency for normal errors (common practice)
MAD_TO_SIGMA = 1.4826
# Roughness counts this much of the data's own information: nothing where there are data, a bridge where not.
_BRIDGE = 1e-3
_EMPTY = 1e-3  # of that, to hold splines of an order without any data at zero


@dataclass(frozen=True)
class SmoothBasis:
    """Cubic B-splines, uniform in ln(wavelength) over each order.

    Attributes
    ----------
    columns : float64 array (n_wave, n_spline)
        Their values; they sum to one over the splines.
    penalty : float64 array (n_penalty, n_spline)
        Second differences of neighbouring coefficients within an order, and a faint ridge.
    """

    columns: Array
    penalty: Array

    def subset(self, used: NDArray[np.bool_]) -> SmoothBasis:
        """The same splines at some of the channels."""
        return SmoothBasis(self.columns[used], self.penalty)

    def solve(self, target: Array, root_weight: Array, factor: ArrayLike = 1.0) -> tuple[Array, Array]:
        """Weighted least squares of `target` by factor * splines.

        Parameters
        ----------
        target, root_weight : float64 array (n_wave,)
            Data, and the square roots of their weights.
        factor : float64 array (n_wave,)
            What multiplies the splines, e.g. a transmission.

        Returns
        -------
        coefficients : float64 array (n_spline,)
        basis : float64 array (n_wave, n_spline)
            Whitened residuals are ``y - basis @ (basis.T @ y)``, with y = target * root_weight.
        """
        data = self.columns * (np.asarray(factor) * root_weight)[:, None]
        scale = _BRIDGE * np.sqrt(np.sum(data**2) / data.shape[1])
        q, r = np.linalg.qr(np.vstack([data, scale * self.penalty]))
        basis = q[: target.size]
        return np.linalg.solve(r, basis.T @ (target * root_weight)), basis


def smooth_basis(
    wavelength_um: Array, order: NDArray[np.integer], spacing: float, knots: int | None = None
) -> SmoothBasis:
    """B-splines of a given spacing in ln(wavelength), or of a given number in all.

    Parameters
    ----------
    wavelength_um : float64 array (n_wave,)
        Ascending within each order.
    order : int array (n_wave,)
        Order index.
    spacing : float
        Largest distance of knots in ln(wavelength).
    knots : int, optional
        Number of splines in all instead, shared among the orders by their span; at least four an order.
    """
    x = np.log(wavelength_um)
    blocks = [order == value for value in np.unique(order)]
    spans = [float(np.ptp(x[block])) for block in blocks]
    parts, penalties = [], []
    for block, span in zip(blocks, spans, strict=True):
        number = round(knots * span / sum(spans)) if knots else 3 + int(np.ceil(span / spacing))
        number = max(4, number)
        inner = np.linspace(x[block][0], x[block][-1], number - 2)
        places = np.concatenate([[inner[0]] * 3, inner, [inner[-1]] * 3])
        part = np.zeros((x.size, number))
        part[block] = BSpline.design_matrix(x[block], places, 3).toarray()
        parts.append(part)
        penalties.append(np.diff(np.eye(number), n=2, axis=0))
    n_spline = sum(part.shape[1] for part in parts)
    rough = np.zeros((sum(len(p) for p in penalties), n_spline))
    row = column = 0
    for p in penalties:
        rough[row : row + p.shape[0], column : column + p.shape[1]] = p
        row, column = row + p.shape[0], column + p.shape[1]
    return SmoothBasis(np.hstack(parts), np.vstack([rough, _EMPTY * np.eye(n_spline)]))


def tukey_weights(residual: Array, sigma: Array) -> Array:
    """Tukey's biweight, zero beyond 4.685 sigma and beside channels that are (wings of a rejected line)."""
    u = residual / (TUKEY * sigma)
    weight = np.where(np.abs(u) < 1.0, (1.0 - u**2) ** 2, 0.0)
    padded = np.pad(weight, 1, mode="edge")
    return np.where((padded[:-2] == 0.0) | (padded[2:] == 0.0), 0.0, weight)


def upper_envelope(basis: SmoothBasis, flux: Array, used: NDArray[np.bool_]) -> Array:
    """Smooth curve over a spectrum with absorption, (n_wave,): channels well below it count one twentieth."""
    inside = basis.subset(used)
    values, weight = flux[used], np.ones(np.count_nonzero(used))
    for _ in range(10):
        coefficients, _ = inside.solve(values, np.sqrt(weight))
        below = values - inside.columns @ coefficients
        scatter = MAD_TO_SIGMA * float(np.median(np.abs(below)))
        weight = np.where(below < -scatter, 0.05, 1.0)
    return basis.columns @ coefficients
