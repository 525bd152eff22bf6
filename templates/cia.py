"""Collision-induced absorption of H2-H2 and H2-He, from 1000 K."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from h5write import write_tables
from sources import provenance, read_member, sha256

HIGHEST_K = 4000.0
RANGE_PER_CM = (20.0, 14000.0)
SOURCES = {
    "H2-H2": ("cia_h2_h2", "Borysow, Jorgensen & Fu 2001, JQSRT 68, 235"),
    "H2-He": ("cia_h2_he", "Jorgensen, Hammer, Borysow & Falkesgaard 2000, A&A 361, 283"),
}


def parse(text: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Wavenumber (n,), temperature (t,), coefficient (t, n): four header lines, the fourth with the
    temperatures, two lines of titles, then rows."""
    lines = [line for line in text.splitlines() if line.strip()]
    rows = np.array([line.split() for line in lines[6:]], dtype=float)
    return rows[:, 0], np.array(lines[3].split(), dtype=float), rows[:, 1:].T


def build(folder: Path, out: Path) -> None:
    """Write cia.h5."""
    attributes = {
        "notes": "cm-1 amagat-2; times 1.38527e-39 gives cm5 molecule-2. No table below 1000 K: there the "
        "1000 K table stands in, too high by about a factor 3 at 300 K and 4100 cm-1",
    }
    tables = {}
    for pair, (name, source) in SOURCES.items():
        data = read_member(name, folder)
        wavenumber, temperature, coefficient = parse(data.decode())
        wave = (wavenumber >= RANGE_PER_CM[0]) & (wavenumber <= RANGE_PER_CM[1])
        used = temperature <= HIGHEST_K
        kept = coefficient[used][:, wave].astype(np.float32)
        tables[f"{pair}/wavenumber_per_cm"] = (wavenumber[wave], "cm-1", "wavenumber")
        tables[f"{pair}/temperature_k"] = (temperature[used], "K", "temperature")
        tables[f"{pair}/coefficient"] = (kept, "cm-1 amagat-2", "absorption (temperature, wavenumber)")
        attributes[f"source_{pair}"] = source
        attributes[f"input_{pair}"] = provenance(name)
        attributes[f"input_sha256_{pair}"] = sha256(data)
        print(f"{pair}: {kept.shape}, {temperature[used]} K, {wavenumber[wave][[0, -1]]} cm-1")
    write_tables(out / "cia.h5", attributes, tables)
