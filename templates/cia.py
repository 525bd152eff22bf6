"""Collision-induced absorption of H2-H2 and H2-He."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from h5write import write_tables
from sources import provenance, read_member, sha256

HIGHEST_K = 4000.0
RANGE_PER_CM = (20.0, 14000.0)
SOURCES = {
    "H2-H2": (
        "cia_h2_h2",
        "60-1000 K Borysow 2002, A&A 390, 779; from 1000 K Borysow, Jorgensen & Fu 2001, JQSRT 68, 235",
    ),
    "H2-He": (
        "cia_h2_he",
        "below 1000 K Borysow et al. 1988, ApJ 326, 509; 1989, ApJ 336, 495; Borysow & Frommhold 1989, "
        "ApJ 341, 549; from 1000 K Jorgensen et al. 2000, A&A 361, 283",
    ),
}


def parse(text: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Wavenumber (n,), temperature (t,), coefficient (t, n) of a table in the source's layout."""
    lines = [line for line in text.splitlines() if line.strip() and not line.startswith("#")]
    temperature = np.array(lines[lines.index("@TEMPERATURES") + 1].split(), dtype=float)
    rows = np.array([line.split() for line in lines[lines.index("@DATA") + 1 :]], dtype=float)
    return rows[:, 0], temperature, rows[:, 1:].T


def build(folder: Path, out: Path) -> None:
    """Write cia.h5."""
    tables, attributes = {}, {"notes": "cm-1 amagat-2; times 1.38527e-39 gives cm5 molecule-2"}
    for pair, (name, source) in SOURCES.items():
        data = read_member(name, folder)
        wavenumber, temperature, coefficient = parse(data.decode())
        wave = (wavenumber >= RANGE_PER_CM[0]) & (wavenumber <= RANGE_PER_CM[1])
        warm = temperature <= HIGHEST_K
        kept = coefficient[warm][:, wave].astype(np.float32)
        tables[f"{pair}/wavenumber_per_cm"] = (wavenumber[wave], "cm-1", "wavenumber")
        tables[f"{pair}/temperature_k"] = (temperature[warm], "K", "temperature")
        tables[f"{pair}/coefficient"] = (kept, "cm-1 amagat-2", "absorption (temperature, wavenumber)")
        attributes[f"source_{pair}"] = source
        attributes[f"input_{pair}"] = provenance(name)
        attributes[f"input_sha256_{pair}"] = sha256(data)
        print(f"{pair}: {kept.shape}, {temperature[warm]} K, {wavenumber[wave][[0, -1]]} cm-1")
    write_tables(out / "cia.h5", attributes, tables)
