"""H2O: positions and strengths of the published table; the level list restores the factor of ortho lines."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import water_levels
from h5write import write_tables
from sources import provenance, read_member, sha256

EV_PER_CM = 8065.544  # cm-1 in 1 eV
C2, REFERENCE_K = 1.438776877, 296.0
STRENGTH_PER_GF = 8.85282e-13  # pi e^2 / (m c^2), cm: times gf / Q and the Boltzmann factors
SUM_296 = 174.5813  # TIPS-2021, with the weight 3 of ortho levels, which the table's gf lack
# The table holds one species (1H1H16O), strengths per molecule of it; ours are per molecule of natural water.
ISOTOPOLOGUE, MASS_U, ABUNDANCE = "H2(16O)", 18.010565, 0.9973173
ORTHO_WEIGHT = 3.0
UNKNOWN_WEIGHT = 2.0  # lines of unknown kind: the mean of 1 and 3


def refractive_index_morton_2000(wavelength_um: np.ndarray) -> np.ndarray:
    """Standard air, vacuum wavelength in um (Morton 2000, ApJS 130, 403; Birch & Downs 1994). This one
    brings the table onto HITRAN: median -0.0001 km/s (Ciddor 1996 0.0016, Edlen 1966 0.0039, 1953 0.0078)."""
    s2 = 1 / wavelength_um**2
    return 1 + 8.34254e-5 + 2.406147e-2 / (130 - s2) + 1.5998e-4 / (38.9 - s2)


def air_to_wavenumber(air_angstrom: np.ndarray) -> np.ndarray:
    """Vacuum wavenumber, cm-1, by fixed-point iteration (converges to 1e-15 in four steps)."""
    air = air_angstrom * 1e-4
    vacuum = air.copy()
    for _ in range(6):
        vacuum = air * refractive_index_morton_2000(vacuum)
    return 1e4 / vacuum


def parse(text: bytes) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Vacuum wavenumber ascending (cm-1), lower energy (cm-1, rounded to 0.001 eV), and gf."""
    rows = [line.split() for line in gzip.decompress(text).decode().splitlines()]
    if {row[1] for row in rows} != {"10108.0"}:
        raise SystemExit("the H2O table holds other species than 1H1H16O")
    table = np.array([[float(row[0]), float(row[2]), float(row[3])] for row in rows])
    wavenumber = air_to_wavenumber(table[:, 0])
    order = np.argsort(wavenumber, kind="stable")
    return wavenumber[order], table[order, 1] * EV_PER_CM, 10 ** table[order, 2]


def strength(wavenumber: np.ndarray, energy: np.ndarray, gf: np.ndarray) -> np.ndarray:
    """Strength at 296 K of natural water, cm molecule-1, as if all lines were para."""
    boltzmann = np.exp(-C2 * energy / REFERENCE_K) * -np.expm1(-C2 * wavenumber / REFERENCE_K)
    return ABUNDANCE * STRENGTH_PER_GF * gf / SUM_296 * boltzmann


def five_digits(values: np.ndarray) -> np.ndarray:
    """Rounded to five significant digits, so that the last bits of exp do not change the file."""
    return np.array([float(f"{value:.4e}") for value in values])


def build(folder: Path, out: Path) -> None:
    """Write lines_h2o.h5."""
    text, level_text = read_member("h2o_lines", folder), read_member("h2o_levels", folder)
    wavenumber, rounded_energy, gf = parse(text)
    found = water_levels.assign(wavenumber, rounded_energy, water_levels.read_levels(level_text))
    energy = np.where(np.isnan(found.lower_energy), rounded_energy, found.lower_energy)
    weight = np.choose(found.ortho + 1, (UNKNOWN_WEIGHT, 1.0, ORTHO_WEIGHT))
    strength_296 = five_digits(strength(wavenumber, energy, gf) * weight)
    strong = strength_296 > 1e-25
    for name, chosen in (("all", strong | True), ("above 1e-25", strong)):
        kinds = [int(np.count_nonzero(found.ortho[chosen] == kind)) for kind in (1, 0, -1)]
        alone = np.count_nonzero(found.support[chosen] < 3)
        print(f"H2O, {name}: {kinds} ortho, para, unknown; {alone} with fewer than 3 lines in the crowd")
    tables = {
        "wavenumber_per_cm": (np.round(wavenumber, 6), "cm-1", "vacuum wavenumber"),
        "strength_296": (
            strength_296.astype(np.float32),
            "cm molecule-1",
            "strength at 296 K, natural abundance included",
        ),
        "lower_energy_per_cm": (np.round(energy, 3).astype(np.float32), "cm-1", "lower-state energy"),
        "isotopologue": (np.ones(len(gf), dtype=np.int8), "", "HITRAN local number"),
        "ortho": (found.ortho, "", "1 ortho, 0 para, -1 unknown"),
    }
    attributes = {
        "molecule": "H2O",
        "reference_temperature_k": REFERENCE_K,
        "isotopologues": [ISOTOPOLOGUE],
        "masses_u": np.array([MASS_U]),
        "abundances": np.array([ABUNDANCE]),
        "source": "HITRAN, edition not named by the table, equal to 2016 (Gordon et al. 2017, JQSRT 203, 3) "
        "or 2020 (Gordon et al. 2022, JQSRT 277, 107949) where tested; ortho or para and lower energies: "
        "levels of Barber et al. 2006 (MNRAS 368, 1087)",
        "input": provenance("h2o_lines"),
        "input_sha256": sha256(text),
        "input_levels": provenance("h2o_levels"),
        "input_sha256_levels": sha256(level_text),
        "medium": "air wavelengths of the input to vacuum wavenumbers by Morton 2000",
        "complete_to_k": 1300.0,
        "notes": "a 296 K list: hot lines incomplete from 1300 K up; H2(16O) only",
    }
    write_tables(out / "lines_h2o.h5", attributes, tables)
