"""Real spectra and a real cube: verdicts of common knowledge about known kinds of objects.

Sources of the data are in the README beside them (IRTF library, Cushing et al. 2005, Rayner et al. 2009; Theissen et
al. 2022; ESO archive). That L dwarfs show CO and H2O and T dwarfs H2O and CH4 in the K band is common practice
(Kirkpatrick 2005, ARA&A 43, 195); the velocities of the order files are those of the data README.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from xcorr import inject, read_cube, run
from xcorr.atmosphere import builtin_template
from xcorr.config import parse_settings
from xcorr.results import MoleculeResult, RunResult

SHOWN = ("detected", "evidence")


def search_spectrum(
    folder: Path, file: str, resolving_power: float, t_eff: float, orders: str = ""
) -> RunResult:
    """K-band search of an extracted spectrum, knots frozen at 60 as for all bright one-dimensional spectra.

    Field dwarfs are searched within 500 km/s: faster ones would leave the Galaxy (common practice, no source).
    """
    settings = parse_settings(
        f"""
        [[exposure]]
        file = "{folder / "spectra" / file}"
        resolving_power = {resolving_power}
        medium = "vacuum"
        frame = "barycentric"
        telluric_corrected = true
        wavelength_range_um = [1.95, 2.42]
        {orders}
        [starlight]
        reference = "none"
        knots = 60
        [search]
        molecules = ["CO", "H2O", "CH4"]
        velocity_km_s = [-500, 500, 5]
        t_eff = {t_eff}
        log_g = 5.0
        """
    )
    return run(settings)


def by_name(result: RunResult) -> dict[str, MoleculeResult]:
    """Rows of the answer by molecule."""
    return {row.name: row for row in result.molecules}


def agree(*rows: MoleculeResult) -> bool:
    """All velocities within 30 km/s."""
    velocities = [row.velocity_km_s for row in rows]
    return max(velocities) - min(velocities) <= 30.0


@pytest.mark.parametrize(
    ("file", "resolving_power", "orders", "velocity"),
    [
        ("L4_R2699_orders.fits", 2699, "orders = [0]", 105.0),
        ("L5_2MASSJ1507-1627.fits", 2000, "", 0.0),
    ],
)
def test_l_dwarfs_show_co_and_water_but_no_methane(reference_data, file, resolving_power, orders, velocity):
    rows = by_name(search_spectrum(reference_data, file, resolving_power, 1600.0, orders))
    assert rows["CO"].verdict in SHOWN
    assert rows["H2O"].verdict in SHOWN
    assert rows["CH4"].verdict == "not detected"
    assert agree(rows["CO"], rows["H2O"])
    # the README gives about +105 km/s (L4) and zero to +-25 km/s (library spectra); 50 covers both with our errors
    assert abs(rows["CO"].velocity_km_s - velocity) < 50.0
    assert rows["CO"].null is None, "one spectrum has no null positions"


@pytest.mark.parametrize(
    ("file", "resolving_power", "orders", "velocity"),
    [
        ("T5_R2699_orders.fits", 2699, "orders = [0]", -75.0),
        ("T4.5_2MASSJ0559-1404.fits", 2000, "", 0.0),
    ],
)
def test_t_dwarfs_show_water_and_methane(reference_data, file, resolving_power, orders, velocity):
    rows = by_name(search_spectrum(reference_data, file, resolving_power, 1000.0, orders))
    assert rows["H2O"].verdict in SHOWN
    assert rows["CH4"].verdict in SHOWN
    assert rows["CO"].verdict != "detected"
    assert agree(rows["H2O"], rows["CH4"])
    assert abs(rows["H2O"].velocity_km_s - velocity) < 50.0


def test_early_m_dwarf_shows_neither_water_nor_methane(reference_data):
    rows = by_name(search_spectrum(reference_data, "M0V_HD19305.fits", 2000, 1600.0))
    assert rows["H2O"].verdict not in SHOWN
    assert rows["CH4"].verdict not in SHOWN
    # its CO is plain to see (heads at 2.29 um): the search is able to find something here
    assert rows["CO"].verdict in SHOWN


def faint_cube(folder: Path, position: str = ""):
    """Run settings of the real faint cube: water only, no star."""
    return parse_settings(
        f"""
        [target]
        {position}
        [[exposure]]
        file = "{folder / "cubes" / "kmos_yj_faint.fits"}"
        resolving_power = 3500
        [starlight]
        reference = "none"
        [search]
        molecules = ["H2O"]
        """
    )


def test_blind_search_of_a_faint_cube_detects_nothing(reference_data):
    result = run(faint_cube(reference_data))
    assert result.molecules[0].verdict == "not detected"
    assert "blind-search" in {note.code for note in result.warnings}


@pytest.mark.parametrize("position", [(6.3, 7.4), (9.0, 5.0)])
def test_companion_injected_at_twelve_sigma_into_the_faint_cube_is_detected(reference_data, position):
    # S/N 12 of the cube's real noise: its error of the amplitude at this very place, nulls included
    settings = faint_cube(reference_data, f"companion_xy = [{position[0]}, {position[1]}]")
    before = run(settings, maps=False).molecules[0]
    cube = read_cube(reference_data / "cubes" / "kmos_yj_faint.fits", resolving_power=3500.0)
    template = builtin_template("H2O", wavelength_range_um=(1.0, 1.36), t_eff=1200.0, log_g=4.0)
    with_companion = inject(
        cube,
        template,
        position_xy=position,
        velocity_km_s=30.0,
        amplitude=12.0 * before.amplitude_err,
        psf_fwhm_pixels=2.5,
        resolving_power=3500.0,
    )
    found = run(settings, cubes=[with_companion], maps=False).molecules[0]
    assert found.verdict == "detected"
    assert abs(found.velocity_km_s - 30.0) < 4.0 * found.velocity_err_km_s
    # the noise at the place itself moves the amplitude by up to 2.5 of its errors, the PSF's shape by 10 %
    assert np.isclose(found.amplitude, 12.0 * before.amplitude_err, rtol=0.1, atol=2.5 * before.amplitude_err)
