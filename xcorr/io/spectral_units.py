"""Units of spectral axes: their kind and their factor to SI. Nothing is guessed."""

from __future__ import annotations

from dataclasses import dataclass

from xcorr.errors import InputError

_ALIASES = {
    "a": "Angstrom",
    "ang": "Angstrom",
    "aa": "Angstrom",
    "angstrom": "Angstrom",
    "angstroms": "Angstrom",
    "0.1nm": "Angstrom",
    "0.1 nm": "Angstrom",
    "micron": "um",
    "microns": "um",
    "micrometer": "um",
    "micrometers": "um",
    "micrometre": "um",
    "micrometres": "um",
    "\u00b5m": "um",
    "\u03bcm": "um",
    "nanometer": "nm",
    "nanometers": "nm",
    "nanometre": "nm",
    "nanometres": "nm",
    "meter": "m",
    "meters": "m",
    "metre": "m",
    "metres": "m",
    "hertz": "Hz",
    "1/cm": "cm-1",
    "1/m": "m-1",
    "1/um": "um-1",
    "cm^-1": "cm-1",
    "m^-1": "m-1",
    "kayser": "cm-1",
    "ev": "eV",
    "kev": "keV",
    "ghz": "GHz",
    "thz": "THz",
    "khz": "kHz",
    "hz": "Hz",
    "nm": "nm",
    "um": "um",
    "cm": "cm",
    "mm": "mm",
    "m/s": "m/s",
    "km/s": "km/s",
}

_KIND_OF_SI = {
    "length": "m",
    "frequency": "Hz",
    "energy": "J",
    "wavenumber": "1 / m",
    "speed": "m / s",
}


@dataclass(frozen=True)
class SpectralUnit:
    """A unit of a spectral coordinate.

    Attributes
    ----------
    text : str
        As written.
    kind : str
        "length", "frequency", "energy", "wavenumber", "speed" or "none" (dimensionless).
    to_si : float
        Value in SI = value times this.
    """

    text: str
    kind: str
    to_si: float


def spectral_unit(text: str) -> SpectralUnit:
    """Understand a unit string of a spectral axis.

    Parameters
    ----------
    text : str
        e.g. "um", "Angstrom", "GHz", "cm-1", "eV", "km/s", "" (dimensionless).

    Raises
    ------
    InputError
        If the string is no unit of a spectral coordinate.
    """
    from astropy import units as u

    cleaned = " ".join(str(text).split())
    if cleaned == "":
        return SpectralUnit("", "none", 1.0)
    # astropy raises TypeError for a few malformed strings
    try:
        unit = u.Unit(_ALIASES.get(cleaned.lower(), cleaned), parse_strict="raise")
        if isinstance(unit, u.UnitBase):
            for kind, si in _KIND_OF_SI.items():
                si_unit = u.Unit(si)
                if unit.physical_type == si_unit.physical_type:
                    return SpectralUnit(cleaned, kind, float(unit.to(si_unit)))
    except (ValueError, TypeError):
        pass
    raise InputError(
        "unknown spectral unit",
        repr(cleaned[:40]),
        "set wavelength_unit to one of um, nm, Angstrom, m, Hz, GHz, cm-1, eV",
    )
