"""Peak memory of a whole run from files: ``python -m tests.benchmarks.memory [--json] [--trace]``.

A 128 x 128 x 1640 cube with errors is written to a temporary folder and searched in a fresh process; the
largest private memory (RssAnon) of that process and its children is sampled every 20 ms.
"""

from __future__ import annotations

import argparse
import json
import platform
import subprocess
import sys
import tempfile
import time
from pathlib import Path

N_WAVE, NY, NX = 1640, 128, 128
PLANE_MB = N_WAVE * NY * NX * 4 / 1e6
PLANES = 2
"""float32 planes in the file: data and errors."""
ALLOWANCE_MB = 500.0
"""Interpreter, libraries, templates: added to four times the planes for the target."""

RUN = """
[target]
companion_xy = [{x}, {y}]
[[exposure]]
file = "exposure.fits"
[search]
molecules = ["CO", "H2O"]
velocity_km_s = [-1000, 1000, 5]
[run]
jobs = 2
"""


def write(folder: Path) -> None:
    """The cube, drawn channel by channel (its own memory does not count), and the run file."""
    import numpy as np

    from xcorr.cube import Cube
    from xcorr.io.writing import write_cube

    rng = np.random.default_rng(1)
    wave = np.linspace(1.97, 2.45, N_WAVE)
    star = 1e6 * (1 - 0.3 * (wave - 2.2) + 0.02 * np.sin(90 * wave))
    rows, columns = np.indices((NY, NX))
    radius = np.hypot(columns - 63.3, rows - 62.6)
    image = 0.07 * (1 + (radius / 2.6) ** 2) ** -2.5 + 2e-6
    data = np.empty((N_WAVE, NY, NX), np.float32)
    variance = np.empty_like(data)
    for i in range(N_WAVE):
        variance[i] = star[i] * image + 100.0
        data[i] = star[i] * image + np.sqrt(variance[i]) * rng.standard_normal(image.shape)
    cube = Cube(
        data=data,
        variance=variance,
        mask=np.zeros(data.shape, bool),
        wavelength_um=wave,
        resolving_power=np.full(N_WAVE, 4000.0),
        barycentric_velocity_km_s=10.0,
        unit="electron",
    )
    write_cube(folder / "exposure.fits", cube)
    (folder / "run.toml").write_text(RUN.format(x=80.2, y=55.7))


def private_mb(process) -> float:
    """RssAnon of a process and its children, MB: what mapped files do not share."""
    import psutil

    total = 0.0
    for one in (process, *process.children(recursive=True)):
        try:
            status = Path(f"/proc/{one.pid}/status").read_text()
        except (OSError, psutil.Error):
            continue
        for line in status.splitlines():
            if line.startswith("RssAnon:"):
                total += float(line.split()[1]) * 1024 / 1e6
    return total


def watch(folder: Path, trace: bool) -> dict[str, float]:
    """Run the search in a fresh process and sample its memory."""
    import psutil

    command = [sys.executable, "-m", "xcorr", "run", str(folder / "run.toml"), "--out", str(folder / "out")]
    start = time.perf_counter()
    root = Path(__file__).resolve().parents[2]
    child = subprocess.Popen([*command, "--quiet"], cwd=root, stdout=subprocess.DEVNULL)
    process, peak, samples = psutil.Process(child.pid), 0.0, []
    while child.poll() is None:
        try:
            now = private_mb(process)
        except psutil.Error:
            break
        samples.append((time.perf_counter() - start, now))
        peak = max(peak, now)
        time.sleep(0.02)
    if child.wait():
        raise SystemExit(f"the run failed with {child.returncode}")
    if trace:
        for moment, value in samples[:: max(1, len(samples) // 200)]:
            print(f"{moment:7.2f} s {value:8.0f} MB", file=sys.stderr)
    return {"peak_mb": round(peak), "run_s": round(time.perf_counter() - start, 1)}


def measure(trace: bool = False) -> dict[str, float | str]:
    """Peak of a full run, beside the target and the size of the planes."""
    import psutil

    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        # in a process of its own, so that the cube that is written does not stay here
        subprocess.run(
            [
                sys.executable,
                "-c",
                "import sys; from tests.benchmarks.memory import *; write(Path(sys.argv[1]))",
                name,
            ],
            check=True,
            cwd=Path(__file__).resolve().parents[2],
        )
        watched = watch(folder, trace)
    return {
        "machine": f"{platform.machine()}, {psutil.cpu_count()} cores, Python {platform.python_version()}",
        "cube": f"{NX} x {NY} x {N_WAVE} with errors, CO and H2O, 401 velocities",
        "planes_mb": round(PLANES * PLANE_MB),
        "target_mb": round(4 * PLANES * PLANE_MB + ALLOWANCE_MB),
        **watched,
        "peak_over_planes": round(watched["peak_mb"] / (PLANES * PLANE_MB), 2),
    }


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--trace", action="store_true", help="memory against time on standard error")
    options = parser.parse_args()
    result = measure(options.trace)
    if options.json:
        print(json.dumps(result, indent=1))
    else:
        for key, value in result.items():
            print(f"{key:18s} {value}")
