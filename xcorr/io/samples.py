"""From planes on disk to samples in memory: one float32 copy of each, masks, a common power of ten.

Works on chunks, so that the peak is the two planes, the mask and a few megabytes.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note

# (index into (wave, y, x), values of that part)
Chunks = Iterable[tuple[tuple[slice, ...], NDArray[Any]]]
_BLOCK = 64  # channels handled at once
_TINY, _HUGE = 1e-3, 1e5  # typical fluxes between these are kept as they are
_VARIANCE_OF: dict[str, Callable[[NDArray[np.float64]], NDArray[np.float64]]] = {
    "sigma": lambda x: np.where(x > 0, x * x, np.nan),
    "variance": lambda x: x,
    "inverse_variance": lambda x: 1.0 / x,
    "inverse_sigma": lambda x: np.where(x > 0, 1.0 / (x * x), np.nan),
}


@dataclass
class Samples:
    """Planes under construction, (wave, y, x).

    Attributes
    ----------
    data : float32 array
    mask : bool array
        True = unusable.
    variance : float32 array or None
    scale_exponent : int
        data = physical value * 10**scale_exponent.
    sigma_range : (low, high)
        Of the usable claimed errors, physical units.
    masked : dict
        Samples masked by cause, each counted at its first cause.
    notes : list of Note
    """

    data: NDArray[np.float32]
    mask: NDArray[np.bool_]
    variance: NDArray[np.float32] | None = None
    scale_exponent: int = 0
    sigma_range: tuple[float, float] = (math.inf, 0.0)
    masked: dict[str, int] = field(default_factory=dict)
    notes: list[Note] = field(default_factory=list)

    def add_mask(self, index: Any, bad: NDArray[np.bool_], cause: str) -> None:
        """Mask the samples `bad` of a part; counts those that were still usable."""
        view = self.mask[index]
        fresh = int(np.count_nonzero(bad & ~view))
        if fresh:
            self.masked[cause] = self.masked.get(cause, 0) + fresh
            view |= bad


def read_data(shape: tuple[int, int, int], chunks: Chunks, stored_exponent: int = 0) -> Samples:
    """Data plane in float32, scaled by a power of ten where the fluxes are tiny or huge; NaN and inf masked.

    `stored_exponent`: the file already holds physical values times 10**stored_exponent.
    """
    try:
        samples = Samples(np.empty(shape, np.float32), np.zeros(shape, bool))
    except (MemoryError, ValueError) as error:
        raise InputError(
            "cube too large for memory", f"{shape}", "cut it with wavelength_range_um"
        ) from error
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        for index, values in chunks:
            samples.data[index] = values
            samples.add_mask(index, ~np.isfinite(samples.data[index]), "not finite")
    _refuse_if_all_masked(samples, "every sample is NaN or infinite")
    _scale(samples)
    samples.scale_exponent += stored_exponent
    return samples


def _scale(samples: Samples) -> None:
    data = samples.data
    step = max(1, data.shape[0] // 200)
    part, good = data[::step], ~samples.mask[::step]
    sizes = np.abs(part[good & (part != 0)], dtype=np.float64)
    if sizes.size == 0:
        return
    typical = float(np.median(sizes))
    if _TINY <= typical <= _HUGE:
        return
    samples.scale_exponent = -math.floor(math.log10(typical))
    factor = 10.0**samples.scale_exponent
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        for start in range(0, data.shape[0], _BLOCK):
            data[start : start + _BLOCK] = data[start : start + _BLOCK].astype(np.float64) * factor


def mask_empty(samples: Samples) -> None:
    """Mask channels, and spaxels, whose usable samples are all exactly zero: nothing was recorded there."""
    data, mask = samples.data, samples.mask
    lit = np.zeros(data.shape[1:], bool)
    for start in range(0, data.shape[0], _BLOCK):
        part = slice(start, start + _BLOCK)
        used = (data[part] != 0) & ~mask[part]
        lit |= used.any(axis=0)
        dark = ~used.any(axis=(1, 2))
        if dark.any():
            samples.add_mask(part, np.broadcast_to(dark[:, None, None], used.shape), "channel zero")
    if not lit.all():
        samples.add_mask(slice(None), np.broadcast_to(~lit, data.shape), "spaxel zero")
    _mask_zeros_of_ragged_spaxels(samples)
    _refuse_if_all_masked(samples, "every sample is zero or unusable")


def _mask_zeros_of_ragged_spaxels(samples: Samples) -> None:
    """Mask exact zeros in spaxels at the rim of the field that were filled with zeros in part.

    A spaxel is ragged where over a tenth of its usable samples are exactly zero while the median spaxel has
    fewer than a hundredth; counts, where zeros are honest, fail the second test.
    """
    data, mask = samples.data, samples.mask
    zeros, usable = np.zeros(data.shape[1:], np.int64), np.zeros(data.shape[1:], np.int64)
    for start in range(0, data.shape[0], _BLOCK):
        part = slice(start, start + _BLOCK)
        zeros += np.count_nonzero((data[part] == 0) & ~mask[part], axis=0)
        usable += np.count_nonzero(~mask[part], axis=0)
    fraction = zeros / np.maximum(usable, 1)
    if not usable.any() or np.median(fraction[usable > 0]) >= 0.01:
        return
    for y, x in np.argwhere(fraction > 0.1):
        samples.add_mask((slice(None), y, x), data[:, y, x] == 0, "zero at the rim")


def read_errors(samples: Samples, chunks: Chunks, kind: str, label: str, stored_exponent: int = 0) -> None:
    """Claimed errors as variances; non-finite and non-positive ones masked.

    Raises
    ------
    InputError
        If no usable sample has a positive variance.
    """
    data = samples.data
    variance = np.empty(data.shape, np.float32)
    factor, any_good = 10.0 ** (2 * (samples.scale_exponent - stored_exponent)), False
    low, high = samples.sigma_range
    with np.errstate(all="ignore"):
        for index, values in chunks:
            physical = _VARIANCE_OF[kind](np.asarray(values, dtype=np.float64))
            good = np.isfinite(physical) & (physical > 0)
            any_good = any_good or bool(good.any())
            used = good & ~samples.mask[index]
            if used.any():
                low = min(low, math.sqrt(physical[used].min()))
                high = max(high, math.sqrt(physical[used].max()))
            physical *= factor
            variance[index] = physical
            samples.add_mask(index, ~good, "no positive error")
    if not any_good:
        raise InputError(
            f"error plane {label} holds no positive {kind.replace('_', ' ')}",
            "all zero, negative or NaN",
            "name another with error_extension, or check error_kind",
        )
    _refuse_if_all_masked(samples, "no sample has both a flux and a positive error")
    stored = 10.0 ** (-stored_exponent)
    samples.variance, samples.sigma_range = variance, (low * stored, high * stored)


def read_quality(
    samples: Samples, chunks: Chunks, bad_bits: Sequence[int] | None, good_bits: Sequence[int] | None
) -> str:
    """Mask flagged samples; returns the rule in words.

    Without bits any non-zero value is bad; bad bits: any of them set; good bits: not all of them set.
    """
    for index, values in chunks:
        samples.add_mask(index, _flagged(values, bad_bits, good_bits), "flagged")
    _refuse_if_all_masked(samples, "the quality plane leaves no usable sample")
    if good_bits is not None:
        return f"good = bits {list(good_bits)} all set"
    return "bad = any bit set" if bad_bits is None else f"bad = any of bits {list(bad_bits)} set"


def _flagged(
    values: NDArray[Any], bad_bits: Sequence[int] | None, good_bits: Sequence[int] | None
) -> NDArray[np.bool_]:
    unknown = np.zeros(values.shape, bool)
    if not np.issubdtype(values.dtype, np.integer):
        unknown = ~np.isfinite(values)
        values = np.where(unknown, 0, values)
        if bad_bits is None and good_bits is None:
            return np.asarray(unknown | (values != 0))
        values = values.astype(np.int64)
    elif bad_bits is None and good_bits is None:
        return np.asarray(values != 0)
    flags = values.astype(np.uint64)
    wanted = np.uint64(sum(1 << bit for bit in set(good_bits if good_bits is not None else bad_bits or ())))
    if good_bits is not None:
        return np.asarray(unknown | ((flags & wanted) != wanted))
    return np.asarray(unknown | ((flags & wanted) != 0))


ABSURD_VARIANCE = 1e-3
"""Samples that claim less than this fraction of the median variance are masked: resampling at the edge of a
gap leaves errors near zero, and one of them would outweigh the whole spectrum."""


def _typical_variance(samples: Samples) -> float:
    """Median claimed variance of the usable samples, from every 37th of them."""
    assert samples.variance is not None  # callers check
    values = samples.variance.reshape(-1)[::37]
    usable = ~samples.mask.reshape(-1)[::37] & np.isfinite(values) & (values > 0)
    return float(np.median(values[usable])) if usable.any() else 0.0


def finish(samples: Samples) -> None:
    """Masked data become 0 and masked variances 1; errors too large or small to be used are masked."""
    if samples.variance is not None:
        floor = np.float32(ABSURD_VARIANCE * _typical_variance(samples))
        for start in range(0, samples.variance.shape[0], _BLOCK):
            part = slice(start, start + _BLOCK)
            block = samples.variance[part]
            samples.add_mask(part, ~np.isfinite(block) | (block <= 0), "no positive error")
            samples.add_mask(part, block < floor, "error absurdly small")
        np.copyto(samples.variance, np.float32(1), where=samples.mask)
    np.copyto(samples.data, np.float32(0), where=samples.mask)
    _refuse_if_all_masked(samples, "no usable sample remains")


def _refuse_if_all_masked(samples: Samples, what: str) -> None:
    if samples.mask.all():
        raise InputError(
            f"nothing to work on: {what}", f"{samples.mask.size} samples", "check the file and its planes"
        )
