"""Resolving power: a number, a file, or a header card."""

from __future__ import annotations

import os
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note
from xcorr.io.overrides import existing_file

# cards some files carry (common practice, no source); FITS itself has none
RESOLVING_CARDS = ("SPEC_RES", "RP", "RESPOWER")
_LOWEST = 10.0


def resolving_power(
    given: float | str | os.PathLike[str] | None,
    header: Mapping[str, Any],
    wavelength_um: NDArray[np.float64],
    shape: tuple[int, int, int],
) -> tuple[NDArray[np.float64] | None, list[Note]]:
    """R per channel (or per channel and spaxel), None where nobody says.

    Parameters
    ----------
    given : float or path or None
        A number; or a file: a 1-D form with columns wavelength and R, or a FITS image shaped like the cube.
    header : mapping
        Cards, searched where nothing is given.
    wavelength_um : float64 array (n_wave,)
    shape : (n_wave, ny, nx)

    Raises
    ------
    InputError
        R not positive, or a file that does not cover the channels.
    """
    notes: list[Note] = []
    if given is None:
        for key in RESOLVING_CARDS:
            value = header.get(key)
            if isinstance(value, int | float) and not isinstance(value, bool) and value > _LOWEST:
                notes.append(
                    Note("resolving-power-from-header", f"resolving power {value:g} from header card {key}")
                )
                return np.full(wavelength_um.size, float(value)), notes
        return None, notes
    if isinstance(given, int | float):
        return np.full(wavelength_um.size, _positive(float(given))), notes
    return _from_file(given, wavelength_um, shape), notes


def _positive(value: float) -> float:
    if not (np.isfinite(value) and value > 0):
        raise InputError("resolving power must be positive", f"{value:g}", "give R = lambda/FWHM")
    return value


def _from_file(
    path: str | os.PathLike[str], wavelength_um: NDArray[np.float64], shape: tuple[int, int, int]
) -> NDArray[np.float64]:
    from xcorr.io.columns import read_columns

    file = existing_file(path)
    cube = _cube_of_r(file, shape)
    if cube is not None:
        return cube
    columns = read_columns(file, fallback_unit="um", fallback_medium="vacuum", need_flux=False)
    block = columns.blocks[0]
    values = block.resolving if block.resolving is not None else block.flux
    if values is None:
        raise InputError("resolving power file has no second column", file.name, "write wavelength and R")
    x, r = block.wavelength, values
    good = np.isfinite(x) & np.isfinite(r)
    x, r = x[good], r[good]
    if x.size == 0 or np.any(np.diff(x) <= 0):
        raise InputError("wavelengths of the resolving power file must ascend", file.name, "sort it")
    margin = 0.01 * (wavelength_um.max() - wavelength_um.min())
    if x[0] > wavelength_um.min() + margin or x[-1] < wavelength_um.max() - margin:
        raise InputError(
            f"resolving power file {file.name} does not cover the exposure",
            f"{x[0]:.4f}-{x[-1]:.4f} um for {wavelength_um.min():.4f}-{wavelength_um.max():.4f} um",
            "extend it",
        )
    result = np.interp(wavelength_um, x, r)
    _positive(float(result.min()))
    return np.asarray(result, dtype=np.float64)


def _cube_of_r(path: Any, shape: tuple[int, int, int]) -> NDArray[np.float64] | None:
    """A FITS image of R, (wave, y, x) with ascending wavelength; None for another file."""
    from xcorr.io.fitsfile import FitsFile

    with open(path, "rb") as stream:
        if stream.read(9) != b"SIMPLE  =":
            return None
    file = FitsFile(path)
    for hdu in file.hdus:
        if hdu.kind in ("image", "compressed") and len(hdu.naxis) == 3 and hdu.naxis[1] > 4:
            if hdu.shape != shape:
                raise InputError(
                    "resolving power cube has another shape", f"{hdu.shape} for {shape}", "regrid it"
                )
            values = np.asarray(file.image(hdu), dtype=np.float64)
            _positive(float(values.min()))
            return values
    return None
