"""Pressure and temperature with depth: hydrostatic, grey, from effective temperature and gravity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError

ADIABATIC_GRADIENT = 2.0 / 7.0  # dlnT/dlnP of a gas of rigid diatomic molecules
HOTTEST = 2.5  # the structure ends where T = 2.5 T_eff, or at the bottom pressure
_CROWDING = 1.0  # share of the layers that follow log T, per share that follows log P
_FINE = 2000  # integration steps of the optical depth; layers are read off this


@dataclass(frozen=True)
class Structure:
    """A plane-parallel hydrostatic atmosphere, given at layer boundaries, top first.

    Attributes
    ----------
    pressure_bar, temperature_k : float64 array (n_layer + 1,)
        At the boundaries; pressure ascends.
    log_g : float
        log10 of the surface gravity in cm s-2.
    """

    pressure_bar: NDArray[np.float64]
    temperature_k: NDArray[np.float64]
    log_g: float

    def __post_init__(self) -> None:
        pressure = np.ascontiguousarray(self.pressure_bar, np.float64)
        temperature = np.ascontiguousarray(self.temperature_k, np.float64)
        if pressure.ndim != 1 or pressure.shape != temperature.shape or pressure.size < 2:
            raise InputError(
                "pressure and temperature must be arrays of one length",
                f"{pressure.shape}, {temperature.shape}",
            )
        if not (np.all(pressure > 0) and np.all(np.diff(pressure) > 0)):
            raise InputError(
                "layer pressures must be positive and ascend", f"{pressure}", "list the top first"
            )
        if not (np.all(np.isfinite(temperature)) and np.all(temperature > 0)):
            raise InputError("layer temperatures must be positive", f"{temperature}", "give kelvin")
        if not np.isfinite(self.log_g):
            raise InputError("log g must be finite", f"{self.log_g}")
        pressure.flags.writeable = temperature.flags.writeable = False
        object.__setattr__(self, "pressure_bar", pressure)
        object.__setattr__(self, "temperature_k", temperature)

    @property
    def layer_pressure_bar(self) -> NDArray[np.float64]:
        """Geometric mean pressure of each layer."""
        return np.sqrt(self.pressure_bar[:-1] * self.pressure_bar[1:])

    @property
    def layer_temperature_k(self) -> NDArray[np.float64]:
        """Mean temperature of each layer."""
        return 0.5 * (self.temperature_k[:-1] + self.temperature_k[1:])


def eddington_temperature(t_eff: float, tau: NDArray | float) -> NDArray[np.float64]:
    """T of a grey atmosphere in radiative equilibrium, T^4 = (3/4) T_eff^4 (tau + 2/3)."""
    return t_eff * (0.75 * (np.asarray(tau, np.float64) + 2.0 / 3.0)) ** 0.25


def rosseland_opacity(temperature_k: NDArray | float, pressure_bar: NDArray | float) -> NDArray[np.float64]:
    """Rosseland mean opacity of solar-composition gas without grains, cm2 / g.

    Notes
    -----
    Freedman et al. 2014, ApJS 214, 25, eqs. 3-5 and Table 2, at [M/H] = 0. Coefficients from memory; the fit
    was made for 75-4000 K and 1e-6-300 bar.
    """
    log_t = np.log10(temperature_k)
    log_p = np.log10(np.asarray(pressure_bar) * 1e6)  # dyn cm-2
    low = (
        10.602 * np.arctan(log_t - 2.882) - 6.09e-15 / (log_p + 2.954) * np.exp((log_t + 2.526) ** 2) - 5.490
    )
    cool = -14.051 + 3.055 * log_t + 0.024 * log_t**2 + log_p * (1.877 - 0.445 * log_t)
    hot = 82.241 - 55.456 * log_t + 8.754 * log_t**2 + log_p * (0.7048 - 0.0414 * log_t)
    high = np.where(log_t < np.log10(800.0), cool, hot)
    return 10.0**low + 10.0**high


def grain_opacity(t_eff: float, log_g: float) -> float:
    """Grey opacity of condensates, cm2 / g: at log g 5 none up to 1200 K, 0.05 from 1500 K, linear between.

    Both temperatures fall by 400 K per decade of gravity.

    Notes
    -----
    That clouds lie in the photospheres of L dwarfs and below those of T dwarfs, and leave them at lower
    effective temperatures where gravity is low, is common practice (Marley et al. 2012, ApJ 754, 135, for the
    gravity). The numbers have no source: the value puts the photosphere of a 1600 K, log g 5 atmosphere near
    1 bar instead of 5, where equilibrium would leave enough methane to dominate the K band, against what L
    dwarfs show; the slope keeps young objects of 1000-1400 K cloudy, and so poor in methane.
    """
    shift = 400.0 * (5.0 - log_g)
    return float(np.interp(t_eff + shift, (1200.0, 1500.0), (0.0, 0.05)))


def default_pressures(log_g: float) -> tuple[float, float]:
    """First and last boundary, bar: 1e-5 and 300, lowered with gravity below log g 3 and 4."""
    return 1e-5 * 10.0 ** min(0.0, log_g - 3.0), 300.0 * 10.0 ** min(0.0, log_g - 4.0)


def grey_structure(
    t_eff: float,
    log_g: float,
    *,
    n_layers: int = 60,
    grains_cm2_g: float | None = None,
    pressures_bar: tuple[float, float] | None = None,
) -> Structure:
    """Hydrostatic grey atmosphere, convective where the radiative gradient would be steeper.

    Parameters
    ----------
    t_eff : float
        Effective temperature, K.
    log_g : float
        Surface gravity, log10 cm s-2.
    n_layers : int
        At least 10; equally spaced in a mean of log pressure and log temperature.
    grains_cm2_g : float, optional
        Grey opacity added to that of the gas; default `grain_opacity`.
    pressures_bar : (top, bottom), optional
        First and last boundary; default `default_pressures`.

    Returns
    -------
    Structure

    Raises
    ------
    InputError
        For values outside 300-4000 K, log g 0-6, or fewer than 10 layers.

    Notes
    -----
    The optical depth is that of the Rosseland mean of solar-composition gas (`rosseland_opacity`) and grains.
    Gradient: dlnT/dlnP = min[(3/16) kappa P / g (T_eff/T)^4, 2/7]; the first is dT^4 = (3/4) T_eff^4 dtau,
    so that T(tau) is Eddington's above the convective zone. Real atmospheres are not grey: their upper
    layers are cooler than 0.84 T_eff, and strong lines deeper.
    """
    top, bottom = _check_structure(t_eff, log_g, n_layers, pressures_bar)
    grains = grain_opacity(t_eff, log_g) if grains_cm2_g is None else grains_cm2_g
    log_pressure = np.linspace(np.log(top), np.log(bottom), _FINE + 1)
    step = log_pressure[1] - log_pressure[0]
    # dtau / dlnP per unit of opacity, and the Eddington gradient's constants
    scale = 3.0 / 16.0 * 1e6 / 10.0**log_g * t_eff**4

    def gradient(ln_p: float, ln_t: float) -> float:
        pressure, temperature = np.exp(ln_p), np.exp(ln_t)
        opacity = float(rosseland_opacity(temperature, pressure)) + grains
        return min(scale * opacity * pressure / temperature**4, ADIABATIC_GRADIENT)

    skin = eddington_temperature(t_eff, 0.0)
    above = (rosseland_opacity(skin, top) + grains) * top * 1e6 / 10.0**log_g
    ln_t = np.empty(_FINE + 1)
    ln_t[0] = np.log(eddington_temperature(t_eff, above))
    for k in range(_FINE):
        half = ln_t[k] + 0.5 * step * gradient(log_pressure[k], ln_t[k])
        ln_t[k + 1] = ln_t[k] + step * gradient(log_pressure[k] + 0.5 * step, half)
    return Structure(*_layers(log_pressure, ln_t, np.log(HOTTEST * t_eff), n_layers), log_g)


def _layers(
    ln_p: NDArray[np.float64], ln_t: NDArray[np.float64], ln_hottest: float, n_layers: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Boundaries equally spaced in a mean of log P and log T, down to the hottest level that can be seen.

    Planck's function changes fast where T does; layers equal in log P alone waste most of themselves on the
    isothermal top: 60 of them leave errors of 1 % at 700 K, these 0.4 % (0.15 % from 1200 K).
    """
    last = min(int(np.searchsorted(ln_t, ln_hottest)) + 1, ln_p.size)
    ln_p, ln_t = ln_p[:last], ln_t[:last]
    place = (ln_p - ln_p[0]) / (ln_p[-1] - ln_p[0]) + _CROWDING * (ln_t - ln_t[0]) / (ln_t[-1] - ln_t[0])
    boundary = np.interp(np.linspace(0.0, place[-1], n_layers + 1), place, ln_p)
    return np.exp(boundary), np.exp(np.interp(boundary, ln_p, ln_t))


def _check_structure(
    t_eff: float, log_g: float, n_layers: int, pressures_bar: tuple[float, float] | None
) -> tuple[float, float]:
    if not 300.0 <= t_eff <= 4000.0:
        raise InputError("t_eff is outside 300-4000 K", f"{t_eff:g}", "give a temperature in range")
    if not 0.0 <= log_g <= 6.0:
        raise InputError("log_g is outside 0-6", f"{log_g:g}", "give log10 of the gravity in cm s-2")
    if n_layers < 10:
        raise InputError("too few layers", f"{n_layers}", "use at least 10 (50 or more for science)")
    top, bottom = default_pressures(log_g) if pressures_bar is None else pressures_bar
    if not 0.0 < top < bottom:
        raise InputError("the top pressure must be positive and below the bottom", f"{top}, {bottom}")
    return top, bottom
