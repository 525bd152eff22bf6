"""The spectral axis of a FITS image: CTYPE, unit and matrix to wavelengths, by FITS paper III.

Greisen, Calabretta, Valdes & Allen (2006, A&A 446, 747), cited below by equation. The linear, logarithmic and
table forms are computed here; the non-linear algorithms (-F2W, -GRI, ...) are left to wcslib.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.io.spectral_units import SpectralUnit, spectral_unit
from xcorr.units import LIGHT_M_S, PLANCK_J_S

Header = Mapping[str, Any]
Floats = NDArray[np.float64]

# CTYPE -> (kind of unit, medium of the wavelength it stands for), paper III table 1
STANDARD: dict[str, tuple[str, str]] = {
    "FREQ": ("frequency", "vacuum"),
    "AFRQ": ("frequency", "vacuum"),
    "ENER": ("energy", "vacuum"),
    "WAVN": ("wavenumber", "vacuum"),
    "VRAD": ("speed", "vacuum"),
    "WAVE": ("length", "vacuum"),
    "VOPT": ("speed", "vacuum"),
    "ZOPT": ("none", "vacuum"),
    "AWAV": ("length", "air"),
    "VELO": ("speed", "vacuum"),
    "BETA": ("none", "vacuum"),
}
_STANDARD_FORM = re.compile(rf"^({'|'.join(STANDARD)})(?:-(LOG|TAB|GRI|GRA|[FWAV]2[FWAV]))?$")
_NAMED = {"LAMBDA", "WAVELENGTH", "WAVELEN", "WAVELNTH", "WLEN", "WAVELENG"}
_OF_KIND = {"length": "WAVE", "frequency": "FREQ", "energy": "ENER", "wavenumber": "WAVN"}
_SI_NAME = {"length": "m", "frequency": "Hz", "energy": "J", "wavenumber": "m-1", "speed": "m/s", "none": ""}
_PLAUSIBLE_UM = (0.01, 1000.0)


@dataclass(frozen=True)
class SpectralAxis:
    """A spectral axis as understood.

    Attributes
    ----------
    wavelength_um : float64 array (n,)
        In file order (may descend), in `medium`, micrometre.
    fits_axis : int
        Pixel axis it runs along, counted from 1 as in NAXISn.
    medium : str
        "vacuum", "air", or "" where the header does not say.
    ctype, unit : str
        As in the header (or as overridden).
    """

    wavelength_um: Floats
    fits_axis: int
    medium: str
    ctype: str
    unit: str


def number(header: Header, key: str, default: float) -> float:
    """A numeric card; absent or blank gives the default, anything else non-numeric is an error."""
    value = header.get(key)
    if value is None or value == "":
        return default
    try:
        result = float(value)
    except (TypeError, ValueError):
        result = np.nan
    if not np.isfinite(result):
        raise InputError(f"header card {key} must be a number", repr(value)[:40], "mend the header")
    return result


def pixel_matrix_row(header: Header, world: int, naxis: int, alt: str = "") -> Floats:
    """Row `world` (1-based) of the matrix from pixels to intermediate world coordinates, shape (naxis,).

    CD where present, else CDELT times PC. A row that CD leaves empty falls back to CDELT: many files write CD
    for the sky and CDELT for the spectrum.
    """
    row = np.zeros(naxis)
    if any(f"CD{i}_{j}{alt}" in header for i in range(1, 10) for j in range(1, 10)):
        row = np.array([number(header, f"CD{world}_{j}{alt}", 0.0) for j in range(1, naxis + 1)])
    if not np.any(row):
        pc = [number(header, f"PC{world}_{j}{alt}", float(world == j)) for j in range(1, naxis + 1)]
        row = number(header, f"CDELT{world}{alt}", 1.0) * np.array(pc)
    return row


def _ctypes(header: Header, alt: str) -> dict[int, str]:
    found = {}
    for axis in range(1, 10):
        value = header.get(f"CTYPE{axis}{alt}")
        if isinstance(value, str) and value.strip():
            found[axis] = value.strip().upper()
    return found


def _is_spectral_unit(text: Any) -> bool:
    try:
        return isinstance(text, str) and spectral_unit(text).kind in _OF_KIND
    except InputError:
        return False


def find_world_axis(header: Header) -> tuple[int, str] | None:
    """World axis (1-based) that is spectral and the letter of its WCS ("" for the primary); None without one.

    Standard types first, then the common names, then LINEAR with a spectral unit or named by DISPAXIS.
    """
    for alt in ("", *"ABCDEFGHIJKLMNOPQRSTUVWXYZ"):
        ctypes = _ctypes(header, alt)
        standard = [axis for axis, name in ctypes.items() if _STANDARD_FORM.match(name)]
        named = [axis for axis, name in ctypes.items() if name.removesuffix("-LOG") in _NAMED]
        linear = [axis for axis, name in ctypes.items() if name == "LINEAR"]
        with_unit = [axis for axis in linear if _is_spectral_unit(header.get(f"CUNIT{axis}{alt}"))]
        pointed = [axis for axis in linear if header.get("DISPAXIS") == axis]
        for found in (standard, named, with_unit, pointed, linear if len(ctypes) == 1 else []):
            if len(found) > 1:
                raise InputError(
                    "more than one spectral axis", f"CTYPE on axes {found}", "name it with spectral_axis"
                )
            if found:
                return found[0], alt
    return None


def spectral_axis(
    header: Header,
    naxis: Sequence[int],
    *,
    axis: int | None = None,
    unit: str | None = None,
    table: Callable[[str, int, str], tuple[Floats, str]] | None = None,
) -> SpectralAxis:
    """Wavelengths along the spectral axis of an image.

    Parameters
    ----------
    header : mapping
        FITS cards of the image.
    naxis : sequence of int
        NAXIS1, NAXIS2, ... (FITS order).
    axis : int, optional
        FITS axis number that overrides the search by CTYPE.
    unit : str, optional
        Unit that overrides CUNIT.
    table : callable, optional
        (extension name, version, column) -> (values, unit), for -TAB axes.

    Raises
    ------
    InputError
        No spectral axis, unknown or missing unit, wavelengths that vary over the field, not monotonic, or
        outside 0.01-1000 um.
    """
    world, alt = _chosen_axis(header, naxis, axis)
    ctype = str(header.get(f"CTYPE{world}{alt}") or "").strip().upper()
    row = pixel_matrix_row(header, world, len(naxis), alt)
    pixel_axis = _pixel_axis(row, naxis, axis)
    n = naxis[pixel_axis - 1]
    crpix = number(header, f"CRPIX{pixel_axis}{alt}", 0.0)
    intermediate = row[pixel_axis - 1] * (np.arange(1, n + 1) - crpix)

    code, algorithm, medium, axis_unit = _type_and_unit(header, world, alt, ctype, unit)
    crval = number(header, f"CRVAL{world}{alt}", 0.0)
    if algorithm == "TAB":
        values = _from_table(header, world, alt, crval + intermediate, axis_unit, table) * axis_unit.to_si
    elif algorithm in ("", "LOG", "LOG10"):
        values = _linear_or_log(crval, intermediate, algorithm) * axis_unit.to_si
    else:
        values = _by_wcslib(
            header, world, alt, f"{code}-{algorithm}", axis_unit, crpix, row[pixel_axis - 1], n
        )
    wavelength = _wavelength_m(code, values, header, alt) * 1e6
    _check(wavelength, ctype, axis_unit.text)
    return SpectralAxis(wavelength, pixel_axis, medium, ctype, axis_unit.text)


def _chosen_axis(header: Header, naxis: Sequence[int], axis: int | None) -> tuple[int, str]:
    if axis is not None:
        if not 1 <= axis <= len(naxis):
            raise InputError(
                "spectral_axis is no axis of the image", f"{axis} of {len(naxis)}", "count from 1"
            )
        return axis, ""
    found = find_world_axis(header)
    if found is None:
        names = ", ".join(_ctypes(header, "").values()) or "no CTYPE at all"
        raise InputError(
            "no spectral axis in the image",
            names[:80],
            "set spectral_axis and wavelength_unit, or check the file",
        )
    return found


def _pixel_axis(row: Floats, naxis: Sequence[int], axis: int | None) -> int:
    """Pixel axis the wavelength runs along; the others must change it by less than 1/20 of a channel."""
    reach = np.abs(row) * (np.array(naxis) - 1 if max(naxis) > 1 else np.array(naxis))
    pixel_axis = axis if axis is not None else int(np.argmax(reach)) + 1
    step = abs(row[pixel_axis - 1])
    if step == 0:
        raise InputError("the spectral axis has a step of zero", "CD or CDELT 0", "mend the header")
    if np.any(np.delete(reach, pixel_axis - 1) > 0.05 * step):
        raise InputError(
            "the wavelength depends on the position in the field",
            "CD or PC terms that couple the spectral to a spatial axis",
            "rectify the cube first",
        )
    return pixel_axis


def _type_and_unit(
    header: Header, world: int, alt: str, ctype: str, unit: str | None
) -> tuple[str, str, str, SpectralUnit]:
    """(type code, algorithm, medium, unit) of the axis; the unit's kind decides for non-standard names."""
    stated = unit if unit is not None else header.get(f"CUNIT{world}{alt}")
    match = _STANDARD_FORM.match(ctype)
    if match:
        code, algorithm = match[1], match[2] or ""
        kind, medium = STANDARD[code]
        # paper I sect. 2.1.1 and III: SI where CUNIT is absent
        parsed = spectral_unit(str(stated)) if stated else SpectralUnit(_SI_NAME[kind], kind, 1.0)
        if code == "AFRQ":
            text = str(stated or "rad/s").replace("rad", "").strip()
            parsed = spectral_unit("Hz" if text in ("/s", "s-1", "s^-1") else text)
        if parsed.kind != kind:
            raise InputError(
                f"unit does not fit CTYPE {ctype}", repr(parsed.text), f"set wavelength_unit to a {kind} unit"
            )
        return code, algorithm, medium, parsed
    if not stated:
        raise InputError(
            f"the spectral axis {ctype or 'without CTYPE'} has no unit", "no CUNIT", "set wavelength_unit"
        )
    parsed = spectral_unit(str(stated))
    if parsed.kind not in _OF_KIND:
        raise InputError(
            f"unit does not fit a {ctype or 'spectral'} axis", repr(parsed.text), "use um, nm, ..."
        )
    code = _OF_KIND[parsed.kind]
    log10 = header.get("DC-FLAG") in (1, "1")  # IRAF: the linear coordinate is log10(lambda)
    algorithm = "LOG10" if log10 else "LOG" if ctype.endswith("-LOG") else ""
    return code, algorithm, "" if code == "WAVE" else "vacuum", parsed


def _linear_or_log(crval: float, intermediate: Floats, algorithm: str) -> Floats:
    if algorithm == "":
        return crval + intermediate
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        if algorithm == "LOG10":
            return np.asarray(10.0 ** (crval + intermediate))
        return np.asarray(
            crval * np.exp(intermediate / crval) if crval else np.zeros_like(intermediate)
        )  # eq. 5


def _from_table(
    header: Header,
    world: int,
    alt: str,
    psi: Floats,
    unit: SpectralUnit,
    table: Callable[[str, int, str], tuple[Floats, str]] | None,
) -> Floats:
    """Coordinates of a -TAB axis, paper III sect. 6; `psi` is CRVAL plus the intermediate coordinate."""
    extension, column = header.get(f"PS{world}_0{alt}"), header.get(f"PS{world}_1{alt}")
    if table is None or not isinstance(extension, str) or not isinstance(column, str):
        raise InputError("a -TAB axis needs PSi_0 and PSi_1", f"axis {world} without them", "mend the header")
    version = int(number(header, f"PV{world}_1{alt}", 1.0))
    values, _ = table(extension, version, column)
    index_column = header.get(f"PS{world}_2{alt}")
    position = psi
    if isinstance(index_column, str) and index_column.strip():
        index, _ = table(extension, version, index_column)
        if index.shape != values.shape or (np.any(np.diff(index) <= 0) and np.any(np.diff(index) >= 0)):
            raise InputError(
                "the index vector of a -TAB axis must be monotonic", index_column, "mend the table"
            )
        ascending = index if index[-1] >= index[0] else index[::-1]
        found = _interpolate(psi, ascending, np.arange(1.0, index.size + 1))
        position = found if index[-1] >= index[0] else index.size + 1 - found
    if values.size == 1:
        return np.where(np.abs(position - 1.0) <= 0.5, values[0], np.nan)
    inside = (position >= 0.5) & (position <= values.size + 0.5)
    return np.where(inside, _interpolate(position, np.arange(1.0, values.size + 1), values), np.nan)


def _interpolate(x: Floats, xp: Floats, fp: Floats) -> Floats:
    """Linear interpolation, and extrapolation from the outermost intervals; `xp` ascends."""
    k = np.clip(np.searchsorted(xp, x, side="right") - 1, 0, xp.size - 2)
    return np.asarray(fp[k] + (x - xp[k]) * (fp[k + 1] - fp[k]) / (xp[k + 1] - xp[k]))


def _by_wcslib(
    header: Header, world: int, alt: str, ctype: str, unit: SpectralUnit, crpix: float, step: float, n: int
) -> Floats:
    """Coordinates of the non-linear algorithms (X2P, grisms) in SI, through a one-axis header."""
    from astropy import wcs

    w = wcs.WCS(naxis=1)
    w.wcs.ctype = [ctype]
    w.wcs.cunit = [_SI_NAME[STANDARD[ctype[:4]][0]]]
    w.wcs.crval = [number(header, f"CRVAL{world}{alt}", 0.0) * unit.to_si]
    w.wcs.crpix, w.wcs.cdelt = [crpix], [step * unit.to_si]
    w.wcs.restfrq, w.wcs.restwav = _rest(header, alt)
    w.wcs.set_pv(
        [
            (1, m, number(header, f"PV{world}_{m}{alt}", 0.0))
            for m in range(10)
            if f"PV{world}_{m}{alt}" in header
        ]
    )
    try:
        return np.asarray(w.wcs_pix2world(np.arange(1.0, n + 1), 1)[0], dtype=np.float64)
    except (wcs.WcsError, ValueError) as error:
        raise InputError(
            f"the spectral axis {ctype} cannot be computed",
            str(error).strip().splitlines()[-1][:120],
            "check CRVAL, RESTWAV and RESTFRQ in the header",
        ) from error


def _rest(header: Header, alt: str) -> tuple[float, float]:
    """(rest frequency in Hz, rest wavelength in m), zero where absent."""
    frequency = number(header, f"RESTFRQ{alt}", 0.0) or number(header, f"RESTFREQ{alt}", 0.0)
    return frequency, number(header, f"RESTWAV{alt}", 0.0)


def _rest_wavelength(header: Header, alt: str, code: str) -> float:
    frequency, wavelength = _rest(header, alt)
    if wavelength > 0:
        return wavelength
    if frequency > 0:
        return LIGHT_M_S / frequency
    raise InputError(f"a {code} axis needs RESTWAV or RESTFRQ", "neither", "add the card to the header")


def _wavelength_m(code: str, value: Floats, header: Header, alt: str) -> Floats:
    """Wavelength in metre of a spectral coordinate in SI, paper III table 2."""
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        if code in ("WAVE", "AWAV"):
            result = value
        elif code == "FREQ":
            result = LIGHT_M_S / value
        elif code == "AFRQ":
            result = 2 * np.pi * LIGHT_M_S / value
        elif code == "ENER":
            result = PLANCK_J_S * LIGHT_M_S / value
        elif code == "WAVN":
            result = 1.0 / value
        elif code == "VRAD":
            result = _rest_wavelength(header, alt, code) / (1.0 - value / LIGHT_M_S)
        elif code in ("VOPT", "ZOPT"):
            redshift = value / LIGHT_M_S if code == "VOPT" else value
            result = _rest_wavelength(header, alt, code) * (1.0 + redshift)
        else:
            beta = value / LIGHT_M_S if code == "VELO" else value
            result = _rest_wavelength(header, alt, code) * np.sqrt((1.0 + beta) / (1.0 - beta))
    return np.asarray(result, dtype=np.float64)


def _check(wavelength: Floats, ctype: str, unit: str) -> None:
    name = ctype or "spectral axis"
    if not np.all(np.isfinite(wavelength)):
        raise InputError(f"{name}: wavelengths are not finite", unit, "check CRVAL, CDELT and the table")
    low, high = wavelength.min(), wavelength.max()
    if low < _PLAUSIBLE_UM[0] or high > _PLAUSIBLE_UM[1]:
        raise InputError(
            f"{name}: wavelengths outside 0.01-1000 um",
            f"{low:.4g} to {high:.4g} um with unit {unit or 'none'!r}",
            "set wavelength_unit",
        )
    step = np.diff(wavelength)
    if not (np.all(step > 0) or np.all(step < 0)):
        raise InputError(
            f"{name}: wavelengths are repeated or not in order", f"{low:.6g} um", "mend the header"
        )
