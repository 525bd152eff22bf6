"""Time of 401 template columns x 1640 channels from a 70,000-point grid, kernels warm.

Run ``python -m tests.benchmarks.template_columns --json``. The claim: at most 0.5 s on two threads.
"""

import argparse
import json
import platform
import time

import numpy as np

from xcorr.spectral import LsfOperator, log_grid, shifted_columns


def measure(jobs: int, repeats: int = 5) -> dict[str, float | int | str]:
    """Best of some repeats, seconds."""
    grid = log_grid(1.96, 2.48, 70_000 / np.log(2.48 / 1.96))
    rng = np.random.default_rng(1)
    flux, transmission = rng.uniform(0.1, 1.0, (2, grid.size))
    channels, velocity = np.linspace(2.0, 2.44, 1640), np.linspace(-1000.0, 1000.0, 401)
    build, columns = [], []
    for _ in range(repeats + 1):
        start = time.perf_counter()
        operator = LsfOperator.build(grid, channels, 4000.0)
        middle = time.perf_counter()
        shifted_columns(operator, grid, flux, velocity, multiply=transmission, jobs=jobs)
        build.append(middle - start)
        columns.append(time.perf_counter() - middle)
    return {
        "machine": platform.machine(),
        "jobs": jobs,
        "build_s": round(min(build[1:]), 4),
        "columns_s": round(min(columns[1:]), 4),
    }


def main() -> None:
    """Print the figures."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--jobs", type=int, default=2)
    arguments = parser.parse_args()
    result = measure(arguments.jobs)
    print(json.dumps(result) if arguments.json else "  ".join(f"{k} {v}" for k, v in result.items()))


if __name__ == "__main__":
    main()
