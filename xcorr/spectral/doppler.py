"""Doppler factors: relativistic velocities that compose, and the barycentric factor.

Velocities of objects are relativistic, positive receding: 1 + z = sqrt((1 + v/c) / (1 - v/c)). The
barycentric velocity is stored as z_B * c (as astropy returns it), so its factor is 1 + v_B/c.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.units import LIGHT_KM_S, to_plain


def _beta(velocity_km_s: Any) -> NDArray[np.float64]:
    beta = to_plain(velocity_km_s, "km/s") / LIGHT_KM_S
    if np.any(np.abs(beta) >= 1.0):
        raise InputError(
            "velocities must be slower than light",
            f"{np.nanmax(np.abs(beta)) * LIGHT_KM_S:g} km/s",
            "give km/s",
        )
    return beta


def doppler_factor(velocity_km_s: Any) -> NDArray[np.float64]:
    """Observed over emitted wavelength, 1 + z, of a radial velocity (relativistic, positive receding).

    Parameters
    ----------
    velocity_km_s : array_like or Quantity
        Radial velocity, km/s.

    Returns
    -------
    float64 array (same shape)
    """
    beta = _beta(velocity_km_s)
    return np.sqrt((1.0 + beta) / (1.0 - beta))


def velocity_of_factor(factor: Any) -> NDArray[np.float64]:
    """Radial velocity in km/s whose `doppler_factor` is `factor`."""
    square = np.square(to_plain(factor, ""))
    return LIGHT_KM_S * (square - 1.0) / (square + 1.0)


def doppler_shift(wavelength_um: Any, velocity_km_s: Any) -> NDArray[np.float64]:
    """Wavelengths as seen from an object receding at `velocity_km_s`.

    Parameters
    ----------
    wavelength_um : array_like or Quantity
        Rest wavelengths, micrometre.
    velocity_km_s : array_like or Quantity
        Radial velocity, km/s, positive receding, relativistic; broadcast against the wavelengths.

    Returns
    -------
    float64 array
        Shifted wavelengths, micrometre.

    Raises
    ------
    InputError
        A velocity not below that of light.
    """
    return to_plain(wavelength_um, "um") * doppler_factor(velocity_km_s)


def compose_velocities(first_km_s: Any, second_km_s: Any) -> NDArray[np.float64]:
    """The one radial velocity whose factor is the product (1 + z1)(1 + z2): Einstein's addition.

    Parameters
    ----------
    first_km_s, second_km_s : array_like or Quantity
        Radial velocities, km/s.

    Returns
    -------
    float64 array
        Composed velocity, km/s.
    """
    one, two = _beta(first_km_s), _beta(second_km_s)
    return LIGHT_KM_S * (one + two) / (1.0 + one * two)


def observed_velocity(velocity_km_s: Any, barycentric_velocity_km_s: float) -> NDArray[np.float64]:
    """Velocity seen from the observatory of an object with a barycentric velocity.

    (1 + z_obs) = (1 + z_bary) / (1 + z_B), with z_B = barycentric_velocity / c the value to *add* to a
    measured velocity (Wright & Eastman 2014, PASP 126, 838).

    Parameters
    ----------
    velocity_km_s : array_like or Quantity
        Relativistic velocity in the barycentric frame, km/s.
    barycentric_velocity_km_s : float
        z_B * c of the exposure, km/s.

    Returns
    -------
    float64 array
        Relativistic velocity in the observatory frame, km/s.
    """
    frame = 1.0 + to_plain(barycentric_velocity_km_s, "km/s") / LIGHT_KM_S
    return velocity_of_factor(doppler_factor(velocity_km_s) / frame)
