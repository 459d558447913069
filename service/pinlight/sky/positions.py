"""Positions of stars: reading, moving to an epoch, separating."""

import math
import re

import erfa
import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.errors import InputError

__all__ = [
    "check_position",
    "galactic_latitude_deg",
    "looks_like_coordinates",
    "move_to_epoch",
    "parse_coordinates",
    "separation_deg",
    "unit_vectors",
]

Floats = NDArray[np.float64]

# North galactic pole in ICRS: The Hipparcos and Tycho Catalogues, ESA SP-1200 (1997), vol. 1, eq. 1.5.12.
_GALACTIC_POLE_RA_DEG, _GALACTIC_POLE_DEC_DEG = 192.85948, 27.12825

_AU_PER_YEAR_KM_S = 4.740470463533  # 149 597 870.7 km (IAU 2012 resolution B2) in a Julian year

_NUMBER = r"\d+(?:\.\d*)?"
_SEXAGESIMAL = re.compile(
    rf"(?P<h>\d{{1,3}})(?:\s*[:h]\s*|\s+)(?P<m>{_NUMBER})(?:(?:\s*[:m]\s*|\s+)(?P<s>{_NUMBER})\s*s?)?\s*m?"
    rf"[\s,]*(?P<sign>[+\-−])?\s*(?P<d>\d{{1,2}})(?:\s*[:d°]\s*|\s+)(?P<am>{_NUMBER})"
    rf"(?:(?:\s*[:m'′]\s*|\s+)(?P<as>{_NUMBER})\s*[s\"″]?)?\s*[m'′]?"
)
_REAL = r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?|nan|inf"
_DECIMAL = re.compile(rf"(?P<ra>[+-]?(?:{_REAL}))\s*d?[\s,]\s*(?P<dec>[+\-−]?(?:{_REAL}))\s*d?")


def check_position(ra_deg: float, dec_deg: float) -> tuple[float, float]:
    """The same two numbers, or an error that names the one which is no place on the sky.

    Raises
    ------
    InputError
        If `ra_deg` is not within 0 to 360, `dec_deg` not within -90 to 90, or either is NaN.
    """
    for name, value, low, high in (("ra_deg", ra_deg, 0, 360), ("dec_deg", dec_deg, -90, 90)):
        if not math.isfinite(value) or not low <= value <= high:
            raise InputError(f"{name} is {value:g}; it must lie between {low} and {high}")
    return float(ra_deg), float(dec_deg)


def looks_like_coordinates(text: str) -> bool:
    """Whether `text` is written as a pair of coordinates, possible ones or not.

    >>> looks_like_coordinates("10:15:30 +20:05:00"), looks_like_coordinates("HD 10700")
    (True, False)
    """
    return _as_degrees(text) is not None


def _as_degrees(text: str) -> tuple[float, float] | None:
    text = text.strip()
    if match := _SEXAGESIMAL.fullmatch(text):
        hours, minutes, seconds = (float(match[key] or 0) for key in ("h", "m", "s"))
        degrees, arcmin, arcsec = (float(match[key] or 0) for key in ("d", "am", "as"))
        for value in (minutes, seconds, arcmin, arcsec):
            if value >= 60:
                raise InputError(f"{text!r} has {value:g} minutes or seconds; they must be below 60")
        ra_deg = 15 * (hours + minutes / 60 + seconds / 3600)
        dec_deg = degrees + arcmin / 60 + arcsec / 3600
        return ra_deg, -dec_deg if match["sign"] in ("-", "−") else dec_deg
    if match := _DECIMAL.fullmatch(text):
        return float(match["ra"]), float(match["dec"].replace("−", "-"))
    return None


def parse_coordinates(text: str) -> tuple[float, float]:
    """Right ascension and declination in degrees from the ways people write them.

    Decimal degrees (``"153.875 20.083"``), or hours and degrees with colons, blanks or
    unit letters.

    Raises
    ------
    InputError
        If `text` is no pair of coordinates or lies outside the sky.

    Examples
    --------
    >>> parse_coordinates("10:15:30 +20:05:00")
    (153.875, 20.083333333333332)
    >>> parse_coordinates("10h15m30s -20d05m00s")
    (153.875, -20.083333333333332)
    """
    place = _as_degrees(text)
    if place is None:
        raise InputError(f"{text!r} is no position; write degrees ('153.875 20.083') or '10:15:30 +20:05:00'")
    return check_position(*place)


def unit_vectors(ra_deg: ArrayLike, dec_deg: ArrayLike) -> Floats:
    """Unit vectors of positions, shape (..., 3)."""
    return np.asarray(erfa.s2c(np.radians(ra_deg), np.radians(dec_deg)))


def separation_deg(ra1_deg: ArrayLike, dec1_deg: ArrayLike, ra2_deg: ArrayLike, dec2_deg: ArrayLike) -> Floats:
    """Angle between positions on the sky. [deg]

    All arguments broadcast; exact at all angles (ERFA's `seps`, the arctangent form).

    >>> float(separation_deg(10.0, 0.0, 10.0, 1.0))
    1.0
    """
    radians = (np.radians(angle) for angle in (ra1_deg, dec1_deg, ra2_deg, dec2_deg))
    return np.degrees(erfa.seps(*radians))


def galactic_latitude_deg(ra_deg: ArrayLike, dec_deg: ArrayLike) -> Floats:
    """Galactic latitude of ICRS positions. [deg]"""
    pole = unit_vectors(_GALACTIC_POLE_RA_DEG, _GALACTIC_POLE_DEC_DEG)
    return np.degrees(np.arcsin(np.clip(unit_vectors(ra_deg, dec_deg) @ pole, -1, 1)))


def move_to_epoch(
    ra_deg: ArrayLike,
    dec_deg: ArrayLike,
    pm_ra_mas_yr: ArrayLike,
    pm_dec_mas_yr: ArrayLike,
    parallax_mas: ArrayLike,
    radial_velocity_km_s: ArrayLike,
    from_year: float,
    to_year: float,
) -> tuple[Floats, Floats]:
    """Where stars stand at another epoch, by rigorous space motion.

    Parameters
    ----------
    ra_deg, dec_deg, pm_ra_mas_yr, pm_dec_mas_yr, parallax_mas, radial_velocity_km_s : array, shape (N,)
        ICRS position at `from_year`; `pm_ra_mas_yr` contains the factor cos(dec), as
        catalogues give it. NaN in a motion, parallax or velocity counts as zero.
    from_year, to_year : float
        Julian years.

    Returns
    -------
    ra_deg, dec_deg : array, shape (N,)

    Notes
    -----
    The standard model of uniform space motion, The Hipparcos and Tycho Catalogues, ESA SP-1200
    (1997), vol. 1, sec. 1.5.5: the direction turns as r + t (p mu_ra + q mu_dec + r mu_r).
    """
    motions = (pm_ra_mas_yr, pm_dec_mas_yr, parallax_mas, radial_velocity_km_s)
    pm_ra, pm_dec, parallax, velocity = (np.nan_to_num(np.asarray(value, float)) for value in motions)
    # Radial motion in the same unit: parallax [mas] times velocity over one au a year [km/s].
    radial = np.radians(parallax * velocity / _AU_PER_YEAR_KM_S / 3.6e6)
    years = to_year - from_year
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    zero = np.zeros_like(ra)
    r = erfa.s2c(ra, dec)
    p = np.stack([-np.sin(ra), np.cos(ra), zero], axis=-1)
    q = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)], axis=-1)
    moved = (
        r * (1 + years * radial)[..., None]
        + p * (years * np.radians(pm_ra / 3.6e6))[..., None]
        + q * (years * np.radians(pm_dec / 3.6e6))[..., None]
    )
    new_ra, new_dec = erfa.c2s(moved)
    return np.degrees(new_ra) % 360, np.degrees(new_dec)
