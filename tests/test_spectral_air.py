"""Air and vacuum wavelengths against published formulae and worked values."""

import numpy as np
import pytest
from astropy import units as u
from hypothesis import given
from hypothesis import strategies as st

from xcorr.errors import InputError
from xcorr.spectral import air_to_vacuum, vacuum_to_air
from xcorr.units import LIGHT_KM_S

FORMULAE = ("ciddor1996", "morton2000", "fits3")


@pytest.mark.parametrize(
    ("air", "vacuum", "digits"),
    [
        # published worked values (Ciddor 1996), 4, 3 and 3 decimals of an Angstrom
        (0.6056125, 0.60578019, 0.6e-8),
        (0.4861363, 0.4862721, 0.6e-7),
        # computed in double precision from the formula of Ciddor (1996)
        (2.2935, 2.294125923, 0.6e-9),
        (2.16612, 2.166711236, 0.6e-9),
    ],
)
def test_ciddor_worked_values(air, vacuum, digits):
    assert abs(air_to_vacuum(air) - vacuum) < digits


def test_ciddor_published_vacuum_to_air():
    # vacuum 2000 A is air 1999.353 A (Ciddor 1996, published worked value, 3 decimals)
    assert abs(vacuum_to_air(0.2) - 0.1999353) < 0.6e-7


@pytest.mark.parametrize(
    ("formula", "values"),
    [
        ("ciddor1996", [2.736064, 2.731848, 2.729373, 2.729103]),
        ("morton2000", [2.736107, 2.731899, 2.729428, 2.729158]),
        ("fits3", [2.886635, 2.882156, 2.879526, 2.879239]),
    ],
)
def test_refractivity(formula, values):
    # 1e4 (n - 1) from the published formulae in double precision, vacuum wavelengths; 6 decimals
    vacuum = np.array([1.25, 1.65, 2.20, 2.30])
    refractivity = (vacuum / vacuum_to_air(vacuum, formula) - 1.0) * 1e4
    np.testing.assert_allclose(refractivity, values, atol=0.6e-6)


def test_morton_inverse_agrees_with_the_published_one():
    # VALD's closed inverse of Morton (2000); published to agree to 2e-9 A
    air = np.linspace(0.3, 2.5, 200)
    s2 = air**-2
    index = (
        1.0
        + 8.336624212083e-5
        + 2.408926869968e-2 / (130.1065924522 - s2)
        + 1.599740894897e-4 / (38.92568793293 - s2)
    )
    np.testing.assert_allclose(air_to_vacuum(air, "morton2000"), air * index, rtol=2e-9)
    # at 22935 A the quoted agreement of the two is 2e-9 A
    assert abs(air_to_vacuum(2.2935, "morton2000") * 1e4 - 22941.25936) < 0.6e-5


def test_the_formulae_differ_as_published():
    # c dn at 2.3 um: Ciddor - Morton -1.7 m/s, FITS III - Ciddor +4501 m/s
    index = {name: 2.3 / vacuum_to_air(2.3, name) for name in FORMULAE}
    metres = 1e3 * LIGHT_KM_S
    assert abs((index["ciddor1996"] - index["morton2000"]) * metres + 1.7) < 0.06
    assert abs((index["fits3"] - index["ciddor1996"]) * metres - 4501.0) < 1.0


@given(st.floats(0.19, 30.0), st.sampled_from(FORMULAE))
def test_each_is_the_inverse_of_the_other(wavelength, formula):
    # rounding only
    assert abs(air_to_vacuum(vacuum_to_air(wavelength, formula), formula) / wavelength - 1) < 1e-12
    assert abs(vacuum_to_air(air_to_vacuum(wavelength, formula), formula) / wavelength - 1) < 1e-12


def test_quantity_and_plain_agree():
    assert air_to_vacuum(22935.0 * u.AA) == pytest.approx(float(air_to_vacuum(2.2935)), rel=1e-15)


def test_bad_input():
    with pytest.raises(InputError, match="unknown air formula"):
        air_to_vacuum(2.0, "edlen")
    with pytest.raises(InputError, match=r"below 0\.18 um"):
        vacuum_to_air([2.0, 0.01])
    with pytest.raises(InputError, match="unit does not convert"):
        vacuum_to_air(2.0 * u.s)
