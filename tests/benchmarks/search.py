"""Speed of the search core: ``python -m tests.benchmarks.search [--json]``.

4096 spaxels x 1640 channels, 5 templates x 401 velocities, 40 splines, 1 % random masks and a gap of 200 channels.
The clock starts with cube and template columns in memory. Three things are timed in one process, with the same
BLAS threads: the starlight fit with num and info of every spaxel; the two bare float32 products (W R) T and W T^2
that any such search must do at least; and the obvious loop, one QR a spaxel and one column after the other,
on a few spaxels and scaled up.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import time

import numba
import numpy as np
from scipy.ndimage import gaussian_filter1d
from threadpoolctl import threadpool_info, threadpool_limits

from xcorr.kernels import reference
from xcorr.search import project_templates, spaxel_maps
from xcorr.starlight import fit_spaxels, mean_weights, nuisance_model

N_SPAXEL, N_WAVE, N_TEMPLATE, N_VELOCITY, KNOTS = 4096, 1640, 5, 401, 40
LOOPED = 2
"""Spaxels of the obvious loop; its time is scaled to all of them."""
REPEATS = 5


def problem():
    """Star, columns, spectra, weights and nuisance model."""
    rng = np.random.default_rng(1)
    wave = np.linspace(1.97, 2.45, N_WAVE)
    star = 1 + 0.3 * np.sin(wave * 40) + 0.06 * rng.standard_normal(N_WAVE)
    lines = gaussian_filter1d(rng.standard_normal((N_TEMPLATE, N_WAVE + 2 * N_VELOCITY)), 2.0, axis=1)
    grid = np.arange(N_WAVE)
    columns = star * np.array(
        [
            [1 + np.interp(grid + 0.25 * v, np.arange(own.size), own) for v in range(N_VELOCITY)]
            for own in lines
        ]
    )
    level = np.exp(rng.normal(0, 0.5, (N_SPAXEL, 1)))
    model = level * star * (1 + 0.2 * np.sin(wave * 15 + rng.uniform(0, 6, (N_SPAXEL, 1))))
    variance = model + 0.3
    data = (100 * model + np.sqrt(variance) * rng.standard_normal(model.shape)).astype(np.float32)
    weights = np.where(rng.random(model.shape) > 0.01, 1.0 / variance, 0.0).astype(np.float32)
    weights[:, 700:900] = 0.0
    nuisance = nuisance_model(wave, np.zeros(N_WAVE, int), star, knots=KNOTS)
    return columns, data, weights, nuisance


def search(data, weights, nuisance, templates):
    """What is timed: starlight, num and info of every spaxel."""
    fit = fit_spaxels(data, weights, nuisance)
    return spaxel_maps(data, weights, nuisance, templates, fit)


def products(data, weights, flat, squares):
    """The floor: two products of the same size, nothing else."""
    return (weights * data) @ flat.T, weights @ squares.T


def best(action, *arguments) -> tuple[float, object]:
    """Shortest of several times, and the last result."""
    times, result = [], None
    for _ in range(REPEATS):
        start = time.perf_counter()
        result = action(*arguments)
        times.append(time.perf_counter() - start)
    return min(times), result


def obvious(data, weights, nuisance, columns) -> tuple[float, np.ndarray, np.ndarray]:
    """Seconds for all spaxels, scaled from `LOOPED` of them, and their num and info."""
    dense, flat = nuisance.dense(), columns.reshape(-1, N_WAVE)
    start = time.perf_counter()
    found = []
    for p in range(LOOPED):
        # one QR a spaxel, as a careful loop would do; then every column is projected and dotted
        w = weights[p].astype(float)
        root = np.sqrt(w)
        q, _ = np.linalg.qr(root[:, None] * dense[:, np.any(dense[w > 0] != 0, axis=0)])
        y = root * data[p]
        y = y - q @ (q.T @ y)
        num, info = np.empty(len(flat)), np.empty(len(flat))
        for i, column in enumerate(flat):
            t = root * column
            t = t - q @ (q.T @ t)
            num[i], info[i] = t @ y, t @ t
        found.append((num, info))
    seconds = (time.perf_counter() - start) * N_SPAXEL / LOOPED
    num, info = (np.array(part) for part in zip(*found, strict=True))
    return seconds, num, info


def measure(blas_threads: int | None = None) -> dict[str, float | str | int]:
    """All times, ratios and errors."""
    threads = blas_threads or os.cpu_count() or 1
    numba.set_num_threads(min(threads, numba.config.NUMBA_NUM_THREADS))
    columns, data, weights, nuisance = problem()
    with threadpool_limits(threads):
        nothing = np.zeros((0, N_WAVE))
        start = time.perf_counter()
        templates = project_templates(columns, nothing, mean_weights(weights), nuisance)
        projection = time.perf_counter() - start
        flat = templates.columns.reshape(-1, N_WAVE)
        search(data[:64], weights[:64], nuisance, templates)  # compiled and warm
        floor, _ = best(products, data, weights, flat, flat * flat)
        whole, (num, info) = best(search, data, weights, nuisance, templates)
        again, _ = best(products, data, weights, flat, flat * flat)
        floor = min(floor, again)
        loop, expected_num, expected_info = obvious(data, weights, nuisance, columns)
    shape = (LOOPED, -1)
    # the loop itself is checked against the project's slow twin
    twin = reference.matched_filter(
        data[0].astype(float), weights[0].astype(float), nuisance.dense(), columns[0, :3]
    )
    assert np.allclose(twin[1], expected_info[0, :3], rtol=1e-9)
    return {
        "machine": f"{platform.machine()}, {os.cpu_count()} cores, Python {platform.python_version()}",
        "libraries": f"numpy {np.__version__}, numba {numba.__version__}, "
        + ", ".join(
            sorted({f"{i['internal_api']} {i['version']}" for i in threadpool_info() if i["version"]})
        ),
        "threads": threads,
        "problem": f"{N_SPAXEL} spaxels x {N_WAVE} channels, {N_TEMPLATE} x {N_VELOCITY} columns, {KNOTS} splines",
        "projection_of_templates_s": round(projection, 3),
        "search_s": round(whole, 3),
        "two_products_s": round(floor, 3),
        "search_over_two_products": round(whole / floor, 2),
        "obvious_loop_s": round(loop, 1),
        "obvious_loop_spaxels_timed": LOOPED,
        "obvious_loop_over_search": round(loop / whole),
        "largest_error_of_info": float(
            f"{np.max(np.abs(info[:LOOPED].reshape(shape) / expected_info - 1)):.1e}"
        ),
        "largest_error_of_num_in_sigma": float(
            f"{np.max(np.abs(num[:LOOPED].reshape(shape) - expected_num) / np.sqrt(expected_info)):.1e}"
        ),
        "load_average": round(os.getloadavg()[0], 2),
    }


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--threads", type=int, help="BLAS and numba threads (default: all cores)")
    options = parser.parse_args()
    result = measure(options.threads)
    if options.json:
        print(json.dumps(result, indent=1))
    else:
        for key, value in result.items():
            print(f"{key:30s} {value}")
