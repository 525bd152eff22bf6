"""Equilibrium chemistry against worked values of the published analytic form."""

import numpy as np
import pytest
from astropy import units as u

from xcorr.atmosphere import MOLECULE_FLOOR, default_mixing_ratios, equilibrium
from xcorr.atmosphere.chemistry import H2_FRACTION, SOLAR_CARBON, SOLAR_GAS_OXYGEN
from xcorr.errors import InputError

ATM_BAR = 1.01325
# Burrows & Sharp 1999, ApJ 512, 843, eqs. 1-8, abundances of Asplund et al. 2009, 1 atm:
# T, then CO, CH4, H2O per particle and NH3 per H2
WORKED = [
    (1000, 1.0617e-5, 4.4939e-4, 6.4505e-4, 4.07e-6),
    (1200, 2.6454e-4, 1.9546e-4, 3.9113e-4, 1.34e-6),
    (1500, 4.5320e-4, 6.8053e-6, 2.0247e-4, 4.38e-7),
    (2000, 4.5993e-4, 7.64e-8, 1.9574e-4, 1.46e-7),
]


@pytest.mark.parametrize(("temperature", "co", "ch4", "h2o", "nh3"), WORKED)
def test_worked_values(temperature, co, ch4, h2o, nh3):
    found = equilibrium(temperature, ATM_BAR)
    # tolerances: the digits quoted
    assert found.co == pytest.approx(co, rel=1e-4)
    assert found.ch4 == pytest.approx(ch4, rel=1e-3)
    assert found.h2o == pytest.approx(h2o, rel=1e-4)
    assert found.nh3 / H2_FRACTION == pytest.approx(nh3, rel=5e-3)


@pytest.mark.parametrize(("temperature", "atmospheres"), [(984.0, 0.1), (1179.9, 1.0), (1472.8, 10.0)])
def test_where_co_equals_methane(temperature, atmospheres):
    found = equilibrium(temperature, atmospheres * ATM_BAR)
    # 0.1 K in the quoted temperature is 0.2 %
    assert found.co / found.ch4 == pytest.approx(1.0, abs=2e-3)


def test_element_sums_are_exact():
    t, p = np.meshgrid(np.linspace(500, 2500, 21), np.logspace(-4, 2, 13))
    found = equilibrium(t, p)
    np.testing.assert_allclose(found.co + found.ch4, 2 * SOLAR_CARBON * H2_FRACTION, rtol=1e-12)
    np.testing.assert_allclose(found.co + found.h2o, 2 * SOLAR_GAS_OXYGEN * H2_FRACTION, rtol=1e-12)
    assert np.all(found.ch4 >= 0)
    assert np.all(found.nh3 >= 0)


def test_published_solar_ratios():
    # f_H2 = 0.8545, A_C = 2.6915e-4, A_O = 3.8364e-4 after silicates took 3.28 O per Si
    assert pytest.approx(0.8545, abs=5e-5) == H2_FRACTION
    assert pytest.approx(2.6915e-4, rel=1e-4) == SOLAR_CARBON
    assert pytest.approx(3.8364e-4, rel=1e-4) == SOLAR_GAS_OXYGEN


def test_units_and_errors():
    plain, with_units = equilibrium(1200.0, 1.0), equilibrium(1200.0 * u.K, 1e5 * u.Pa)
    assert with_units.co == pytest.approx(float(plain.co), rel=1e-12)
    with pytest.raises(InputError, match="temperature"):
        equilibrium(-1.0, 1.0)
    with pytest.raises(InputError, match="pressure"):
        equilibrium(1000.0, 0.0)
    with pytest.raises(InputError, match="abundances"):
        equilibrium(1000.0, 1.0, carbon=0.0)


def test_default_mixing_ratios_follow_the_spectral_sequence():
    # T dwarfs show methane, L dwarfs and young 1200 K objects CO instead (common practice, no source)
    t_dwarf, l_dwarf, young = (
        default_mixing_ratios(1000.0, 5.0),
        default_mixing_ratios(1700.0, 5.0),
        default_mixing_ratios(1200.0, 4.0),
    )
    assert t_dwarf["CH4"] > 1e-4
    assert l_dwarf["CH4"] < MOLECULE_FLOOR < l_dwarf["CO"]
    assert young["CO"] > 5 * young["CH4"]
    assert min(t_dwarf["H2O"], l_dwarf["H2O"], young["H2O"]) > 1e-4
