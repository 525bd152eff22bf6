"""Which extensions hold data, errors and quality: by override, by HDUCLASn and pointers, by name."""

from __future__ import annotations

import re
from dataclasses import dataclass

from xcorr.errors import InputError, Note
from xcorr.io.fitsfile import FitsFile, Hdu
from xcorr.io.overrides import Overrides
from xcorr.io.spectral_axis import find_world_axis

SCIENCE_NAMES = {"SCI", "SCIENCE", "DATA", "FLUX", "SIGNAL", "INTENSITY", "CUBE", "SPEC", "SPECTRUM"}
SIGMA_NAMES = {
    *("ERR", "ERROR", "ERRORS", "NOISE", "SIGMA", "RMS", "STD", "STDEV", "STDDEV"),
    *("UNC", "UNCERT", "UNCERTAINTY"),
}
VARIANCE_NAMES = {"VAR", "STAT", "VARIANCE"}
INVERSE_NAMES = {"IVAR", "INVVAR", "WEIGHT_IVAR"}
QUALITY_NAMES = {"DQ", "MASK", "QUALITY", "FLAG", "FLAGS", "QUAL", "BADPIX", "BPM"}
ERROR_NAMES = {
    **dict.fromkeys(SIGMA_NAMES, "sigma"),
    **dict.fromkeys(VARIANCE_NAMES, "variance"),
    **dict.fromkeys(INVERSE_NAMES, "inverse_variance"),
}
# HDUCLAS3 of error planes in the pipeline products that use HDUCLASn (common practice, from memory)
_HDUCLAS3 = {"MSE": "variance", "RMSE": "sigma", "INVMSE": "inverse_variance", "INVRMSE": "inverse_sigma"}
_ERRTYPE = {"ERR": "sigma", "VAR": "variance", "IVAR": "inverse_variance", "IERR": "inverse_sigma"}
_UTYPE = {"STD": "sigma", "VAR": "variance", "IVAR": "inverse_variance"}
_UNCERTAINTY_CLASS = {
    "STDDEVUNCERTAINTY": "sigma",
    "VARIANCEUNCERTAINTY": "variance",
    "INVERSEVARIANCE": "inverse_variance",
}


@dataclass(frozen=True)
class Planes:
    """The chosen extensions; None where there is none."""

    science: Hdu
    error: Hdu | None
    error_kind: str
    quality: Hdu | None
    notes: tuple[Note, ...]


def role_of(hdu: Hdu) -> str:
    """ "science", "error", "quality" or "" by HDUCLAS2, else by the last word of EXTNAME."""
    hduclas2 = str(hdu.cards.get("HDUCLAS2", "")).upper()
    if hduclas2 in ("DATA", "ERROR", "QUALITY"):
        return {"DATA": "science", "ERROR": "error", "QUALITY": "quality"}[hduclas2]
    name = _word(hdu.name)
    if name in SCIENCE_NAMES:
        return "science"
    if name in ERROR_NAMES:
        return "error"
    return "quality" if name in QUALITY_NAMES else ""


def _word(name: str) -> str:
    """The last word of an extension name: "IFU.7.DATA" -> "DATA", "SCI_1" -> "SCI"."""
    words = [word for word in re.split(r"[^A-Z]+", name.upper()) if word]
    return words[-1] if words else ""


def choose_planes(file: FitsFile, overrides: Overrides) -> Planes:
    """Extensions to read as a cube, with the meaning of the error plane."""
    science = _science(file, overrides)
    notes: list[Note] = []
    if overrides.error_extension is not None:
        error: Hdu | None = file.find(overrides.error_extension, "error")
    else:
        error = _companion(file, science, "error", ("ERRDATA", "ERREXT"))
    if overrides.quality_extension is not None:
        quality: Hdu | None = file.find(overrides.quality_extension, "quality")
    else:
        quality = _companion(file, science, "quality", ("QUALDATA", "QUALEXT", "MASKEXT"))
    kind = overrides.error_kind or (_error_kind(error) if error else "")
    if error is not None and not kind:
        raise InputError(
            f"meaning of error extension {error.label} unknown", "no telling name", "set error_kind"
        )
    if error is None:
        twins = [h.label for h in file.hdus if _is_image(h) and h.naxis == science.naxis and not role_of(h)]
        twins = [label for label in twins if label != science.label]
        misfits = [h.label for h in file.hdus if role_of(h) == "error" and _is_image(h)]
        if misfits:
            message = f"error extension {', '.join(misfits)} is of another object or shape: not used"
            notes.append(Note("error-plane-unused", message))
        if twins:
            message = f"extension {', '.join(twins)} has the shape of the cube but no telling name: not used"
            notes.append(Note("unused-plane", message))
    return Planes(science, error, kind, quality, tuple(notes))


def _is_image(hdu: Hdu) -> bool:
    return hdu.kind in ("image", "compressed") and len(hdu.naxis) > 0


def _science(file: FitsFile, overrides: Overrides) -> Hdu:
    if overrides.science_extension is not None:
        hdu = file.find(overrides.science_extension, "science")
        if not _is_image(hdu):
            raise InputError(f"science extension {hdu.label} holds no image", hdu.kind, "name another")
        return hdu
    images = [hdu for hdu in file.hdus if _is_image(hdu)]
    if not images:
        raise InputError("no image in the FITS file", f"{len(file.hdus)} extensions", "check the file")
    cubes = [hdu for hdu in images if len(hdu.naxis) >= 3] or images
    named = [hdu for hdu in cubes if role_of(hdu) == "science"]
    plain = [hdu for hdu in cubes if role_of(hdu) == ""]
    for candidates in (named, [h for h in plain if find_world_axis(h.cards)], plain):
        if len(candidates) > 1 and candidates[0].index != 0:
            names = ", ".join(hdu.label for hdu in candidates[:6])
            raise InputError("several extensions could be the cube", names, "set science_extension")
        if candidates:
            return candidates[0]
    raise InputError(
        "no science extension found", ", ".join(hdu.label for hdu in cubes[:6]), "set science_extension"
    )


def _prefix(hdu: Hdu) -> str:
    """What tells apart the planes of several objects in one file, e.g. "IFU.7." of "IFU.7.DATA"."""
    word = _word(hdu.name)
    stem = hdu.name.rsplit(word, 1) if word else []
    return "".join(stem) + f":{hdu.cards.get('EXTVER', 1)}" if word else f"#{hdu.index}"


def _companion(file: FitsFile, science: Hdu, role: str, pointers: tuple[str, ...]) -> Hdu | None:
    """Error or quality plane of `science`: by pointer card, then by role with the same prefix."""
    for pointer in pointers:
        for cards in (science.cards, file.hdus[0].cards):
            target = str(cards.get(pointer, "")).upper()
            found = [hdu for hdu in file.hdus if target and hdu.name == target and _is_image(hdu)]
            if found:
                return found[0]
    candidates = [h for h in file.hdus if _is_image(h) and role_of(h) == role and h is not science]
    candidates = [h for h in candidates if role == "quality" or h.naxis == science.naxis]
    same = [h for h in candidates if _prefix(h) == _prefix(science)]
    if same:
        return same[0]
    # a name on one plane only ("FLUX" in the primary, "ERROR" behind it) is enough where there is just one
    return candidates[0] if len(candidates) == 1 else None


def _error_kind(hdu: Hdu) -> str:
    for key, table in (("HDUCLAS3", _HDUCLAS3), ("ERRTYPE", _ERRTYPE), ("UTYPE", _UNCERTAINTY_CLASS)):
        value = str(hdu.cards.get(key, "")).upper()
        if value in table:
            return table[value]
    return ERROR_NAMES.get(_word(hdu.name), "")
