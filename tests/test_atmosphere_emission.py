"""Emergent spectra: Planck limits, convergence, CO heads, and what each ingredient does."""

import numpy as np
import pytest
from astropy import units as u
from scipy.ndimage import gaussian_filter1d

from xcorr.atmosphere import Structure, emergent_spectra, emergent_spectrum, grey_structure, planck
from xcorr.atmosphere.emission import _collision_coefficient, _layer_columns
from xcorr.errors import InputError
from xcorr.lines import load_cia

GRID_R = 250_000.0
MIXTURE = {"H2O": 2e-4, "CO": 4.5e-4}


def _grid(low, high, resolution=GRID_R):
    return np.exp(np.arange(np.log(low), np.log(high), 1.0 / resolution))


def _smooth(flux, resolving_power):
    return gaussian_filter1d(flux, GRID_R / resolving_power / 2.3548200450)


# B_lambda in W m-2 sr-1 um-1, computed from CODATA 2018 constants
@pytest.mark.parametrize(
    ("wavelength", "temperature", "expected"),
    [
        (2.2, 1000, 3343.50220),
        (2.2, 1500, 29916.1881),
        (2.2, 2000, 91310.9003),
        (2.2935, 1700, 48061.4087),
        (4.0, 1000, 3277.66352),
        (2.2, 280, 1.65996446e-4),
        (2.3, 290, 7.92828816e-4),
    ],
)
def test_planck(wavelength, temperature, expected):
    assert planck(wavelength, temperature) == pytest.approx(expected, rel=2e-9)


def test_planck_integrates_to_stefan_boltzmann():
    wavelength = np.geomspace(0.2, 2000, 400_001)
    total = np.pi * np.trapezoid(planck(wavelength, 1300.0), wavelength)
    assert total == pytest.approx(5.670374419e-8 * 1300.0**4, rel=1e-6)  # the tail beyond 2 mm: 1e-9


def test_isothermal_atmosphere_has_no_lines():
    wavelength = _grid(2.29, 2.30)
    isothermal = Structure(np.geomspace(1e-5, 300, 61), np.full(61, 1000.0), 4.5)
    flux = emergent_spectrum(wavelength, structure=isothermal, mixing_ratios=MIXTURE | {"CH4": 1e-4})
    np.testing.assert_allclose(flux, np.pi * planck(wavelength, 1000.0), rtol=1e-12)


@pytest.mark.parametrize(
    ("t_eff", "log_g", "limit"), [(700, 4.5, 5e-3), (1200, 4.0, 2e-3), (1700, 5.0, 1e-3)]
)
def test_layers_are_enough(t_eff, log_g, limit):
    # second order: twice the layers leave a quarter of the error: that of 60 is 4/3 of this difference
    wavelength = _grid(2.29, 2.30)
    few, many = (
        emergent_spectra(wavelength, grey_structure(t_eff, log_g, n_layers=n), {"": MIXTURE})[""]
        for n in (60, 120)
    )
    middle = slice(500, -500)
    difference = np.abs(_smooth(few, 4000)[middle] / _smooth(many, 4000)[middle] - 1)
    assert 4.0 / 3.0 * np.max(difference) < limit


def test_angles_are_enough():
    wavelength = _grid(2.29, 2.30)
    structure = grey_structure(1200.0, 4.0)
    few, many = (emergent_spectra(wavelength, structure, {"": MIXTURE}, n_angles=n)[""] for n in (6, 16))
    np.testing.assert_allclose(few, many, rtol=1e-4)


# vacuum heads from the Dunham coefficients of Huber & Herzberg 1979. "Steepest fall" is the head only where
# the head is the strongest feature around: at 2500 K the levels v = 1, 2 behind 3-1 and 4-2 are populated.
# In colder spectra, and in saturated giants, single 2-0 lines or blends are steeper and prove nothing.
@pytest.mark.parametrize(
    ("head", "t_eff", "log_g", "resolving_power"),
    [
        (2.293515, 1700.0, 5.0, 20_000),
        (2.293515, 2500.0, 4.5, 2500),
        (2.322649, 2500.0, 4.5, 2500),
        (2.352450, 2500.0, 4.5, 2500),
    ],
)
def test_co_band_heads(head, t_eff, log_g, resolving_power):
    wavelength = _grid(head - 0.012, head + 0.012)
    flux = emergent_spectrum(wavelength, t_eff=t_eff, log_g=log_g, mixing_ratios={"CO": 4.5e-4}, n_layers=30)
    middle = slice(800, -800)
    slope = np.gradient(_smooth(flux, resolving_power), wavelength)[middle]
    # half a resolution element: the smoothed edge of a one-sided pile of lines is steepest outside it
    found = wavelength[middle][np.argmin(slope)]
    assert found == pytest.approx(head, abs=0.5 * head / resolving_power)


def test_absorption_grows_with_the_mixing_ratio():
    wavelength = _grid(2.29, 2.31)
    structure = grey_structure(1500.0, 4.5)
    labels = {name: {"CO": ratio} for name, ratio in (("none", 0.0), ("some", 1e-5), ("more", 1e-3))}
    flux = emergent_spectra(wavelength, structure, labels)
    # hotter below: absorption only removes light. But 1e-5 of a gas of mass 28 also replaces gas of mass 2.3:
    # the column shrinks by 1e-5 (28 / 2.3 - 1) = 1.1e-4, the pairs by 2e-5; the flux gains no more
    assert np.all(flux["some"] <= flux["none"] * (1 + 1.3e-4))
    assert flux["more"].mean() < 0.9 * flux["some"].mean()


def test_silent_molecule_weighs_but_does_not_absorb():
    wavelength = _grid(2.29, 2.295)
    mixtures = {"with": MIXTURE, "without": MIXTURE, "nothing": {}}
    flux = emergent_spectra(
        wavelength, grey_structure(1500.0, 4.5, n_layers=20), mixtures, silent={"without": "CO"}
    )
    assert flux["with"].mean() < 0.95 * flux["without"].mean()
    # a molecule without lines here: present or silent is the same spectrum, bit for bit
    bare = _grid(1.20, 1.202)
    flux = emergent_spectra(
        bare, grey_structure(1500.0, 4.5, n_layers=20), mixtures, silent={"without": "CO"}
    )
    np.testing.assert_array_equal(flux["with"], flux["without"])


def test_collisions_go_as_density_squared():
    # pair coefficient times n * column: ten times the pressure in a layer of ten times the column
    wavelength = np.array([2.10, 2.11])

    def depth(pressure):
        thin = Structure(np.array([pressure, pressure * 1.0001]), np.array([1500.0, 1500.0]), 4.0)
        column, density = _layer_columns(thin, {}, {})
        return (_collision_coefficient(1e4 / wavelength, thin) * (column * density)[:, None])[0]

    np.testing.assert_allclose(depth(1.0) / depth(0.1), 100.0, rtol=1e-9)


def test_collision_tables_are_met_at_their_own_points():
    table = load_cia()["H2-H2"]
    k = len(table.temperature_k) // 2
    kelvin, wavenumber = float(table.temperature_k[k]), table.wavenumber_per_cm[100:120]
    level = Structure(np.array([1.0, 1.1]), np.array([kelvin, kelvin]), 4.0)
    both = _collision_coefficient(wavenumber, level)[0]
    helium = load_cia()["H2-He"]
    row = int(np.argmin(np.abs(helium.temperature_k - kelvin)))
    h2, he = 0.8545, 0.1455  # solar (Asplund et al. 2009), four digits
    expected = h2**2 * table.coefficient_cm5()[k][100:120] + h2 * he * np.interp(
        wavenumber, helium.wavenumber_per_cm, helium.coefficient_cm5()[row], left=0.0
    )
    np.testing.assert_allclose(both, expected, rtol=3e-4)
    # 1.38527e-39 cm5 per cm-1 amagat-2, from the Loschmidt constant
    assert table.coefficient_cm5()[k][100] / table.coefficient[k][100] == pytest.approx(1.38527e-39, rel=1e-5)


def test_blocks_join_without_a_seam(monkeypatch):
    wavelength = _grid(2.292, 2.296)
    structure = grey_structure(1500.0, 4.5, n_layers=20)
    whole = emergent_spectra(wavelength, structure, {"": MIXTURE})[""]
    monkeypatch.setattr("xcorr.atmosphere.emission._BLOCK", 100)
    np.testing.assert_allclose(emergent_spectra(wavelength, structure, {"": MIXTURE})[""], whole, rtol=1e-12)


def test_units():
    wavelength = _grid(2.29, 2.292)
    plain = emergent_spectrum(wavelength, t_eff=1500.0, log_g=4.0, mixing_ratios=MIXTURE)
    other = emergent_spectrum(wavelength * 1e3 * u.nm, t_eff=1500.0 * u.K, log_g=4.0, mixing_ratios=MIXTURE)
    np.testing.assert_allclose(other, plain, rtol=1e-6)  # rounding of the converted wavelengths in line cores


@pytest.mark.parametrize(
    "changed",
    [
        {"mixing_ratios": {"CO": -1e-4}},
        {"mixing_ratios": {"CO": 0.7, "H2O": 0.4}},
        {"mixing_ratios": {"CO": np.nan}},
        {"mixing_ratios": {"NH3": 1e-5}},
        {"t_eff": None},
        {"wavelength_um": np.array([2.3, 2.29])},
    ],
)
def test_bad_input(changed):
    arguments = {"wavelength_um": _grid(2.29, 2.291), "t_eff": 1500.0, "log_g": 4.0, "mixing_ratios": MIXTURE}
    with pytest.raises(InputError):
        emergent_spectrum(**(arguments | changed))
