"""What the run file says about an exposure where its file does not say it, or says it wrongly."""

from __future__ import annotations

import difflib
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from xcorr.cube import FRAMES
from xcorr.errors import InputError, SettingsError

MEDIA = ("vacuum", "air")
ERROR_KINDS = ("sigma", "variance", "inverse_variance")


@dataclass(frozen=True)
class Overrides:
    """Keys of ``[[exposure]]`` in the run file that concern reading; None = not said.

    Attributes
    ----------
    medium : "vacuum" or "air"
    air_formula : str
        Formula that turns air into vacuum wavelengths, "ciddor1996" or "fits3".
    wavelength_unit : str
    spectral_axis : int
        FITS axis number, from 1.
    frame : str
        "observatory", "heliocentric" or "barycentric".
    wavelength_range_um : (low, high)
        Vacuum micrometre; channels outside are dropped.
    orders : sequence of int
        Zero-based orders to keep.
    science_extension, error_extension, quality_extension : int or str
        Number (0 = primary) or EXTNAME.
    error_kind : "sigma", "variance" or "inverse_variance"
    quality_bad_bits, quality_good_bits : sequence of int
        Zero-based; a sample is bad if any bad bit is set, or unless all good bits are set.
    gain_e_per_unit : float
        Electrons per flux unit.
    telluric_corrected, starlight_removed : bool
    mask_wavelength_um : sequence of (low, high)
        Vacuum micrometre; channels inside are masked.
    resolving_power : float or path
    barycentric_velocity_km_s : float
    time : str
        Middle of the exposure, ISO UTC.
    site : (east longitude deg, latitude deg, height m)
    coordinates : (ra deg, dec deg)
    """

    medium: str | None = None
    air_formula: str | None = None
    wavelength_unit: str | None = None
    spectral_axis: int | None = None
    frame: str | None = None
    wavelength_range_um: Sequence[float] | None = None
    orders: Sequence[int] | None = None
    science_extension: int | str | None = None
    error_extension: int | str | None = None
    error_kind: str | None = None
    quality_extension: int | str | None = None
    quality_bad_bits: Sequence[int] | None = None
    quality_good_bits: Sequence[int] | None = None
    gain_e_per_unit: float | None = None
    telluric_corrected: bool | None = None
    starlight_removed: bool | None = None
    mask_wavelength_um: Sequence[Sequence[float]] | None = None
    resolving_power: float | str | os.PathLike[str] | None = None
    barycentric_velocity_km_s: float | None = None
    time: Any = None
    site: Sequence[float] | None = None
    coordinates: Sequence[float] | None = None

    def __post_init__(self) -> None:
        _one_of("medium", self.medium, MEDIA)
        _one_of("air_formula", self.air_formula, ("ciddor1996", "fits3"))
        _one_of("frame", self.frame, FRAMES)
        _one_of("error_kind", self.error_kind, ERROR_KINDS)
        _integer("spectral_axis", self.spectral_axis, 1)
        for name in ("orders", "quality_bad_bits", "quality_good_bits"):
            _integers(name, getattr(self, name))
        for name in ("science_extension", "error_extension", "quality_extension"):
            value = getattr(self, name)
            if not isinstance(value, str):
                _integer(name, value, 0)
        for name in ("gain_e_per_unit", "barycentric_velocity_km_s"):
            _number(name, getattr(self, name))
        r = self.resolving_power
        if isinstance(r, int | float) and not (r > 0 and math.isfinite(r)):
            raise InputError(
                "resolving power must be positive", f"{self.resolving_power}", "give R = lambda/FWHM"
            )
        if self.gain_e_per_unit is not None and self.gain_e_per_unit <= 0:
            raise InputError(
                "gain_e_per_unit must be positive", f"{self.gain_e_per_unit}", "electrons per unit"
            )
        if self.wavelength_range_um is not None:
            _interval("wavelength_range_um", self.wavelength_range_um)
        for interval in self.mask_wavelength_um or ():
            _interval("mask_wavelength_um", interval)
        if self.quality_bad_bits is not None and self.quality_good_bits is not None:
            raise SettingsError(
                "quality_bad_bits and quality_good_bits exclude each other", "both", "keep one"
            )


def overrides_from(values: Mapping[str, Any]) -> Overrides:
    """Overrides from keyword arguments; an unknown key names the nearest known one."""
    known = {field.name for field in fields(Overrides)}
    for key in values:
        if key not in known:
            near = difflib.get_close_matches(key, sorted(known), n=1, cutoff=0.0)
            raise SettingsError("unknown exposure key", repr(key), f"did you mean {near[0]!r}?")
    return Overrides(**values)


def _one_of(name: str, value: Any, allowed: Sequence[str]) -> None:
    if value is not None and value not in allowed:
        raise SettingsError(f"unknown {name}", repr(value), f"use one of {', '.join(allowed)}")


def _integer(name: str, value: Any, lowest: int) -> None:
    if value is not None and (isinstance(value, bool) or not isinstance(value, int) or value < lowest):
        raise SettingsError(f"{name} must be a whole number from {lowest}", repr(value), "mend the setting")


def _integers(name: str, values: Any) -> None:
    if values is None:
        return
    if isinstance(values, str) or not isinstance(values, Sequence) or not values:
        raise SettingsError(f"{name} must be a list of whole numbers", repr(values), "write e.g. [0, 3]")
    for value in values:
        _integer(name, value, 0)


def _number(name: str, value: Any) -> None:
    if value is not None and (
        isinstance(value, bool) or not isinstance(value, int | float) or value != value
    ):
        raise SettingsError(f"{name} must be a number", repr(value), "mend the setting")


def _interval(name: str, value: Any) -> None:
    try:
        low, high = (float(x) for x in value)
    except (TypeError, ValueError) as error:
        raise SettingsError(
            f"{name} must be [low, high] in micrometre", repr(value), "give two numbers"
        ) from error
    if not 0 < low < high:
        raise SettingsError(f"{name} must ascend", repr(value), "write [low, high] in micrometre")


def existing_file(path: str | os.PathLike[str]) -> Path:
    """The path, checked to be a readable, non-empty regular file."""
    path = Path(path)
    if not path.exists():
        raise InputError("input file missing", str(path), "check the path")
    if not path.is_file():
        raise InputError("input is not a file", str(path), "give a FITS, HDF5, ECSV or text file")
    try:
        with open(path, "rb") as stream:
            empty = not stream.read(1)
    except OSError as error:
        raise InputError("input file cannot be read", f"{path.name}: {error.strerror}", "check it") from error
    if empty:
        raise InputError("input file is empty", path.name, "check how it was written")
    return path
