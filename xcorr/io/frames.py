"""Frame of the wavelengths and the barycentric velocity, from the header."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from xcorr.errors import InputError, Note
from xcorr.io.overrides import Overrides

Header = Mapping[str, Any]

# SPECSYS of paper III, table 12
_FRAME_OF_SPECSYS = {
    "TOPOCENT": "observatory",
    "BARYCENT": "barycentric",
    "HELIOCEN": "heliocentric",
    "GEOCENTR": "observatory",
}
_SPECSYS_WORDS = ("BARYCENT", "HELIOCEN", "TOPOCENT", "GEOCENTR")
BARYCENTRIC_CARD = "XCBARY"


def spectral_frame(header: Header, overrides: Overrides) -> tuple[str, list[Note]]:
    """(frame, notes): the override, else SPECSYS, else the observatory's, assumed and said.

    Raises
    ------
    InputError
        SPECSYS names a frame that cannot be used (LSRK, SOURCE, ...).
    """
    if overrides.frame:
        return overrides.frame, []
    specsys = str(header.get("SPECSYS") or "").strip().upper()
    if not specsys:
        message = "the file does not say in which frame its wavelengths are: observatory assumed"
        return "observatory", [Note("frame-assumed", message)]
    for word in _SPECSYS_WORDS:
        if specsys.startswith(word) or (len(specsys) >= 4 and word.startswith(specsys)):
            notes = []
            if word == "GEOCENTR":
                notes = [
                    Note(
                        "frame-geocentric", "geocentric wavelengths taken as observatory (0.46 km/s or less)"
                    )
                ]
            return _FRAME_OF_SPECSYS[word], notes
    raise InputError("frame of the wavelengths cannot be used", f"SPECSYS {specsys[:16]}", "set frame")


def barycentric_km_s(
    header: Header, overrides: Overrides, position: tuple[float, float] | None
) -> tuple[float | None, list[Note]]:
    """z_B c from the run file, or from time, site and coordinates in the header; None, said, where they lack.

    Parameters
    ----------
    header : mapping
        Cards of the science extension over those of the primary.
    overrides : Overrides
    position : (ra, dec) in degrees or None
        Sky position of the field by its WCS; RA and DEC cards are the second choice (their unit may vary).
    """
    if overrides.barycentric_velocity_km_s is not None:
        return float(overrides.barycentric_velocity_km_s), []
    stored = header.get(BARYCENTRIC_CARD)
    if isinstance(stored, int | float) and overrides.time is None:
        return float(stored), []
    time, site = overrides.time or middle_of_exposure(header), overrides.site or observatory_site(header)
    place = overrides.coordinates or position or sky_position(header)
    missing = [
        name for name, value in (("time", time), ("site", site), ("coordinates", place)) if value is None
    ]
    if time is None or site is None or place is None:
        message = f"barycentric velocity unknown: the header lacks {', '.join(missing)}"
        return None, [Note("no-barycentric-velocity", message)]
    from xcorr.spectral import barycentric_velocity

    try:
        value = barycentric_velocity(time, place[0], place[1], site=tuple(float(x) for x in site))
    except InputError as error:
        return None, [Note("no-barycentric-velocity", f"barycentric velocity not computed: {error}")]
    return float(value), [
        Note("barycentric-from-header", f"barycentric velocity {value:+.3f} km/s from the header")
    ]


def _float(value: Any) -> float | None:
    if isinstance(value, bool):
        return None
    try:
        result = float(value)
    except (TypeError, ValueError):
        return None
    return result if result == result and abs(result) != float("inf") else None


def middle_of_exposure(header: Header) -> Any:
    """Middle of the exposure as a Julian date (UTC) or ISO string; None where no card tells.

    MJD-AVG or DATE-AVG; else the mean of begin and end; else MJD-OBS or DATE-OBS plus half of EXPTIME.
    """
    for key in ("MJD-AVG", "MJD_AVG", "AVE_MJD"):
        if (value := _float(header.get(key))) is not None:
            return value + 2400000.5
    if _is_date(header.get("DATE-AVG")):
        return str(header["DATE-AVG"])
    for begin, end in (("MJD-BEG", "MJD-END"), ("MJD-OBS", "MJD-END"), ("EXPSTART", "EXPEND")):
        first, last = _float(header.get(begin)), _float(header.get(end))
        if first is not None and last is not None and last >= first:
            return 0.5 * (first + last) + 2400000.5
    half_day = 0.5 * max(_float(header.get("EXPTIME")) or 0.0, 0.0) / 86400.0
    start = _float(header.get("MJD-OBS"))
    if start is not None:
        return start + half_day + 2400000.5
    date, clock = header.get("DATE-OBS"), header.get("TIME-OBS") or header.get("UT") or header.get("UTC")
    if not _is_date(date):
        return None
    text = str(date)
    if "T" not in text:
        if not isinstance(clock, str) or ":" not in clock:
            return None  # a day alone leaves +-0.3 km/s of Earth rotation open
        text = f"{text}T{clock}"
    return _julian_date(text, half_day)


def _is_date(value: Any) -> bool:
    return isinstance(value, str) and re.match(r"^\d{4}-\d{2}-\d{2}", value) is not None


def _julian_date(text: str, add_days: float) -> float | None:
    from datetime import datetime

    try:
        moment = datetime.fromisoformat(text.strip().rstrip("Zz"))
    except ValueError:
        return None
    if moment.tzinfo is not None:
        return None
    return (moment - datetime(2000, 1, 1, 12)).total_seconds() / 86400.0 + 2451545.0 + add_days


def observatory_site(header: Header) -> tuple[float, float, float] | None:
    """Geocentric x, y, z in metre (OBSGEO-X), or (east longitude, latitude, height) (OBSGEO-L, *GEOLON)."""
    xyz = [_float(header.get(f"OBSGEO-{axis}")) for axis in "XYZ"]
    if all(value is not None for value in xyz) and any(xyz):
        return xyz[0], xyz[1], xyz[2]  # type: ignore[return-value]
    lonlat = [_float(header.get(f"OBSGEO-{axis}")) for axis in "LBH"]
    if lonlat[0] is not None and lonlat[1] is not None:
        return lonlat[0], lonlat[1], lonlat[2] or 0.0
    found = {}
    for key, value in header.items():
        word = key.split()[-1] if key else ""
        if word in ("GEOLON", "GEOLAT", "GEOELEV"):
            found[word] = _float(value)
    longitude, latitude = found.get("GEOLON"), found.get("GEOLAT")
    if longitude is None or latitude is None:
        return None
    return longitude, latitude, found.get("GEOELEV") or 0.0


def sky_position(header: Header) -> tuple[float, float] | None:
    """(ra, dec) in degrees from RA/DEC or their usual variants; sexagesimal text is hours and degrees."""
    for ra_key, dec_key in (
        ("RA_TARG", "DEC_TARG"),
        ("TARG_RA", "TARG_DEC"),
        ("RA", "DEC"),
        ("OBJRA", "OBJDEC"),
    ):
        ra, dec = _angle(header.get(ra_key), 15.0), _angle(header.get(dec_key), 1.0)
        if ra is not None and dec is not None and 0 <= ra <= 360 and abs(dec) <= 90:
            return ra, dec
    return None


def _angle(value: Any, per_hour: float) -> float | None:
    plain = _float(value)
    if plain is not None or not isinstance(value, str):
        return plain
    parts = re.match(r"^\s*([+-]?)(\d{1,3})[:\s](\d{1,2})[:\s](\d{1,2}(?:\.\d*)?)\s*$", value)
    if not parts:
        return None
    size = float(parts[2]) + float(parts[3]) / 60 + float(parts[4]) / 3600
    return (-size if parts[1] == "-" else size) * per_hour
