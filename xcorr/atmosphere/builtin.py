"""Built-in templates: the full spectrum, and what one molecule contributes to it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.atmosphere import cache
from xcorr.atmosphere.abundances import MOLECULE_FLOOR, default_mixing_ratios
from xcorr.atmosphere.emission import BUILTIN_MOLECULES, emergent_spectra
from xcorr.atmosphere.structure import grey_structure
from xcorr.errors import CoverageError, InputError, Note, SettingsError
from xcorr.lines import load_cia, load_lines, load_methane, load_partition
from xcorr.provenance import sha256_of_json
from xcorr.template import Template
from xcorr.units import LIGHT_KM_S, to_plain

FULL = "full"
FORMS = ("contribution", "alone")
GRID_RESOLUTION = 250_000.0  # lambda / step; one global grid, lambda = exp(k / GRID_RESOLUTION)
PAD_KM_S = 1500.0  # beyond the range asked for: searched velocities and the wings of the LSF
_FEATURELESS = 1e-5  # a contribution below this fraction of the flux is no template


@dataclass(frozen=True)
class CatalogueEntry:
    """A built-in template: what it is made of and where it holds."""

    name: str
    wavelength_range_um: tuple[float, float]
    source: str
    caveats: tuple[str, ...]


def catalogue() -> tuple[CatalogueEntry, ...]:
    """The built-in templates with their ranges, sources and caveats."""
    entries = []
    for molecule in BUILTIN_MOLECULES:
        low, high = _covered_range(molecule)
        if molecule == "CH4":
            table = load_methane()
            entries.append(CatalogueEntry(molecule, (low, high), table.source, (table.warning,)))
        else:
            lines = load_lines(molecule)
            caveats = (lines.notes,) if lines.notes else ()
            entries.append(CatalogueEntry(molecule, (low, high), lines.source, caveats))
    water = entries[0]
    collisions = "; ".join(table.source for table in load_cia().values())
    grey = "grey temperature profile and grains; no atoms, metal hydrides, NH3 or CO2"
    full = CatalogueEntry(FULL, water.wavelength_range_um, f"the above with {collisions}", (grey,))
    return (*entries, full)


def wavelength_grid(low_um: float, high_um: float) -> NDArray[np.float64]:
    """The part of the global logarithmic grid that covers [low, high] and PAD_KM_S on either side."""
    pad = np.log1p(PAD_KM_S / LIGHT_KM_S)
    first = int(np.floor((np.log(low_um) - pad) * GRID_RESOLUTION))
    last = int(np.ceil((np.log(high_um) + pad) * GRID_RESOLUTION))
    return np.exp(np.arange(first, last + 1) / GRID_RESOLUTION)


def builtin_template(
    name: str,
    *,
    wavelength_range_um: Any,
    t_eff: Any,
    log_g: float,
    mixing_ratios: Mapping[str, float] | None = None,
    form: str = "contribution",
    n_layers: int = 60,
) -> Template:
    """The full spectrum, or the contribution full(theta) - full(theta without X) of one molecule.

    Parameters
    ----------
    name : str
        ``"full"``, ``"H2O"``, ``"CO"`` or ``"CH4"``.
    wavelength_range_um : (low, high) or Quantity
        Vacuum, um, of the channels; 1500 km/s are added on either side.
    t_eff : float or Quantity
        Effective temperature, K.
    log_g : float
        log10 gravity, cm s-2.
    mixing_ratios : mapping, optional
        Molecule -> mole fraction, constant with depth. Default: `default_mixing_ratios`, where a molecule
        that equilibrium all but removes is raised to MOLECULE_FLOOR in its *own* template (and in the full
        spectrum that template is measured against), so that it can be looked for; `full` has no floor.
    form : str
        ``"contribution"``, or ``"alone"``: the spectrum of this molecule and H2-He only.
    n_layers : int
        Layers of the grey structure.

    Returns
    -------
    Template
        ``reference_flux`` of a contribution is the full spectrum it is part of. Caveats are in ``notes``.

    Raises
    ------
    SettingsError
        For an unknown name or form, or a molecule whose given mixing ratio is zero.
    InputError
        For parameters out of range.
    CoverageError
        If the molecule has no data, or no features, in the range.
    """
    low, high = _check(name, wavelength_range_um, form)
    t_eff = float(to_plain(t_eff, "K"))
    chosen = None if mixing_ratios is None else {key: float(each) for key, each in mixing_ratios.items()}
    ratios = default_mixing_ratios(t_eff, log_g) if chosen is None else chosen
    if name != FULL and chosen is not None and not ratios.get(name, 0.0) > 0.0:
        raise SettingsError(
            f"a template of {name} needs its mixing ratio", f"{chosen}", "give a positive one"
        )
    floor = MOLECULE_FLOOR if chosen is None else 0.0
    parameters = {
        "range": [low, high],
        "t_eff": t_eff,
        "log_g": float(log_g),
        "ratios": dict(sorted(ratios.items())),
        "floor": floor,
        "layers": n_layers,
        "grid": GRID_RESOLUTION,
        "form": form,
    }
    key = sha256_of_json([parameters, cache.code_digest(), _data_digests()])
    grid = wavelength_grid(low, high)
    _covered(name, grid)  # before any work is done
    spectra = _spectra(key, low, high, t_eff, float(log_g), tuple(ratios.items()), floor, n_layers, form)
    flux, reference = _select(name, form, spectra)
    if name != FULL and np.max(np.abs(spectra[f"without {name}"] / reference - 1.0)) < _FEATURELESS:
        raise CoverageError(f"{name} has no features in the range", f"{low:g}-{high:g} um", "leave it out")
    if form == "alone" and name != FULL:
        reference = flux
    used = max(ratios.get(name, 0.0), floor) if name != FULL else None
    return Template(
        name=name,
        wavelength_um=grid,
        flux=flux,
        reference_flux=reference,
        kind=FULL if name == FULL else "contribution" if form == "contribution" else "spectrum",
        covered=_covered(name, grid),
        description=_describe(name, form, t_eff, log_g, ratios, used),
        sha256=sha256_of_json([key, name, form]),
        notes=_notes(name, grid, t_eff, ratios, used),
    )


def _check(name: str, wavelength_range_um: Any, form: str) -> tuple[float, float]:
    if name != FULL and name not in BUILTIN_MOLECULES:
        known = ", ".join((FULL, *BUILTIN_MOLECULES))
        raise SettingsError("no built-in template of that name", name, f"use {known}, or a [[template]] file")
    if form not in FORMS:
        raise SettingsError("unknown form of template", form, f"use one of {', '.join(FORMS)}")
    pair = to_plain(wavelength_range_um, "um")
    if pair.shape != (2,) or not 0 < pair[0] < pair[1]:
        raise InputError("the wavelength range must be (low, high) in um", f"{wavelength_range_um}")
    low, high = _covered_range("H2O")
    if pair[0] < low or pair[1] > high:
        raise CoverageError(
            f"built-in templates cover {low:.2f}-{high:.2f} um", f"{pair[0]:g}-{pair[1]:g} um", "use a file"
        )
    return float(pair[0]), float(pair[1])


def _covered_range(molecule: str) -> tuple[float, float]:
    wavenumber = (
        load_methane().wavenumber_per_cm if molecule == "CH4" else load_lines(molecule).wavenumber_per_cm
    )
    return 1e4 / float(wavenumber[-1]), 1e4 / float(wavenumber[0])


def _covered(name: str, grid: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Where a template is defined: methane ends with its table, lines are taken to be complete."""
    if name != "CH4":
        return np.ones(grid.size, bool)
    low, high = _covered_range("CH4")
    covered = (grid >= low) & (grid <= high)
    if not np.any(covered):
        raise CoverageError(
            f"the built-in CH4 covers {low:.3f}-{high:.3f} um only",
            f"{grid[0]:.3f}-{grid[-1]:.3f} um",
            "leave CH4 out, or give a template file",
        )
    return covered


def _data_digests() -> list[str]:
    tables = [load_lines("H2O"), load_lines("CO"), load_methane(), load_partition("H2O"), load_cia()["H2-H2"]]
    return [table.digest for table in tables]


@lru_cache(maxsize=4)
def _spectra(
    key: str,
    low: float,
    high: float,
    t_eff: float,
    log_g: float,
    ratios: tuple[tuple[str, float], ...],
    floor: float,
    n_layers: int,
    form: str,
) -> dict[str, NDArray[np.float64]]:
    """All spectra that the templates of one parameter set are made of, from the disk or computed."""
    stored = cache.load(key)
    if stored is not None:
        return stored
    mixtures = _mixtures(dict(ratios), floor, form)
    structure = grey_structure(t_eff, log_g, n_layers=n_layers)
    silent = {f"without {molecule}": molecule for molecule in BUILTIN_MOLECULES}
    spectra = emergent_spectra(wavelength_grid(low, high), structure, mixtures, silent=silent)
    cache.store(key, spectra)
    return spectra


def _mixtures(ratios: dict[str, float], floor: float, form: str) -> dict[str, dict[str, float]]:
    """Label -> mixing ratios of the spectra needed for every template of one form.

    "without X" is the same gas with X transparent: a molecule without lines contributes exactly nothing.
    """
    mixtures = {FULL: ratios}
    for molecule in BUILTIN_MOLECULES:
        used = max(ratios.get(molecule, 0.0), floor)
        if used == 0.0:
            continue
        others = {name: value for name, value in ratios.items() if name != molecule}
        mixtures[f"with {molecule}"] = others | {molecule: used}
        mixtures[f"without {molecule}"] = others | {molecule: used}
        if form == "alone":
            mixtures[f"only {molecule}"] = {molecule: used}
    return mixtures


def _select(
    name: str, form: str, spectra: Mapping[str, NDArray[np.float64]]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Flux of the template and the full spectrum that belongs to it."""
    if name == FULL:
        return spectra[FULL], spectra[FULL]
    reference = spectra[f"with {name}"]
    if form == "alone":
        return spectra[f"only {name}"], reference
    return reference - spectra[f"without {name}"], reference


def _describe(
    name: str, form: str, t_eff: float, log_g: float, ratios: Mapping[str, float], used: float | None
) -> str:
    mixture = ", ".join(f"{key} {value:.2e}" for key, value in sorted(ratios.items()))
    what = "full spectrum" if name == FULL else f"{form} of {name} at {used:.2e}"
    return f"{what}; grey, T_eff {t_eff:g} K, log g {log_g:g}, mixing ratios {mixture}"


def _notes(
    name: str, grid: NDArray[np.float64], t_eff: float, ratios: Mapping[str, float], used: float | None
) -> tuple[Note, ...]:
    notes = []
    low, high = _covered_range("CH4")
    inside = np.mean((grid >= low) & (grid <= high))
    if name in ("CH4", FULL) and inside > 0 and (name == "CH4" or ratios.get("CH4", 0.0) >= MOLECULE_FLOOR):
        notes.append(Note("cold-methane", load_methane().warning))
    if name == FULL and inside < 0.99 and ratios.get("CH4", 0.0) >= MOLECULE_FLOOR:
        text = f"methane is left out beyond {low:.2f}-{high:.2f} um ({100 * (1 - inside):.0f} % of the range)"
        notes.append(Note("methane-outside-range", text))
    coldest = max(float(table.temperature_k[0]) for table in load_cia().values())
    if t_eff < coldest:
        text = f"H2-H2 and H2-He absorption below {coldest:.0f} K is that of {coldest:.0f} K, too strong"
        notes.append(Note("warm-collisions", text))
    limit = load_lines("H2O").complete_to_k
    if name in ("H2O", FULL) and t_eff >= limit:
        notes.append(Note("hot-lines-incomplete", f"H2O: hot lines incomplete from {limit:.0f} K up"))
    if used is not None and used > ratios.get(name, 0.0):
        text = (
            f"{name} raised from {ratios.get(name, 0.0):.1e} (equilibrium) to {used:.1e} in its own template"
        )
        notes.append(Note("mixing-ratio-floor", text))
    return tuple(notes)
