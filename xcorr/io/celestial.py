"""The two-dimensional celestial WCS of a cube, as cards on axes 1 (x) and 2 (y)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from xcorr.io.spectral_axis import number, pixel_matrix_row

_LONGITUDE = ("RA--", "GLON", "ELON", "HLON", "SLON")
_LATITUDE = ("DEC-", "GLAT", "ELAT", "HLAT", "SLAT")
_COMMON = ("LONPOLE", "LATPOLE", "RADESYS", "EQUINOX")


def celestial_cards(
    header: Mapping[str, Any], naxis: Sequence[int], x_axis: int, y_axis: int
) -> dict[str, Any] | None:
    """Cards of the celestial WCS of the image plane, or None without one.

    Parameters
    ----------
    header : mapping
        Cards of the image.
    naxis : sequence of int
        NAXIS1, NAXIS2, ...
    x_axis, y_axis : int
        FITS pixel axes (from 1) that became x and y.

    Returns
    -------
    dict or None
        CTYPE, CUNIT, CRVAL, CRPIX, CDi_j and the common cards, for axes 1 and 2.
    """
    ctypes = {i: str(header.get(f"CTYPE{i}", "")).upper() for i in range(1, 10)}
    world = [i for i, name in ctypes.items() if name[:4] in _LONGITUDE or name[:4] in _LATITUDE]
    if len(world) != 2 or not any(ctypes[i][:4] in _LONGITUDE for i in world):
        return None
    cd = _matrix(header, naxis, world, (x_axis, y_axis), ctypes)
    if abs(np.linalg.det(cd)) == 0.0:
        return None
    cards: dict[str, Any] = {"WCSAXES": 2}
    for new, old in enumerate(world, start=1):
        cards[f"CTYPE{new}"] = ctypes[old]
        cards[f"CUNIT{new}"] = str(header.get(f"CUNIT{old}") or "deg")
        cards[f"CRVAL{new}"] = number(header, f"CRVAL{old}", 0.0)
        for m in range(40):
            if f"PV{old}_{m}" in header:
                cards[f"PV{new}_{m}"] = number(header, f"PV{old}_{m}", 0.0)
    for new, old in enumerate((x_axis, y_axis), start=1):
        cards[f"CRPIX{new}"] = number(header, f"CRPIX{old}", 0.0)
    for i in (1, 2):
        for j in (1, 2):
            cards[f"CD{i}_{j}"] = float(cd[i - 1, j - 1])
    for key in _COMMON:
        if key in header:
            cards[key] = header[key]
    if "RADESYS" not in cards and isinstance(header.get("RADECSYS"), str):
        cards["RADESYS"] = header["RADECSYS"]
    return cards


def _matrix(
    header: Mapping[str, Any],
    naxis: Sequence[int],
    world: Sequence[int],
    pixel: tuple[int, int],
    ctypes: Mapping[int, str],
) -> Any:
    """CD matrix, shape (2, 2), of the world axes over the pixel axes; old CROTA cards are honoured."""
    rows = [pixel_matrix_row(header, i, len(naxis)) for i in world]
    cd = np.array([[row[j - 1] for j in pixel] for row in rows])
    latitude = next(i for i in world if ctypes[i][:4] in _LATITUDE)
    rotation = number(header, f"CROTA{latitude}", 0.0)
    matrix_given = any(key.startswith(("CD", "PC")) and "_" in key for key in header)
    if rotation and not matrix_given:
        angle, step = np.radians(rotation), np.diag(cd)
        cd = np.array(
            [
                [step[0] * np.cos(angle), -step[1] * np.sin(angle)],
                [step[0] * np.sin(angle), step[1] * np.cos(angle)],
            ]
        )
    return cd


def field_position(cards: Mapping[str, Any] | None) -> tuple[float, float] | None:
    """(ra, dec) in degrees of the reference point, where the WCS is equatorial and in degrees."""
    if cards is None or str(cards["CTYPE1"])[:4] not in ("RA--", "DEC-"):
        return None
    values = {str(cards[f"CTYPE{i}"])[:4]: float(cards[f"CRVAL{i}"]) for i in (1, 2)}
    if {"RA--", "DEC-"} != set(values) or abs(values["DEC-"]) > 90:
        return None
    return values["RA--"] % 360.0, values["DEC-"]
