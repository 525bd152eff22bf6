"""The template: a companion spectrum, or what one molecule contributes to it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError, Note

KINDS = ("full", "contribution", "spectrum")


@dataclass(frozen=True)
class Template:
    """A spectrum on a vacuum wavelength grid, at zero velocity.

    Attributes
    ----------
    name : str
        What the run calls it ("CO", "full", or the user's name).
    wavelength_um : float64 array (n,)
        Vacuum, strictly ascending, micrometre. Line-by-line templates have a grid R >= 200,000.
    flux : float64 array (n,)
        F_lambda of the spectrum, or of the contribution full(theta) - full(theta without X); any linear unit.
    reference_flux : float64 array (n,) or None
        The spectrum whose mean over the used channels is set to one; None means `flux` itself.
    kind : str
        "full" (all molecules: its amplitude is the companion-to-star flux ratio), "contribution", or
        "spectrum" (a user's own).
    resolving_power : float or None
        R of the template itself; None for line-by-line grids, where it is unresolved for any use here.
    covered : bool array (n,) or None
        False where the template is undefined (flagged samples); None means everywhere.
    description : str
        One line: parameters and sources.
    sha256 : str
        Digest of the content or of the file.
    notes : tuple of Note
        Caveats that travel with every result made from it.
    """

    name: str
    wavelength_um: NDArray[np.float64]
    flux: NDArray[np.float64]
    reference_flux: NDArray[np.float64] | None = None
    kind: str = "spectrum"
    resolving_power: float | None = None
    covered: NDArray[np.bool_] | None = None
    description: str = ""
    sha256: str = ""
    notes: tuple[Note, ...] = ()

    def __post_init__(self) -> None:
        wavelength = np.ascontiguousarray(self.wavelength_um, dtype=np.float64)
        flux = np.ascontiguousarray(self.flux, dtype=np.float64)
        reference = (
            flux if self.reference_flux is None else np.ascontiguousarray(self.reference_flux, np.float64)
        )
        covered = (
            np.ones(flux.size, bool) if self.covered is None else np.ascontiguousarray(self.covered, bool)
        )
        if wavelength.ndim != 1 or wavelength.size < 16:
            raise InputError(f"template {self.name!r} needs at least 16 samples", f"{wavelength.size}")
        if not (flux.shape == wavelength.shape == reference.shape == covered.shape):
            raise InputError(f"template {self.name!r}: wavelength and flux differ in length", f"{flux.size}")
        if not np.all(np.isfinite(wavelength)) or np.any(np.diff(wavelength) <= 0) or wavelength[0] <= 0:
            raise InputError(
                f"template {self.name!r}: wavelengths must be positive and ascend strictly",
                "repeated, descending or non-finite values",
                "sort the file and drop repeated rows",
            )
        if not np.all(np.isfinite(flux[covered])) or not np.all(np.isfinite(reference[covered])):
            raise InputError(
                f"template {self.name!r}: flux holds non-finite values", "NaN or inf", "drop them"
            )
        if self.kind not in KINDS:
            raise InputError(
                f"template {self.name!r}: unknown kind", self.kind, f"use one of {', '.join(KINDS)}"
            )
        if self.resolving_power is not None and not self.resolving_power > 0:
            raise InputError(
                f"template {self.name!r}: resolving power must be positive", str(self.resolving_power)
            )
        for name, value in (
            ("wavelength_um", wavelength),
            ("flux", flux),
            ("reference_flux", reference),
            ("covered", covered),
        ):
            value.flags.writeable = False
            object.__setattr__(self, name, value)
