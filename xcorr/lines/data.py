"""The tables that ship with the package: line lists, partition functions, collisions, transmission.

Sources, conversions and measured agreement are in ``templates/README.md``. Every loader reads its file
once; all arrays are read-only.
"""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from functools import cache
from types import MappingProxyType
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError
from xcorr.provenance import data_path, sha256_of_file

LINE_FILES = MappingProxyType({"H2O": "lines_h2o.h5", "CO": "lines_co.h5"})


def _freeze(instance: Any) -> None:
    """Set every array of a dataclass, also inside dicts, read-only."""
    for each in fields(instance):
        value = getattr(instance, each.name)
        inner = value.values() if isinstance(value, (dict, MappingProxyType)) else [value]
        for array in inner:
            if isinstance(array, np.ndarray):
                array.setflags(write=False)


@dataclass(frozen=True, eq=False)
class LineList:
    """Lines of one molecule at the reference temperature, HITRAN conventions, ascending in wavenumber.

    Attributes
    ----------
    molecule : str
        e.g. ``"H2O"``.
    wavenumber_per_cm : ndarray (n_line,)
        Vacuum wavenumber, cm-1.
    strength_296 : ndarray (n_line,)
        Strength at 296 K, cm molecule-1, natural isotopic abundance included.
    lower_energy_per_cm : ndarray (n_line,)
        Lower-state energy above the ground state, cm-1.
    isotopologue : ndarray (n_line,) of int8
        HITRAN local number, 1 the most abundant.
    masses_u, abundances : ndarray (n_isotopologue,)
        Element ``n - 1`` belongs to isotopologue n. Masses in u.
    gamma_air, gamma_self, n_air : ndarray (n_line,) or None
        Half widths at 296 K, cm-1 atm-1, and the temperature exponent of ``gamma_air``; None where unknown,
        as in the shipped lists.
    ortho : ndarray (n_line,) of int8, or None
        1 ortho, 0 para, -1 unknown or no nuclear-spin symmetry.
    complete_to_k : float
        Above this temperature lines from hot levels are missing.
    source, notes, digest : str
        Citation; caveats; SHA-256 of the file.
    """

    molecule: str
    wavenumber_per_cm: NDArray[np.float64]
    strength_296: NDArray[np.float64]
    lower_energy_per_cm: NDArray[np.float64]
    isotopologue: NDArray[np.int8]
    masses_u: NDArray[np.float64]
    abundances: NDArray[np.float64]
    source: str
    notes: str = ""
    digest: str = ""
    complete_to_k: float = np.inf
    reference_temperature_k: float = 296.0
    isotopologue_names: tuple[str, ...] = ()
    gamma_air: NDArray[np.float64] | None = None
    gamma_self: NDArray[np.float64] | None = None
    n_air: NDArray[np.float64] | None = None
    ortho: NDArray[np.int8] | None = None

    def __post_init__(self) -> None:
        n = len(self.wavenumber_per_cm)
        for name in ("strength_296", "lower_energy_per_cm", "isotopologue", "gamma_air", "n_air", "ortho"):
            array = getattr(self, name)
            if array is not None and len(array) != n:
                raise InputError(
                    f"line list {self.molecule}: {name} has another length", f"{len(array)} and {n}"
                )
        if n and np.any(np.diff(self.wavenumber_per_cm) < 0):
            raise InputError(
                f"line list {self.molecule} is not sorted by wavenumber", "a descending step", "sort it"
            )
        if n and not 1 <= self.isotopologue.min() <= self.isotopologue.max() <= len(self.masses_u):
            raise InputError(
                f"line list {self.molecule}: isotopologue without a mass",
                str(self.isotopologue.max()),
                "add it",
            )
        _freeze(self)

    def __len__(self) -> int:
        return len(self.wavenumber_per_cm)

    def select(self, low_per_cm: float, high_per_cm: float, minimum_strength: float = 0.0) -> LineList:
        """The lines within [low, high] cm-1 and at least as strong (at 296 K) as the limit."""
        first, last = np.searchsorted(self.wavenumber_per_cm, [low_per_cm, high_per_cm])
        keep = np.arange(first, last)
        keep = keep[self.strength_296[keep] >= minimum_strength]
        values = {each.name: getattr(self, each.name) for each in fields(self)}
        per_line = ("wavenumber_per_cm", "strength_296", "lower_energy_per_cm", "isotopologue", "gamma_air")
        for name in (*per_line, "gamma_self", "n_air", "ortho"):
            if values[name] is not None:
                values[name] = values[name][keep]
        return LineList(**values)


@dataclass(frozen=True, eq=False)
class PartitionTable:
    """Total internal partition sums of one molecule, nuclear-spin weights included (HITRAN convention).

    Attributes
    ----------
    temperature_k : ndarray (n_t,)
    partition_sum : ndarray (n_isotopologue, n_t)
        NaN above the isotopologue's own limit.
    agreed_to_k : ndarray (n_isotopologue,)
        Temperature to which the sums and the last two releases of TIPS agree to 0.5 %.
    """

    molecule: str
    temperature_k: NDArray[np.float64]
    partition_sum: NDArray[np.float64]
    isotopologue_names: tuple[str, ...]
    agreed_to_k: NDArray[np.float64]
    source: str
    digest: str = ""

    def __post_init__(self) -> None:
        _freeze(self)

    def limit_k(self, isotopologue: int = 1) -> float:
        """Highest tabulated temperature of an isotopologue (HITRAN local number), K."""
        finite = np.isfinite(self.partition_sum[isotopologue - 1])
        return float(self.temperature_k[finite][-1])


@dataclass(frozen=True, eq=False)
class CiaTable:
    """Collision-induced absorption of one pair.

    Attributes
    ----------
    wavenumber_per_cm : ndarray (n_wave,)
    temperature_k : ndarray (n_t,)
        Ascending; the lowest is 1000 K.
    coefficient : ndarray (n_t, n_wave)
        cm-1 amagat-2: times the two densities in amagat (once the square for H2-H2) gives cm-1.
    """

    pair: str
    wavenumber_per_cm: NDArray[np.float64]
    temperature_k: NDArray[np.float64]
    coefficient: NDArray[np.float64]
    source: str
    notes: str = ""
    digest: str = ""

    def __post_init__(self) -> None:
        _freeze(self)

    def coefficient_cm5(self) -> NDArray[np.float64]:
        """Coefficients in cm5 molecule-2 (1 cm-1 amagat-2 = 1.38527e-39 cm5)."""
        return self.coefficient / AMAGAT_PER_CM3**2


AMAGAT_PER_CM3 = 2.686780111e19  # CODATA 2018 Loschmidt constant at 273.15 K, 101325 Pa


@dataclass(frozen=True, eq=False)
class TransmissionTable:
    """The Earth's transmission by absorber at R = 100,000 (exempt from the rule R_grid >= 200,000).

    Attributes
    ----------
    wavelength_um : ndarray (n_wave,)
        Vacuum, ascending.
    optical_depth : mapping of str to ndarray (n_wave,)
        By absorber (H2O includes its continuum), at `airmass` and `water_mm`. Scaling it by a factor is
        Beer's law on averages over a sample: good while the factor stays within about a decade.
    water_continuum : ndarray (n_wave,)
        The smooth part of the optical depth of H2O.
    transmission : mapping of str to ndarray (n_wave,)
        exp(-optical_depth).
    airmass, water_mm : float
        What the table refers to; water at zenith, mm precipitable.
    """

    wavelength_um: NDArray[np.float64]
    optical_depth: MappingProxyType[str, NDArray[np.float64]]
    water_continuum: NDArray[np.float64]
    airmass: float
    water_mm: float
    source: str
    notes: str = ""
    digest: str = ""
    resolving_power: float = 1e5
    transmission: MappingProxyType[str, NDArray[np.float64]] = field(init=False)

    def __post_init__(self) -> None:
        transmission = {name: np.exp(-depth) for name, depth in self.optical_depth.items()}
        object.__setattr__(self, "transmission", MappingProxyType(transmission))
        _freeze(self)


@dataclass(frozen=True, eq=False)
class MethaneTable:
    """Effective cold methane cross section, from the transmission of the Earth's methane.

    Attributes
    ----------
    wavenumber_per_cm : ndarray (n_wave,)
        Vacuum, ascending.
    cross_section_cm2 : ndarray (n_wave,)
        cm2 molecule-1 at R = 100,000.
    saturated : ndarray (n_wave,) of bool
        The value is a lower limit: the line core was too deep to be resolved.
    """

    wavenumber_per_cm: NDArray[np.float64]
    cross_section_cm2: NDArray[np.float64]
    saturated: NDArray[np.bool_]
    temperature_k: float
    column_per_cm2: float
    source: str
    notes: str = ""
    digest: str = ""
    warning: str = field(
        default="cold methane: one temperature (about 260 K); saturated cores are lower limits"
    )

    def __post_init__(self) -> None:
        _freeze(self)


def _open(name: str) -> tuple[h5py.File, str]:
    """A shipped HDF5 file and its digest."""
    path = data_path("templates", name)
    return h5py.File(path, "r"), sha256_of_file(path)


def _text(values: Any) -> tuple[str, ...]:
    return tuple(value.decode() if isinstance(value, bytes) else str(value) for value in values)


@cache
def load_lines(molecule: str) -> LineList:
    """The shipped line list of a molecule.

    Parameters
    ----------
    molecule : str
        ``"H2O"`` or ``"CO"``.

    Raises
    ------
    InputError
        If no list of that molecule ships.
    """
    if molecule not in LINE_FILES:
        known = ", ".join(LINE_FILES)
        raise InputError(f"no line list of {molecule} ships", molecule, f"give your own list, or use {known}")
    file, digest = _open(LINE_FILES[molecule])
    with file:
        read = {name: file[name][()] for name in file}
        head = dict(file.attrs)
    double = ("strength_296", "lower_energy_per_cm", "gamma_air", "gamma_self", "n_air")
    read |= {name: read[name].astype(np.float64) for name in double if name in read}
    return LineList(
        molecule=head["molecule"],
        masses_u=head["masses_u"],
        abundances=head["abundances"],
        source=head["source"],
        notes=head["notes"],
        digest=digest,
        complete_to_k=float(head["complete_to_k"]),
        reference_temperature_k=float(head["reference_temperature_k"]),
        isotopologue_names=_text(head["isotopologues"]),
        **{name: read[name] for name in read if name in LineList.__dataclass_fields__},
    )


@cache
def load_partition(molecule: str) -> PartitionTable:
    """Partition sums of a molecule (H2O, CO, CH4, NH3, CO2).

    Raises
    ------
    InputError
        If the molecule is not tabulated.
    """
    file, digest = _open("partition.h5")
    with file:
        known = [name for name in file if name != "temperature_k"]
        if molecule not in known:
            raise InputError(
                f"no partition function of {molecule} ships", molecule, f"use one of {', '.join(known)}"
            )
        return PartitionTable(
            molecule=molecule,
            temperature_k=file["temperature_k"][()],
            partition_sum=file[molecule][()],
            isotopologue_names=_text(file.attrs[f"isotopologues_{molecule}"]),
            agreed_to_k=file.attrs[f"agreed_to_k_{molecule}"],
            source=file.attrs[f"source_{molecule}"],
            digest=digest,
        )


@cache
def load_cia() -> MappingProxyType[str, CiaTable]:
    """Collision-induced absorption, by pair: ``"H2-H2"`` and ``"H2-He"``, from 1000 K.

    No colder table ships. The 1000 K one stands in, too high by about a factor 3 at 300 K and 4100 cm-1.
    """
    file, digest = _open("cia.h5")
    with file:
        tables = {
            pair: CiaTable(
                pair=pair,
                wavenumber_per_cm=file[f"{pair}/wavenumber_per_cm"][()],
                temperature_k=file[f"{pair}/temperature_k"][()],
                coefficient=file[f"{pair}/coefficient"][()].astype(np.float64),
                source=file.attrs[f"source_{pair}"],
                notes=file.attrs["notes"],
                digest=digest,
            )
            for pair in ("H2-H2", "H2-He")
        }
    return MappingProxyType(tables)


@cache
def load_transmission_table() -> TransmissionTable:
    """The shipped transmission of the Earth's atmosphere, 1.4-2.5 um."""
    file, digest = _open("transmission.h5")
    with file:
        wavelength = file["wavelength_um"][()]
        depth = {name: data[()].astype(np.float64) for name, data in file["optical_depth"].items()}
        continuum = file["water_continuum"][()].astype(np.float64)
        head = dict(file.attrs)
    return TransmissionTable(
        wavelength_um=wavelength,
        optical_depth=MappingProxyType(depth),
        water_continuum=continuum,
        airmass=float(head["airmass"]),
        water_mm=float(head["water_mm"]),
        source=head["source"],
        notes=head["notes"],
        digest=digest,
        resolving_power=float(head["resolving_power"]),
    )


@cache
def load_methane() -> MethaneTable:
    """The shipped effective cold methane cross section, 1.4-2.5 um."""
    file, digest = _open("methane_cold.h5")
    with file:
        head = dict(file.attrs)
        return MethaneTable(
            wavenumber_per_cm=file["wavenumber_per_cm"][()],
            cross_section_cm2=file["cross_section_cm2"][()].astype(np.float64),
            saturated=file["saturated"][()].astype(bool),
            temperature_k=float(head["temperature_k"]),
            column_per_cm2=float(head["column_per_cm2"]),
            source=head["source"],
            notes=head["notes"],
            digest=digest,
        )
