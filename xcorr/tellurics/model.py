"""The model LSF (x) [T_H2O^water * prod T_x^airmass](v) in the channels of a star, and its derivatives."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from xcorr.spectral import LsfOperator, doppler_factor
from xcorr.spectral.continuum import SmoothBasis
from xcorr.tellurics.types import Array, FitParameters, TransmissionTable
from xcorr.units import FWHM_PER_SIGMA, LIGHT_KM_S

WATER = "H2O"
WATER_RANGE, AIRMASS_RANGE, SCALE_RANGE = (0.01, 30.0), (0.2, 6.0), (0.6, 1.6)
VELOCITY_REACH_KM_S = 150.0
_BLACK = 1e-30  # transmissions are floored here before their logarithm


@dataclass(frozen=True)
class Star:
    """The star's spectrum and its channels, wavelengths in the frame of the tellurics at v = 0."""

    flux: Array  # (n,)
    variance: Array  # (n,)
    wavelength: Array  # (n,) um
    edges: Array  # (n, 2) um
    resolving: Array  # (n,)
    splines: SmoothBasis

    def subset(self, used: np.ndarray) -> Star:
        """Some of its channels."""
        return Star(
            self.flux[used],
            self.variance[used],
            self.wavelength[used],
            self.edges[used],
            self.resolving[used],
            self.splines.subset(used),
        )


@dataclass(frozen=True)
class Depths:
    """Optical depths on the table's own grid, constant beyond its ends."""

    wavelength: Array  # (n_t,)
    water: Array  # (n_t,)
    others: Array  # (n_t,)

    def transmission(self, water: float, airmass: float) -> Array:
        """T on the table's grid, (n_t,)."""
        return np.exp(-(water * self.water + airmass * self.others))


def optical_depths(table: TransmissionTable, star: Star) -> Depths:
    """Depths over the channels and as far as their line-spread functions can reach during the fit."""
    grid = np.asarray(table.wavelength_um, dtype=np.float64)
    water, others = np.zeros(grid.size), np.zeros(grid.size)
    for name, value in table.molecules.items():
        depth = -np.log(np.clip(value, _BLACK, 1.0))
        if name == WATER:
            water += depth
        else:
            others += depth
    reach = 6.0 / (FWHM_PER_SIGMA * SCALE_RANGE[0] * float(star.resolving.min()))
    reach += 1.5 * VELOCITY_REACH_KM_S / LIGHT_KM_S
    reach += 2.0 * float(np.max(np.ptp(star.edges, axis=1) / star.wavelength))
    first = max(0, int(np.searchsorted(grid, star.wavelength.min() * (1.0 - reach))) - 1)
    last = min(grid.size, int(np.searchsorted(grid, star.wavelength.max() * (1.0 + reach))) + 1)
    kept = grid[first:last]
    step = float(np.median(np.diff(np.log(kept))))
    n_pad = int(np.ceil(reach / step)) + 1
    steps = step * np.arange(1, n_pad + 1)
    return Depths(
        np.concatenate([kept[0] * np.exp(-steps[::-1]), kept, kept[-1] * np.exp(steps)]),
        np.pad(water[first:last], n_pad, mode="edge"),
        np.pad(others[first:last], n_pad, mode="edge"),
    )


def operator_at(star: Star, depths: Depths, beta: float, scale: float) -> LsfOperator:
    """Operator at a velocity: channels are shifted back, not T forth, so that nothing is interpolated."""
    factor = float(doppler_factor(beta * LIGHT_KM_S))
    return LsfOperator.build(
        depths.wavelength, star.wavelength / factor, star.resolving * scale, edges_um=star.edges / factor
    )


def model_and_slopes(star: Star, depths: Depths, at: FitParameters) -> tuple[Array, Array]:
    """LSF (x) T (n,), and its derivatives (4, n) by ln water, ln airmass, v/c and ln R."""
    operator = operator_at(star, depths, at.beta, at.scale)
    t = depths.transmission(at.water, at.airmass)
    by_log = np.gradient(t, np.log(depths.wavelength))
    # d ln(lambda) / d beta of the shifted features is gamma^2, one to 3e-7 here
    columns = np.stack([t, -t * depths.water * at.water, -t * depths.others * at.airmass, -by_log])
    value, *slopes = operator.apply(columns)
    by_scale = replace(operator, weights=operator.slopes).apply(t)
    return value, np.stack([*slopes, by_scale])
