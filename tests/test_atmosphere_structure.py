"""Grey structures: Eddington's relation, convection, hydrostatics, and what is refused."""

import numpy as np
import pytest

from xcorr.atmosphere import (
    Structure,
    eddington_temperature,
    grain_opacity,
    grey_structure,
    rosseland_opacity,
)
from xcorr.atmosphere.structure import ADIABATIC_GRADIENT, HOTTEST
from xcorr.errors import InputError


@pytest.mark.parametrize(("tau", "ratio"), [(0, 0.840896), (2 / 3, 1.0), (1, 1.057371), (10, 1.681793)])
def test_eddington_relation(tau, ratio):
    # T^4 = (3/4) T_eff^4 (tau + 2/3): Eddington 1926; values computed
    assert eddington_temperature(1000.0, tau) == pytest.approx(1000 * ratio, rel=1e-6)


@pytest.mark.parametrize(("t_eff", "log_g"), [(700, 4.5), (1200, 4.0), (1700, 5.0)])
def test_structure_is_eddington_above_the_convection_zone(t_eff, log_g):
    built = grey_structure(t_eff, log_g, n_layers=2000)
    ln_p, ln_t = np.log(built.pressure_bar), np.log(built.temperature_k)
    gradient = np.diff(ln_t) / np.diff(ln_p)
    # optical depth integrated anew from the result: kappa dP / g
    opacity = rosseland_opacity(built.layer_temperature_k, built.layer_pressure_bar) + grain_opacity(
        t_eff, log_g
    )
    tau = np.concatenate([[0.0], np.cumsum(opacity * np.diff(built.pressure_bar) * 1e6 / 10.0**log_g)])
    radiative = np.concatenate([[True], gradient < 0.99 * ADIABATIC_GRADIENT])
    radiative &= np.cumsum(~radiative) == 0
    assert radiative.sum() > 200
    expected = eddington_temperature(t_eff, tau)
    # second-order steps and the optical depth above the first boundary
    np.testing.assert_allclose(built.temperature_k[radiative], expected[radiative], rtol=2e-3)
    assert gradient.max() <= ADIABATIC_GRADIENT * (1 + 1e-6)


@pytest.mark.parametrize("t_eff", [700, 1200, 1700, 2500])
def test_photosphere_sits_at_sensible_pressure(t_eff):
    # brown dwarfs' photospheres lie at 0.1-10 bar, deeper at higher gravity (common practice, no source)
    depth = []
    for log_g in (4.0, 5.0):
        built = grey_structure(t_eff, log_g)
        depth.append(np.interp(t_eff, built.temperature_k, built.pressure_bar))
    assert 0.05 < depth[0] < depth[1] < 10
    assert built.temperature_k[-1] == pytest.approx(HOTTEST * t_eff, rel=0.02)


def test_opacity_fit_is_continuous_where_its_branches_meet():
    # Freedman et al. 2014, ApJS 214, 25: two fits that join at 800 K
    pressure = np.logspace(-5, 2, 15)
    # half a unit in the last printed digit of c8, c9, c10 at 800 K: 5e-4 (1 + 2.9 + 8.4) dex = 1.4 %
    np.testing.assert_allclose(
        rosseland_opacity(799.99, pressure), rosseland_opacity(800.01, pressure), rtol=0.014
    )


def test_opacity_fit_grows_with_pressure():
    assert np.all(np.diff(rosseland_opacity(1000.0, np.logspace(-3, 2, 30))) > 0)


@pytest.mark.parametrize(
    "arguments",
    [
        {"t_eff": 100, "log_g": 4},
        {"t_eff": 9000, "log_g": 4},
        {"t_eff": 1000, "log_g": 9},
        {"t_eff": np.nan, "log_g": 4},
        {"t_eff": 1000, "log_g": 4, "n_layers": 3},
        {"t_eff": 1000, "log_g": 4, "pressures_bar": (1.0, 0.1)},
    ],
)
def test_out_of_range(arguments):
    with pytest.raises(InputError):
        grey_structure(**arguments)


@pytest.mark.parametrize(
    ("pressure", "temperature"),
    [([1.0, 0.1], [900, 900]), ([0.1, 1.0], [900, -1]), ([0.1, 1.0], [900]), ([0.1, 1.0], [900, np.nan])],
)
def test_structure_checks_itself(pressure, temperature):
    with pytest.raises(InputError):
        Structure(np.array(pressure), np.array(temperature), 4.0)
