"""Seconds for scenes: ``python -m tests.benchmarks.simulate [--json]``."""

from __future__ import annotations

import argparse
import json
import platform
import time

from xcorr.simulate import Correlation, SceneFactory, SceneSettings, demo_companion, ideal_snr

RANGE = (1.97, 2.45)
CORRELATED = Correlation(rho_channel=0.35, slow_fraction=0.3, rho_y=0.29, rho_x=0.12)


def _best(action, repeats: int = 5) -> float:
    """Shortest of several times, s."""
    times = []
    for k in range(repeats):
        start = time.perf_counter()
        action(k)
        times.append(time.perf_counter() - start)
    return min(times)


def measure() -> dict[str, float | str]:
    """Times of one 24 x 24 x 1640 exposure."""
    companion = demo_companion(RANGE)
    start = time.perf_counter()
    factory = SceneFactory(SceneSettings(wavelength_range_um=RANGE, ideal_snr=15.0), companion)
    scene = factory.draw()
    first = time.perf_counter() - start
    correlated = SceneFactory(
        SceneSettings(
            wavelength_range_um=RANGE, ideal_snr=15.0, correlation=CORRELATED, bad_fraction_flagged=0.01
        ),
        companion,
    )
    noisy = correlated.draw()
    return {
        "machine": f"{platform.machine()}, Python {platform.python_version()}",
        "first_draw_s": first,
        "redraw_noise_s": _best(lambda k: factory.draw(seed=k)),
        "redraw_position_s": _best(lambda k: factory.draw(companion_offset_xy=(5.0 + 0.2 * k, -3.0))),
        "redraw_velocity_s": _best(lambda k: factory.draw(companion_velocity_km_s=1.5 * k)),
        "redraw_given_contrast_s": _best(lambda k: factory.draw(seed=k, contrast=2e-3)),
        "ideal_snr_white_s": _best(lambda k: ideal_snr(scene)),
        "redraw_correlated_s": _best(lambda k: correlated.draw(seed=k), 2),
        "ideal_snr_correlated_s": _best(lambda k: ideal_snr(noisy), 2),
    }


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true")
    result = measure()
    if parser.parse_args().json:
        print(json.dumps(result, indent=1))
    else:
        for key, value in result.items():
            print(f"{key:26s} {value if isinstance(value, str) else format(value, '.3f')}")
