"""A user's spectrum file as `Template`."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note
from xcorr.io.columns import Block, read_columns
from xcorr.provenance import sha256_of_file
from xcorr.template import Template

Floats = NDArray[np.float64]


def columns_template(
    path: Path,
    *,
    name: str | None,
    medium: str | None,
    resolving_power: float | None,
    wavelength_unit: str | None,
    air_formula: str | None,
    kind: str | None,
    extension: int | str | None,
) -> Template:
    """Read a 1-D form as a template; see `xcorr.io.read_template`."""
    columns = read_columns(
        path,
        wavelength_unit=wavelength_unit,
        medium=medium,
        air_formula=air_formula,
        extension=extension,
    )
    wavelength, flux, reference, covered, gaps = _merge(columns.blocks)
    notes = list(columns.notes)
    per_frequency = _is_per_frequency(columns.flux_unit)
    if per_frequency:
        # F_lambda = c F_nu / lambda^2, up to a constant
        flux, reference = flux / wavelength**2, None if reference is None else reference / wavelength**2
        notes.append(
            Note("template-per-frequency", f"flux in {columns.flux_unit} turned into flux per wavelength")
        )
    if gaps:
        notes.append(Note("template-gaps", f"{gaps} gaps between orders are not covered"))
    meta = columns.meta
    r = (
        resolving_power
        if resolving_power is not None
        else _positive(meta.get("RESOLVING_POWER", meta.get("RP")))
    )
    stated_kind = str(meta.get("KIND", "")).lower()
    return Template(
        name=name or str(meta.get("NAME") or stem(path)),
        wavelength_um=wavelength,
        flux=flux,
        reference_flux=reference,
        kind=kind or (stated_kind if stated_kind in ("full", "contribution", "spectrum") else "spectrum"),
        resolving_power=r,
        covered=covered,
        description=str(
            meta.get("DESCRIPTION") or f"{columns.form} of {path.name}, {columns.medium} wavelengths"
        ),
        sha256=sha256_of_file(path),
        notes=tuple(notes),
    )


def stem(path: Path) -> str:
    """File name without the endings of the known formats."""
    return re.sub(r"(\.(fits?|fts|ecsv|h5|hdf5|txt|dat|csv))?(\.gz)?$", "", path.name, flags=re.IGNORECASE)


def _positive(value: Any) -> float | None:
    """R from a card or attribute; absent or not a positive number is "not said"."""
    try:
        number = float(value)
    except (TypeError, ValueError):
        return None
    return number if np.isfinite(number) and number > 0 else None


def _is_per_frequency(unit: str) -> bool:
    """Whether the flux unit is one per frequency (Jy, ...); unknown units count as per wavelength."""
    from astropy import units as u

    try:
        parsed = u.Unit(unit, parse_strict="raise") if unit else None
    except (ValueError, TypeError):
        return False
    return parsed is not None and parsed.physical_type in (
        u.physical.get_physical_type("spectral flux density"),
        u.physical.get_physical_type("surface brightness"),
    )


def _usable(block: Block) -> NDArray[np.bool_]:
    if block.flux is None:
        raise InputError("template has no flux column", "wavelengths only", "name it flux")
    good = np.isfinite(block.flux)
    if block.reference is not None:
        good &= np.isfinite(block.reference)
    if block.flag is not None:
        good &= np.nan_to_num(np.asarray(block.flag, dtype=np.float64), nan=1.0) == 0
    return good


def _merge(blocks: tuple[Block, ...]) -> tuple[Floats, Floats, Floats | None, NDArray[np.bool_], int]:
    """(wavelength, flux, reference, covered, number of gaps) of all orders.

    Orders are sorted and cut at the middle of their overlaps. The samples on both sides of a gap are marked
    as not covered, so that no interpolation bridges it.
    """
    orders = sorted((b for b in blocks if b.wavelength.size > 1), key=lambda b: float(b.wavelength[0]))
    if not orders:
        raise InputError("template holds no usable order", "fewer than two samples each", "check the file")
    parts: list[list[NDArray[Any]]] = []
    gaps, start = 0, -np.inf
    for i, block in enumerate(orders):
        stop, gap_after = np.inf, False
        if i + 1 < len(orders):
            end, begin = float(block.wavelength[-1]), float(orders[i + 1].wavelength[0])
            gap_after = begin > end
            stop = end if gap_after else 0.5 * (begin + end)
        inside = (block.wavelength > start) & (block.wavelength <= stop)
        good = _usable(block)[inside]
        if gap_after and good.size:
            good[-1] = False
        if gaps and parts and start == -np.inf and good.size:
            good[0] = False
        flux = np.where(good, np.nan_to_num(np.asarray(block.flux)[inside]), 0.0)
        reference = (
            flux if block.reference is None else np.where(good, np.nan_to_num(block.reference[inside]), 0.0)
        )
        parts.append([block.wavelength[inside], flux, reference, good])
        gaps += gap_after
        start = -np.inf if gap_after else stop
    wavelength, flux, reference, covered = (np.concatenate(column) for column in zip(*parts, strict=True))
    has_reference = any(block.reference is not None for block in orders)
    if not covered.any():
        raise InputError("template holds no usable sample", "all NaN or flagged", "check the file")
    return wavelength, flux, reference if has_reference else None, covered, gaps
