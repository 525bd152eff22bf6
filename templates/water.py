"""H2O: the HITRAN 2012 list, cut to the range of use; ortho or para from its own statistical weights."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from h5write import write_tables
from sources import provenance, read_member, sha256

RANGE_PER_CM = (1900.0, 13050.0)
MINIMUM_STRENGTH = 1e-30
# HITRAN isotopologue numbers 1-6 (Rothman et al. 2013, JQSRT 130, 4): masses in u, natural abundances.
ISOTOPOLOGUES = ("H2(16O)", "H2(18O)", "H2(17O)", "HD(16O)", "HD(18O)", "HD(17O)")
MASSES_U = (18.010565, 20.014811, 19.014780, 19.016740, 21.020985, 20.020956)
ABUNDANCES = (0.9973173, 0.001999827, 0.000371884, 0.0003106930, 6.230032e-7, 1.158526e-7)
# Weight factor independent of the symmetry: 2I+1 of the oxygen nucleus (HITRAN convention).
OXYGEN_WEIGHT = {1: 1, 2: 1, 3: 6}
ORTHO, PARA, NO_SYMMETRY = 1, 0, -1

FIELDS = {
    "isotopologue": (2, 3),
    "wavenumber_per_cm": (3, 15),
    "strength_296": (15, 25),
    "gamma_air": (35, 40),
    "gamma_self": (40, 45),
    "lower_energy_per_cm": (45, 55),
    "n_air": (55, 59),
    "lower_weight": (153, 160),
}


def parse_par(text: bytes) -> dict[str, np.ndarray]:
    """Columns of a HITRAN 2004 format (160 characters) file; lower J and labels included."""
    lines = text.decode("latin-1").splitlines()
    columns = {
        name: np.array([float(line[first:last]) for line in lines]) for name, (first, last) in FIELDS.items()
    }
    columns["lower_j"] = np.array([int(line[112:115]) for line in lines])
    columns["lower_ka_kc_v3"] = np.array(
        [sum(int(line[a:b]) for a, b in ((115, 118), (118, 121), (95, 97))) for line in lines]
    )
    return columns


def nuclear_spin(columns: dict[str, np.ndarray]) -> np.ndarray:
    """Ortho (1), para (0) or no symmetry (-1) of each line, from the lower state's weight.

    The weight of the list is g" = (2J" + 1) * (nuclear factor); the factor is 3 for ortho and 1 for para
    levels of the symmetric isotopologues. Labels give the same: ortho levels have Ka + Kc + v3 odd.
    """
    isotopologue = columns["isotopologue"].astype(int)
    oxygen = np.array([OXYGEN_WEIGHT.get(n, 0) for n in range(7)])[isotopologue]
    symmetric = oxygen > 0
    factor = columns["lower_weight"] / (2 * columns["lower_j"] + 1) / np.where(symmetric, oxygen, 1)
    spin = np.where(symmetric, np.where(np.isclose(factor, 3), ORTHO, PARA), NO_SYMMETRY)
    wrong = symmetric & ~np.isclose(factor, 3) & ~np.isclose(factor, 1)
    if wrong.any():
        raise SystemExit(f"{wrong.sum()} H2O lines have a weight that is neither ortho nor para")
    by_label = columns["lower_ka_kc_v3"] % 2
    clash = symmetric & (by_label != spin)
    print(f"H2O: weight against label: {clash.sum()} of {symmetric.sum()} lines differ")
    return spin.astype(np.int8)


def build(folder: Path, out: Path) -> None:
    """Write lines_h2o.h5."""
    text = read_member("h2o_lines", folder)
    columns = parse_par(text)
    keep = (columns["wavenumber_per_cm"] >= RANGE_PER_CM[0]) & (
        columns["wavenumber_per_cm"] <= RANGE_PER_CM[1]
    )
    keep &= columns["strength_296"] >= MINIMUM_STRENGTH
    columns = {name: values[keep] for name, values in columns.items()}
    order = np.lexsort((columns["isotopologue"], columns["wavenumber_per_cm"]))
    columns = {name: values[order] for name, values in columns.items()}
    f4 = {name: columns[name].astype(np.float32) for name in columns}
    tables = {
        "wavenumber_per_cm": (columns["wavenumber_per_cm"], "cm-1", "vacuum wavenumber"),
        "strength_296": (
            f4["strength_296"],
            "cm molecule-1",
            "strength at 296 K, natural abundance included",
        ),
        "lower_energy_per_cm": (f4["lower_energy_per_cm"], "cm-1", "lower-state energy"),
        "isotopologue": (columns["isotopologue"].astype(np.int8), "", "HITRAN local number"),
        "gamma_air": (f4["gamma_air"], "cm-1 atm-1", "half width in air at 296 K"),
        "gamma_self": (f4["gamma_self"], "cm-1 atm-1", "half width in pure H2O at 296 K"),
        "n_air": (f4["n_air"], "", "temperature exponent of gamma_air"),
        "ortho": (nuclear_spin(columns), "", "1 ortho, 0 para, -1 no nuclear-spin symmetry (HDO)"),
    }
    attributes = {
        "molecule": "H2O",
        "reference_temperature_k": 296.0,
        "isotopologues": list(ISOTOPOLOGUES),
        "masses_u": np.array(MASSES_U),
        "abundances": np.array(ABUNDANCES),
        "source": "HITRAN 2012 (Rothman et al. 2013, JQSRT 130, 4)",
        "input": provenance("h2o_lines"),
        "input_sha256": sha256(text),
        "medium": "vacuum wavenumbers as listed; no conversion",
        "ortho_from": "statistical weight of the lower state as listed",
        "complete_to_k": 1300.0,
        "notes": "a 296 K list: hot lines incomplete from 1300 K up",
    }
    write_tables(out / "lines_h2o.h5", attributes, tables)
