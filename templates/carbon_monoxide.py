"""CO: positions of the published table, energies of the Dunham sum, strengths of one dipole function.

Bands that HITRAN 2012 lists are then scaled to its band sums (at most 10 %, printed); other hot bands are the
dipole function's own.
"""

from __future__ import annotations

import gzip
import re
from pathlib import Path

import co_theory
import numpy as np
from h5write import write_tables
from sources import provenance, read_member, sha256

SPECIES = {"608.01216": 1, "608.01316": 2, "608.01218": 3, "608.01217": 4}
LABEL = re.compile(r"(\d{2})(\d{2})([PR])(\d{3})")
HIGHEST_DV, HIGHEST_V, HIGHEST_J = 3, 15, 150
LOWEST_PER_CM = 1500.0
CHECK_TEMPERATURES_K = (296.0, 1000.0, 2000.0, 3000.0)
FAINTEST = 1e-7  # of the strongest line with the same change of v, at any of the temperatures above

# Band sums at 296 K, natural abundance included, cm molecule-1, summed by band and isotopologue from the
# HITRAN 2012 list (Rothman et al. 2013, JQSRT 130, 4): {(v', v"): for 12C16O, 13C16O, 12C18O, 12C17O}.
HITRAN_2012 = {
    (1, 0): (9.9685e-18, 1.0705e-19, 1.9039e-20, 3.6246e-21),
    (2, 1): (5.9213e-22, 8.0004e-24, 1.4504e-24, 2.4551e-25),
    (2, 0): (7.5648e-20, 7.9623e-22, 1.3798e-22, 2.8156e-23),
    (3, 1): (7.1852e-24, 9.4773e-26, 1.7149e-26, 2.9384e-27),
    (3, 0): (4.5681e-22, 4.9348e-24, 8.7408e-25, 1.7073e-25),
    (4, 1): (6.3699e-26, 8.1671e-28, 1.4742e-28, 2.5631e-29),
}


def refractive_index_edlen_1966(wavelength_um: np.ndarray) -> np.ndarray:
    """Standard air, vacuum wavelength in um. Of Ciddor 1996, Morton 2000, Edlen 1953 and Edlen 1966 this one
    brings the table onto HITRAN: median offset below 0.0005 km/s (Ciddor: -0.002)."""
    s2 = 1 / wavelength_um**2
    return 1 + 1e-8 * (8342.13 + 2406030 / (130 - s2) + 15997 / (38.9 - s2))


def air_to_wavenumber(air_angstrom: np.ndarray) -> np.ndarray:
    """Vacuum wavenumber, cm-1, by fixed-point iteration (converges to 1e-15 in four steps)."""
    air = air_angstrom * 1e-4
    vacuum = air.copy()
    for _ in range(6):
        vacuum = air * refractive_index_edlen_1966(vacuum)
    return 1e4 / vacuum


def parse(text: bytes) -> dict[str, np.ndarray]:
    """Wavenumber, isotopologue, v', v", branch (-1 P, +1 R) and J" of the table."""
    rows = [line.split() for line in gzip.decompress(text).decode().splitlines()]
    labels = [LABEL.fullmatch(row[-1]) for row in rows]
    return {
        "wavenumber_per_cm": air_to_wavenumber(np.array([float(row[0]) for row in rows])),
        "isotopologue": np.array([SPECIES[row[1]] for row in rows]),
        "v_up": np.array([int(label[1]) for label in labels]),
        "v_low": np.array([int(label[2]) for label in labels]),
        "branch": np.array([1 if label[3] == "R" else -1 for label in labels]),
        "j": np.array([int(label[4]) for label in labels]),
    }


def band_strengths(isotopologue: int, v_up: int, v_low: int) -> tuple[np.ndarray, np.ndarray]:
    """P and R strengths by J", scaled to HITRAN 2012 where it lists the band."""
    p_lines, r_lines = co_theory.strengths(np.array(co_theory.dipole_function()), isotopologue, v_up, v_low)
    if (v_up, v_low) in HITRAN_2012:
        factor = HITRAN_2012[v_up, v_low][isotopologue - 1] / (p_lines.sum() + r_lines.sum())
        print(
            f"CO isotopologue {isotopologue} band {v_up}-{v_low}: HITRAN 2012 / dipole function {factor:.4f}"
        )
        p_lines, r_lines = p_lines * factor, r_lines * factor
    return p_lines, r_lines


def add_strengths(lines: dict[str, np.ndarray]) -> None:
    """Fill in strength and lower energy of every line, in place."""
    lines["strength_296"] = np.zeros(len(lines["j"]))
    isotopologue, v_up, v_low = lines["isotopologue"], lines["v_up"], lines["v_low"]
    for n, up, low in sorted(set(zip(isotopologue.tolist(), v_up.tolist(), v_low.tolist(), strict=True))):
        p_lines, r_lines = band_strengths(n, up, low)
        rows = np.flatnonzero((isotopologue == n) & (v_up == up) & (v_low == low))
        j = lines["j"][rows]
        lines["strength_296"][rows] = np.where(lines["branch"][rows] > 0, r_lines[j], p_lines[j])
    lines["lower_energy_per_cm"] = np.zeros(len(lines["j"]))
    for n in SPECIES.values():
        rows = isotopologue == n
        energy = co_theory.term(n, v_low[rows], lines["j"][rows]) - co_theory.term(n, 0, 0)
        lines["lower_energy_per_cm"][rows] = energy


def matters(lines: dict[str, np.ndarray]) -> np.ndarray:
    """True where a line reaches FAINTEST of the strongest of its dv at some temperature."""
    change = lines["v_up"] - lines["v_low"]
    keep = np.zeros(len(change), dtype=bool)
    for temperature in CHECK_TEMPERATURES_K:
        excess = 1 / co_theory.REFERENCE_K - 1 / temperature
        # Partition sums are common to all lines of an isotopologue and drop out.
        strength = lines["strength_296"] * np.exp(co_theory.C2 * lines["lower_energy_per_cm"] * excess)
        for dv in range(1, HIGHEST_DV + 1):
            keep |= (change == dv) & (strength > FAINTEST * strength[change == dv].max())
    return keep


def five_digits(values: np.ndarray) -> np.ndarray:
    """Rounded to five significant digits, so that the last bits of a solver do not change the file."""
    return np.array([float(f"{value:.4e}") for value in values])


def build(folder: Path, out: Path) -> None:
    """Write lines_co.h5."""
    text = read_member("co_lines", folder)
    lines = parse(text)
    change = lines["v_up"] - lines["v_low"]
    keep = (change <= HIGHEST_DV) & (lines["v_up"] <= HIGHEST_V) & (lines["j"] <= HIGHEST_J)
    keep &= lines["wavenumber_per_cm"] >= LOWEST_PER_CM
    lines = {name: values[keep] for name, values in lines.items()}
    add_strengths(lines)
    lines = {name: values[matters(lines)] for name, values in lines.items()}
    order = np.lexsort((lines["isotopologue"], lines["wavenumber_per_cm"]))
    lines = {name: values[order] for name, values in lines.items()}
    print(f"CO: {len(order)} lines, dipole function {co_theory.dipole_function()}")
    strength = five_digits(lines["strength_296"])
    m = np.where(lines["branch"] > 0, lines["j"] + 1, -lines["j"])
    energy = np.round(lines["lower_energy_per_cm"], 3)
    tables = {
        "wavenumber_per_cm": (np.round(lines["wavenumber_per_cm"], 6), "cm-1", "vacuum wavenumber"),
        "strength_296": (strength, "cm molecule-1", "strength at 296 K, natural abundance included"),
        "lower_energy_per_cm": (energy.astype(np.float32), "cm-1", "lower-state energy"),
        "isotopologue": (lines["isotopologue"].astype(np.int8), "", "HITRAN local number"),
        "v_up": (lines["v_up"].astype(np.int8), "", "upper vibrational quantum number"),
        "v_low": (lines["v_low"].astype(np.int8), "", "lower vibrational quantum number"),
        "m": (m.astype(np.int16), "", 'J"+1 for R lines, -J" for P lines'),
    }
    attributes = {
        "molecule": "CO",
        "reference_temperature_k": co_theory.REFERENCE_K,
        "isotopologues": ["(12C)(16O)", "(13C)(16O)", "(12C)(18O)", "(12C)(17O)"],
        "masses_u": np.array(co_theory.MASSES_U),
        "abundances": np.array(co_theory.ABUNDANCES),
        "source": "positions: linemake (Placco et al. 2021, RNAAS 5, 92); energies: Huber & Herzberg 1979; "
        "strengths: dipole function on the band strengths of HITRAN 2012 (Rothman et al. 2013, JQSRT 130, 4)",
        "input": provenance("co_lines"),
        "input_sha256": sha256(text),
        "medium": "air wavelengths of the input to vacuum wavenumbers by Edlen 1966",
        "dipole_function_debye": np.array([round(value, 6) for value in co_theory.dipole_function()]),
        "complete_to_k": 3000.0,
        "notes": "changes of v of 1, 2 and 3 up to v' = 15; hot bands from v\" = 2 up are not in HITRAN 2012 "
        "and are the dipole function's own",
    }
    write_tables(out / "lines_co.h5", attributes, tables)
