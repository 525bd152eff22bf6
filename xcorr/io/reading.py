"""The public readers: dispatch by what the file is, not by what it is called."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np

from xcorr.cube import Cube
from xcorr.errors import InputError
from xcorr.io.cubes import read_fits_cube
from xcorr.io.fitsfile import FitsFile
from xcorr.io.hdf5 import is_hdf5, read_hdf5_cube
from xcorr.io.hdf5_guard import hdf5_guard
from xcorr.io.overrides import Overrides, existing_file, overrides_from
from xcorr.io.rawtable import is_rows_image, is_spectrum_table
from xcorr.io.spectra import read_columns_spectrum
from xcorr.io.spectral_axis import find_world_axis
from xcorr.io.templates import columns_template, stem
from xcorr.template import Template

PathLike = str | os.PathLike[str]


def read_cube(path: PathLike, **overrides: Any) -> Cube:
    """Read one exposure: a FITS image with a spectral axis, or an HDF5 cube.

    Parameters
    ----------
    path : path
        FITS (plain or gzipped) or HDF5.
    **overrides
        Keys of ``[[exposure]]`` in the run file that say what the file does not, or says wrongly:
        ``medium``, ``air_formula``, ``wavelength_unit``, ``spectral_axis``, ``frame``,
        ``wavelength_range_um``, ``science_extension``, ``error_extension``, ``error_kind``,
        ``quality_extension``, ``quality_bad_bits``, ``quality_good_bits``, ``gain_e_per_unit``,
        ``telluric_corrected``, ``starlight_removed``, ``mask_wavelength_um``, ``resolving_power``,
        ``barycentric_velocity_km_s``, ``time``, ``site``, ``coordinates``. None means "not said".

    Returns
    -------
    Cube
        (wave, y, x), vacuum micrometre ascending, float32 planes on a common power of ten, masked samples 0.

    Raises
    ------
    InputError
        The file cannot be used, or does not say something that must be known.
    SettingsError
        Unknown or mistyped override.
    """
    file, settings = existing_file(path), overrides_from(overrides)
    if is_hdf5(file):
        cube = read_hdf5_cube(file, settings)
    else:
        cube = read_fits_cube(FitsFile(_need_fits(file)), settings)
    if cube.is_spectrum:
        raise InputError("the file holds a single spectrum, no cube", file.name, "use read_spectrum")
    return cube


def read_spectrum(path: PathLike, **overrides: Any) -> Cube:
    """Read an extracted spectrum: ECSV, FITS table, FITS image (rows or WCS), HDF5, text.

    Parameters
    ----------
    path : path
    **overrides
        As for `read_cube`, and ``orders`` (zero-based orders to keep).

    Returns
    -------
    Cube
        With ny = nx = 1; several orders follow each other and are told apart by ``order``.

    Raises
    ------
    InputError, SettingsError
        As `read_cube`; also where wavelengths are repeated or out of order.
    """
    cube = read_exposure(path, **overrides)
    if not cube.is_spectrum:
        raise InputError("the file holds a cube, no single spectrum", f"{cube.shape}", "use read_cube")
    return cube


def read_exposure(path: PathLike, **overrides: Any) -> Cube:
    """Read a cube or an extracted spectrum, whichever the file holds; see `read_cube` and `read_spectrum`."""
    file, settings = existing_file(path), overrides_from(overrides)
    if is_hdf5(file):
        return read_hdf5_cube(file, settings)
    if _is_fits(file) and _is_image_exposure(scanned := FitsFile(file), settings):
        return read_fits_cube(scanned, settings)
    return read_columns_spectrum(file, settings)


def read_template(
    path: PathLike,
    *,
    name: str | None = None,
    medium: str | None = None,
    resolving_power: float | None = None,
    wavelength_unit: str | None = None,
    air_formula: str | None = None,
    kind: str | None = None,
    extension: int | str | None = None,
) -> Template:
    """Read a companion spectrum from any of the 1-D forms.

    Parameters
    ----------
    path : path
        ECSV, FITS table, FITS image rows (orders allowed), HDF5 or text. A column ``reference_flux`` marks a
        contribution template (full spectrum beside the molecule's share).
    name : str, optional
        Name in the results; default the file's own, else its base name.
    medium : "vacuum" or "air", optional
        Where the file does not say.
    resolving_power : float, optional
        R of the template; default what the file says, else unresolved.
    wavelength_unit, air_formula, kind, extension : optional
        Override the file.

    Returns
    -------
    Template
        Vacuum micrometre; flagged samples, and gaps between orders, not covered.

    Raises
    ------
    InputError
        The file cannot be used.
    """
    file = existing_file(path)
    settings = overrides_from(
        {"medium": medium, "air_formula": air_formula, "resolving_power": resolving_power}
    )
    if (is_hdf5(file) and _is_hdf5_cube(file)) or (
        _is_fits(file) and _is_image_exposure(FitsFile(file), Overrides(science_extension=extension))
    ):
        cube = read_spectrum(
            file,
            medium=medium,
            air_formula=air_formula,
            wavelength_unit=wavelength_unit,
            science_extension=extension,
        )
        return _template_of(cube, name or stem(file), settings.resolving_power, kind)
    return columns_template(
        file,
        name=name,
        medium=medium,
        resolving_power=resolving_power,
        wavelength_unit=wavelength_unit,
        air_formula=air_formula,
        kind=kind,
        extension=extension,
    )


def _template_of(cube: Cube, name: str, resolving_power: Any, kind: str | None) -> Template:
    """A one-dimensional WCS image or HDF5 spectrum, read as an exposure, as a template."""
    if cube.order is not None and np.unique(cube.order).size > 1:
        raise InputError("template holds several orders", f"{np.unique(cube.order).size}", "merge them first")
    r = resolving_power
    if r is None and cube.resolving_power is not None:
        r = float(np.median(cube.resolving_power))
    return Template(
        name=name,
        wavelength_um=cube.wavelength_um,
        flux=cube.data[:, 0, 0].astype(np.float64) * 10.0**-cube.scale_exponent,
        kind=kind or "spectrum",
        resolving_power=r,
        covered=~cube.mask[:, 0, 0],
        description=f"spectrum of {cube.source}",
        sha256=cube.sha256,
    )


def _is_fits(path: Path) -> bool:
    with open(path, "rb") as stream:
        start = stream.read(6)
    return start == b"SIMPLE" or start[:2] == b"\x1f\x8b"


def _need_fits(path: Path) -> Path:
    if not _is_fits(path):
        raise InputError("not a FITS or HDF5 cube", path.name, "give a cube, or use read_spectrum")
    return path


def _is_hdf5_cube(path: Path) -> bool:
    """Whether an HDF5 file holds data of three axes."""
    import h5py

    with hdf5_guard(path), h5py.File(path, "r") as file:
        return any(isinstance(file.get(n), h5py.Dataset) and file[n].ndim == 3 for n in ("data", "flux"))


def _is_image_exposure(file: FitsFile, settings: Overrides) -> bool:
    """Whether a FITS file is to be read through its image axes (else: through its columns or rows)."""
    hdus = file.hdus
    if settings.science_extension is not None:
        hdus = (file.find(settings.science_extension, "science"),)
    images = [hdu for hdu in hdus if hdu.kind in ("image", "compressed") and hdu.naxis]
    if settings.spectral_axis is not None:
        return bool(images)
    if any(len(hdu.naxis) >= 3 and not is_rows_image(hdu) for hdu in images):
        return True
    if any(is_rows_image(hdu) for hdu in images):
        return False
    if any(len(hdu.naxis) == 1 and find_world_axis({**file.hdus[0].cards, **hdu.cards}) for hdu in images):
        return True
    return not any(is_spectrum_table(hdu) for hdu in hdus)
