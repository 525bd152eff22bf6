"""Partition functions: TIPS-2021 as tabulated, thinned to one grid."""

from __future__ import annotations

import io
import pickle
from pathlib import Path

import numpy as np
from h5write import write_tables
from scipy.interpolate import CubicSpline
from sources import provenance, read_member, sha256

GRID_K = np.arange(60.0, 3001.0, 10.0)
# Tables of ours <- keys of the source, in the order of HITRAN's local numbers.
SPECIES = {
    "H2O": ("161", "181", "171", "162", "182", "172"),
    "CO": ("26", "36", "28", "27", "38", "37"),
    "CH4": ("211", "311", "212", "312"),
    "NH3": ("4111", "5111"),
    "CO2": ("626", "636", "628", "627", "638", "637"),
}
# Highest temperature at which this release and the next one (TIPS-2025, as in hitran-api 1.3) agree to 0.5 %,
# by isotopologue: above it, hot CH4 and NH3 states are counted differently (CH4 at 2000 K: 7 %).
AGREED_TO_K = {
    "H2O": (3000.0,) * 6,
    "CO": (3000.0,) * 6,
    "CH4": (1500.0, 1500.0, 2500.0, 2500.0),
    "NH3": (1700.0, 800.0),
    "CO2": (3000.0,) * 6,
}


class NumpyOnly(pickle.Unpickler):
    """Unpickler that can build arrays and nothing else."""

    def find_class(self, module: str, name: str) -> object:
        """Allow numpy's array constructors only."""
        if module.split(".")[0] == "numpy" and name in {"_reconstruct", "ndarray", "dtype", "_frombuffer"}:
            return super().find_class(module, name)
        raise pickle.UnpicklingError(f"{module}.{name} is not an array")


def on_grid(temperature: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Cubic in log-log onto GRID_K; NaN above the last tabulated temperature."""
    own = temperature[: len(values)]
    spline = CubicSpline(np.log(own), np.log(values))
    return np.where(own[-1] >= GRID_K, np.exp(spline(np.log(GRID_K))), np.nan)


def build(folder: Path, out: Path) -> None:
    """Write partition.h5."""
    data = read_member("partition", folder)
    source = NumpyOnly(io.BytesIO(data)).load()
    tables = {"temperature_k": (GRID_K, "K", "temperature")}
    names = {}
    for molecule, keys in SPECIES.items():
        sums = np.array([on_grid(source["temp"], source[molecule][key]) for key in keys])
        tables[molecule] = (sums, "", "partition sum (isotopologue, temperature); NaN above the limit")
        names[f"isotopologues_{molecule}"] = list(keys)
        names[f"agreed_to_k_{molecule}"] = np.array(AGREED_TO_K[molecule])
        limits = [GRID_K[np.isfinite(row)][-1] for row in sums]
        print(f"{molecule}: Q(296) {np.interp(296, GRID_K, sums[0]):.3f}, limits {limits} K")
    attributes = names | {
        "source": "TIPS-2021 (Gamache et al. 2021, JQSRT 271, 107713)",
        "input": provenance("partition"),
        "input_sha256": sha256(data),
        "notes": "nuclear-spin weights included (HITRAN convention)",
    }
    write_tables(out / "partition.h5", attributes, tables)
