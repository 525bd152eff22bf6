"""Cross sections against the HITRAN tool, the strength law, and their own integral."""

import contextlib
import io
import json
import warnings

import numpy as np
import pytest
from astropy import units as u

from xcorr.errors import CoverageError, InputError
from xcorr.kernels import reference_lines
from xcorr.kernels.line_by_line import doppler_width
from xcorr.lines import (
    Broadening,
    LineList,
    cross_section,
    default_broadening,
    line_strength,
    load_lines,
    load_methane,
    partition_sum,
)

ATM_BAR = 1.01325


def _one_line(strength=1e-20):
    co = load_lines("CO")
    one = np.array([1.0])
    return LineList(
        "CO",
        4280.0 * one,
        strength * one,
        0.0 * one,
        np.array([1], np.int8),
        co.masses_u,
        co.abundances,
        source="invented",
    )


@pytest.mark.parametrize(("temperature", "ratio"), [(1000, 0.2818511), (1500, 0.1688243), (2000, 0.1103292)])
def test_strength_scaling_of_co_r0(temperature, ratio):
    # 2-0 R(0), E" = 0: computed from the HITRAN strength formula and Q of TIPS-2021 (Gamache et al. 2021)
    lines = load_lines("CO").select(4263.83, 4263.85)
    k = int(np.argmax(lines.strength_296))
    assert lines.lower_energy_per_cm[k] == pytest.approx(0.0, abs=0.01)
    # 1e-5: the rounding of the partition sums quoted
    found = line_strength(lines, float(temperature))[k] / lines.strength_296[k]
    assert found == pytest.approx(ratio, rel=1e-5)


def test_integral_is_the_strength():
    # a line's area is S up to the wing beyond 25 cm-1: 2 gamma / (pi 25)
    nu = np.linspace(4254, 4306, 1_000_001)
    sigma = cross_section(_one_line(), nu, 296.0, 1.0, broadening=Broadening(0.07, 0.5))
    expected = 1e-20 * (1 - 2 * 0.07 / (np.pi * 25))
    assert np.trapezoid(sigma, nu) == pytest.approx(expected, rel=1e-5)


def test_equals_the_slow_twin():
    lines = load_lines("H2O")
    nu = np.linspace(4500, 4504, 300)
    near = lines.select(nu[0] - 25, nu[-1] + 25)
    mass = near.masses_u[near.isotopologue - 1]
    slow = reference_lines.sum_of_lines(
        nu,
        near.wavenumber_per_cm,
        line_strength(near, 900.0),
        doppler_width(near.wavenumber_per_cm, 900.0, mass),
        default_broadening(near).hwhm(900.0, 0.3, len(near)),
        25.0,
    )
    # the kernel's far-wing expansion: 3e-6
    np.testing.assert_allclose(cross_section("H2O", nu, 900.0, 0.3), slow, rtol=4e-6)


def _hapi_table(path, name, rows):
    """A table in the HITRAN tool's own layout, pressure shifts set to zero."""
    import hapi

    (path / f"{name}.data").write_text("".join(row[:59] + "0.000000" + row[67:] + "\n" for row in rows))
    header = dict(hapi.HITRAN_DEFAULT_HEADER)
    header |= {"table_name": name, "number_of_rows": len(rows), "size_in_bytes": -1}
    (path / f"{name}.header").write_text(json.dumps(header))


def _parse(rows, like):
    def column(first, last):
        return np.array([float(row[first:last]) for row in rows])

    isotopologue = np.array([int(row[2]) for row in rows], np.int8)
    return LineList(
        like.molecule,
        column(3, 15),
        column(15, 25),
        column(45, 55),
        isotopologue,
        like.masses_u,
        like.abundances,
        source="reference file",
        gamma_air=column(35, 40),
        n_air=column(55, 59),
    )


@pytest.mark.parametrize(
    ("file", "molecule", "low", "high"),
    [("05_hit12.par", "CO", 4250.0, 4320.0), ("h2o_3400-4100.par", "H2O", 4000.0, 4060.0)],
)
def test_against_the_hitran_tool(reference_data, tmp_path, file, molecule, low, high):
    # HITRAN lists (Rothman et al. 2013; Gordon et al. 2022) through absorptionCoefficient_Voigt of hitran-api
    # (Kochanov et al. 2016, JQSRT 177, 15)
    with warnings.catch_warnings(), contextlib.redirect_stdout(io.StringIO()):
        warnings.simplefilter("ignore")
        hapi = pytest.importorskip("hapi")
    text = (reference_data / "hitran" / file).read_text(errors="replace").splitlines()
    rows = [row for row in text if len(row) >= 160 and low <= float(row[3:15]) <= high]
    rows = sorted((row for row in rows if row[2] in "123456"), key=lambda row: float(row[3:15]))
    lines = _parse(rows, load_lines(molecule))
    broadening = Broadening(lines.gamma_air / ATM_BAR, lines.n_air)
    middle = 0.5 * (low + high)
    nu = np.arange(middle - 3, middle + 3, 0.005)
    with warnings.catch_warnings(), contextlib.redirect_stdout(io.StringIO()):
        warnings.simplefilter("ignore")
        _hapi_table(tmp_path, molecule, rows)
        hapi.db_begin(str(tmp_path))
        for temperature, atmospheres in ((300.0, 1.0), (300.0, 1e-3), (1000.0, 1.0), (1000.0, 0.05)):
            _, expected = hapi.absorptionCoefficient_Voigt(
                SourceTables=molecule,
                Environment={"T": temperature, "p": atmospheres},
                WavenumberGrid=nu,
                WavenumberWing=25.0,
                WavenumberWingHW=0.0,
                Diluent={"air": 1.0},
                HITRAN_units=True,
            )
            found = cross_section(
                lines, nu, temperature, atmospheres * ATM_BAR, broadening=broadening, wing_cm=25.0
            )
            # different releases of the partition sums: 0.03 %
            np.testing.assert_allclose(found, expected, rtol=1e-3)


def test_order_units_and_mixtures():
    nu = np.linspace(4280, 4290, 500)
    up = cross_section("CO", nu, 1000.0, 1.0)
    np.testing.assert_array_equal(cross_section("CO", nu[::-1], 1000.0, 1.0)[::-1], up)
    with_units = cross_section("CO", nu * 100 / u.m, 1000 * u.K, 1e5 * u.Pa)
    np.testing.assert_allclose(with_units, up, rtol=1e-9)  # rounding of the converted wavenumbers
    one, many = Broadening(0.07, 0.5), Broadening(np.full(len(load_lines("CO")), 0.07), 0.5)
    np.testing.assert_array_equal(
        cross_section("CO", nu, 1000.0, 1.0, broadening=many),
        cross_section("CO", nu, 1000.0, 1.0, broadening=one),
    )


def test_pressure_broadens_and_heat_narrows():
    lines = _one_line()
    nu = np.linspace(4279, 4281, 20_001)

    def hwhm(temperature, pressure):
        sigma = cross_section(lines, nu, temperature, pressure, broadening=Broadening(0.07, 0.5))
        return 0.5 * np.ptp(nu[sigma > 0.5 * sigma.max()])

    # Lorentz HWHM gamma P (296/T)^n; at 1 bar the Doppler width adds 0.5 %
    assert hwhm(296.0, 2.0) == pytest.approx(0.14, rel=0.01)
    assert hwhm(1184.0, 4.0) == pytest.approx(0.14, rel=0.01)


def test_methane_is_effective_and_does_not_vary():
    table = load_methane()
    nu = np.array([3500.0, 4300.0, 4310.0])  # 3500 cm-1 = 2.86 um: outside
    first, second = cross_section("CH4", nu, 300.0, 1.0), cross_section("CH4", nu, 1500.0, 0.01)
    np.testing.assert_array_equal(first, second)
    assert np.isnan(first[0])
    assert np.all(first[1:] > 0)
    assert first[1] == pytest.approx(
        np.interp(4300.0, table.wavenumber_per_cm, table.cross_section_cm2), rel=1e-12
    )
    with pytest.raises(CoverageError, match="CH4"):
        cross_section("CH4", np.linspace(2000, 2100, 50), 300.0, 1.0)


@pytest.mark.parametrize(
    ("grid", "temperature", "pressure"),
    [
        ([4280.0, 4280.0, 4281.0], 1000.0, 1.0),
        ([4280.0], 1000.0, 1.0),
        ([4280.0, 4281.0], -5.0, 1.0),
        ([4280.0, 4281.0], 1000.0, -1.0),
        ([4280.0, np.nan, 4282.0], 1000.0, 1.0),
        ([4280.0, 4281.0], 1e5, 1.0),
    ],
)
def test_bad_input(grid, temperature, pressure):
    with pytest.raises(InputError):
        cross_section("CO", np.array(grid), temperature, pressure)


def test_unknown_molecule():
    with pytest.raises(InputError, match="NaCl"):
        cross_section("NaCl", np.linspace(4280, 4290, 10), 1000.0, 1.0)


# TIPS-2021 (Gamache et al. 2021, JQSRT 271, 107713). Shipped are sums over levels: the Dunham levels of CO
# (Huber & Herzberg 1979) differ from TIPS by 8e-6, those of H2O (Barber et al. 2006) by 4e-4. The CH4
# values are of unknown release: 0.5 %. Required of all: 0.5 %.
@pytest.mark.parametrize(
    ("molecule", "temperature", "expected", "tolerance"),
    [
        ("CO", 296, 107.419824, 2e-5),
        ("CO", 1000, 380.296965, 2e-5),
        ("CO", 1500, 625.62894, 2e-5),
        ("CO", 2000, 928.313078, 2e-5),
        ("H2O", 296, 174.5813, 5e-4),
        ("H2O", 1000, 1218.06925, 5e-4),
        ("H2O", 1500, 2712.10111, 5e-4),
        ("H2O", 2000, 5274.24868, 5e-4),
        ("CH4", 296, 590.48, 5e-3),
        ("CH4", 1000, 8065.02611, 5e-3),
    ],
)
def test_partition_sums(molecule, temperature, expected, tolerance):
    assert partition_sum(molecule, temperature) == pytest.approx(expected, rel=tolerance)


def test_partition_sums_between_the_tables():
    # direct Dunham sum of 12C16O, v < 30, J < 200: Huber & Herzberg 1979 constants
    t = np.array([303.7, 1013.3, 1997.1])
    y1 = (2169.8135802, -13.2883076, 1.051127e-2, 5.7440e-5, 9.831e-7, -3.1660e-8)
    y = [y1, (1.9312808724, -1.75044121e-2, 5.487e-7, 2.541e-8), (-6.121468e-6, 1.1526e-9, -1.8050e-10)]
    half, j = np.arange(30)[:, None] + 0.5, np.arange(200)[None, :]
    level = sum(c * half ** (k + 1) for k, c in enumerate(y[0]))
    level = level + sum(c * half**k for k, c in enumerate(y[1])) * j * (j + 1)
    level = level + sum(c * half**k for k, c in enumerate(y[2])) * (j * (j + 1)) ** 2
    level -= level[0, 0]
    for temperature in t:
        direct = np.sum((2 * j + 1) * np.exp(-1.438776877504 * level / temperature))
        # TIPS differs from the Dunham sum by 8e-6; interpolation adds less than 1e-5
        assert partition_sum("CO", temperature) == pytest.approx(direct, rel=3e-5)


def test_partition_errors():
    with pytest.raises(InputError, match="tabulated"):
        partition_sum("CO", 2e4)
    with pytest.raises(InputError, match="isotopologue"):
        partition_sum("CO", 300.0, 99)
