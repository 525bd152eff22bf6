"""What a telluric fit takes and what it returns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import Note

Array = NDArray[np.float64]


class TransmissionTable(Protocol):
    """Transmission by molecule at airmass 1 and a reference water column.

    `wavelength_um` (n,) is vacuum and ascending; `molecules` maps names ("H2O", "CO2", ...) to (n,) in 0..1.
    """

    @property
    def wavelength_um(self) -> Array:
        """Vacuum micrometre (n,), observatory frame."""

    @property
    def molecules(self) -> Mapping[str, Array]:
        """Transmission (n,) by name; "H2O" goes with the water column, all others with the airmass."""


@dataclass(frozen=True)
class TelluricFit:
    """The transmission of one exposure, and the smooth throughput that remains.

    Attributes
    ----------
    water : float
        Exponent of the reference water transmission: zenith column over the reference, times airmass.
    airmass : float
        Exponent of all other molecules.
    velocity_km_s, velocity_err_km_s : float
        Velocity of the tellurics beyond the expected frame velocity, relativistic: a zero-point error of the
        wavelengths. The error is scaled to the scatter and the correlation of the residuals.
    resolving_power_scale : float
        Fitted R over the given one (1 where not usable).
    wavelength_hi_um : float64 array (n_hi,)
        Fine grid in the frame of the cube, vacuum micrometre.
    transmission_hi : float64 array (n_hi,)
        Line-by-line transmission on it, shifted by frame and fitted velocity. Ones where not usable.
    transmission_channels : float64 array (n_wave,)
        LSF (x) T in the channels. Where not usable: star / continuum, the fallback to be multiplied in after
        the LSF, 0 where masked.
    continuum : float64 array (n_wave,)
        c, the smooth ratio of the star to LSF (x) T, with stellar lines bridged.
    weights : float64 array (n_wave,)
        Final robust weight of each channel, 0 (rejected or masked) to 1.
    chi2 : float
        Sum of the weighted squared residuals over claimed variance plus model error.
    n_used : int
        Channels with a weight above one half.
    explained : float
        Share of the star's structure beyond the splines that the transmission explains, up to 1.
    model_error : float
        Scatter of the star about the model beyond the claimed noise, as a fraction of the continuum.
    usable : bool
        False: no line-by-line transmission; the fallback must be declared.
    notes : tuple of Note
    """

    water: float
    airmass: float
    velocity_km_s: float
    velocity_err_km_s: float
    resolving_power_scale: float
    wavelength_hi_um: Array
    transmission_hi: Array
    transmission_channels: Array
    continuum: Array
    weights: Array
    chi2: float
    n_used: int
    explained: float
    model_error: float
    usable: bool
    notes: tuple[Note, ...] = ()

    def __post_init__(self) -> None:
        for array in vars(self).values():
            if isinstance(array, np.ndarray):
                array.flags.writeable = False


@dataclass(frozen=True)
class FitParameters:
    """The four non-linear parameters as the fit moves them: (ln water, ln airmass, v/c, ln R scale)."""

    values: Array

    @property
    def water(self) -> float:
        """Exponent of the water transmission."""
        return float(np.exp(self.values[0]))

    @property
    def airmass(self) -> float:
        """Exponent of the other molecules."""
        return float(np.exp(self.values[1]))

    @property
    def beta(self) -> float:
        """Velocity over that of light."""
        return float(self.values[2])

    @property
    def scale(self) -> float:
        """R over the given one."""
        return float(np.exp(self.values[3]))
