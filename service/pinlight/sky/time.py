"""Times: UTC as people write it, atomic time for arithmetic, the Earth's rotation.

Inside, a time is a Julian date in International Atomic Time (TAI) less 2 400 000.5 days: `mjd_tai`. It
runs evenly through leap seconds, and a double holds it to a microsecond.
"""

import re
from functools import lru_cache

import erfa
import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.errors import InputError

__all__ = [
    "ROTATION_ACCURACY_S",
    "format_utc",
    "has_rotation_data",
    "next_minute",
    "parse_utc",
    "rotation_angle_deg",
]

Floats = NDArray[np.float64]

_MJD = 2_400_000.5
_DAY_S = 86_400.0
_UTC = re.compile(
    r"(\d{4})-(\d{1,2})-(\d{1,2})(?:[T ](\d{1,2}):(\d{2})(?::(\d{2}(?:\.\d*)?))?)?\s*(?:Z|UTC|\+00:00)?",
    re.IGNORECASE,
)
# Without Earth-rotation data UT1 is taken as UTC, which is kept within 0.9 s of it.
ROTATION_ACCURACY_S = 0.9
_FIRST_YEAR, _LAST_YEAR = 1960, 2200


def parse_utc(text: str, name: str = "time") -> float:
    """The time that a UTC text such as ``2026-12-01T22:30:00Z`` means, as `mjd_tai`.

    Seconds and the clock time may be left out; a leap second may be written.

    Raises
    ------
    InputError
        If the text is no UTC time between the years 1960 and 2200; `name` is what it is called.

    Examples
    --------
    >>> format_utc(parse_utc("2016-12-31 23:59:60"))
    '2016-12-31T23:59:60Z'
    """
    match = _UTC.fullmatch(text.strip())
    wrong = f"{name} is {text!r}; write UTC as 2026-12-01T22:30:00Z"
    if not match:
        raise InputError(wrong)
    year, month, day = (int(match[index]) for index in (1, 2, 3))
    hour, minute = int(match[4] or 0), int(match[5] or 0)
    if not _FIRST_YEAR <= year <= _LAST_YEAR:
        raise InputError(f"{name} is {text!r}; its year must lie between {_FIRST_YEAR} and {_LAST_YEAR}")
    # The raw functions return a status: 1 is a year whose leap seconds are not announced yet.
    utc1, utc2, status = erfa.ufunc.dtf2d(b"UTC", year, month, day, hour, minute, float(match[6] or 0))
    if status not in (0, 1):
        raise InputError(wrong)
    tai1, tai2, _ = erfa.ufunc.utctai(utc1, utc2)
    return float((tai1 - _MJD) + tai2)


def _utc_parts(mjd_tai: ArrayLike) -> tuple[Floats, Floats]:
    utc1, utc2, _ = erfa.ufunc.taiutc(_MJD, np.asarray(mjd_tai, float))
    return utc1, utc2


def format_utc(mjd_tai: float) -> str:
    """UTC in ISO 8601 to the nearest second, with Z."""
    utc1, utc2 = _utc_parts(mjd_tai)
    year, month, day, clock, _ = erfa.ufunc.d2dtf(b"UTC", 0, utc1, utc2)
    hour, minute, second = (int(clock[key]) for key in ("h", "m", "s"))
    return f"{int(year):04d}-{int(month):02d}-{int(day):02d}T{hour:02d}:{minute:02d}:{second:02d}Z"


def next_minute(mjd_tai: float) -> float:
    """The first whole minute of UTC that is not before a time.

    >>> format_utc(next_minute(parse_utc("2026-12-01T20:15:01Z")))
    '2026-12-01T20:16:00Z'
    """
    utc1, utc2 = _utc_parts(mjd_tai)
    # Read off the clock: a day with a leap second has a longer last minute.
    _, _, _, clock, _ = erfa.ufunc.d2dtf(b"UTC", 3, utc1, utc2)
    past_s = int(clock["s"]) + int(clock["f"]) / 1000
    length_s = 61 if past_s >= 60 else 60
    return float(mjd_tai + (length_s - past_s) / _DAY_S) if past_s else float(mjd_tai)


@lru_cache(maxsize=1)
def _rotation_table() -> tuple[Floats, Floats]:
    """MJD (UTC) and UT1 - UTC [s] of the installed Earth-rotation data (IERS finals2000A)."""
    from astropy_iers_data import IERS_A_FILE

    days, differences = [], []
    with open(IERS_A_FILE, encoding="ascii") as file:  # noqa: PTH123 - the package names it as text
        for line in file:
            if line[58:68].strip():  # columns of the IERS readme of finals2000A
                days.append(float(line[7:15]))
                differences.append(float(line[58:68]))
    return np.array(days), np.array(differences)


def has_rotation_data(mjd_tai: ArrayLike) -> NDArray[np.bool_]:
    """Whether UT1 is known (measured or predicted) at these times; else it is UTC, good to 0.9 s."""
    days, _ = _rotation_table()
    times = np.asarray(mjd_tai, float)
    return (times >= days[0]) & (times <= days[-1])


def _ut1_minus_utc_s(mjd_utc: Floats) -> Floats:
    days, differences = _rotation_table()
    index = np.clip(np.searchsorted(days, mjd_utc, side="right") - 1, 0, days.size - 2)
    low, high = differences[index], differences[index + 1]
    # A leap second between two entries is a step, not a slope.
    high = np.where(high - low > 0.5, high - 1, np.where(high - low < -0.5, high + 1, high))
    along = np.clip((mjd_utc - days[index]) / (days[index + 1] - days[index]), 0, 1)
    inside = (mjd_utc >= days[0]) & (mjd_utc <= days[-1])
    return np.where(inside, low + (high - low) * along, 0.0)


def rotation_angle_deg(mjd_tai: ArrayLike) -> Floats:
    """Earth rotation angle, the angle between the celestial and terrestrial origins. [deg]

    Parameters
    ----------
    mjd_tai : float or array, shape (T,)

    Returns
    -------
    angle_deg : array, shape (T,), 0 to 360

    Notes
    -----
    Capitaine et al. (2000), A&A 355, 398, by ERFA's `era00`. UT1 from the IERS data of the
    installed `astropy-iers-data`; outside its dates UT1 = UTC, wrong by at most 0.9 s (14 arcsec).
    """
    utc1, utc2 = _utc_parts(mjd_tai)
    mjd_utc = (utc1 - _MJD) + utc2
    ut11, ut12, _ = erfa.ufunc.utcut1(utc1, utc2, _ut1_minus_utc_s(mjd_utc))
    return np.degrees(erfa.era00(ut11, ut12))
