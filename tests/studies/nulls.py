"""Calibrated S/N of companion-free scenes at fixed position and velocity, and verdicts on them."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy import stats

from tests.studies.common import main, mean_and_error, random_offset, run_settings
from xcorr.parallel import map_tasks
from xcorr.pipeline import run
from xcorr.simulate import Correlation, SceneFactory, SceneSettings

RANGE_UM = (1.97, 2.45)
MOLECULES = ["CO", "H2O", "CH4"]
VELOCITIES = np.arange(-875.0, 876.0, 250.0)  # some 3 resolution elements apart: nearly independent
CELLS = {"white": Correlation(), "correlated": Correlation(rho_channel=0.35, rho_y=0.25, rho_x=0.25)}


@lru_cache(maxsize=2)
def factory(cell: str) -> SceneFactory:
    """Scenes of an A host without a companion."""
    return SceneFactory(SceneSettings(contrast=0.0, wavelength_range_um=RANGE_UM, correlation=CELLS[cell]))


@dataclass(frozen=True)
class Case:
    """One scene to search."""

    cell: str
    seed: int


def measure(case: Case) -> dict[str, Any]:
    """Calibrated S/N at the fixed velocities, global p and verdicts of an empty place."""
    offset = random_offset(np.random.default_rng(case.seed), 6.6)
    scene = factory(case.cell).draw(seed=case.seed)
    at = SceneSettings(contrast=0.0, companion_offset_xy=offset)
    result = run(run_settings(at, molecules=MOLECULES, user=[]), cubes=scene.cubes, jobs=1, maps=False)
    grid = result.arrays["velocity_km_s"]
    solo = [np.interp(VELOCITIES, grid, curve) for curve in result.arrays["snr_curve"]]
    conditional = [np.interp(VELOCITIES, grid, curve) for curve in result.arrays["conditional_curve"]]
    return {
        "solo": np.concatenate(solo).tolist(),
        "conditional": np.concatenate(conditional).tolist(),
        "p_global": [row.p_global for row in result.molecules],
        "verdicts": [row.verdict for row in result.molecules],
    }


def summary(rows: list[dict[str, Any]]) -> dict[str, Any]:
    """Moments with errors, tails, and how often anything was claimed."""
    found: dict[str, Any] = {}
    for kind in ("solo", "conditional"):
        values = np.concatenate([row[kind] for row in rows])
        found[kind] = mean_and_error(values) | {
            "std_error": float(values.std() / np.sqrt(2 * values.size)),
            "above_3": int((values > 3).sum()),
            "expected_above_3": float(stats.norm.sf(3) * values.size),
        }
    p = np.concatenate([row["p_global"] for row in rows])
    found["p_global_below"] = {str(level): float((p <= level).mean()) for level in (0.5, 0.1, 0.01, 1.35e-3)}
    verdicts = [verdict for row in rows for verdict in row["verdicts"]]
    found["verdicts"] = {name: verdicts.count(name) for name in sorted(set(verdicts))}
    return found


def study(n: int, seed: int, jobs: int) -> dict[str, Any]:
    """Both cells."""
    cases = [Case(cell, seed * 100_000 + i) for cell in CELLS for i in range(n)]
    rows = list(map_tasks(measure, cases, jobs=jobs))
    return {
        cell: summary([row for case, row in zip(cases, rows, strict=True) if case.cell == cell])
        for cell in CELLS
    }


if __name__ == "__main__":
    # imported by name, so that worker processes find what they unpickle
    from tests.studies.nulls import study as importable

    main(importable, "Calibrated S/N of empty places", 170)
