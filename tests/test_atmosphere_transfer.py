"""The formal solution against analytic limits, and its slow twin."""

import numpy as np
import pytest
from scipy.special import expn

from xcorr.kernels import reference_lines
from xcorr.kernels.radiative import emergent_flux, gauss_angles

BARE = 1e-12  # a layer this thin lets the source jump: boundaries share their source function


N_ANGLE = 6  # the default of emergent_spectrum


def _flux(optical_depth, source, n_angle=N_ANGLE):
    mu, weight = gauss_angles(n_angle)
    out = np.empty(np.shape(optical_depth)[1])
    emergent_flux(np.asarray(optical_depth, float), np.asarray(source, float), mu, weight, out)
    return out


def _slab(tau, n_angle):
    """Flux of an isothermal slab (S = 1) over a black, cold floor."""
    return _flux([[tau], [BARE], [100.0]], [[1.0], [1.0], [0.0], [0.0]], n_angle)[0]


@pytest.mark.parametrize(("x", "value"), [(0.1, 0.41629145791), (1, 0.10969196720), (2, 0.030133379798)])
def test_exponential_integral_of_the_check(x, value):
    # E3: computed values, as tabulated in Abramowitz & Stegun
    assert expn(3, x) == pytest.approx(value, rel=1e-9)


@pytest.mark.parametrize(
    ("tau", "share"), [(0.1, 0.1674171), (0.5, 0.5567913), (1, 0.7806161), (2, 0.9397332)]
)
def test_hemispheric_slab(tau, share):
    # F / (pi B) = 1 - 2 E3(tau)
    assert _slab(tau, N_ANGLE) / np.pi == pytest.approx(share, rel=1e-3)  # the accuracy asked for
    assert _slab(tau, 24) / np.pi == pytest.approx(share, rel=2e-6)  # and it converges to the truth


def test_slab_of_any_depth():
    # the four tabulated depths could be lucky: the same limit everywhere
    tau = np.geomspace(1e-4, 20.0, 200)
    one = np.ones_like(tau)
    flux = _flux([tau, BARE * one, 100.0 * one], [one, one, 0.0 * one, 0.0 * one])
    # BARE itself emits about its depth: subtract nothing, it is 1e-8 of the thinnest slab
    np.testing.assert_allclose(flux / np.pi, 1.0 - 2.0 * expn(3, tau), rtol=1e-3)


@pytest.mark.parametrize(("tau", "share"), [(0.1, 0.095163), (1.0, 0.632121)])
def test_nadir_slab(tau, share):
    out = np.empty(1)
    depth, source = np.array([[tau], [BARE], [100.0]]), np.array([[1.0], [1.0], [0.0], [0.0]])
    emergent_flux(depth, source, np.array([1.0]), np.array([1.0]), out)
    assert out[0] == pytest.approx(share, abs=1e-6)  # 1 - exp(-tau)


def test_linear_source_is_exact():
    # S = a + b tau: F = pi (a + 2 b / 3), I(mu) = a + b mu
    edges = np.concatenate([[0.0], np.geomspace(1e-6, 30.0, 20)])
    source = (2.0 + 3.0 * edges)[:, None]
    flux = _flux(np.diff(edges)[:, None], source)
    assert flux[0] == pytest.approx(np.pi * (2.0 + 2.0), rel=1e-12)


def test_isothermal_is_black_whatever_the_depth():
    rng = np.random.default_rng(2)
    depth = 10 ** rng.uniform(-14, 4, (40, 200))
    np.testing.assert_allclose(_flux(depth, np.full((41, 200), 7.0)), 7.0 * np.pi, rtol=1e-12)


def test_grey_atmosphere_carries_its_flux():
    # Eddington T^4 = (3/4) T_eff^4 (tau + 2/3) with a grey source: F = pi (a + 2b/3) = sigma T_eff^4 exactly
    edges = np.concatenate([[0.0], np.geomspace(1e-5, 60.0, 60)])
    source = 0.75 * (edges + 2.0 / 3.0) / np.pi
    assert _flux(np.diff(edges)[:, None], source[:, None])[0] == pytest.approx(1.0, rel=1e-12)


def test_equals_the_slow_twin():
    rng = np.random.default_rng(3)
    depth = 10 ** rng.uniform(-6, 0.5, (12, 30))
    source = np.sort(rng.uniform(1.0, 9.0, (13, 30)), axis=0)
    mu, weight = gauss_angles(N_ANGLE)
    # slant depths reach 2800 at the most grazing angle: 100 nodes of the twin resolve them, 60 do not (4e-8)
    slow = reference_lines.emergent_flux(depth, source, mu, weight, n_step=200)
    np.testing.assert_allclose(_flux(depth, source), slow, rtol=1e-11)


def test_flux_weights():
    for n_angle in (3, 6, 8):
        mu, weight = gauss_angles(n_angle)
        assert weight.sum() == pytest.approx(np.pi, rel=1e-14)
        assert np.sum(weight * mu) == pytest.approx(2 * np.pi / 3, rel=1e-14)
