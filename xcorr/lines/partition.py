"""Total internal partition sums at any tabulated temperature."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.lines.data import load_partition
from xcorr.units import to_plain


def partition_sum(molecule: str, temperature_k: Any, isotopologue: int = 1) -> NDArray[np.float64]:
    """Total internal partition sum Q(T), nuclear-spin weights included (HITRAN convention).

    Parameters
    ----------
    molecule : str
        One of the tabulated molecules, e.g. ``"CO"``.
    temperature_k : float, array or Quantity
    isotopologue : int
        HITRAN local number, 1 the most abundant.

    Returns
    -------
    float64 array
        Of the shape of `temperature_k`; cubic interpolation of ln Q in ln T between tabulated values.

    Raises
    ------
    InputError
        Outside the table, which ends at each species' own limit.
    """
    table = load_partition(molecule)
    temperature = to_plain(temperature_k, "K")
    count = table.partition_sum.shape[0]
    if not 1 <= isotopologue <= count:
        raise InputError(
            f"{molecule} has no isotopologue {isotopologue}", f"{isotopologue}", f"use 1-{count}"
        )
    low, high = float(table.temperature_k[0]), table.limit_k(isotopologue)
    if not np.all((temperature >= low) & (temperature <= high)):
        raise InputError(
            f"the partition sum of {molecule} is tabulated for {low:g}-{high:g} K",
            f"{np.min(temperature):g}-{np.max(temperature):g} K",
            "stay inside",
        )
    column = table.partition_sum[isotopologue - 1]
    finite = np.isfinite(column)
    return np.exp(_cubic(np.log(table.temperature_k[finite]), np.log(column[finite]), np.log(temperature)))


def _cubic(x: NDArray, y: NDArray, at: NDArray) -> NDArray:
    """Piecewise cubic Hermite interpolation without overshoot (the tables have small splices)."""
    from scipy.interpolate import PchipInterpolator

    return PchipInterpolator(x, y)(at)
