"""What is written down about a scene: its truth for `truth.json`, and its celestial axes."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import numpy as np

from xcorr.simulate.rendering import Renderer
from xcorr.simulate.scene import Exposure, information_limit
from xcorr.simulate.settings import SceneSettings

TRUTH_SCHEMA = "xcorr-truth-1"
# Invented pointing and pixel size of the celestial axes.
FIELD_RA_DEC_DEG = (150.0, -20.0)
PIXEL_ARCSEC = 0.05


def truth_of(
    s: SceneSettings, exposures: list[Exposure], contrast: float, render: Renderer
) -> dict[str, Any]:
    per_exposure = [
        information_limit([e.signal_model(s.correlation)]) if contrast else 0.0 for e in exposures
    ]
    middle = s.n_wave // 2
    lags = np.arange(17.0)
    return {
        "schema": TRUTH_SCHEMA,
        "contrast": contrast,
        "amplitude": contrast,
        "ideal_snr": float(np.sqrt(np.sum(np.square(per_exposure)))),
        "ideal_columns": {"knots": 40, "companion_knots": 6, "reference": "true star spectrum"},
        "companion": render.companion_description,
        "velocity_km_s": s.companion_velocity_km_s,
        "star_velocity_km_s": s.star_velocity_km_s,
        "star_temperature_k": None if render.star_is_given else s.temperature_k,
        "exposures": [
            {
                "ideal_snr": snr,
                "star_xy": e.star_xy[middle].tolist(),
                "companion_xy": e.companion_xy[middle].tolist(),
                "barycentric_velocity_km_s": float(s.of_exposure("barycentric_velocity_km_s", i)),
                "companion_fraction_in_field": float(e.companion_psf.sum(axis=(1, 2)).mean()),
                "bad_fraction": float(e.bad.mean()),
            }
            for i, (e, snr) in enumerate(zip(exposures, per_exposure, strict=True))
        ],
        "covariance": {
            "structure": "sqrt(variance) * (K_wave x K_y x K_x) * sqrt(variance)",
            "wave_autocorrelation": s.correlation.along_wave(lags).tolist(),
            "rho_y": s.correlation.rho_y,
            "rho_x": s.correlation.rho_x,
        },
        "settings": asdict(s),
    }


def celestial_header(s: SceneSettings, exposure: int) -> dict[str, Any]:
    """Tangential WCS on the star; east to the left at rotation 0, turned with the field."""
    angle = np.deg2rad(s.of_exposure("rotation_deg", exposure))
    x, y = np.asarray(s.star_position_xy) + s.of_exposure("dither_xy_pixels", exposure)
    step = PIXEL_ARCSEC / 3600.0
    return {
        "CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CUNIT1": "deg", "CUNIT2": "deg",
        "CRVAL1": FIELD_RA_DEC_DEG[0], "CRVAL2": FIELD_RA_DEC_DEG[1],
        "CRPIX1": float(x + 1.0), "CRPIX2": float(y + 1.0),
        "CD1_1": float(-step * np.cos(angle)), "CD1_2": float(-step * np.sin(angle)),
        "CD2_1": float(-step * np.sin(angle)), "CD2_2": float(step * np.cos(angle)),
    }  # fmt: skip
