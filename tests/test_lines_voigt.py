"""Voigt function against published values and scipy's Faddeeva function."""

import numpy as np
import pytest
from scipy.special import wofz

from xcorr.errors import InputError
from xcorr.kernels import reference_lines, voigt

# H(a, u) = Re w(u + ia), computed to 12 digits in double precision from the definition; H(a, 0) = erfcx(a)
TABLE = [
    (0.1, 0.0, 0.896456979969),
    (1.0, 0.0, 0.427583576156),
    (0.01, 1.0, 0.368702417398),
    (0.1, 1.0, 0.373170148311),
    (1.0, 1.0, 0.304744205257),
    (0.1, 3.0, 7.942680998770e-3),
    (0.01, 5.0, 2.408033919512e-4),
    (1.0, 5.0, 2.300313259406e-2),
    (0.001, 10.0, 5.728717502842e-6),
    (2.0, 2.0, 0.147952759512),
    (0.5, 0.5, 0.533156707912),
]
# truncation of the quadrature (exp(-t^2) at its first dropped node) and of the continued fraction at |z| = 7
METHOD_ERROR = 3e-8


@pytest.mark.parametrize(("a", "u", "expected"), TABLE)
def test_tabulated_values(a, u, expected):
    assert voigt(a, u) == pytest.approx(expected, rel=METHOD_ERROR)


def test_relative_error_against_scipy_everywhere():
    rng = np.random.default_rng(1)
    a = 10 ** rng.uniform(-12, 4, 200_000)
    u = np.concatenate([10 ** rng.uniform(-4, 4, 100_000), rng.uniform(0, 12, 100_000)])
    np.testing.assert_allclose(voigt(a, u), wofz(u + 1j * a).real, rtol=METHOD_ERROR)


def test_without_damping_it_is_a_gaussian():
    u = np.linspace(-26, 26, 1001)
    np.testing.assert_allclose(voigt(0.0, u), np.exp(-u * u), rtol=1e-13)


def test_even_in_u_and_broadcast():
    u = np.linspace(0, 50, 77)
    a = np.array([[1e-3], [1.0], [40.0]])
    value = voigt(a, u)
    assert value.shape == (3, 77)
    np.testing.assert_array_equal(value, voigt(a, -u))


def test_profile_is_normalised():
    # Int H du = sqrt(pi); the Lorentz wings beyond +-1000 hold 2 a / (sqrt(pi) 1000) of it
    u = np.linspace(-1000, 1000, 2_000_001)
    total = np.trapezoid(voigt(0.3, u), u)
    assert total + 2 * 0.3 / (np.sqrt(np.pi) * 1000) == pytest.approx(np.sqrt(np.pi), rel=1e-7)


def test_nan_in_nan_out():
    assert np.isnan(voigt(0.1, np.nan))
    assert np.isnan(voigt(np.nan, 0.1))


def test_negative_damping_is_an_error():
    with pytest.raises(InputError, match="negative"):
        voigt(-0.1, 1.0)


def test_slow_twin_is_an_independent_code():
    a, u = np.array([0.5]), np.array([0.5])
    assert reference_lines.voigt(a, u)[0] == pytest.approx(0.533156707912, rel=1e-11)
