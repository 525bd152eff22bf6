"""The line-by-line sum against its slow twin, and bit for bit against itself on other thread counts."""

import numba
import numpy as np
import pytest

from xcorr.kernels import reference_lines
from xcorr.kernels.line_by_line import doppler_width, sum_of_lines

# |z| >= 30: neglected terms of the continued fraction are 2.5 / |z|^4 = 3e-6
FAR_ERROR = 4e-6


def _lines(n_line=300, seed=1):
    rng = np.random.default_rng(seed)
    centre = np.sort(rng.uniform(4150, 4350, n_line))
    return centre, 10 ** rng.uniform(-26, -20, n_line)


@pytest.mark.parametrize(
    ("temperature", "hwhm"), [(300, 0.0), (300, 1e-6), (300, 1e-3), (1000, 0.07), (1500, 1.0), (1000, 8.0)]
)
def test_equals_the_slow_twin(temperature, hwhm):
    nu = np.exp(np.linspace(np.log(4200), np.log(4300), 3001))
    centre, strength = _lines()
    width = doppler_width(centre, temperature, np.full(centre.size, 18.0))
    lorentz = np.full(centre.size, hwhm)
    out = np.empty(nu.size)
    sum_of_lines(nu, centre, strength, width, lorentz, 25.0, out)
    twin = reference_lines.sum_of_lines(nu, centre, strength, width, lorentz, 25.0)
    # without damping the far wings are exactly zero here and 1e-300 in the twin
    np.testing.assert_allclose(out, twin, rtol=FAR_ERROR, atol=1e-40)


def test_same_bits_for_any_number_of_threads():
    nu = np.linspace(4200, 4300, 5000)
    centre, strength = _lines()
    width = doppler_width(centre, 1000.0, np.full(centre.size, 28.0))
    lorentz = np.full(centre.size, 0.05)
    results, before = [], numba.get_num_threads()
    try:
        for threads in {1, before}:
            numba.set_num_threads(threads)
            out = np.empty(nu.size)
            sum_of_lines(nu, centre, strength, width, lorentz, 25.0, out)
            results.append(out.tobytes())
    finally:
        numba.set_num_threads(before)
    assert len(set(results)) == 1


def test_a_line_ends_at_its_wing():
    nu = np.linspace(4200, 4300, 10_001)
    out = np.empty(nu.size)
    sum_of_lines(nu, np.array([4250.0]), np.array([1e-20]), np.array([0.01]), np.array([0.1]), 10.0, out)
    distance = np.abs(nu - 4250.0)
    assert np.all(out[distance < 9.995] > 0)  # away from the edge by half a sample: rounding of the grid
    assert np.all(out[distance > 10.005] == 0)


def test_no_lines_is_no_absorption():
    out = np.full(100, 7.0)
    none = np.empty(0)
    sum_of_lines(np.linspace(4200, 4300, 100), none, none, none, none, 25.0, out)
    assert np.all(out == 0)


@pytest.mark.parametrize(
    ("mass", "hwhm"), [(28.010, 2.620675e-6), (18.015, 3.267779e-6), (16.043, 3.4628e-6)]
)
def test_doppler_width(mass, hwhm):
    # Doppler HWHM / nu = 3.581163e-7 sqrt(T / M) at 1500 K for CO, H2O, CH4 (mean molar masses), CODATA 2018
    width = doppler_width(np.array([4300.0]), 1500.0, np.array([mass]))
    assert width[0] * np.sqrt(np.log(2)) / 4300.0 == pytest.approx(hwhm, rel=2e-5)
