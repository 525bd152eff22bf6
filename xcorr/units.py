"""Physical constants (CODATA 2018, IAU 2015) as plain floats, and unit stripping at the public edge."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError

PLANCK_J_S = 6.62607015e-34
LIGHT_M_S = 299792458.0
LIGHT_KM_S = 299792.458
BOLTZMANN_J_K = 1.380649e-23
STEFAN_BOLTZMANN = 5.670374419e-8  # W m-2 K-4
ATOMIC_MASS_KG = 1.66053906660e-27
SECOND_RADIATION_CM_K = 1.438776877504  # hc/k
FWHM_PER_SIGMA = 2.3548200450309493


def to_plain(value: Any, unit: str) -> NDArray[np.float64]:
    """Strip an astropy Quantity to a float64 array in `unit`; plain numbers are taken to be in it.

    Raises
    ------
    InputError
        If the Quantity cannot be converted.
    """
    if hasattr(value, "to_value"):
        from astropy import units as u

        try:
            value = value.to_value(unit)
        except u.UnitConversionError as error:
            raise InputError("unit does not convert", str(error), f"give a value in {unit}") from error
    return np.asarray(value, dtype=np.float64)
