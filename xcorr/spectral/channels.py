"""Grids and channels: where pixels begin and end, and the mean of a spectrum over each."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.ndimage import median_filter

from xcorr.errors import InputError
from xcorr.units import to_plain

# A step this much larger than its neighbours is a gap (dropped channels), not a wide pixel.
GAP_FACTOR = 1.6


def ascending(wavelength_um: Any, name: str = "wavelengths", at_least: int = 2) -> NDArray[np.float64]:
    """Contiguous float64 wavelengths in micrometre, checked to be finite, positive and strictly ascending.

    Raises
    ------
    InputError
        Otherwise.
    """
    wavelength = np.ascontiguousarray(to_plain(wavelength_um, "um"))
    if wavelength.ndim != 1 or wavelength.size < at_least:
        raise InputError(
            f"{name} must be one axis of at least {at_least} samples", f"shape {wavelength.shape}"
        )
    if not np.all(np.isfinite(wavelength)) or wavelength[0] <= 0 or np.any(np.diff(wavelength) <= 0):
        raise InputError(
            f"{name} must be positive and ascend strictly",
            "repeated, descending or non-finite values",
            "sort them and drop repeated rows",
        )
    return wavelength


def log_grid(start_um: float, stop_um: float, resolving_power: float) -> NDArray[np.float64]:
    """Grid of constant step 1/R in ln lambda from `start_um` to at least `stop_um`.

    Parameters
    ----------
    start_um, stop_um : float
        First and last wavelength to cover, micrometre.
    resolving_power : float
        lambda / step. Line-by-line work needs 200,000 or more.

    Returns
    -------
    float64 array (n,)

    Examples
    --------
    >>> log_grid(2.0, 2.4, 200_000).size
    36466
    """
    start, stop = float(to_plain(start_um, "um")), float(to_plain(stop_um, "um"))
    if not (0 < start < stop and resolving_power > 0):
        raise InputError("a grid needs 0 < start < stop and R > 0", f"{start}, {stop}, R {resolving_power}")
    n_steps = int(np.ceil(np.log(stop / start) * resolving_power - 1e-9))
    return start * np.exp(np.arange(n_steps + 1) / resolving_power)


def _block_edges(centres: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n, 2) edges of one order: midpoints, except across gaps and at the ends."""
    step = np.diff(centres)
    usual = median_filter(step, size=min(9, step.size), mode="nearest")
    half = 0.5 * np.where(step > GAP_FACTOR * usual, usual, step)
    low = centres - np.concatenate([half[:1], half])
    high = centres + np.concatenate([half, half[-1:]])
    return np.stack([low, high], axis=1)


def channel_edges(wavelength_um: Any, order: ArrayLike | None = None) -> NDArray[np.float64]:
    """Lower and upper edge of every channel.

    Edges are midpoints between centres of one order; the first and last channel are symmetric. A step more
    than 1.6 times the median of its neighbours is taken for a gap, whose adjoining channels keep their usual
    half-width.

    Parameters
    ----------
    wavelength_um : array_like or Quantity (n_wave,)
        Channel centres, micrometre, ascending within each order.
    order : array_like of int (n_wave,), optional
        Order index in contiguous blocks; one order without it.

    Returns
    -------
    float64 array (n_wave, 2)

    Raises
    ------
    InputError
        Centres that do not ascend, or an order of a single channel.
    """
    if order is None:
        return _block_edges(ascending(wavelength_um, "channel centres"))
    wavelength, blocks = to_plain(wavelength_um, "um"), np.asarray(order)
    if blocks.shape != wavelength.shape:
        raise InputError("one order per channel needed", f"{blocks.shape} for {wavelength.shape} channels")
    cuts = np.flatnonzero(np.diff(blocks)) + 1
    parts = np.split(wavelength, cuts)
    return np.concatenate([_block_edges(ascending(part, "channel centres of an order")) for part in parts])


def edge_pairs(edges: Any) -> NDArray[np.float64]:
    """(n, 2) edges from pairs or from (n + 1,) shared edges.

    Raises
    ------
    InputError
        Pixels without width.
    """
    pairs = to_plain(edges, "um")
    if pairs.ndim == 1 and pairs.size >= 2:
        pairs = np.stack([pairs[:-1], pairs[1:]], axis=1)
    if pairs.ndim != 2 or pairs.shape[1] != 2 or not np.all(pairs[:, 1] > pairs[:, 0]):
        raise InputError("channel edges must be (n, 2) or (n + 1,) and ascend", f"shape {pairs.shape}")
    return np.ascontiguousarray(pairs)


def to_channels(wavelength_hi: Any, flux: ArrayLike, edges: Any) -> NDArray[np.float64]:
    """Mean of a spectrum over each pixel; conserves flux.

    The integral of the piecewise-linear spectrum is exact: summed over adjoining pixels, mean times width
    equals the trapezoid integral of the input.

    Parameters
    ----------
    wavelength_hi : array_like or Quantity (n_hi,)
        Ascending wavelengths, micrometre.
    flux : array_like (n_hi,) or (n_columns, n_hi)
        Flux density.
    edges : array_like or Quantity (n_wave, 2) or (n_wave + 1,)
        Pixel edges, micrometre, see `channel_edges`.

    Returns
    -------
    float64 array (n_wave,) or (n_columns, n_wave)
        NaN where a pixel is not wholly inside the input.
    """
    wavelength, pairs = ascending(wavelength_hi), edge_pairs(edges)
    values = np.asarray(flux, dtype=np.float64)
    if values.ndim not in (1, 2) or values.shape[-1] != wavelength.size:
        raise InputError("flux must have one value per wavelength", f"{values.shape} for {wavelength.size}")
    step = np.diff(wavelength)
    trapezoids = 0.5 * (values[..., 1:] + values[..., :-1]) * step
    integral = np.concatenate([np.zeros((*values.shape[:-1], 1)), np.cumsum(trapezoids, axis=-1)], axis=-1)

    index = np.clip(np.searchsorted(wavelength, pairs, side="right") - 1, 0, step.size - 1)
    beyond = pairs - wavelength[index]
    slope = (values[..., index + 1] - values[..., index]) / step[index]
    at_edge = integral[..., index] + beyond * (values[..., index] + 0.5 * slope * beyond)
    mean = (at_edge[..., 1] - at_edge[..., 0]) / (pairs[:, 1] - pairs[:, 0])
    outside = (pairs[:, 0] < wavelength[0]) | (pairs[:, 1] > wavelength[-1])
    return np.where(outside, np.nan, mean)
