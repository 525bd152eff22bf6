"""S/N against the information limit, amplitude, velocity, and the answer to a featureless twin."""

from __future__ import annotations

import contextlib
from dataclasses import dataclass
from functools import lru_cache
from typing import Any
from unittest import mock

import numpy as np

from tests.studies.common import featureless, main, mean_and_error, random_offset, run_settings
from xcorr.atmosphere import builtin_template
from xcorr.errors import CoverageError
from xcorr.parallel import map_tasks
from xcorr.pipeline import run
from xcorr.simulate import SceneFactory, SceneSettings
from xcorr.template import Template

RANGE_UM = (1.97, 2.45)
T_EFF, LOG_G = 1400.0, 4.0
LEVELS = (8.0, 15.0, 40.0)
CELLS = ("true", "fallback", "cooler", "hotter", "featureless")


@lru_cache(maxsize=1)
def truth_template() -> Template:
    """The companion of every scene."""
    return builtin_template("full", wavelength_range_um=RANGE_UM, t_eff=T_EFF, log_g=LOG_G)


@lru_cache(maxsize=4)
def factory(flat: bool, snr: float) -> SceneFactory:
    """Scenes of an A host with white noise; a flat companion has the contrast of the true one at `snr`."""
    settings = SceneSettings(
        ideal_snr=snr, wavelength_range_um=RANGE_UM, barycentric_velocity_km_s=(11.0,), star="A"
    )
    if not flat:
        return SceneFactory(settings, truth_template())
    contrast = factory(False, snr).draw(seed=0).truth["contrast"]
    flat_settings = SceneSettings(
        contrast=contrast, wavelength_range_um=RANGE_UM, barycentric_velocity_km_s=(11.0,), star="A"
    )
    return SceneFactory(flat_settings, featureless(truth_template()))


@dataclass(frozen=True)
class Case:
    """One scene to search."""

    cell: str
    snr: float
    seed: int


def no_transmission(*_: Any, **__: Any) -> None:
    """Stands in for the shipped transmission where the declared fallback is studied."""
    raise CoverageError("left out on purpose")


def measure(case: Case) -> dict[str, float]:
    """Draw, search, compare with the truth."""
    rng = np.random.default_rng([case.seed, int(case.snr)])
    velocity = float(rng.uniform(-60.0, 60.0))
    offset = random_offset(rng, 6.6)
    make = factory(case.cell == "featureless", case.snr)
    scene = make.draw(seed=case.seed, companion_velocity_km_s=velocity, companion_offset_xy=offset)
    at = SceneSettings(ideal_snr=case.snr, companion_offset_xy=offset)
    name = "full" if case.cell in ("cooler", "hotter") else "truth"
    shift = {"cooler": -200.0, "hotter": 200.0}.get(case.cell, 0.0)
    settings = run_settings(
        at,
        molecules=["full"] if name == "full" else [],
        user=[] if name == "full" else ["truth"],
        t_eff=T_EFF + shift,
        log_g=LOG_G,
    )
    settings = settings.model_copy(
        update={
            "target": settings.target.model_copy(update={"systemic_velocity_km_s": velocity}),
        }
    )
    patch = (
        mock.patch("xcorr.throughput.load_transmission", no_transmission)
        if case.cell == "fallback"
        else contextlib.nullcontext()
    )
    with patch:
        given = None if name == "full" else [truth_template()]
        result = run(settings, cubes=scene.cubes, templates=given or [], jobs=1, maps=False)
    row = result.molecules[0]
    ideal = scene.truth["ideal_snr"] or np.nan
    raw = np.interp(velocity, result.arrays["velocity_km_s"], result.arrays["snr_raw_curve"][0])
    return {
        "ratio": row.snr / ideal,
        "ratio_at_truth": row.snr_at_systemic / ideal,
        "raw_at_truth": float(raw),
        "snr_at_truth": row.snr_at_systemic,
        "pull": (row.velocity_km_s - velocity) / row.velocity_err_km_s,
        "amplitude": row.amplitude / scene.truth["contrast"] - 1.0,
        "amplitude_pull": (row.amplitude - scene.truth["contrast"]) / row.amplitude_err,
        "detected": float(row.verdict == "detected"),
    }


def study(n: int, seed: int, jobs: int) -> dict[str, Any]:
    """All cells; the featureless twin and the mismatched templates at one level each."""
    cases = [
        Case(cell, snr, seed * 100_000 + i)
        for cell in CELLS
        for snr in (LEVELS if cell == "true" else (40.0,) if cell == "featureless" else (15.0,))
        for i in range(n if cell == "true" else max(n // 4, 50))
    ]
    found: dict[str, Any] = {}
    rows = list(map_tasks(measure, cases, jobs=jobs))
    for cell in CELLS:
        for snr in sorted({case.snr for case in cases if case.cell == cell}):
            own = [row for case, row in zip(cases, rows, strict=True) if (case.cell, case.snr) == (cell, snr)]
            found[f"{cell} {snr:g}"] = {key: mean_and_error([row[key] for row in own]) for key in own[0]}
    return found


if __name__ == "__main__":
    # imported by name, so that worker processes find what they unpickle
    from tests.studies.efficiency import study as importable

    main(importable, "S/N against the information limit", 400)
