"""Wavelengths in air and in vacuum.

Three published refractive indices of dry air are offered; all are functions of the *vacuum* wavenumber
s = 1/lambda_vac [um-1], so that vacuum to air is explicit and air to vacuum is its fixed point.
Near 2.3 um "ciddor1996" and "morton2000" (both 15 C) agree to 2 m/s; "fits3" (0 C) is 4.5 km/s away.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.units import to_plain

# The formulae have poles at 0.06-0.16 um; air is opaque there anyway.
SHORTEST_UM = 0.18


def _ciddor1996(wavelength_um: NDArray[np.float64]) -> NDArray[np.float64]:
    s2 = wavelength_um**-2
    return 1.0 + 0.05792105 / (238.0185 - s2) + 0.00167917 / (57.362 - s2)


def _morton2000(wavelength_um: NDArray[np.float64]) -> NDArray[np.float64]:
    s2 = wavelength_um**-2
    return 1.0 + 8.34254e-5 + 2.406147e-2 / (130.0 - s2) + 1.5998e-4 / (38.9 - s2)


def _fits3(wavelength_um: NDArray[np.float64]) -> NDArray[np.float64]:
    s2 = wavelength_um**-2
    return 1.0 + 1e-6 * (287.6155 + 1.62887 * s2 + 0.01360 * s2**2)


REFRACTIVE_INDEX: dict[str, Callable[[NDArray[np.float64]], NDArray[np.float64]]] = {
    "ciddor1996": _ciddor1996,  # Ciddor 1996, Applied Optics 35, 1566
    "morton2000": _morton2000,  # Morton 2000, ApJS 130, 403
    "fits3": _fits3,  # Greisen et al. 2006, A&A 446, 747, eq. 65
}


def _checked(wavelength_um: Any, formula: str) -> tuple[NDArray[np.float64], Callable[..., Any]]:
    if formula not in REFRACTIVE_INDEX:
        raise InputError("unknown air formula", repr(formula), f"use one of {', '.join(REFRACTIVE_INDEX)}")
    wavelength = to_plain(wavelength_um, "um")
    if np.any(wavelength < SHORTEST_UM):
        raise InputError(
            f"air wavelengths below {SHORTEST_UM} um are not defined",
            f"{np.nanmin(wavelength):g} um",
            "check the unit of the wavelengths",
        )
    return wavelength, REFRACTIVE_INDEX[formula]


def vacuum_to_air(wavelength_um: Any, formula: str = "ciddor1996") -> NDArray[np.float64]:
    """Air wavelengths of vacuum wavelengths.

    Parameters
    ----------
    wavelength_um : array_like or Quantity
        Vacuum wavelengths, micrometre; any shape, NaN passes through.
    formula : {"ciddor1996", "morton2000", "fits3"}
        Refractive index of air: Ciddor (1996, 15 C), Morton (2000, 15 C), FITS paper III (Greisen
        et al. 2006 eq. 65, 0 C).

    Returns
    -------
    float64 array (same shape)
        Air wavelengths, micrometre.

    Raises
    ------
    InputError
        Unknown formula, or wavelengths below 0.18 um.
    """
    wavelength, index = _checked(wavelength_um, formula)
    return wavelength / index(wavelength)


def air_to_vacuum(wavelength_um: Any, formula: str = "ciddor1996") -> NDArray[np.float64]:
    """Vacuum wavelengths of air wavelengths; the inverse of `vacuum_to_air` to rounding.

    The index depends on the wavelength so weakly (d ln n / d ln lambda < 1e-4 above 0.18 um) that each
    round of the fixed point gains four digits or more.

    Parameters
    ----------
    wavelength_um : array_like or Quantity
        Air wavelengths, micrometre; any shape, NaN passes through.
    formula : {"ciddor1996", "morton2000", "fits3"}
        As in `vacuum_to_air`.

    Returns
    -------
    float64 array (same shape)
        Vacuum wavelengths, micrometre.

    Raises
    ------
    InputError
        Unknown formula, or wavelengths below 0.18 um.
    """
    wavelength, index = _checked(wavelength_um, formula)
    vacuum = wavelength
    for _ in range(5):
        vacuum = wavelength * index(vacuum)
    return vacuum
