"""The exposure: one cube or extracted spectrum, as every step of the chain sees it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note

FRAMES = ("observatory", "heliocentric", "barycentric")


@dataclass(frozen=True)
class Cube:
    """One exposure on the axes (wave, y, x), vacuum wavelengths, float32 planes.

    A 1-D spectrum is a cube with one spaxel. Several echelle orders follow each other
    along the wave axis and are told apart by `order`; wavelengths ascend within an order
    and may overlap between orders.

    Attributes
    ----------
    data : float32 array (n_wave, ny, nx)
        Flux times ``10**scale_exponent`` in `unit`; the power of ten keeps variances of tiny
        fluxes inside float32. Masked samples are 0.
    variance : float32 array (n_wave, ny, nx) or None
        Claimed variance on the same scale squared; None where the file holds no usable errors.
        Masked samples are 1 (never 0, so that a division stays finite).
    mask : bool array (n_wave, ny, nx)
        True = unusable.
    wavelength_um : float64 array (n_wave,)
        Vacuum channel centres in micrometre, in `frame`.
    order : int16 array (n_wave,)
        Order index, ascending blocks; all 0 for an ordinary cube.
    resolving_power : float64 array (n_wave,) or (n_wave, ny, nx), or None
        R = lambda / FWHM.
    frame : str
        Frame of the wavelengths: "observatory", "heliocentric" or "barycentric".
    barycentric_velocity_km_s : float or None
        z_B * c, the velocity to ADD to a measured one, (1+z_bary) = (1+z_obs)(1+z_B). For a cube already
        in the barycentric frame it still tells where the tellurics went. None: unknown.
    scale_exponent : int
        Physical value = stored value * 10**(-scale_exponent).
    unit : str
        Flux unit of the file, as text ("" where it says nothing).
    gain_e_per_unit : float or None
        Electrons per stored flux unit, for model variances.
    telluric_corrected, starlight_removed : bool
        Declared states of the input.
    celestial_header : mapping or None
        FITS cards of the two-dimensional celestial WCS (CRPIX, CD, ...), None without one.
    header : mapping
        Selected primary cards (OBJECT, DATE-OBS, ...), strings as read: untrusted text.
    source : str
        Base name of the file.
    sha256 : str
        Digest of the file, "" for data made in memory.
    planes : mapping
        What was used as data, errors, quality, and how it was interpreted.
    notes : tuple of Note
        Doubts met while reading.
    """

    data: NDArray[np.float32]
    variance: NDArray[np.float32] | None
    mask: NDArray[np.bool_]
    wavelength_um: NDArray[np.float64]
    order: NDArray[np.int16] | None = None
    resolving_power: NDArray[np.float64] | None = None
    frame: str = "observatory"
    barycentric_velocity_km_s: float | None = None
    scale_exponent: int = 0
    unit: str = ""
    gain_e_per_unit: float | None = None
    telluric_corrected: bool = False
    starlight_removed: bool = False
    celestial_header: Mapping[str, Any] | None = None
    header: Mapping[str, Any] = field(default_factory=dict)
    source: str = ""
    sha256: str = ""
    planes: Mapping[str, str] = field(default_factory=dict)
    notes: tuple[Note, ...] = ()

    def __post_init__(self) -> None:
        data, mask = self.data, self.mask
        if data.ndim != 3 or data.dtype != np.float32:
            raise InputError(
                "cube data must be float32 (wave, y, x)", f"{data.dtype} {data.shape}", "convert"
            )
        if mask.shape != data.shape or mask.dtype != np.bool_:
            raise InputError("mask must be boolean with the shape of the data", f"{mask.dtype} {mask.shape}")
        if self.variance is not None and (
            self.variance.shape != data.shape or self.variance.dtype != np.float32
        ):
            raise InputError(
                "variance must be float32 with the shape of the data",
                f"{self.variance.dtype} {self.variance.shape}",
            )
        wavelength = np.asarray(self.wavelength_um, dtype=np.float64)
        order = (
            np.zeros(wavelength.size, np.int16) if self.order is None else np.asarray(self.order, np.int16)
        )
        if wavelength.shape != (data.shape[0],) or order.shape != wavelength.shape:
            raise InputError(
                "one wavelength and one order per channel needed", f"{wavelength.shape} and {order.shape}"
            )
        if not np.all(np.isfinite(wavelength)) or np.any(wavelength <= 0):
            raise InputError(
                "wavelengths must be finite and positive", f"{wavelength.min()} um", "check the header"
            )
        step, same = np.diff(wavelength), np.diff(order) == 0
        if np.any(step[same] <= 0) or np.any(np.diff(order) < 0):
            bad = int(np.argmax((step <= 0) & same))
            raise InputError(
                "wavelengths must ascend strictly within an order",
                f"{wavelength[bad]:.6f} then {wavelength[min(bad + 1, wavelength.size - 1)]:.6f} um at channel {bad}",
                "sort the file or name its spectral axis",
            )
        if self.frame not in FRAMES:
            raise InputError("unknown frame", self.frame, f"use one of {', '.join(FRAMES)}")
        resolving = self.resolving_power
        if resolving is not None:
            resolving = np.asarray(resolving, dtype=np.float64)
            if resolving.ndim == 0:
                resolving = np.full(wavelength.size, float(resolving))
            if resolving.shape not in (wavelength.shape, data.shape):
                raise InputError(
                    "resolving power has the wrong shape", str(resolving.shape), "one per channel"
                )
            if not np.all(np.isfinite(resolving)) or np.any(resolving <= 0):
                raise InputError(
                    "resolving power must be positive", f"{resolving.min()}", "give R = lambda/FWHM"
                )
        for name, value in (("wavelength_um", wavelength), ("order", order), ("resolving_power", resolving)):
            object.__setattr__(self, name, value)
        for array in (data, self.variance, mask, wavelength, order, resolving):
            if array is not None:
                array.flags.writeable = False

    @property
    def shape(self) -> tuple[int, int, int]:
        """(n_wave, ny, nx)."""
        n_wave, ny, nx = self.data.shape
        return n_wave, ny, nx

    @property
    def is_spectrum(self) -> bool:
        """True for an extracted spectrum (one spaxel)."""
        return self.data.shape[1:] == (1, 1)

    def with_changes(self, **changes: Any) -> Cube:
        """A copy with some attributes replaced, validated again."""
        return replace(self, **changes)
