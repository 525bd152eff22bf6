"""Write an exposure in any of the layouts that tests and demonstrations need; bytes are reproducible."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.cube import Cube
from xcorr.errors import OutputError
from xcorr.io.frames import BARYCENTRIC_CARD
from xcorr.io.hdf5 import SCHEMA

LAYOUTS = ("um-sigma", "nm-axis1-quality", "awav-variance", "metre-nan", "hdf5")
GOOD_BITS = (0, 3)  # set in good samples by the "nm-axis1-quality" layout
_LINEAR_TOLERANCE = 1e-3  # channels
_UNIT_PER_UM = {"um": 1.0, "nm": 1e3, "Angstrom": 1e4, "m": 1e-6}
_SPECSYS = {"observatory": "TOPOCENT", "barycentric": "BARYCENT", "heliocentric": "HELIOCEN"}


def write_cube(path: str | os.PathLike[str], cube: Cube, *, layout: str = "um-sigma") -> None:
    """Write a cube; an existing file is replaced.

    Parameters
    ----------
    path : path
    cube : Cube
    layout : str
        "um-sigma": WAVE on FITS axis 3 in um, extension NOISE with sigmas, 0 where masked;
        "nm-axis1-quality": WAVE on FITS axis 1 in nm, ERR, and DQ whose bits 0 and 3 are set in good samples
        (read it with ``quality_good_bits=[0, 3]``);
        "awav-variance": AWAV (Ciddor 1996) on axis 3 in Angstrom, STAT with variances, NaN where masked;
        "metre-nan": WAVE on axis 3 in m, NaN where masked, no errors;
        "hdf5": the layout of docs/file-formats.md, exact.
        Grids that are linear to a thousandth of a channel get a linear WCS, others a -TAB.

    Raises
    ------
    OutputError
        Unknown layout, several orders in a FITS layout, or the file cannot be written.
    """
    target = Path(path)
    if layout not in LAYOUTS:
        raise OutputError("unknown cube layout", repr(layout), f"use one of {', '.join(LAYOUTS)}")
    try:
        if layout == "hdf5":
            _write_hdf5(target, cube)
        else:
            _write_fits(target, cube, layout)
    except OSError as error:
        raise OutputError(
            f"{target.name} cannot be written", str(error)[:120], "check folder and space"
        ) from error


def _write_fits(path: Path, cube: Cube, layout: str) -> None:
    from astropy.io import fits

    if cube.order is not None and np.any(cube.order != cube.order[0]):
        raise OutputError("FITS layouts hold one order only", "several orders", "write layout hdf5")
    unit = {"um-sigma": "um", "nm-axis1-quality": "nm", "awav-variance": "Angstrom", "metre-nan": "m"}[layout]
    axis = 1 if layout == "nm-axis1-quality" else 3
    wcs, table = _wcs_cards(cube, axis, unit, air=layout == "awav-variance")
    primary = fits.PrimaryHDU()
    for key, value in _primary_cards(cube).items():
        primary.header[key] = value
    hdus: list[Any] = [primary]
    for name, plane, extra in _planes(cube, layout):
        stored = plane.transpose(1, 2, 0) if axis == 1 else plane
        hdu = fits.ImageHDU(np.ascontiguousarray(stored), name=name)
        hdu.header.update(wcs)
        hdu.header.update(extra)
        hdus.append(hdu)
    if table is not None:
        column = fits.Column(
            "wavelength", f"{table.size}D", unit=unit, dim=f"(1,{table.size})", array=table[None, :, None]
        )
        hdus.append(fits.BinTableHDU.from_columns([column], name="WCS-TABLE"))
    fits.HDUList(hdus).writeto(path, overwrite=True)


def _primary_cards(cube: Cube) -> dict[str, Any]:
    cards: dict[str, Any] = {
        key: value
        for key, value in cube.header.items()
        if key not in ("BUNIT", "SPECSYS") and isinstance(value, str | int | float | bool) and len(key) <= 8
    }
    cards["SPECSYS"] = _SPECSYS[cube.frame]
    if cube.barycentric_velocity_km_s is not None:
        cards[BARYCENTRIC_CARD] = (cube.barycentric_velocity_km_s, "[km/s] to add to a measured velocity")
    r = cube.resolving_power
    if r is not None and np.all(r == r.flat[0]):
        cards["SPEC_RES"] = (float(r.flat[0]), "resolving power")
    return cards


def _planes(cube: Cube, layout: str) -> list[tuple[str, NDArray[Any], dict[str, Any]]]:
    """(EXTNAME, values (wave, y, x), extra cards) in physical units."""
    factor = 10.0**-cube.scale_exponent
    data = (cube.data.astype(np.float64) * factor).astype(np.float32)
    unit = {"BUNIT": cube.unit} if cube.unit else {}
    sigma = None if cube.variance is None else np.sqrt(cube.variance.astype(np.float64)) * factor
    if layout == "um-sigma":
        planes: list[tuple[str, NDArray[Any], dict[str, Any]]] = [("DATA", data, unit)]
        if sigma is not None:
            planes.append(("NOISE", np.where(cube.mask, 0.0, sigma).astype(np.float32), unit))
        else:
            data[cube.mask] = np.nan
        return planes
    if layout == "nm-axis1-quality":
        good = np.int16(sum(1 << bit for bit in GOOD_BITS))
        quality = np.where(cube.mask, np.int16(1 << GOOD_BITS[0]), good).astype(np.int16)
        errors = [] if sigma is None else [("ERR", sigma.astype(np.float32), unit)]
        return [("SCI", data, unit), *errors, ("DQ", quality, {})]
    data[cube.mask] = np.nan
    if layout == "awav-variance" and sigma is not None:
        # in double precision: squares of faint fluxes leave the range of float32
        return [("DATA", data, unit), ("STAT", np.where(cube.mask, np.nan, sigma**2), {})]
    return [("DATA", data, unit)]


def _wcs_cards(
    cube: Cube, axis: int, unit: str, *, air: bool
) -> tuple[dict[str, Any], NDArray[np.float64] | None]:
    """(cards of the three axes, table of a -TAB axis or None)."""
    wavelength = cube.wavelength_um
    if air:
        from xcorr.spectral import vacuum_to_air

        wavelength = vacuum_to_air(wavelength, formula="ciddor1996")
    values = np.asarray(wavelength, dtype=np.float64) * _UNIT_PER_UM[unit]
    name = "AWAV" if air else "WAVE"
    cards: dict[str, Any] = {"WCSAXES": 3, f"CUNIT{axis}": unit, f"CRPIX{axis}": 1.0}
    start, step = _line(values)
    table = None
    if (
        values.size == 1
        or np.max(np.abs(start + step * np.arange(values.size) - values)) <= _LINEAR_TOLERANCE * step
    ):
        cards |= {f"CTYPE{axis}": name, f"CRVAL{axis}": start, f"CD{axis}_{axis}": step}
    else:
        table = values
        cards |= {f"CTYPE{axis}": f"{name}-TAB", f"CRVAL{axis}": 1.0, f"CD{axis}_{axis}": 1.0}
        cards |= {f"PS{axis}_0": "WCS-TABLE", f"PS{axis}_1": "wavelength"}
    cards |= _spatial_cards(cube, axis)
    return cards, table


def _line(values: NDArray[np.float64]) -> tuple[float, float]:
    """Start and step of a line with the slope between the ends, centred between the extremes."""
    if values.size == 1:
        return float(values[0]), float(values[0]) * 1e-4
    step = float((values[-1] - values[0]) / (values.size - 1))
    rest = values - step * np.arange(values.size)
    return float(0.5 * (rest.min() + rest.max())), step


def _spatial_cards(cube: Cube, spectral: int) -> dict[str, Any]:
    """The celestial cards renumbered around the spectral axis; plain pixel axes without them."""
    x, y = (2, 3) if spectral == 1 else (1, 2)
    new = {1: x, 2: y}
    cards: dict[str, Any] = {}
    for key, value in (cube.celestial_header or {}).items():
        if key == "WCSAXES":
            continue
        if key.startswith("CD") and "_" in key:
            i, j = (int(part) for part in key[2:].split("_"))
            cards[f"CD{new[i]}_{new[j]}"] = value
        elif key.startswith("PV"):
            world, m = key[2:].split("_")
            cards[f"PV{new[int(world)]}_{m}"] = value
        elif key[-1:] in "12" and key[:-1] in ("CTYPE", "CUNIT", "CRVAL", "CRPIX"):
            cards[f"{key[:-1]}{new[int(key[-1])]}"] = value
        else:
            cards[key] = value
    if not cards:
        for axis in (x, y):
            cards |= {
                f"CTYPE{axis}": "PIXEL",
                f"CRVAL{axis}": 1.0,
                f"CRPIX{axis}": 1.0,
                f"CD{axis}_{axis}": 1.0,
            }
    return cards


def _write_hdf5(path: Path, cube: Cube) -> None:
    import h5py

    with h5py.File(path, "w") as file:

        def put(name: str, values: NDArray[Any]) -> Any:
            return file.create_dataset(name, data=values, track_times=False)

        # fixed-length text: it needs no heap in the file, so damage elsewhere cannot reach it
        file.attrs["schema"] = np.bytes_(SCHEMA)
        file.attrs["frame"] = np.bytes_(cube.frame)
        file.attrs["unit"] = np.bytes_((cube.unit or " ").encode())
        file.attrs["scale_exponent"] = cube.scale_exponent
        file.attrs["telluric_corrected"] = cube.telluric_corrected
        file.attrs["starlight_removed"] = cube.starlight_removed
        if cube.barycentric_velocity_km_s is not None:
            file.attrs["barycentric_velocity_km_s"] = float(cube.barycentric_velocity_km_s)
        if cube.gain_e_per_unit is not None:
            file.attrs["gain_e_per_unit"] = float(cube.gain_e_per_unit)
        put("data", cube.data)
        if cube.variance is not None:
            put("variance", cube.variance)
        put("mask", cube.mask.astype(np.uint8))
        wavelength = put("wavelength", cube.wavelength_um)
        wavelength.attrs["unit"] = np.bytes_("um")
        wavelength.attrs["medium"] = np.bytes_("vacuum")
        if cube.order is not None:
            put("order", cube.order)
        if cube.resolving_power is not None:
            put("resolving_power", cube.resolving_power)
        for name, cards in (("celestial", cube.celestial_header), ("header", cube.header)):
            if cards:
                group = file.create_group(name)
                for key, value in cards.items():
                    if isinstance(value, str | int | float | bool):
                        text = isinstance(value, str)
                        group.attrs[key] = np.bytes_((str(value) or " ").encode()) if text else value
