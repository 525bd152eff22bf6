"""The barycentric velocity of an exposure, computed offline."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

import numpy as np

from xcorr.errors import InputError

# A site farther than this from the origin is geocentric metres; degrees and heights never are.
_GEOCENTRIC_M = 1.0e6


@contextmanager
def offline_iers() -> Iterator[None]:
    """Use the bundled Earth-orientation table only, also for dates beyond it.

    Beyond the table polar motion and UT1-UTC are taken as their last or zero values: up to a second of Earth
    rotation, below 0.05 m/s in the barycentric velocity.
    """
    from astropy.utils import iers
    from astropy.utils.exceptions import AstropyWarning
    from erfa import ErfaWarning

    with (
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("auto_max_age", None),
        iers.conf.set_temp("iers_degraded_accuracy", "ignore"),
        warnings.catch_warnings(),
    ):
        warnings.filterwarnings("ignore", "Tried to get polar motions for times", AstropyWarning)
        warnings.filterwarnings("ignore", ".*time is out of IERS range", AstropyWarning)
        warnings.filterwarnings("ignore", ".*dubious year", ErfaWarning)
        yield


def _location(site: Any) -> Any:
    """EarthLocation of (lon_deg, lat_deg, height_m) or geocentric (x, y, z) in metres."""
    from astropy import units as u
    from astropy.coordinates import EarthLocation

    if isinstance(site, EarthLocation):
        return site
    values = np.asarray(site, dtype=np.float64)
    if values.shape != (3,) or not np.all(np.isfinite(values)):
        raise InputError(
            "a site is (longitude_deg, latitude_deg, height_m) or geocentric (x, y, z) in metres",
            repr(site),
            "give three finite numbers",
        )
    if np.linalg.norm(values) > _GEOCENTRIC_M:
        return EarthLocation.from_geocentric(*values, unit=u.m)
    longitude, latitude, height = values
    if abs(latitude) > 90.0 or abs(longitude) > 360.0:
        raise InputError("site outside the Earth's coordinates", repr(site), "longitude first, then latitude")
    return EarthLocation.from_geodetic(longitude * u.deg, latitude * u.deg, height * u.m)


def _time(time: Any) -> Any:
    """Astropy Time of an ISO string (UTC), a Julian date (UTC) or a Time."""
    from astropy.time import Time

    if isinstance(time, Time):
        return time
    try:
        if isinstance(time, str):
            return Time(time, scale="utc")
        return Time(float(time), format="jd", scale="utc")
    except (ValueError, TypeError) as error:
        raise InputError(
            "time of the exposure not understood",
            repr(time),
            "give UTC as 2015-08-10T00:00:00 or a Julian date",
        ) from error


def barycentric_velocity(
    time: Any, ra_deg: float, dec_deg: float, *, site: Sequence[float], kind: str = "barycentric"
) -> float:
    """Velocity to add to a velocity measured on Earth, z_B * c; needs no network.

    (1 + z_bary) = (1 + z_obs)(1 + z_B), Wright & Eastman (2014, PASP 126, 838). Positions of the Earth
    come from the ephemeris built into ERFA (epv00). The published vectors of that paper's service are met
    to 2 mm/s (``tests/test_spectral_barycentric.py``); light deflection and proper motion are left out.

    Parameters
    ----------
    time : str, float or astropy Time
        Middle of the exposure: ISO string (UTC), Julian date (UTC), or a Time.
    ra_deg, dec_deg : float or Quantity
        ICRS right ascension and declination, degrees.
    site : sequence of three floats, or EarthLocation
        (longitude_deg, latitude_deg, height_m), east positive; or geocentric (x, y, z) in metres, the
        OBSGEO-X, -Y, -Z of FITS.
    kind : {"barycentric", "heliocentric"}
        Frame to correct to.

    Returns
    -------
    float
        z_B * c, km/s.

    Raises
    ------
    InputError
        Time, position or site not understood.
    """
    if kind not in ("barycentric", "heliocentric"):
        raise InputError("unknown frame", repr(kind), "use barycentric or heliocentric")
    with offline_iers():
        from astropy.coordinates import SkyCoord

        from xcorr.units import to_plain

        ra, dec = float(to_plain(ra_deg, "deg")), float(to_plain(dec_deg, "deg"))
        if not (np.isfinite(ra) and abs(dec) <= 90.0):
            raise InputError("target position not understood", f"ra {ra}, dec {dec}", "give ICRS degrees")
        target = SkyCoord(ra, dec, unit="deg")
        value = target.radial_velocity_correction(kind, obstime=_time(time), location=_location(site))
        return float(value.to_value("km/s"))
