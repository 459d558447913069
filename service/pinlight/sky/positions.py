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

# Of sexagesimal positions: their signs and separators, and one number.
_SEXAGESIMAL_LETTERS = re.compile("[0-9:hmsd°'\"′″,.+\\-\\s]+", re.IGNORECASE)
_SEXAGESIMAL_NUMBER = re.compile(r"[+-]?\d+(?:\.\d*)?")
_LONGEST_TEXT = 200


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
    """Whether `text` is written as coordinates, possible ones or not, rather than as a name.

    >>> looks_like_coordinates("10:15:30 +20:05:00"), looks_like_coordinates("HD 10700")
    (True, False)
    """
    text = text.strip().replace("−", "-")
    if len(text) > _LONGEST_TEXT:
        return False
    if _two_numbers(text) is not None:
        return True
    numbers = _SEXAGESIMAL_NUMBER.findall(text)
    return text[:1].isdigit() and len(numbers) > 1 and bool(_SEXAGESIMAL_LETTERS.fullmatch(text))


def _two_numbers(text: str) -> tuple[float, float] | None:
    parts = text.replace(",", " ").split()
    if len(parts) != 2:
        return None
    try:
        return tuple(float(part.rstrip("d°")) for part in parts)  # type: ignore[return-value]
    except ValueError:
        return None


def parse_coordinates(text: str) -> tuple[float, float]:
    """Right ascension and declination in degrees from the ways people write them.

    Decimal degrees (``"153.875 20.083"``), or hours and degrees with minutes and, if wanted,
    seconds, between colons, blanks or unit letters.

    Raises
    ------
    InputError
        If `text` is no pair of coordinates or lies outside the sky.

    Examples
    --------
    >>> parse_coordinates("10:15:30 +20:05:00")
    (153.875, 20.083333333333332)
    >>> parse_coordinates("10h15m -20d05m")
    (153.75, -20.083333333333332)
    """
    text = text.strip().replace("−", "-")
    wrong = f"{text[:60]!r} is no position; write degrees ('153.875 20.083') or '10:15:30 +20:05:00'"
    if not looks_like_coordinates(text):
        raise InputError(wrong)
    if (decimal := _two_numbers(text)) is not None:
        return check_position(*decimal)
    halves = _halves(text)
    if halves is None:
        open_end = "leaves open where the declination begins; put a sign or a blank before it"
        raise InputError(f"{text[:60]!r} {open_end}")
    ra, dec = (_sexagesimal(text, part) for part in halves)
    return check_position(15 * ra, -dec if "-" in halves[1] else dec)


def _halves(text: str) -> tuple[str, str] | None:
    """The parts of right ascension and declination, None where that is not plain."""
    if sign := re.search("[+-]", text):
        return text[: sign.start()], text[sign.start() :]
    if re.search("[^0-9.,\\s]", text):  # colons or unit letters: the blank between the two is the border
        parts = re.split(r"[\s,]+", re.sub(r"\s*:\s*", ":", text))
        return (parts[0], parts[1]) if len(parts) == 2 else None
    numbers = text.replace(",", " ").split()
    half = len(numbers) // 2
    return (" ".join(numbers[:half]), " ".join(numbers[half:])) if len(numbers) in (4, 6) else None


def _sexagesimal(text: str, part: str) -> float:
    values = [abs(float(number)) for number in _SEXAGESIMAL_NUMBER.findall(part)]
    if len(values) not in (2, 3):
        raise InputError(f"{text[:60]!r} has {len(values)} numbers in a coordinate; it takes 2 or 3")
    for value in values[1:]:
        if value >= 60:
            raise InputError(f"{text[:60]!r} has {value:g} minutes or seconds; they must be below 60")
    return sum(value / 60**power for power, value in enumerate(values))


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
