"""Lorentz half-widths of lines in a hydrogen-helium gas."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.lines.data import LineList

REFERENCE_K = 296.0


@dataclass(frozen=True)
class Broadening:
    """Half-width at half maximum hwhm = hwhm_per_bar * P * (296 K / T)**exponent.

    Attributes
    ----------
    hwhm_per_bar : float or float64 array (n_line,)
        cm-1 per bar at 296 K.
    exponent : float or float64 array (n_line,)
        Temperature exponent.
    """

    hwhm_per_bar: float | NDArray[np.float64]
    exponent: float | NDArray[np.float64] = 0.5

    def __post_init__(self) -> None:
        if not np.all(np.asarray(self.hwhm_per_bar) >= 0):
            raise InputError(
                "half-widths must not be negative", f"{self.hwhm_per_bar}", "give cm-1 per bar at 296 K"
            )

    def hwhm(self, temperature_k: float, pressure_bar: float, n_line: int) -> NDArray[np.float64]:
        """Lorentz HWHM, cm-1, of every line, shape (n_line,)."""
        scale = pressure_bar * (REFERENCE_K / temperature_k) ** np.asarray(self.exponent)
        width = np.asarray(self.hwhm_per_bar) * scale
        if width.ndim and width.shape != (n_line,):
            raise InputError("one half-width per line is needed", f"{width.shape} for {n_line} lines")
        return np.ascontiguousarray(np.broadcast_to(width, n_line), dtype=np.float64)


_ATM_BAR = 1.01325
# Ratios to the half-width in air, 85 % H2 + 15 % He. From memory of the measurements behind the H2/He columns
# of current databases (H2O: about 0.8 and 0.2; CO: about 1.15 and 0.8); scaling air widths so keeps their
# dependence on J and is common practice, no source.
_RATIO_TO_AIR = {"H2O": 0.71, "CO": 1.10}
_RATIO_UNKNOWN = 1.0
# One value per molecule, cm-1/bar at 296 K, where the list holds no air widths (same origin, mid J).
_TYPICAL = {"H2O": 0.062, "CO": 0.064, "CH4": 0.059}
_TYPICAL_UNKNOWN = 0.06
_EXPONENT = {"H2O": 0.5, "CO": 0.6}
_EXPONENT_UNKNOWN = 0.5


def default_broadening(lines: LineList) -> Broadening:
    """The H2/He broadening used where the caller gives none: scaled air widths, else a typical value."""
    molecule = lines.molecule
    exponent = _EXPONENT.get(molecule, _EXPONENT_UNKNOWN)
    if lines.gamma_air is None:
        return Broadening(_TYPICAL.get(molecule, _TYPICAL_UNKNOWN), exponent)
    ratio = _RATIO_TO_AIR.get(molecule, _RATIO_UNKNOWN)
    return Broadening(lines.gamma_air * (ratio / _ATM_BAR), exponent)
