"""The small scene of the quick start: a hot star with a companion that shows CO and H2O but no CH4."""

from __future__ import annotations

from typing import Any

from xcorr.simulate.factory import SceneFactory
from xcorr.simulate.scene import Scene
from xcorr.simulate.settings import SceneSettings
from xcorr.template import Template

DEMO_T_EFF_K = 1300.0
DEMO_LOG_G = 4.0
DEMO_MIXING_RATIOS = {"CO": 5.0e-4, "H2O": 4.0e-4}


def quick_settings(**changes: Any) -> SceneSettings:
    """20 x 20 spaxels, 1200 channels of the K band, A-type host, two exposures turned by 25 degrees.

    Parameters
    ----------
    **changes
        Any setting of `SceneSettings` to replace.
    """
    values: dict[str, Any] = {
        "wavelength_range_um": (2.05, 2.44),
        "n_wave": 1200,
        "nx": 20,
        "ny": 20,
        "n_exposures": 2,
        "ideal_snr": 15.0,
        "companion_offset_xy": (5.2, -3.1),
        "companion_velocity_km_s": 12.0,
        "barycentric_velocity_km_s": (14.0, 13.8),
        "rotation_deg": (0.0, 25.0),
        "dither_xy_pixels": ((0.0, 0.0), (0.4, -0.3)),
        "bad_fraction_flagged": 0.002,
    }
    if changes.get("contrast") is not None:
        values.pop("ideal_snr")
    return SceneSettings(**(values | changes))


def demo_companion(wavelength_range_um: tuple[float, float] = (2.05, 2.44)) -> Template:
    """Full spectrum of a companion of 1300 K with CO and H2O."""
    from xcorr.atmosphere import builtin_template

    return builtin_template(
        "full",
        wavelength_range_um=wavelength_range_um,
        t_eff=DEMO_T_EFF_K,
        log_g=DEMO_LOG_G,
        mixing_ratios=DEMO_MIXING_RATIOS,
    )


def demo_scene(seed: int = 1, **changes: Any) -> Scene:
    """The quick scene at ideal S/N 15; `changes` replace its settings."""
    settings = quick_settings(seed=seed, **changes)
    return SceneFactory(settings, demo_companion(settings.wavelength_range_um)).draw()
