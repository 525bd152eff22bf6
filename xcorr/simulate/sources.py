"""Star spectra and transmissions that the scenes are made of."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.simulate.spectra import rotate
from xcorr.units import SECOND_RADIATION_CM_K

Array = NDArray[np.float64]

# Brackett gamma, hydrogen 7-4, vacuum (CHECKS 2.5, from memory); width and depth as in early A stars
# (common practice, no source).
BRACKETT_GAMMA_UM = 2.16612
BRACKETT_GAMMA_HWHM_UM = 0.0030
BRACKETT_GAMMA_DEPTH = 0.25


def planck_shape(wavelength_um: Array, temperature_k: float) -> Array:
    """Planck curve per unit wavelength, arbitrary scale."""
    x = SECOND_RADIATION_CM_K * 1.0e4 / (wavelength_um * temperature_k)
    return wavelength_um**-5.0 / np.expm1(x)


def a_star(wavelength_um: Array, temperature_k: float) -> Array:
    """Planck curve with one broad, Lorentz-shaped Brackett-gamma line."""
    x = (wavelength_um - BRACKETT_GAMMA_UM) / BRACKETT_GAMMA_HWHM_UM
    return planck_shape(wavelength_um, temperature_k) * (1.0 - BRACKETT_GAMMA_DEPTH / (1.0 + x * x))


# Columns (molecules per cm2) of the absorbing layer of an M star; they give a CO head about 20 % deep at
# R = 4000 and water of about one per cent.
M_STAR_COLUMNS = {"CO": 5.0e21, "H2O": 3.0e20}
M_STAR_LAYER_K = 2800.0
M_STAR_LAYER_BAR = 0.5


def m_star(wavelength_um: Array, temperature_k: float) -> Array:
    """Planck curve behind a layer of hot CO and H2O.

    The layer is a recipe for a star with molecular lines of its own, not a model of one: a single
    temperature and pressure, columns chosen for the depth of the CO heads. The shipped H2O list is
    incomplete for hot lines at this temperature.
    """
    from xcorr.lines import cross_section

    wavenumber = 1.0e4 / wavelength_um[::-1]
    tau = np.zeros(wavelength_um.size)
    for molecule, column in M_STAR_COLUMNS.items():
        sigma = cross_section(molecule, wavenumber, M_STAR_LAYER_K, M_STAR_LAYER_BAR)
        tau += column * sigma[::-1]
    source = planck_shape(wavelength_um, M_STAR_LAYER_K) / planck_shape(wavelength_um, temperature_k)
    return planck_shape(wavelength_um, temperature_k) * (source + (1.0 - source) * np.exp(-tau))


def star_flux(kind: str, wavelength_um: Array, temperature_k: float, vsini_km_s: float) -> Array:
    """Rest-frame spectrum of the star on a log grid, arbitrary scale."""
    flux = (a_star if kind == "A" else m_star)(wavelength_um, temperature_k)
    return rotate(wavelength_um, flux, vsini_km_s)


def synthetic_transmission(wavelength_um: Array, water: float, airmass: float, seed: int) -> Array:
    """Random pressure-broadened lines: an atmosphere for tests that need no data file.

    About 60 lines per 1000 cm-1, Lorentz half-width 0.08 cm-1 (typical of air at the ground, common
    practice), log-normal strengths; half of them scale with `water`.
    """
    rng = np.random.default_rng(seed)
    wavenumber = 1.0e4 / wavelength_um
    low, high = 3900.0, 5200.0
    count = 400
    centre = rng.uniform(low, high, count)
    peak = rng.lognormal(-1.2, 1.6, count) * airmass
    peak[::2] *= water
    tau = np.zeros(wavelength_um.size)
    hwhm = 0.08
    for nu, strength in zip(centre, peak, strict=True):
        near = np.abs(wavenumber - nu) < 25.0
        tau[near] += strength / (1.0 + ((wavenumber[near] - nu) / hwhm) ** 2)
    return np.exp(-tau)


def shipped_transmission(water: float, airmass: float) -> tuple[Array, Array]:
    """Wavelengths (um, vacuum, observatory frame) and transmission from the project's data file."""
    from xcorr.atmosphere import load_transmission

    return sample_transmission(load_transmission(), water, airmass)


def sample_transmission(transmission: Any, water: float, airmass: float) -> tuple[Array, Array]:
    """Wavelengths and values of an object with `wavelength_um` and ``at(water=, airmass=)``."""
    return np.asarray(transmission.wavelength_um), np.asarray(transmission.at(water=water, airmass=airmass))
