"""What the studies share: scenes, run settings, command line, and the JSON record."""

from __future__ import annotations

import argparse
import json
import platform
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from xcorr.config import Settings, parse_settings
from xcorr.simulate import SceneSettings
from xcorr.template import Template

ROOT = Path(__file__).resolve().parents[2]


def run_settings(scene: SceneSettings, *, molecules: list[str], user: list[str], **search: Any) -> Settings:
    """Run file of a scene: position and star known, everything else as a user would leave it."""
    star, offset = scene.star_position_xy, scene.companion_offset_xy
    lines = [
        "[target]",
        f"companion_xy = [{star[0] + offset[0]}, {star[1] + offset[1]}]",
        *(["[[exposure]]", 'file = "scene.fits"'] * scene.n_exposures),
        "[starlight]",
        f"star_t_eff = {scene.temperature_k}",
        "[search]",
        f"molecules = {json.dumps(molecules)}",
        *(f"{key} = {json.dumps(value)}" for key, value in search.items()),
    ]
    for name in user:
        lines += ["[[template]]", f"name = {json.dumps(name)}", f'file = "{name}.fits"']
    return parse_settings("\n".join(lines))


def featureless(template: Template) -> Template:
    """The same grid with a flat spectrum."""
    return Template("featureless", template.wavelength_um, np.ones_like(template.flux), kind="full")


def random_offset(rng: np.random.Generator, separation: float) -> tuple[float, float]:
    """Random position angle and sub-pixel phase at about a separation."""
    angle, radius = rng.uniform(0.0, 2.0 * np.pi), separation + rng.uniform(-0.5, 0.5)
    return float(radius * np.cos(angle)), float(radius * np.sin(angle))


def mean_and_error(values: Any) -> dict[str, float]:
    """Mean, its standard error, and the standard deviation."""
    array = np.asarray(values, float)
    return {
        "mean": float(array.mean()),
        "error": float(array.std(ddof=1) / np.sqrt(array.size)),
        "std": float(array.std(ddof=1)),
        "n": int(array.size),
    }


def commit() -> str:
    """Short hash of the checkout, "unknown" outside one."""
    found = subprocess.run(
        ["git", "rev-parse", "--short", "HEAD"], cwd=ROOT, capture_output=True, text=True, check=False
    )
    return found.stdout.strip() or "unknown"


def main(study: Callable[[int, int, int], dict[str, Any]], description: str, n: int) -> None:
    """Command line ``--n N --seed S --jobs J --json`` of a study."""
    parser = argparse.ArgumentParser(description=description)
    parser.add_argument("--n", type=int, default=n, help="scenes of each cell")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--json", action="store_true", help="print JSON only")
    asked = parser.parse_args()
    begin = time.perf_counter()
    found = study(asked.n, asked.seed, asked.jobs)
    record = {
        "study": description,
        "commit": commit(),
        "seed": asked.seed,
        "n": asked.n,
        "python": platform.python_version(),
        "seconds": round(time.perf_counter() - begin, 1),
        "result": found,
    }
    if not asked.json:
        print(description, file=sys.stderr)
    print(json.dumps(record, indent=1))
