"""Partition functions: H2O and CO summed over their levels, the rest TIPS-2021 as tabulated."""

from __future__ import annotations

import re
from pathlib import Path

import co_theory
import numpy as np
from h5write import write_tables
from scipy.interpolate import CubicSpline
from sources import provenance, read_member, sha256
from water_levels import read_levels

GRID_K = np.arange(60.0, 3001.0, 10.0)
# HITRAN's molecule numbers and how many isotopologues we take.
SPECIES = {"H2O": (1, 6), "CO": (5, 6), "CH4": (6, 4), "NH3": (11, 2), "CO2": (2, 6)}
NAMES = {
    "H2O": ("161", "181", "171", "162", "182", "172"),
    "CO": ("26", "36", "28", "27", "38", "37"),
    "CH4": ("211", "311", "212", "312"),
    "NH3": ("4111", "5111"),
    "CO2": ("626", "636", "628", "627", "638", "637"),
}
# Highest temperature at which TIPS-2021 and TIPS-2025 (both in hitran-api 1.3) agree to 0.5 %, by
# isotopologue: above it, hot CH4 and NH3 states are counted differently (CH4 at 2000 K: 7 %).
AGREED_TO_K = {
    "H2O": (3000.0,) * 6,
    "CO": (3000.0,) * 6,
    "CH4": (1500.0, 1500.0, 2500.0, 2500.0),
    "NH3": (1700.0, 800.0),
    "CO2": (3000.0,) * 6,
}
CO_SPIN_WEIGHT = {1: 1, 2: 2, 3: 1, 4: 6}  # 12C16O, 13C16O, 12C18O, 12C17O
CO_HIGHEST_V, CO_HIGHEST_J = 30, 200
TIPS = "TIPS-2021 (Gamache et al. 2021, JQSRT 271, 107713)"
SOURCES = {
    "H2O": f"main isotopologue: sum over the levels of Barber et al. 2006 (MNRAS 368, 1087); others: {TIPS}",
    "CO": f"12C16O, 13C16O, 12C18O, 12C17O: Dunham sum (Huber & Herzberg 1979), mass-scaled; others: {TIPS}",
}


def sum_of_levels(energy: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Sum of weight * exp(-c2 E / T) at every temperature of the grid."""
    return np.array([np.sum(weight * np.exp(-co_theory.C2 * energy / kelvin)) for kelvin in GRID_K])


def water(text: bytes) -> np.ndarray:
    """H2(16)O from its levels: (2J+1), times 3 for ortho."""
    levels = read_levels(text)
    return sum_of_levels(levels.energy, (2 * levels.j + 1) * np.where(levels.ortho == 1, 3, 1))


def carbon_monoxide(isotopologue: int) -> np.ndarray:
    """CO from the term values of its Dunham coefficients."""
    v, j = np.meshgrid(np.arange(CO_HIGHEST_V), np.arange(CO_HIGHEST_J))
    energy = co_theory.term(isotopologue, v, j) - co_theory.term(isotopologue, 0, 0)
    return CO_SPIN_WEIGHT[isotopologue] * sum_of_levels(energy, 2 * j + 1)


def tips_tables(text: str) -> dict[tuple[int, int], np.ndarray]:
    """TIPS-2021 of SPECIES on our grid by (molecule, isotopologue); numbers are read, no code is run."""
    array = r"float64\(\[([^\]]*)\]\)"
    grids = {int(n): _numbers(body) for n, body in re.findall(r"TIPS_2021_ISOT\[(\d+)\] = " + array, text)}
    block = (
        r"M = (\d+)\s+I = (\d+)\s+TIPS_2021_ISOT_HASH\[\(M,I\)\] = TIPS_2021_ISOT\[(\d+)\]\s+"
        r"TIPS_2021_ISOQ_HASH\[\(M,I\)\] = " + array
    )
    wanted = {number for number, _ in SPECIES.values()}
    return {
        (int(molecule), int(isotopologue)): on_grid(grids[int(grid)], _numbers(body))
        for molecule, isotopologue, grid, body in re.findall(block, text)
        if int(molecule) in wanted
    }


def _numbers(body: str) -> np.ndarray:
    return np.array([float(word) for word in body.replace(",", " ").split()])


def on_grid(temperature: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Cubic in log-log onto GRID_K; NaN above the last tabulated temperature."""
    spline = CubicSpline(np.log(temperature), np.log(values))
    return np.where(temperature[-1] >= GRID_K, np.exp(spline(np.log(GRID_K))), np.nan)


def build(folder: Path, out: Path) -> None:
    """Write partition.h5."""
    tips_bytes, level_bytes = read_member("partition", folder), read_member("h2o_levels", folder)
    tips = tips_tables(tips_bytes.decode())
    summed = {("H2O", 1): water(level_bytes)} | {("CO", n): carbon_monoxide(n) for n in CO_SPIN_WEIGHT}
    tables = {"temperature_k": (GRID_K, "K", "temperature")}
    attributes = {}
    for molecule, (number, count) in SPECIES.items():
        sums = np.array(
            [summed.get((molecule, n), tips[number, n]) for n in range(1, count + 1)], dtype=np.float64
        )
        sums = np.array([[float(f"{value:.7e}") for value in row] for row in sums])
        tables[molecule] = (sums, "", "partition sum (isotopologue, temperature); NaN above the limit")
        attributes[f"isotopologues_{molecule}"] = list(NAMES[molecule])
        attributes[f"agreed_to_k_{molecule}"] = np.array(AGREED_TO_K[molecule])
        attributes[f"source_{molecule}"] = SOURCES.get(molecule, TIPS)
        for n in range(1, count + 1):
            ratio = sums[n - 1] / tips[number, n] - 1
            limit = GRID_K[np.isfinite(sums[n - 1])][-1]
            print(f"{molecule} {n}: to {limit:g} K, largest difference from TIPS {np.nanmax(abs(ratio)):.2e}")
    attributes |= {
        "input_tips": provenance("partition"),
        "input_sha256_tips": sha256(tips_bytes),
        "input_levels": provenance("h2o_levels"),
        "input_sha256_levels": sha256(level_bytes),
        "notes": "nuclear-spin weights included (HITRAN convention)",
    }
    write_tables(out / "partition.h5", attributes, tables)
