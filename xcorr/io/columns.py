"""Named columns to spectra: which column is what, units, vacuum, order of the wavelengths, padded ends."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note
from xcorr.io.medium import decide_medium, to_vacuum
from xcorr.io.rawtable import RawTable, read_raw_tables
from xcorr.io.spectral_units import spectral_unit
from xcorr.units import LIGHT_M_S, PLANCK_J_S

Floats = NDArray[np.float64]

_ROLES: dict[str, str] = {
    "wavelength": "wave wavelength lambda lam wl wlen wavelen wave_vac wave_air wavelength_vac wavelength_air"
    " lambda_vac lambda_air vacuum_wavelength air_wavelength wavelength_vacuum loglam log_wave"
    " frequency freq nu wavenumber wavn energy",
    "flux": "flux f_lambda flam flux_density spec spectrum data signal flux_reduced intensity contribution"
    " radiance",
    "sigma": "error err errors sigma flux_error flux_err fluxerr fluxerror e_flux eflux noise unc uncertainty"
    " stdev std err_flux err_reduced",
    "variance": "variance var flux_var stat",
    "inverse_variance": "ivar inverse_variance invvar",
    "flag": "flag flags mask quality qual dq",
    "resolving": "r resolving_power resolution res resolvingpower",
    "reference": "reference reference_flux full_flux",
    "order": "order orders",
}
_ROLE_OF = {name: role for role, names in _ROLES.items() for name in names.split()}
_UNIT_SUFFIX = re.compile(
    r"^(.*?)(?:[_ ]?[\[(]([^\])]*)[\])]|_(um|nm|angstrom|aa|micron|hz|ghz|cm1))$", re.IGNORECASE
)


@dataclass(frozen=True)
class Block:
    """One order: vacuum wavelengths in micrometre, strictly ascending, and what goes with them (all (n,))."""

    wavelength: Floats
    flux: Floats | None
    error: Floats | None = None
    flag: NDArray[Any] | None = None
    resolving: Floats | None = None
    reference: Floats | None = None


@dataclass(frozen=True)
class Columns:
    """A 1-D file as understood: orders in file order, the kind of its errors, its header."""

    blocks: tuple[Block, ...]
    error_kind: str
    flux_unit: str
    meta: Mapping[str, Any]
    form: str
    medium: str
    wavelength_unit: str
    notes: tuple[Note, ...]


def _parse_name(name: str) -> tuple[str, str]:
    """(bare lower-case name, unit in the name or "")."""
    match = _UNIT_SUFFIX.match(name.strip())
    bare, unit = (match[1], match[2] or match[3] or "") if match else (name, "")
    unit = "cm-1" if unit.lower() == "cm1" else unit
    return re.sub(r"[\s.-]+", "_", bare.strip()).lower(), unit


def role_of_column(name: str) -> str:
    """Role of a column name ("wavelength", "flux", "sigma", ...), "" for an unknown one."""
    return _ROLE_OF.get(_parse_name(name)[0], "")


def read_columns(
    path: Path,
    *,
    wavelength_unit: str | None = None,
    medium: str | None = None,
    air_formula: str | None = None,
    extension: int | str | None = None,
    error_kind: str | None = None,
    need_flux: bool = True,
    fallback_unit: str | None = None,
    fallback_medium: str | None = None,
) -> Columns:
    """Read any 1-D form.

    Parameters
    ----------
    path : Path
    wavelength_unit, medium, air_formula, extension, error_kind : optional
        Override what the file says.
    need_flux : bool
        Whether a flux column must be there.
    fallback_unit, fallback_medium : str, optional
        Taken where the file does not say (used for resolving powers, where the difference is immaterial).

    Raises
    ------
    InputError
        Unreadable, columns not recognised, unit or medium unknown, wavelengths repeated or out of order.
    """
    raws = read_raw_tables(path, extension)
    first = raws[0]
    names = _assign(first, path)
    if "flux" not in names and need_flux:
        raise InputError(f"{path.name} has no flux column", ", ".join(first.columns)[:80], "name it flux")
    unit = wavelength_unit or _unit_of(first, names["wavelength"]) or fallback_unit
    if not unit:
        raise InputError(
            f"{path.name}: unit of the wavelengths unknown", "none stated", "set wavelength_unit"
        )
    by_name = _medium_in(names["wavelength"])
    by_axis = by_name or ("" if spectral_unit(unit).kind == "length" else "vacuum") or _medium_by_ucd(first)
    try:
        medium, notes = decide_medium(medium, by_axis, first.meta, path.name)
    except InputError:
        if fallback_medium is None:
            raise
        medium, notes = fallback_medium, []
    kind = next((k for k in ("sigma", "variance", "inverse_variance") if k in names), "")
    blocks = [
        block for raw in raws for block in _blocks(raw, names, kind, unit, medium, air_formula, path.name)
    ]
    if not any(block.wavelength.size for block in blocks):
        raise InputError(f"{path.name} holds no usable sample", "all NaN", "check the file")
    flux_unit = first.units.get(names.get("flux", ""), "") or str(first.meta.get("FLUX_UNIT", ""))
    flux_unit = flux_unit or (_parse_name(names["flux"])[1] if "flux" in names else "")
    return Columns(
        tuple(blocks), error_kind or kind, flux_unit, first.meta, first.form, medium, unit, tuple(notes)
    )


def _assign(raw: RawTable, path: Path) -> dict[str, str]:
    """Role -> column name; the first column of a role counts."""
    names: dict[str, str] = {}
    for name in raw.columns:
        role = role_of_column(name)
        if role and role not in names:
            names[role] = name
    if "wavelength" not in names:
        found = ", ".join(raw.columns)[:80] or "no numeric column"
        raise InputError(f"{path.name} has no wavelength column", found, "name it wavelength")
    return names


def _unit_of(raw: RawTable, name: str) -> str:
    bare, in_name = _parse_name(name)
    if bare in ("loglam", "log_wave"):
        return raw.units.get(name, "").lower().replace("log10", "").strip(" ()[]") or "Angstrom"
    stated = raw.units.get(name) or in_name
    return str(stated or raw.meta.get("WAVELENGTH_UNIT") or raw.meta.get("XUNITS") or "")


def _medium_in(name: str) -> str:
    bare = _parse_name(name)[0]
    return "vacuum" if "vac" in bare else "air" if re.search(r"(^|_)air(_|$)", bare) else ""


def _medium_by_ucd(raw: RawTable) -> str:
    """Virtual-observatory tables: the UCD em.wl;obs.atmos marks air wavelengths (IVOA UCD list)."""
    for key, value in raw.meta.items():
        if key.startswith("TUCD") and str(value).lower().startswith("em.wl"):
            return "air" if "obs.atmos" in str(value).lower() else ""
    return ""


def _blocks(
    raw: RawTable, names: Mapping[str, str], kind: str, unit: str, medium: str, formula: str | None, what: str
) -> list[Block]:
    take = {role: raw.columns[name] for role, name in names.items() if name in raw.columns}
    if "wavelength" not in take:
        raise InputError(f"{what}: orders differ in their columns", raw.form, "mend the file")
    coordinate = np.asarray(take["wavelength"], dtype=np.float64)
    if _parse_name(names["wavelength"])[0] in ("loglam", "log_wave"):
        with np.errstate(over="ignore"):
            coordinate = 10.0**coordinate
    wavelength, may_flip = _to_um(coordinate, unit)
    orders = take.get("order")
    groups = [np.arange(wavelength.size)] if orders is None else _groups(orders, what)
    errors = take.get(kind) if kind else None
    parts = []
    for rows in groups:
        kept = _trim(rows, wavelength, take.get("flux"))
        if kept.size and may_flip and wavelength[kept[0]] > wavelength[kept[-1]]:
            kept = kept[::-1]
        vacuum = to_vacuum(_ascending(wavelength[kept], what), medium, formula)
        get = {
            role: np.asarray(values, dtype=np.float64)[kept]
            for role, values in take.items()
            if role != "flag"
        }
        flag = take["flag"][kept] if "flag" in take else None
        error = np.asarray(errors, dtype=np.float64)[kept] if errors is not None else None
        parts.append(Block(vacuum, get.get("flux"), error, flag, get.get("resolving"), get.get("reference")))
    return parts


def _groups(orders: NDArray[Any], what: str) -> list[NDArray[np.intp]]:
    """Rows of each run of equal order numbers."""
    change = np.flatnonzero(orders[1:] != orders[:-1]) + 1
    runs = np.split(np.arange(orders.size), change)
    if len({float(orders[run[0]]) for run in runs}) != len(runs):
        raise InputError(f"{what}: rows of one order are not together", f"{len(runs)} runs", "sort by order")
    return runs


def _to_um(coordinate: Floats, unit: str) -> tuple[Floats, bool]:
    """(micrometre, whether a descending order is natural)."""
    parsed = spectral_unit(unit)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        if parsed.kind == "length":
            return coordinate * (parsed.to_si * 1e6), False  # micrometres stay what they are, bit for bit
        si = coordinate * parsed.to_si
        if parsed.kind == "frequency":
            return LIGHT_M_S / si * 1e6, True
        if parsed.kind == "wavenumber":
            return 1e6 / si, True
        if parsed.kind == "energy":
            return PLANCK_J_S * LIGHT_M_S / si * 1e6, True
    raise InputError(
        "unit is none of a wavelength", repr(unit), "set wavelength_unit to um, nm, Angstrom, ..."
    )


def _trim(rows: NDArray[np.intp], wavelength: Floats, flux: NDArray[Any] | None) -> NDArray[np.intp]:
    """Rows without the ends padded by NaN."""
    good = np.isfinite(wavelength[rows])
    if flux is not None:
        good = good & np.isfinite(np.asarray(flux, dtype=np.float64)[rows])
    inside = np.flatnonzero(good)
    return rows[:0] if inside.size == 0 else rows[inside[0] : inside[-1] + 1]


def _ascending(wavelength: Floats, what: str) -> Floats:
    if wavelength.size == 0:
        return wavelength
    if not np.all(np.isfinite(wavelength)):
        raise InputError(
            f"{what}: wavelengths missing inside the table", "NaN or infinite", "drop those rows"
        )
    if wavelength.min() < 0.01 or wavelength.max() > 1000.0:
        got = f"{wavelength.min():.4g} to {wavelength.max():.4g} um"
        raise InputError(f"{what}: wavelengths outside 0.01-1000 um", got, "set wavelength_unit")
    step = np.diff(wavelength)
    if np.any(step <= 0):
        k = int(np.argmax(step <= 0))
        raise InputError(
            f"{what}: wavelengths must ascend strictly",
            f"{wavelength[k]:.7g} then {wavelength[k + 1]:.7g} um in row {k + 2}",
            "sort the rows and drop repeated ones",
        )
    return wavelength
