"""Seconds from lines to templates, uncached: ``python -m tests.benchmarks.line_by_line [--json]``."""

from __future__ import annotations

import argparse
import json
import os
import platform
import tempfile
import time
from collections.abc import Callable

import numba
import numpy as np

from xcorr.atmosphere import builtin, builtin_template
from xcorr.kernels import voigt
from xcorr.lines import cross_section, load_lines

K_BAND = (1.9, 2.5)
GRID_R = 200_000.0


def _best(action: Callable[[], object], repeats: int = 3) -> float:
    """Shortest of several times, s, after one run that compiles the kernels."""
    action()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        action()
        times.append(time.perf_counter() - start)
    return min(times)


def _template(name: str) -> object:
    """All spectra a K-band template set is made of (H2O + CO + CH4), nothing kept from before."""
    builtin._spectra.cache_clear()
    with tempfile.TemporaryDirectory() as folder:
        os.environ["XCORR_CACHE"] = folder
        return builtin_template(name, wavelength_range_um=K_BAND, t_eff=1200.0, log_g=4.0)


def measure() -> dict[str, float | int | str]:
    """Times of the steps from lines to a K-band template."""
    wavenumber = 1e4 / np.exp(np.arange(np.log(K_BAND[0]), np.log(K_BAND[1]), 1.0 / GRID_R))
    rng = np.random.default_rng(1)
    damping, distance = 10 ** rng.uniform(-3, 1, 1_000_000), rng.uniform(0, 10, 1_000_000)
    before = os.environ.get("XCORR_CACHE")
    try:
        result: dict[str, float | int | str] = {
            "machine": f"{platform.machine()}, {os.cpu_count()} CPUs, Python {platform.python_version()}",
            "threads": numba.get_num_threads(),
            "load_1min": os.getloadavg()[0],
            "voigt_ns": 1e3 * _best(lambda: voigt(damping, distance)),
            "grid_points": wavenumber.size,
        }
        for molecule in ("H2O", "CO"):
            near = load_lines(molecule).select(wavenumber[-1] - 25, wavenumber[0] + 25)
            result[f"{molecule}_lines"] = len(near)
            result[f"{molecule}_cross_section_s"] = _best(
                lambda molecule=molecule: cross_section(molecule, wavenumber, 1000.0, 1.0)
            )
        result["k_band_templates_uncached_s"] = _best(lambda: _template("CO"), 2)
        # processor seconds of all threads: what a busy machine does not inflate
        start = time.process_time()
        _template("CO")
        result["k_band_templates_uncached_cpu_s"] = time.process_time() - start
    finally:
        os.environ.pop("XCORR_CACHE", None)
        if before is not None:
            os.environ["XCORR_CACHE"] = before
    return result


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true")
    found = measure()
    if parser.parse_args().json:
        print(json.dumps(found, indent=1))
    else:
        for key, value in found.items():
            print(f"{key:32} {value:.4g}" if isinstance(value, float) else f"{key:32} {value}")
