"""The information limit of a scene: the S/N no unbiased linear search can beat.

    S/N_ideal = sqrt( sum over exposures of s' C^-1 P s )

s: noiseless companion signal, C: true covariance of the noise, P: the projection, orthogonal in C^-1, that
removes the default columns: per spaxel the true star spectrum times `knots` cubic B-splines, and
`companion_knots` columns a_p T B_j, shared by the spaxels. Written for this purpose only; no code is
shared with the search.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline

from xcorr.simulate.detector import Correlation

Array = NDArray[np.float64]
# Per-spaxel starlight (p, k), shared continuum (j,), masked samples (m,).
Columns = tuple[Array, Array, Array]
# Share of s'W s in the spaxels left out: S/N is low by half of it or less (measured 4e-5 and 2.4e-4).
NEGLECTED = 1.0e-4
NEGLECTED_CORRELATED = 1.0e-3
# Of s'C^-1 s; the information is some per cent of it.
PRECISION = 1.0e-7
MAX_STEPS = 200
ROUNDING = 1.0e-12


@dataclass(frozen=True)
class SignalModel:
    """One exposure as the information limit sees it.

    Attributes
    ----------
    signal : array (n_wave, ny, nx)
        Noiseless companion.
    variance : array (n_wave, ny, nx)
        True variance, positive.
    good : bool array (n_wave, ny, nx)
        False where a sample is unusable.
    reference : array (n_wave,)
        True star spectrum, any scale.
    continuum : array (n_wave, ny, nx)
        a_p T: the image of a source with a flat spectrum.
    correlation : Correlation
    """

    signal: NDArray[np.floating]
    variance: NDArray[np.floating]
    good: NDArray[np.bool_]
    reference: Array
    continuum: NDArray[np.floating]
    correlation: Correlation


def spline_basis(n_wave: int, count: int) -> Array:
    """Cubic B-splines on equal intervals over the channels: (n_wave, count), count >= 4."""
    inner = np.linspace(0.0, n_wave - 1.0, count - 2)
    knots = np.concatenate([[0.0] * 3, inner, [n_wave - 1.0] * 3])
    return BSpline.design_matrix(np.arange(n_wave, dtype=float), knots, 3).toarray()


def information(model: SignalModel, knots: int = 40, companion_knots: int = 6) -> float:
    """s' C^-1 P s of one exposure: the square of its ideal S/N.

    Spaxels are kept in order of their share of s' W s until 1e-4 of it is left (correlated noise: 1e-3, and
    the neighbours are kept too); the information lost is of that order.
    """
    white = model.correlation.is_white
    kept = kept_spaxels(model, NEGLECTED if white else NEGLECTED_CORRELATED)
    if not kept.any():
        return 0.0
    if white:
        return _white(model, kept, knots, companion_knots)
    return _correlated(model, _grow(kept), knots, companion_knots)


def kept_spaxels(model: SignalModel, neglected: float) -> NDArray[np.bool_]:
    """Spaxels (ny, nx) that hold all but this share of s' W s; none where there is no signal."""
    ratio = np.square(model.signal) / model.variance
    energy = np.where(model.good, ratio, 0.0).sum(axis=0, dtype=np.float64)
    ranked = np.sort(energy, axis=None)[::-1]
    count = int(np.searchsorted(np.cumsum(ranked), (1.0 - neglected) * ranked.sum())) + 1
    return (energy >= ranked[min(count, ranked.size) - 1]) & (energy > 0.0)


def compact(model: SignalModel) -> SignalModel:
    """The kept spaxels as one row, (n_wave, 1, p), as if the noise were white."""
    kept = kept_spaxels(model, NEGLECTED)
    planes = {
        name: getattr(model, name)[:, None, kept] for name in ("signal", "variance", "good", "continuum")
    }
    return replace(model, correlation=Correlation(), **planes)


def _grow(kept: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """The kept spaxels and their neighbours on all sides."""
    padded = np.pad(kept, 1)
    rows, columns = kept.shape
    shifts = [padded[dy : dy + rows, dx : dx + columns] for dy in (0, 1, 2) for dx in (0, 1, 2)]
    return np.logical_or.reduce(shifts)


def _white(model: SignalModel, kept: NDArray[np.bool_], knots: int, companion_knots: int) -> float:
    """Independent samples: exact, spaxel by spaxel, then the shared columns."""
    n_wave = model.reference.size
    variance = model.variance[:, kept].astype(np.float64)
    weight = np.where(model.good[:, kept], 1.0 / variance, 0.0).T  # (p, n)
    signal = model.signal[:, kept].astype(np.float64).T
    continuum = model.continuum[:, kept].astype(np.float64).T
    starlight = spline_basis(n_wave, knots) * model.reference[:, None]
    normal = WhiteNormal(starlight, spline_basis(n_wave, companion_knots), continuum, weight)
    weighted = weight * signal
    right = weighted @ starlight, np.einsum("pn,pn->n", continuum, weighted) @ normal.shared
    columns, shared = normal.solve(*right)
    return float(np.vdot(signal, weighted) - np.vdot(right[0], columns) - right[1] @ shared)


class WhiteNormal:
    """Normal equations of the columns for independent samples.

    Parameters
    ----------
    starlight : array (n_wave, k)
        Columns of every spaxel by itself.
    shared : array (n_wave, j)
        Splines of the companion continuum.
    continuum, weight : arrays (p, n_wave)
        a_p T, and inverse variance (zero where masked).
    """

    def __init__(self, starlight: Array, shared: Array, continuum: Array, weight: Array) -> None:
        self.shared = shared
        self._inverse = np.linalg.inv(_normal_matrices(starlight, weight))
        weighted = weight * continuum
        self._cross = np.stack([weighted @ (starlight * column[:, None]) for column in shared.T], axis=2)
        self._solved = np.matmul(self._inverse, self._cross)  # (p, k, j)
        own = shared.T @ (np.einsum("pn,pn->n", continuum, weighted)[:, None] * shared)
        rest = own - np.tensordot(self._cross, self._solved, axes=((0, 1), (0, 1)))
        # Starlight explains most of a shared column (1e-3 to 1e-10 of it is left in real scenes); a
        # direction that it explains to rounding is taken out.
        scale = 1.0 / np.sqrt(np.diag(own))
        left, direction = np.linalg.eigh(rest * np.outer(scale, scale))
        direction = direction[:, left > ROUNDING] * scale[:, None]
        self._rest_inverse = (direction / left[left > ROUNDING]) @ direction.T

    def solve(self, columns: Array, shared: Array) -> tuple[Array, Array]:
        """Solution for right-hand sides (p, k) and (j,)."""
        own = np.matmul(self._inverse, columns[:, :, None])[:, :, 0]
        together = self._rest_inverse @ (shared - np.einsum("pkj,pk->j", self._cross, own))
        return own - self._solved @ together, together


def _normal_matrices(starlight: Array, weight: Array) -> Array:
    """N' W N for every spaxel (p, k, k); a column without weight gets a unit diagonal."""
    knots = starlight.shape[1]
    normal = np.zeros((weight.shape[0], knots, knots))
    for lag in range(4):  # cubic splines overlap with three neighbours
        products = weight @ (starlight[:, : knots - lag] * starlight[:, lag:])
        row = np.arange(knots - lag)
        normal[:, row, row + lag] = products
        normal[:, row + lag, row] = products
    diagonal = np.arange(knots)
    empty = normal[:, diagonal, diagonal] <= 0.0
    ridge = 1.0e-13 * normal[:, diagonal, diagonal]
    normal[:, diagonal, diagonal] += np.where(empty, 1.0, ridge)
    return normal


def _correlated(model: SignalModel, kept: NDArray[np.bool_], knots: int, companion_knots: int) -> float:
    """Correlated noise: generalised least squares by conjugate gradients.

    C = D K D with K = K_wave (x) K_space. A masked sample becomes a column of its own, which marginalises
    over it exactly and keeps the Kronecker structure. The equations for white noise are the preconditioner.
    """
    y, x = np.nonzero(kept)
    space = np.linalg.inv(model.correlation.between_spaxels(y, x))
    bad = ~model.good[:, kept]
    scale = 1.0 / np.sqrt(model.variance[:, kept].astype(np.float64))
    reference = model.reference / np.abs(model.reference).max()
    starlight = spline_basis(reference.size, knots) * reference[:, None]
    shared = spline_basis(reference.size, companion_knots)
    continuum = model.continuum[:, kept] * scale
    signal = np.where(bad, 0.0, model.signal[:, kept] * scale)
    weight = np.where(bad, 0.0, scale**2)
    white = WhiteNormal(starlight, shared, (continuum / scale).T, weight.T)

    def precision(values: Array) -> Array:
        return model.correlation.solve_wave(values) @ space

    def forward(free: Columns) -> Array:
        values = scale * (starlight @ free[0].T) + continuum * (shared @ free[1])[:, None]
        values[bad] += free[2]
        return values

    def adjoint(values: Array) -> Columns:
        return (scale * values).T @ starlight, (continuum * values).sum(axis=1) @ shared, values[bad]

    def normal(free: Columns) -> Columns:
        return adjoint(precision(forward(free)))

    def precondition(right: Columns) -> Columns:
        masked = np.zeros_like(scale)
        masked[bad] = right[2]
        taken = adjoint(masked)
        columns, together = white.solve(right[0] - taken[0], right[1] - taken[1])
        return columns, together, right[2] - forward((columns, together, 0.0))[bad]

    weighted = precision(signal)
    whole = float(np.vdot(signal, weighted))
    return whole - _conjugate_gradient(normal, adjoint(weighted), precondition, enough=PRECISION * whole)


def _conjugate_gradient(operator: Any, right: Columns, precondition: Any, enough: float) -> float:
    """b' M^-1 b by preconditioned conjugate gradients (Hestenes & Stiefel 1952).

    Every step adds alpha * r'z >= 0 to the result; it stops once a step adds less than `enough`.
    """

    def dot(a: Columns, b: Columns) -> float:
        return sum(float(np.vdot(p, q)) for p, q in zip(a, b, strict=True))

    residual, total = right, 0.0
    direction, previous = None, 1.0
    for _ in range(MAX_STEPS):
        step = precondition(residual)
        power = dot(residual, step)
        if power <= 0.0:
            break
        if direction is not None:
            step = tuple(s + (power / previous) * d for s, d in zip(step, direction, strict=True))
        direction, previous = step, power
        image = operator(direction)
        alpha = power / dot(direction, image)
        residual = tuple(r - alpha * i for r, i in zip(residual, image, strict=True))
        total += alpha * power
        if alpha * power < enough:
            break
    return total
