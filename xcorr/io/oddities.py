"""Two traps of real cubes: spaxels written twice, and error planes that hold a meaningless constant."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import Note
from xcorr.io.samples import Samples

_MIN_COMMON = 8  # channels two spaxels must share before they can be called equal
_CONSTANT = 1e-3  # relative spread of a constant error plane
# claimed errors below these fractions of the scatter from channel to channel cannot be meant
_ABSURD, _ABSURD_VARYING = 1e-2, 1e-3
_NEAR = 20.0  # factor within which errors "fit": resampled data scatter several times less than they should


def mask_duplicates(samples: Samples) -> int:
    """Mask spaxels that repeat their lower neighbour in y or x exactly; returns how many.

    Some slicer reductions write each row twice. Two spaxels of real data that agree bit for bit in all
    channels are one measurement; counted twice it would raise every S/N by up to sqrt(2).
    """
    data, mask = samples.data, samples.mask
    double = np.zeros(data.shape[1:], bool)
    for axis in (1, 2):
        lower = tuple(slice(None, -1) if i == axis else slice(None) for i in range(3))
        upper = tuple(slice(1, None) if i == axis else slice(None) for i in range(3))
        double[upper[1:]] |= _equal(data[lower], data[upper], mask[lower], mask[upper])
    count = int(np.count_nonzero(double))
    if count:
        usable = int(np.count_nonzero(~mask.all(axis=0)))
        bad = np.broadcast_to(double, data.shape)
        for start in range(0, data.shape[0], 64):
            part = slice(start, start + 64)
            samples.add_mask(part, bad[part], "duplicate")
        message = f"{count} of {usable} spaxels repeat a neighbour exactly: counted once, the copies masked"
        samples.notes.append(Note("duplicate-spaxels", message))
    return count


def _equal(
    a: NDArray[np.float32], b: NDArray[np.float32], masked_a: NDArray[np.bool_], masked_b: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Spaxels equal in all channels usable in both, shape (y, x); stops when no candidate is left."""
    same = np.ones(a.shape[1:], bool)
    common = np.zeros(a.shape[1:], np.int64)
    low, high = np.full(a.shape[1:], np.inf), np.full(a.shape[1:], -np.inf)
    for start in range(0, a.shape[0], 32):
        part = slice(start, start + 32)
        both = ~(masked_a[part] | masked_b[part])
        differs = (a[part] != b[part]) & both
        same &= ~differs.any(axis=0)
        if not same.any():
            break
        common += both.sum(axis=0)
        low = np.minimum(low, np.where(both, a[part], np.inf).min(axis=0))
        high = np.maximum(high, np.where(both, a[part], -np.inf).max(axis=0))
    return same & (high > low) & (common >= _MIN_COMMON)


def drop_absurd_errors(samples: Samples) -> None:
    """Forget a claimed error plane that lies far below what the data show.

    The scatter is the robust scatter of second differences along wavelength in the quietest tenth of the
    spaxels (of the only one in a spectrum): noise plus structure. A constant plane below a hundredth of it,
    or one whose largest value is below a thousandth, is no error of these data.
    """
    low, high = samples.sigma_range
    if samples.variance is None:
        return
    constant = high <= low * (1 + _CONSTANT)
    scatter = _scatter(samples) * 10.0 ** (-samples.scale_exponent)
    if high >= (_ABSURD if constant else _ABSURD_VARYING) * scatter:
        return
    samples.variance = None
    found = f"the constant {high:.3g}" if constant else f"{low:.3g} to {high:.3g}"
    message = (
        f"the error plane holds {found}, at least {scatter / high:.3g} times less than the scatter of the"
        f" data from channel to channel ({scatter:.3g}): ignored, noise to be estimated"
    )
    typical = math.sqrt(math.sqrt(low * high))
    if scatter / _NEAR < typical < scatter * _NEAR:
        message += f"; its square root ({typical:.3g}) would fit: perhaps variances, see error_kind"
    samples.notes.append(Note("error-plane-absurd", message))


def _scatter(samples: Samples) -> float:
    n_wave, ny, nx = samples.data.shape
    if n_wave < 3:
        return 0.0
    step = max(1, ny * nx // 400)
    found = []
    for spaxel in range(0, ny * nx, step):
        y, x = divmod(spaxel, nx)
        flux = samples.data[:, y, x].astype(np.float64)
        good = ~samples.mask[:, y, x]
        triple = good[:-2] & good[1:-1] & good[2:]
        if np.count_nonzero(triple) >= 16:
            second = flux[:-2] - 2 * flux[1:-1] + flux[2:]
            found.append(1.4826 * float(np.median(np.abs(second[triple]))) / np.sqrt(6.0))
    return float(np.quantile(found, 0.1)) if found else 0.0
