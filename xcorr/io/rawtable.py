"""The 1-D file forms as named columns: FITS tables and rows of a FITS image, ECSV, HDF5, text."""

from __future__ import annotations

import re
import warnings
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.io.fitsfile import FITS_FAULTS, FitsFile, Hdu
from xcorr.io.hdf5_guard import hdf5_guard
from xcorr.io.spectral_axis import find_world_axis

# what the ECSV reader raises on damaged files
_ECSV_FAULTS = (ValueError, TypeError, KeyError, IndexError, OSError, AttributeError)

_TEXT_LIMIT = 1 << 29
_ROW_NAMES = ("wavelength", "flux", "error", "flag")
_KEY_VALUE = re.compile(r"^\s*([A-Za-z][\w .-]*?)\s*[:=]\s*(.+?)\s*$")
_NUMBER = re.compile(
    r"^[+-]?(\d+\.?\d*([eEdD][+-]?\d+)?|\.\d+([eEdD][+-]?\d+)?|nan|inf|infinity)$", re.IGNORECASE
)


@dataclass
class RawTable:
    """Columns as they stand in the file.

    Attributes
    ----------
    columns : dict
        Name -> values, all of one length (n,).
    units : dict
        Name -> unit text, where stated.
    meta : dict
        Header cards or attributes, upper-case keys.
    form : str
        What the file was taken for.
    """

    columns: dict[str, NDArray[Any]]
    units: dict[str, str] = field(default_factory=dict)
    meta: dict[str, Any] = field(default_factory=dict)
    form: str = ""


def read_raw_tables(path: Path, extension: int | str | None = None) -> list[RawTable]:
    """One raw table per order (one for an ordinary spectrum)."""
    with open(path, "rb") as stream:
        start = stream.read(16)
    if start.startswith(b"\x89HDF\r\n\x1a\n"):
        return [_hdf5(path)]
    if start.startswith(b"SIMPLE") or start.startswith(b"\x1f\x8b"):
        return _fits(FitsFile(path), extension)
    if start.startswith(b"# %ECSV"):
        return [_ecsv(path)]
    return [_text(path)]


def is_rows_image(hdu: Hdu) -> bool:
    """An image whose rows are (wavelength, flux[, error, flag]), alone or stacked by order."""
    long_enough = len(hdu.naxis) in (2, 3) and 2 <= hdu.naxis[1] <= 4 and hdu.naxis[0] >= 16
    return hdu.kind in ("image", "compressed") and long_enough and find_world_axis(hdu.cards) is None


def is_spectrum_table(hdu: Hdu) -> bool:
    """A table with at least two columns, one of which is named like a wavelength."""
    if hdu.kind != "table":
        return False
    count = hdu.cards.get("TFIELDS", 0)
    names = (
        [str(hdu.cards.get(f"TTYPE{i}", "")) for i in range(1, count + 1)] if isinstance(count, int) else []
    )
    from xcorr.io.columns import role_of_column

    return len(names) >= 2 and any(role_of_column(name) == "wavelength" for name in names)


def _fits(file: FitsFile, extension: int | str | None) -> list[RawTable]:
    candidates = file.hdus if extension is None else (file.find(extension, "science"),)
    primary = file.hdus[0].cards
    for hdu in candidates:
        if is_rows_image(hdu):
            data = np.asarray(file.image(hdu), dtype=np.float64)
            meta, units = {**primary, **hdu.cards}, {}
            for key, name in (("XUNITS", "wavelength"), ("WAVEUNIT", "wavelength"), ("YUNITS", "flux")):
                if isinstance(meta.get(key), str):
                    units[name] = meta[key]
            orders = data if data.ndim == 3 else data[None]
            return [
                RawTable(dict(zip(_ROW_NAMES, rows, strict=False)), units, meta, f"rows of image {hdu.label}")
                for rows in orders
            ]
    for hdu in candidates:
        if is_spectrum_table(hdu):
            return [_fits_table(file, hdu, primary)]
    raise InputError(
        f"{file.path.name} holds no spectrum",
        f"extensions {', '.join(hdu.label for hdu in file.hdus[:8])}",
        "give a table with wavelength and flux, or image rows (wavelength, flux, error, flag)",
    )


def _fits_table(file: FitsFile, hdu: Hdu, primary: dict[str, Any]) -> RawTable:
    data = file.table(hdu)
    columns, units = {}, {}
    lengths: dict[str, int] = {}
    try:
        for name in data.names:
            values = np.asarray(data[name])
            if values.dtype.kind not in "iufb":
                continue
            values = values.ravel()  # a table of one row may hold whole spectra
            columns[name] = values.astype(values.dtype.newbyteorder("="))
            lengths[name] = values.size
            unit = data.columns[name].unit
            if unit:
                units[name] = str(unit)
    except FITS_FAULTS as error:
        raise InputError(
            f"table {hdu.label} cannot be read", type(error).__name__, "check the file"
        ) from error
    longest = max(lengths.values(), default=0)
    meta = {**primary, **hdu.cards}
    return RawTable(
        {k: v for k, v in columns.items() if lengths[k] == longest}, units, meta, f"table {hdu.label}"
    )


def _ecsv(path: Path) -> RawTable:
    from astropy.table import Table

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            table = Table.read(path, format="ascii.ecsv")
    except _ECSV_FAULTS as error:
        raise InputError(
            "ECSV file cannot be read", f"{path.name}: {str(error)[:100]}", "check the file"
        ) from error
    columns, units = {}, {}
    for name in table.colnames:
        column = table[name]
        if column.dtype.kind not in "iufb" or column.ndim != 1:
            continue
        values = np.ma.filled(column.astype(float), np.nan) if hasattr(column, "mask") else np.asarray(column)
        columns[name] = np.asarray(values)
        if column.unit is not None:
            units[name] = str(column.unit)
    meta = {str(key).upper(): value for key, value in (table.meta or {}).items()}
    return RawTable(columns, units, meta, "ECSV table")


def _hdf5(path: Path) -> RawTable:
    import h5py

    columns, units = {}, {}
    with hdf5_guard(path), h5py.File(path, "r") as file:
        meta = {str(key).upper(): plain_attribute(value) for key, value in file.attrs.items()}
        for name, item in file.items():
            if not isinstance(item, h5py.Dataset) or item.dtype.kind not in "iufb":
                continue
            if item.size > 1 and item.size == max(item.shape):
                columns[name] = np.asarray(item[()]).ravel()
                for key in ("unit", "units"):
                    if key in item.attrs:
                        units[name] = str(plain_attribute(item.attrs[key]))
                if "medium" in item.attrs:
                    meta["MEDIUM"] = str(plain_attribute(item.attrs["medium"]))
    longest = max((values.size for values in columns.values()), default=0)
    columns = {name: values for name, values in columns.items() if values.size == longest}
    return RawTable(columns, units, meta, "HDF5 spectrum")


def plain_attribute(value: Any) -> Any:
    """An HDF5 attribute as a plain Python value."""
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace").strip()
    if isinstance(value, np.generic):
        return value.item()
    return value


def _text(path: Path) -> RawTable:
    if path.stat().st_size > _TEXT_LIMIT:
        raise InputError(
            "text file too large", f"{path.name}: {path.stat().st_size} bytes", "use HDF5 or FITS"
        )
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except UnicodeDecodeError as error:
        raise InputError(
            "file format not recognised",
            f"{path.name} is neither FITS, HDF5, ECSV nor text",
            "check the file",
        ) from error
    meta: dict[str, Any] = {}
    names: list[str] = []
    rows: list[list[str]] = []
    for line in lines:
        text = line.strip()
        if not text:
            continue
        if text[0] in "#%!;":
            comment = text.lstrip("#%!; ")
            if match := _KEY_VALUE.match(comment):
                meta[match[1].strip().upper()] = match[2].strip("'\" ")
            elif not rows:
                names = _split(comment)
            continue
        tokens = _split(text)
        if not rows and not _NUMBER.match(tokens[0]):
            if names and meta.get("HEADER_SEEN"):
                break
            names, meta["HEADER_SEEN"] = tokens, True
            continue
        rows.append(tokens)
    meta.pop("HEADER_SEEN", None)
    return _from_tokens(path, rows, names, meta)


def _split(text: str) -> list[str]:
    return [token.strip() for token in re.split(r"\s*[,;\t]\s*|\s+", text.strip()) if token.strip()]


def _from_tokens(path: Path, rows: list[list[str]], names: list[str], meta: dict[str, Any]) -> RawTable:
    width = len(rows[0]) if rows else 0
    if not rows or width < 2 or any(len(row) != width for row in rows):
        what = "no table of numbers" if not rows or width < 2 else "rows of different length"
        raise InputError(
            "file format not recognised", f"{path.name}: {what}", "give columns wavelength, flux, ..."
        )
    try:
        values = np.array(
            [[float(token.replace("D", "e").replace("d", "e")) for token in row] for row in rows]
        )
    except ValueError as error:
        raise InputError(
            "text table holds words among its numbers", f"{path.name}: {error}", "mend it"
        ) from error
    if len(names) != width:
        if width > len(_ROW_NAMES):
            raise InputError(
                "columns of the text table unknown", f"{width} columns without names", "name them in a # line"
            )
        names = list(_ROW_NAMES[:width])
    return RawTable(dict(zip(names, values.T, strict=True)), {}, meta, "text table")
