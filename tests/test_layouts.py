"""One scene in four file layouts gives one answer."""

from __future__ import annotations

import pytest

from xcorr import run
from xcorr.config import parse_settings
from xcorr.io import write_cube
from xcorr.simulate import SceneFactory, SceneSettings, demo_companion

LAYOUTS = {
    "um-sigma": "",
    "nm-axis1-quality": "quality_good_bits = [0, 3]",
    "awav-variance": "",
    "metre-nan": "",
}


@pytest.fixture(scope="module")
def answers(tmp_path_factory):
    """Result of the same scene from each layout."""
    settings = SceneSettings(
        ideal_snr=20.0,
        nx=20,
        ny=20,
        n_wave=1000,
        wavelength_range_um=(2.05, 2.42),
        bad_fraction_flagged=0.005,
        companion_velocity_km_s=17.0,
        barycentric_velocity_km_s=(-9.0,),
    )
    scene = SceneFactory(settings, demo_companion(settings.wavelength_range_um)).draw(seed=5)
    star, offset = settings.star_position_xy, settings.companion_offset_xy
    folder = tmp_path_factory.mktemp("layouts")
    found = {}
    for layout, extra in LAYOUTS.items():
        path = folder / f"{layout}.fits"
        write_cube(path, scene.cubes[0], layout=layout)
        found[layout] = run(
            parse_settings(
                f"""
                [target]
                companion_xy = [{star[0] + offset[0]}, {star[1] + offset[1]}]
                [[exposure]]
                file = "{path}"
                resolving_power = 4000
                barycentric_velocity_km_s = -9.0
                {extra}
                [starlight]
                star_t_eff = 9000
                [search]
                molecules = ["full"]
                t_eff = 1300
                """
            ),
            maps=False,
        )
    return found, scene.truth


@pytest.mark.parametrize("layout", list(LAYOUTS)[1:])
def test_layouts_agree(answers, layout):
    found, _ = answers
    first, other = found["um-sigma"].molecules[0], found[layout].molecules[0]
    # nothing is resampled: air wavelengths come back to 1e-9, and float32 data to rounding. The layout without
    # errors takes its weights from its own scatter: other weights on the same noise, a third of an error apart
    loose = 0.4 if layout == "metre-nan" else 0.005
    assert other.velocity_km_s == pytest.approx(first.velocity_km_s, abs=loose * first.velocity_err_km_s)
    assert other.amplitude == pytest.approx(first.amplitude, abs=loose * first.amplitude_err)
    assert other.snr == pytest.approx(first.snr, rel=0.05)


def test_truth_is_recovered_from_files(answers):
    found, truth = answers
    row = found["um-sigma"].molecules[0]
    assert abs(row.velocity_km_s - truth["velocity_km_s"]) < 4.0 * row.velocity_err_km_s
    assert abs(row.amplitude - truth["contrast"]) < 4.0 * row.amplitude_err
    assert row.snr == pytest.approx(truth["ideal_snr"], abs=4.0)
    assert row.amplitude_unit == "star"
