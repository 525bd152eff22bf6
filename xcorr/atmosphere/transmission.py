"""The Earth's transmission by absorber, for other airmasses and water columns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import CoverageError, InputError, Note
from xcorr.lines import load_transmission_table
from xcorr.units import to_plain

_FLOOR = 1e-12  # black cores: their optical depth is unknown and taken as 28
WATER = "H2O"


@dataclass(frozen=True, eq=False)
class Transmission:
    """Transmission by absorber at airmass 1 and the reference water column.

    Attributes
    ----------
    wavelength_um : float64 array (n,)
        Vacuum, ascending, in the observatory frame.
    molecules : mapping of str to float64 array (n,)
        Transmission of each absorber, in (0, 1].
    airmass : float
        Always 1: what the arrays refer to.
    pwv_mm : float
        Reference precipitable water at zenith, mm.
    resolving_power : float
        Of the table, which is exempt from the rule of grids finer than R = 200,000.
    source : str
        Citation.
    notes : tuple of Note
    """

    wavelength_um: NDArray[np.float64]
    molecules: Mapping[str, NDArray[np.float64]]
    airmass: float
    pwv_mm: float
    resolving_power: float
    source: str
    notes: tuple[Note, ...] = ()

    def __post_init__(self) -> None:
        self.wavelength_um.setflags(write=False)
        for array in self.molecules.values():
            array.setflags(write=False)
        object.__setattr__(self, "molecules", MappingProxyType(dict(self.molecules)))

    def at(self, *, water: float = 1.0, airmass: float = 1.0) -> NDArray[np.float64]:
        """Total transmission, shape (n,): exp[-airmass (water tau_H2O + tau of all others)].

        Parameters
        ----------
        water : float
            Water column at zenith over the reference column, >= 0.
        airmass : float
            >= 0.

        Raises
        ------
        InputError
            For negative values.
        """
        if not (water >= 0.0 and airmass >= 0.0):
            raise InputError("water and airmass must not be negative", f"{water}, {airmass}")
        total = np.zeros(self.wavelength_um.size)
        for name, transmission in self.molecules.items():
            total += np.log(transmission) * (water if name == WATER else 1.0)
        return np.exp(airmass * total)


def load_transmission(wavelength_range_um: Any | None = None) -> Transmission:
    """The shipped transmission, cut to a range.

    Parameters
    ----------
    wavelength_range_um : (low, high) or Quantity, optional
        Vacuum, um. The part of it the table covers (1.4-2.5 um) is returned; default: all.

    Raises
    ------
    CoverageError
        If the range and the table do not overlap.
    """
    table = load_transmission_table()
    grid = table.wavelength_um
    low, high = (grid[0], grid[-1]) if wavelength_range_um is None else to_plain(wavelength_range_um, "um")
    keep = (grid >= low) & (grid <= high)
    if np.count_nonzero(keep) < 2:
        raise CoverageError(
            f"the shipped transmission covers {grid[0]:.3f}-{grid[-1]:.3f} um",
            f"{low:g}-{high:g} um",
            "give the transmission as a file, or go without it",
        )

    def at_zenith(name: str) -> NDArray[np.float64]:
        value = np.clip(table.transmission[name][keep], _FLOOR, 1.0)
        return value ** (1.0 / table.airmass)

    note = Note(
        "transmission-resolution", f"telluric transmission tabulated at R = {table.resolving_power:.0f}"
    )
    return Transmission(
        wavelength_um=grid[keep].copy(),
        molecules={name: at_zenith(name) for name in table.transmission if name != "total"},
        airmass=1.0,
        pwv_mm=table.water_mm,
        resolving_power=table.resolving_power,
        source=table.source,
        notes=(note,),
    )
