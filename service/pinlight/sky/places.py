"""Apparent places: stars, Sun and Moon as a site on the Earth sees them, without refraction."""

from dataclasses import dataclass

import erfa
import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.sky.positions import move_to_epoch
from pinlight.sky.time import rotation_angle_deg

__all__ = [
    "Site",
    "altitude_azimuth_deg",
    "apparent_place_deg",
    "moon_vectors",
    "sun_vectors",
]

Floats = NDArray[np.float64]

_MJD = 2_400_000.5
_TT_MINUS_TAI_DAY = 32.184 / 86_400.0  # exact
_EARTH_RADIUS_AU = 6_378.137 / 149_597_870.7  # WGS84, IAU 2012
_J2000_MJD = 51_544.5
_LIGHT_DAY_PER_AU = 499.00478384 / 86_400.0  # IAU 2012 au over the speed of light


@dataclass(frozen=True)
class Site:
    """A place on the Earth: geodetic latitude and east longitude, height above the ellipsoid."""

    latitude_deg: float
    longitude_deg: float
    height_m: float = 0.0


def _years(mjd_tai: float) -> float:
    return 2000.0 + (mjd_tai - _J2000_MJD) / 365.25


def apparent_place_deg(
    ra_deg: ArrayLike,
    dec_deg: ArrayLike,
    mjd_tai: float,
    motion: tuple[ArrayLike, ArrayLike, ArrayLike, ArrayLike] | None = None,
) -> tuple[Floats, Floats]:
    """Apparent place of date (CIRS, geocentric) of ICRS positions of epoch 2000.

    Parameters
    ----------
    ra_deg, dec_deg : array, shape (N,)
    mjd_tai : float
        The place changes by less than 0.2 arcsec in twelve hours (aberration), so one time
        serves a night.
    motion : tuple of arrays, optional
        Proper motion in right ascension (with cos dec) and declination [mas/yr], parallax [mas],
        radial velocity [km/s]; NaN counts as zero.

    Returns
    -------
    ra_deg, dec_deg : array, shape (N,)
        Right ascension from the celestial intermediate origin, which goes with the Earth rotation
        angle as the classical one goes with sidereal time.

    Notes
    -----
    IAU 2006/2000A precession-nutation, aberration and light deflection by ERFA's `apci13`, `atciq`.
    """
    if motion is not None:
        ra_deg, dec_deg = move_to_epoch(ra_deg, dec_deg, *motion, 2000.0, _years(mjd_tai))
    parallax_as = 0.0 if motion is None else np.nan_to_num(np.asarray(motion[2], float)) / 1000
    astrometry, _ = erfa.apci13(_MJD, mjd_tai + _TT_MINUS_TAI_DAY)
    place = erfa.atciq(np.radians(ra_deg), np.radians(dec_deg), 0.0, 0.0, parallax_as, 0.0, astrometry)
    return np.degrees(place[0]) % 360, np.degrees(place[1])


def altitude_azimuth_deg(
    hour_angle: ArrayLike, dec_deg: ArrayLike, latitude_deg: float
) -> tuple[Floats, Floats]:
    """Altitude and azimuth (from north through east) without refraction; arguments broadcast. [deg]"""
    h, d = np.radians(hour_angle), np.radians(dec_deg)
    phi = np.radians(latitude_deg)
    up = np.sin(phi) * np.sin(d) + np.cos(phi) * np.cos(d) * np.cos(h)
    north = np.cos(phi) * np.sin(d) - np.sin(phi) * np.cos(d) * np.cos(h)
    east = -np.cos(d) * np.sin(h)
    return np.degrees(np.arctan2(up, np.hypot(north, east))), np.degrees(np.arctan2(east, north)) % 360


def _turn_to_date(vectors: Floats, mjd_tt: Floats) -> Floats:
    """GCRS vectors turned to the equator and origin of date, shape (..., 3).

    The turn is slow to compute and changes by 0.2 arcsec in a day, so times within two days share it.
    """
    short = np.size(mjd_tt) > 0 and np.ptp(mjd_tt) < 2
    return np.asarray(erfa.rxp(erfa.c2i06a(_MJD, np.mean(mjd_tt) if short else mjd_tt), vectors))


def sun_vectors(mjd_tai: ArrayLike) -> Floats:
    """Apparent direction of the Sun of date from the Earth's centre, good to 1 arcsec, shape (T, 3).

    From a site it stands up to 9 arcsec lower (its parallax), which moves no window by a second.
    """
    mjd_tt = np.asarray(mjd_tai, float) + _TT_MINUS_TAI_DAY
    # The raw function: its status only says that a date lies outside 1900-2100.
    heliocentric, barycentric, _ = erfa.ufunc.epv00(_MJD, mjd_tt)
    sunward = -heliocentric["p"]
    distance = np.linalg.norm(sunward, axis=-1, keepdims=True)
    # Aberration to first order: v/c is 1e-4, its square 2 milliarcseconds.
    return _turn_to_date(sunward / distance + barycentric["v"] * _LIGHT_DAY_PER_AU, mjd_tt)


def moon_vectors(mjd_tai: ArrayLike, site: Site) -> Floats:
    """Direction of the Moon of date as seen from a site, good to half an arcminute, shape (T, 3).

    Notes
    -----
    Meeus (1998), Astronomical Algorithms, ch. 47, by ERFA's `moon98`, with the parallax of the site.
    """
    mjd_tt = np.asarray(mjd_tai, float) + _TT_MINUS_TAI_DAY
    geocentric = _turn_to_date(erfa.moon98(_MJD, mjd_tt)["p"], mjd_tt)
    local = np.radians(rotation_angle_deg(mjd_tai) + site.longitude_deg)
    phi = np.radians(site.latitude_deg)
    observer = _EARTH_RADIUS_AU * np.stack(
        [np.cos(phi) * np.cos(local), np.cos(phi) * np.sin(local), np.sin(phi) * np.ones_like(local)], axis=-1
    )
    direction = geocentric - observer
    return direction / np.linalg.norm(direction, axis=-1, keepdims=True)
