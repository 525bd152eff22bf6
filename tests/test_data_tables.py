"""Partition sums, collisions, transmission and cold methane against outside truth; checksums of all files."""

import contextlib
import io

import numpy as np
import pytest
from scipy.special import voigt_profile

from xcorr.errors import InputError
from xcorr.lines.data import (
    load_cia,
    load_lines,
    load_methane,
    load_partition,
    load_transmission_table,
)
from xcorr.provenance import data_path, sha256_of_file

C2 = 1.438776877
LIGHT_KM_S = 299792.458
# The input of the transmission is 50 times the shipped 2 mm of water (templates/README.md).
SLANT_OVER_SHIPPED_WATER = 100.0 / 2.0


def test_checksums():
    listed = data_path("templates", "checksums.txt").read_text().split("\n")
    entries = [line.split() for line in listed if line]
    assert {name for _, name in entries} == {
        path.name for path in data_path("templates", "checksums.txt").parent.glob("*.h5")
    }
    for digest, name in entries:
        assert sha256_of_file(data_path("templates", name)) == digest, name


def test_shipped_data_are_small():
    sizes = [path.stat().st_size for path in data_path("templates", "checksums.txt").parent.glob("*.h5")]
    assert max(sizes) < 4e6
    assert sum(sizes) < 8e6


def interpolate(molecule: str, temperature: float, isotopologue: int = 1) -> float:
    """Linear in log-log between the 10 K steps: 0.01 %."""
    table = load_partition(molecule)
    column = np.log(table.partition_sum[isotopologue - 1])
    return float(np.exp(np.interp(np.log(temperature), np.log(table.temperature_k), column)))


@pytest.mark.parametrize(
    ("molecule", "temperature", "published", "tolerance"),
    [
        # TIPS-2021 (Gamache et al. 2021).
        ("CO", 296, 107.419824, 5e-4),
        ("CO", 1000, 380.296965, 5e-4),
        ("CO", 2000, 928.313078, 5e-4),
        ("H2O", 296, 174.5813, 5e-4),
        ("H2O", 1000, 1218.06925, 5e-4),
        ("H2O", 2000, 5274.24868, 5e-4),
        ("CH4", 296, 590.48, 5e-4),
        ("CH4", 1000, 8065.02611, 5e-4),
        ("NH3", 296, 1725.22, 5e-4),
    ],
)
def test_partition_sums_published(molecule, temperature, published, tolerance):
    assert interpolate(molecule, temperature) == pytest.approx(published, rel=tolerance)


def test_partition_sum_of_co_from_its_levels():
    """Slow twin of the script: direct sum of the Dunham levels of Huber & Herzberg, v < 30, J < 200."""
    v, j = np.meshgrid(np.arange(30) + 0.5, np.arange(200.0))
    x = j * (j + 1)
    energy = 2169.8135802 * v - 13.2883076 * v**2 + 1.051127e-2 * v**3 + 5.744e-5 * v**4 + 9.831e-7 * v**5
    energy += -3.166e-8 * v**6 + x * (1.9312808724 - 1.75044121e-2 * v + 5.487e-7 * v**2 + 2.541e-8 * v**3)
    energy += x**2 * (-6.121468e-6 + 1.1526e-9 * v - 1.805e-10 * v**2) + x**3 * (5.8272e-12 + 1.7375e-13 * v)
    for temperature in (100.0, 300.0, 1000.0, 2000.0, 3000.0):
        direct = np.sum((2 * j + 1) * np.exp(-C2 * (energy - energy.min()) / temperature))
        assert interpolate("CO", temperature) == pytest.approx(direct, rel=1e-4)


HITRAN_NUMBERS = {"H2O": 1, "CO2": 2, "CO": 5, "CH4": 6, "NH3": 11}


@pytest.mark.parametrize("molecule", sorted(HITRAN_NUMBERS))
def test_partition_sums_against_tips(molecule):
    """TIPS through hitran-api, 0.5 % to each isotopologue's stated limit.

    Its current release, TIPS-2025; what the tables take from TIPS is TIPS-2021. H2(16)O and CO are sums over
    levels of other sources.
    """
    with contextlib.redirect_stdout(io.StringIO()):
        hapi = pytest.importorskip("hapi")
    table = load_partition(molecule)
    for number, limit in enumerate(table.agreed_to_k, start=1):
        for temperature in np.append(np.arange(100.0, limit, 150.0), limit):
            tips = float(hapi.partitionSum(HITRAN_NUMBERS[molecule], number, float(temperature)))
            assert interpolate(molecule, temperature, number) == pytest.approx(tips, rel=0.005), temperature


def test_unknown_partition_function():
    with pytest.raises(InputError, match="no partition function of TiO"):
        load_partition("TiO")


def read_collisions(path, skip: int) -> np.ndarray:
    """Rows (wavenumber, coefficient at 1000 K, 2000 K, ...) of a reference table."""
    return np.array([row.split() for row in path.read_text().splitlines()[skip:] if row.strip()], dtype=float)


@pytest.mark.parametrize(
    ("pair", "name", "skip"), [("H2-H2", "CIA.H2-H2.Yi.dat", 6), ("H2-He", "CIA.H2-He.dat", 6)]
)
def test_collisions_against_published_tables(reference_data, pair, name, skip):
    """Borysow, Jorgensen & Fu 2001; Jorgensen et al. 2000: every row and temperature, to float32."""
    rows = read_collisions(reference_data / "cia" / name, skip)
    table = load_cia()[pair]
    assert list(table.temperature_k) == [1000.0, 2000.0, 3000.0, 4000.0]
    rows = rows[rows[:, 0] <= table.wavenumber_per_cm[-1]]
    assert np.array_equal(rows[:, 0], table.wavenumber_per_cm)
    np.testing.assert_allclose(table.coefficient, rows[:, 1:5].T, rtol=1e-6)


def test_collision_band():
    """The fundamental of H2 near 4155-4700 cm-1 (from memory) is the maximum of 3500-6000 cm-1."""
    table = load_cia()["H2-H2"]
    band = (table.wavenumber_per_cm > 3500) & (table.wavenumber_per_cm < 6000)
    peak = table.wavenumber_per_cm[band][np.argmax(table.coefficient[0][band])]
    assert 4155 <= peak <= 4760


def test_collisions_say_what_is_missing():
    assert "No table below 1000 K" in load_cia()["H2-H2"].notes


def test_collision_units():
    """1 cm-1 amagat-2 = 1.38527e-39 cm5 (from the Loschmidt constant)."""
    table = load_cia()["H2-H2"]
    assert table.coefficient_cm5()[3, 100] / table.coefficient[3, 100] == pytest.approx(1.38527e-39, rel=2e-5)


def strength_at(lines, temperature: float, molecule: str) -> np.ndarray:
    """Strengths of one isotopologue-blind list at another temperature (partition sum of the main one)."""
    nu, energy = lines["nu"], lines["e"]
    factor = interpolate(molecule, 296.0) / interpolate(molecule, temperature)
    factor = factor * np.exp(-C2 * energy * (1 / temperature - 1 / 296.0))
    return lines["s"] * factor * np.expm1(-C2 * nu / temperature) / np.expm1(-C2 * nu / 296.0)


def synthetic_depth(
    nu: np.ndarray, lines: dict, mass: float, temperature: float, pressure: float
) -> np.ndarray:
    """Cross section, cm2, of one layer of air; scipy's Voigt function, 25 cm-1 wings."""
    total = np.zeros_like(nu)
    strength = strength_at(lines, temperature, lines["molecule"])
    sigma = lines["nu"] * 3.581163e-7 * np.sqrt(temperature / mass) / np.sqrt(2 * np.log(2))
    for k in np.flatnonzero(strength > 1e-27):
        first, last = np.searchsorted(nu, lines["nu"][k] + np.array([-25.0, 25.0]))
        profile = voigt_profile(nu[first:last] - lines["nu"][k], sigma[k], lines["gamma"][k] * pressure)
        total[first:last] += strength[k] * profile
    return total


def shipped_lines(molecule: str, low: float, high: float) -> dict:
    part = load_lines(molecule).select(low, high)
    return {
        "molecule": molecule,
        "nu": part.wavenumber_per_cm,
        "s": part.strength_296,
        "e": part.lower_energy_per_cm,
        "gamma": np.full(len(part), 0.06),  # CO in air (HITRAN 2012: 0.05-0.07)
    }


def scatter_and_column(depth, cross_section, low, high) -> tuple[float, float]:
    """Robust scatter in dex where low < depth < high, and the column (cm-2) from the optically thin part."""
    thin = depth < 0.8
    column = depth[thin].sum() / cross_section[thin].sum()
    used = (depth > low) & (depth < high)
    residual = np.log10(depth[used] / (cross_section[used] * column))
    return 1.4826 * float(np.median(np.abs(residual - np.median(residual)))), float(column)


def air_widths(path, energy: np.ndarray) -> np.ndarray:
    """Half widths in air by lower energy: medians of the piece's lines, the shipped list having none."""
    rows = [row for row in path.read_text(encoding="latin-1").splitlines() if row[2] == "1"]
    listed = np.array([(float(row[45:55]), float(row[35:40])) for row in rows])
    listed = listed[np.argsort(listed[:, 0], kind="stable")]
    first, last = (np.searchsorted(listed[:, 0], energy + step) for step in (-0.2, 0.2))
    near = last == first  # a level that the piece does not hold: the nearest 40 lines
    first, last = np.where(near, np.maximum(first - 20, 0), first), np.where(near, last + 20, last)
    return np.array([np.median(listed[a:b, 1]) for a, b in zip(first, last, strict=True)])


def water_against_transmission(reference_data, low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
    """Optical depth of the input's water lines, and our cross section in one layer of humid air (cm2)."""
    table = load_transmission_table()
    nu = 1e4 / table.wavelength_um[::-1]
    window = (nu > low) & (nu < high)
    lines_only = table.optical_depth["H2O"] - table.water_continuum
    depth = lines_only[::-1][window] * SLANT_OVER_SHIPPED_WATER
    lines = shipped_lines("H2O", low - 25, high + 25)
    lines["gamma"] = air_widths(reference_data / "hitran" / "h2o_3400-4100.par", lines["e"])
    return depth, synthetic_depth(nu[window], lines, 18.0106, 286.0, 0.85)


MOLECULES_PER_MM = 3.3428e21  # cm-2 in 1 mm of water


@pytest.mark.parametrize(("low", "high"), [(4500, 4800), (5700, 6400)])
def test_h2o_strengths_against_the_transmission(reference_data, low, high):
    """Villanueva et al. 2018 (independent radiative transfer): 0.08 dex where 0.02 < tau < 2 of the input."""
    depth, model = water_against_transmission(reference_data, low, high)
    scatter, column = scatter_and_column(depth, model, 0.02, 2.0)
    assert scatter <= 0.08
    assert column / MOLECULES_PER_MM == pytest.approx(100.0, rel=0.06)


def test_h2o_strengths_between_the_bands(reference_data):
    """4100-4500 cm-1, where HDO, absent from the list, makes much of the faint absorption:
    0.08 dex where the list alone is deeper than 0.2 (all of 0.02-2: 0.10)."""
    depth, model = water_against_transmission(reference_data, 4100, 4500)
    model = model * 100.0 * MOLECULES_PER_MM
    used = (model > 0.2) & (model < 2.0)
    residual = np.log10(depth[used] / model[used])
    assert used.sum() > 1000
    assert 1.4826 * np.median(np.abs(residual - np.median(residual))) <= 0.08


def test_transmission_is_in_vacuum():
    """CO lines of the shipped list against the dips: within 0.5 km/s (air would be 82 km/s off)."""
    table = load_transmission_table()
    nu = 1e4 / table.wavelength_um[::-1]
    window = (nu > 4180) & (nu < 4320)
    depth = table.optical_depth["CO"][::-1][window]
    lines = shipped_lines("CO", 4170, 4330)
    shifts = np.arange(-6.0, 6.1, 0.5)
    quality = [
        np.corrcoef(depth, synthetic_depth(nu[window] * (1 - v / LIGHT_KM_S), lines, 28.0, 280.0, 0.7))[0, 1]
        for v in shifts
    ]
    peak = int(np.argmax(quality))
    left, centre, right = quality[peak - 1 : peak + 2]
    shift = shifts[peak] + 0.5 * 0.5 * (left - right) / (left - 2 * centre + right)
    assert abs(shift) < 0.5
    assert quality[peak] > 0.97


def test_transmission_columns_agree_with_each_other():
    """CO column at airmass 1 from 2-0 and from 3-0 lines: the same in 3 %, and 0.09-0.15 ppm of the air."""
    table = load_transmission_table()
    nu = 1e4 / table.wavelength_um[::-1]
    columns = []
    for low, high in ((4180, 4320), (6300, 6400)):
        window = (nu > low) & (nu < high)
        depth = table.optical_depth["CO"][::-1][window]
        lines = shipped_lines("CO", low, high)
        area = np.trapezoid(depth, nu[window])
        columns.append(area / strength_at(lines, 275.0, "CO").sum())
    assert columns[1] / columns[0] == pytest.approx(1, abs=0.03)
    assert 0.09e-6 < columns[0] / 2.15e25 < 0.15e-6  # 2.15e25 cm-2: one atmosphere of air


@pytest.mark.parametrize("centre_um", [2.3152, 2.2023, 1.6654, 2.3678])
def test_methane_bands(centre_um):
    """nu3+nu4, nu2+nu3, 2nu3 and nu1+nu4 of CH4 (from memory): a maximum at R = 5000 within 0.003 um."""
    table = load_methane()
    kernel = np.exp(-0.5 * (np.arange(-30, 31) / 8.5) ** 2)
    smooth = np.convolve(table.cross_section_cm2, kernel / kernel.sum(), mode="same")
    wavelength = 1e4 / table.wavenumber_per_cm
    around = np.abs(wavelength - centre_um) < 0.006
    assert abs(wavelength[around][np.argmax(smooth[around])] - centre_um) < 0.003


def read_methane(path) -> dict:
    """Lines of the HITRAN piece, 160-character format."""
    rows = path.read_text(encoding="latin-1").splitlines()
    spans = {"nu": (3, 15), "s": (15, 25), "e": (45, 55), "gamma": (35, 40)}
    return {name: np.array([float(row[a:b]) for row in rows]) for name, (a, b) in spans.items()}


def test_methane_strengths_against_hitran_below_4100(reference_data):
    """Sum of the cross section over 4010-4090 cm-1 against the piece's lines at the table's temperature."""
    lines = read_methane(reference_data / "hitran" / "ch4_3400-4100.par")
    table = load_methane()
    inside = (lines["nu"] > 4010) & (lines["nu"] < 4090)
    listed = strength_at(lines, table.temperature_k, "CH4")[inside].sum()
    wave = (table.wavenumber_per_cm > 4010) & (table.wavenumber_per_cm < 4090)
    ours = np.trapezoid(table.cross_section_cm2[wave], table.wavenumber_per_cm[wave])
    assert ours / listed == pytest.approx(1, abs=0.05)


def test_methane_strengths_against_hitran_in_h(reference_data):
    """2nu3 band, 5800-6250 cm-1, against HITRAN 2020: sum within 5 %, sample by sample within 0.1 dex."""
    fits = pytest.importorskip("astropy.io.fits")
    with fits.open(reference_data / "hitran" / "ch4_5555-10338.fits") as file:
        rows = file[1].data
        names = {"nu": "wave_number", "s": "Intensity", "e": "Epp", "gamma": "gamma_air"}
        lines = {mine: np.array(rows[theirs], dtype=float) for mine, theirs in names.items()}
    lines["molecule"] = "CH4"
    table = load_methane()
    wave = (table.wavenumber_per_cm > 5800) & (table.wavenumber_per_cm < 6250)
    near = (lines["nu"] > 5775) & (lines["nu"] < 6275)
    lines = {name: values[near] if name != "molecule" else values for name, values in lines.items()}
    model = synthetic_depth(table.wavenumber_per_cm[wave], lines, 16.03, table.temperature_k, 0.7)
    ours = table.cross_section_cm2[wave]
    assert ours.sum() / model.sum() == pytest.approx(1, abs=0.05)
    used = (ours > 2e-22) & (ours < 1e-20)
    assert 1.4826 * np.median(np.abs(np.log10(ours[used] / model[used]))) < 0.1


def test_methane_says_what_it_is():
    table = load_methane()
    assert "cold methane" in table.notes
    assert "cold methane" in table.warning
    assert 0 < table.saturated.sum() < 1000
    assert table.cross_section_cm2[table.saturated].min() > np.percentile(table.cross_section_cm2, 99)
