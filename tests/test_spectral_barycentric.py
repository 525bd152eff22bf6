"""Barycentric velocities against published vectors, offline."""

import socket

import pytest
from astropy.coordinates import EarthLocation
from astropy.time import Time
from astropy.utils import iers

from xcorr.errors import InputError
from xcorr.spectral import barycentric_velocity

SITE = (-70.403, -24.6252, 2635.0)
JD = 2457244.5  # 2015-08-10 UTC

# Values of the service of Wright & Eastman (2014, PASP 126, 838) as embedded in a general library's test
# suite, whose tolerance there is 10 mm/s: ICRS RA, Dec (deg), m/s to add to a measured velocity.
VECTORS = [
    (180, -85, -10335.933),
    (180, -72.857142857, -14198.476),
    (0, -72.857142857, -2237.600),
    (180, -60.714285714, -17425.465),
    (270, -60.714285714, -17131.709),
    (0, -60.714285714, 2424.371),
    (90, -60.714285714, 2130.615),
    (240, -48.571428571, -24442.371),
    (60, -48.571428571, 11547.933),
    (225, -24.285714286, -29301.923),
    (45, -24.285714286, 22232.912),
    (220, -12.142857143, -29373.051),
    (180, 0, -20284.926),
    (220, 0, -28193.917),
    (260, 0, -22908.516),
    (300, 0, -6901.821),
    (340, 0, 12336.458),
    (20, 0, 25804.515),
    (60, 0, 27200.500),
    (100, 0, 15871.214),
    (140, 0, -2882.247),
]


@pytest.fixture
def no_network(monkeypatch):
    def refuse(*_args, **_kwargs):
        raise AssertionError("the network was used")

    monkeypatch.setattr(socket, "create_connection", refuse)
    monkeypatch.setattr(socket.socket, "connect", refuse)


@pytest.mark.parametrize(("ra", "dec", "metres"), VECTORS)
def test_published_vectors(no_network, ra, dec, metres):
    assert abs(barycentric_velocity(JD, ra, dec, site=SITE) * 1e3 - metres) < 0.010


@pytest.mark.parametrize(
    ("time", "ra", "dec", "velocity"),
    [
        # worked examples of a general reduction package for Kitt Peak, 1987; old low-precision formulae for
        # coordinates of date, so 0.1 km/s besides the precession of 1950/1987 coordinates
        ("1987-10-21T11:00:24", 54.0625, 0.36778, 11.07),
        ("1987-10-21T11:08:00", 124.8958, -0.86417, 28.05),
        ("1987-10-21T12:12:10", 138.3333, 61.48028, 22.06),
    ],
)
def test_old_heliocentric_examples(time, ra, dec, velocity):
    site = (-111.6, 31.963, 2120.0)
    value = barycentric_velocity(time, ra, dec, site=site, kind="heliocentric")
    assert abs(value - velocity) < 0.15


def test_all_forms_of_time_and_site_agree():
    reference = barycentric_velocity(JD, 20.0, 0.0, site=SITE)
    location = EarthLocation.from_geodetic(*SITE)
    geocentric = [location.x.value, location.y.value, location.z.value]
    for time in ("2015-08-10T00:00:00", "2015-08-10 00:00", Time(JD, format="jd", scale="utc")):
        assert barycentric_velocity(time, 20.0, 0.0, site=SITE) == pytest.approx(reference, abs=1e-9)
    for site in (geocentric, location):
        assert barycentric_velocity(JD, 20.0, 0.0, site=site) == pytest.approx(reference, abs=1e-9)


def test_beyond_the_tables_it_still_answers_and_leaves_the_settings_alone(no_network):
    before = (iers.conf.auto_download, iers.conf.auto_max_age, iers.conf.iers_degraded_accuracy)
    late = barycentric_velocity("2045-08-10T00:00:00", 20.0, 0.0, site=SITE)
    early = barycentric_velocity("1955-08-10T00:00:00", 20.0, 0.0, site=SITE)
    # on the same date of other years the Earth moves alike, to leap-day phase and the Sun's reflex motion
    assert late == pytest.approx(25.80, abs=0.5)
    assert early == pytest.approx(25.80, abs=0.5)
    assert (iers.conf.auto_download, iers.conf.auto_max_age, iers.conf.iers_degraded_accuracy) == before


@pytest.mark.parametrize(
    ("changes", "match"),
    [
        ({"time": "yesterday"}, "time of the exposure"),
        ({"dec_deg": 91.0}, "target position"),
        ({"site": (1.0, 2.0)}, "a site is"),
        ({"site": (10.0, 120.0, 0.0)}, "longitude first"),
        ({"kind": "galactic"}, "unknown frame"),
    ],
)
def test_bad_input(changes, match):
    settings = {"time": JD, "ra_deg": 20.0, "dec_deg": 0.0, "site": SITE} | changes
    with pytest.raises(InputError, match=match):
        barycentric_velocity(**settings)
