"""Air or vacuum: known or asked for, never guessed."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note

# cards that name the medium where CTYPE does not (common practice, no source)
_TEXT_CARDS = ("WAVETYPE", "AIRORVAC", "WAVEMED", "MEDIUM", "VACORAIR")


def stated_medium(header: Mapping[str, Any]) -> str:
    """ "vacuum", "air", or "" where no card says."""
    for key in _TEXT_CARDS:
        word = str(header.get(key, "")).strip().lower()
        if word.startswith("vac"):
            return "vacuum"
        if word.startswith("air"):
            return "air"
    flag = header.get("VACUUM")
    if flag is True or flag == 1:
        return "vacuum"
    return "air" if flag is False else ""


def decide_medium(
    override: str | None, by_axis: str, header: Mapping[str, Any], what: str
) -> tuple[str, list[Note]]:
    """(medium, notes): the override, else what the spectral axis means, else a telling card.

    Raises
    ------
    InputError
        If nothing says.
    """
    known = by_axis or stated_medium(header)
    if override:
        if known and known != override:
            return override, [
                Note("medium-overridden", f"the file says {known}, the run file says {override}")
            ]
        return override, []
    if not known:
        raise InputError(
            f"{what}: medium of the wavelengths unknown", "neither air nor vacuum stated", "set medium"
        )
    return known, []


def to_vacuum(wavelength_um: NDArray[np.float64], medium: str, formula: str | None) -> NDArray[np.float64]:
    """Vacuum wavelengths; NaN passes through."""
    if medium != "air":
        return wavelength_um
    from xcorr.spectral import air_to_vacuum

    return np.asarray(air_to_vacuum(wavelength_um, formula=formula or "ciddor1996"), dtype=np.float64)
