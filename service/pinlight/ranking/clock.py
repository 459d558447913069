"""What an array can look at and when: a span of time over a site, its limits and its delay lines."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.arrays.files import Array, Station
from pinlight.arrays.geometry import equatorial_m, project_uvw_m
from pinlight.arrays.reach import DelayLines
from pinlight.errors import InputError
from pinlight.ranking.columns import StarColumns
from pinlight.sky.places import (
    Site,
    altitude_azimuth_deg,
    apparent_place_deg,
    moon_vectors,
    sun_vectors,
)
from pinlight.sky.positions import unit_vectors
from pinlight.sky.time import has_rotation_data, parse_utc, rotation_angle_deg
from pinlight.sky.windows import find_windows

__all__ = ["Clock", "moment_clock", "night_clock", "span_clock"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_MINUTE_DAY = 1 / 1440
# What a ranking looks at first, and what windows and the choice of coarse settings are made of. With a
# horizon above the altitude limit both are the last: a mast may hide a star for a few minutes only.
_STEP_MIN, _FINE_STEP_MIN, _WALLED_STEP_MIN = 10.0, 4.0, 1.0
_MOST_STEPS = 20_000
_LONGEST_SPAN_DAY = 2.0


@dataclass(frozen=True)
class Clock:
    """An array's stations over a grid of times, shape (T,), mjd_tai, within two days.

    All questions take apparent places of date, of `apparent`, and broadcast them with times.
    """

    array: Array
    stations: tuple[Station, ...]
    times: Floats

    @cached_property
    def site(self) -> Site:
        return Site(self.array.latitude_deg, self.array.longitude_deg, self.array.height_m)

    @cached_property
    def delay_lines(self) -> DelayLines:
        return DelayLines(self.stations)

    @cached_property
    def _xyz_m(self) -> Floats:
        return equatorial_m(self.stations, self.site.latitude_deg)

    @cached_property
    def baseline_lengths_m(self) -> Floats:
        """Lengths of all pairs, in the order of `delay_lines.pairs`."""
        first, second = np.array(self.delay_lines.pairs).T
        return np.asarray(np.linalg.norm(self._xyz_m[first] - self._xyz_m[second], axis=-1))

    @cached_property
    def walled(self) -> list[Station]:
        """Stations with a horizon that rises above the altitude limit somewhere."""
        return _walled(self.array, self.stations)

    @cached_property
    def fine_times(self) -> Floats:
        """Times of the same span, four minutes apart or one."""
        step_min = _WALLED_STEP_MIN if self.walled else _FINE_STEP_MIN
        return _even_times(float(self.times[0]), float(self.times[-1]), step_min)

    def every(self, step_min: float) -> Floats:
        """Times of the same span, a step apart from its start, and its end.

        Raises
        ------
        InputError
            If the step is impossible, or makes over 20 000 times.
        """
        if not 0 < step_min <= 1440:
            raise InputError(f"step_min is {step_min:g}; it must lie between 0 and 1440")
        first, last = float(self.times[0]), float(self.times[-1])
        steps = (last - first) / (step_min * _MINUTE_DAY)
        if steps > _MOST_STEPS:
            raise InputError(
                f"step_min is {step_min:g}; that makes {steps:.0f} steps, and {_MOST_STEPS} are the most"
            )
        times = first + np.arange(int(steps + 1e-6) + 1, dtype=np.float64) * step_min * _MINUTE_DAY
        return times if last - times[-1] < 1e-6 else np.append(times, last)

    @property
    def middle(self) -> float:
        return float((self.times[0] + self.times[-1]) / 2)

    @property
    def notes(self) -> list[str]:
        """What the answer's accuracy suffers from."""
        if has_rotation_data(self.times).all():
            return []
        return [
            "No Earth-rotation data for this date, so UT1 is taken as UTC: windows are good to a second"
            " until 2035, later to the minute by which the two may then differ."
        ]

    def apparent(
        self,
        ra_deg: ArrayLike,
        dec_deg: ArrayLike,
        motion: tuple[ArrayLike, ArrayLike, ArrayLike, ArrayLike] | None = None,
    ) -> tuple[Floats, Floats]:
        """Apparent places of date of ICRS positions at the middle of the span, shape (N,)."""
        return apparent_place_deg(ra_deg, dec_deg, self.middle, motion)

    def places(self, stars: StarColumns, rows: NDArray[np.int64]) -> tuple[Floats, Floats]:
        """Apparent places of date of an edition's stars, their motion included, shape (N,)."""
        pm_ra, pm_dec, parallax, velocity = stars.motion(rows)
        return self.apparent(stars.ra_deg[rows], stars.dec_deg[rows], (pm_ra, pm_dec, parallax, velocity))

    # Moon and the Earth's rotation are computed on the grid and interpolated between its times, the Sun on
    # the hours: their paths bend by less than an arcsecond between.

    @cached_property
    def _rotation_deg(self) -> Floats:
        return np.unwrap(rotation_angle_deg(self.times), period=360)

    @cached_property
    def _sun(self) -> Floats:
        return sun_vectors(self._hours)

    @cached_property
    def _hours(self) -> Floats:
        return _even_times(float(self.times[0]), float(self.times[-1]), 60.0)

    @cached_property
    def _moon(self) -> Floats:
        return moon_vectors(self.times, self.site)

    @staticmethod
    def _between(nodes: Floats, directions: Floats, times: ArrayLike) -> Floats:
        """Directions at any time of the span, shape of `times` + (3,), as unit vectors."""
        parts = np.stack([np.interp(np.asarray(times, float), nodes, part) for part in directions.T], axis=-1)
        return parts / np.linalg.norm(parts, axis=-1, keepdims=True)

    def hour_angle_deg(self, ra_deg: ArrayLike, times: ArrayLike) -> Floats:
        """Hour angle, positive west of the meridian, -180 to 180; arguments broadcast."""
        angle = (
            np.interp(np.asarray(times, float), self.times, self._rotation_deg)
            + self.site.longitude_deg
            - np.asarray(ra_deg)
        )
        return (angle + 180) % 360 - 180

    def uvw_m(self, ra_deg: ArrayLike, dec_deg: ArrayLike, times: ArrayLike) -> Floats:
        """u, v, w of every pair of stations, in the order of `delay_lines.pairs`, shape (..., P, 3)."""
        first, second = np.array(self.delay_lines.pairs).T
        return project_uvw_m(
            self._xyz_m[second] - self._xyz_m[first], self.hour_angle_deg(ra_deg, times), dec_deg
        )

    def delays_m(self, ra_deg: ArrayLike, dec_deg: ArrayLike, times: ArrayLike) -> Floats:
        """w_i - w_j of every pair, pairs first: shape (P, ...)."""
        h, d = np.radians(self.hour_angle_deg(ra_deg, times)), np.radians(dec_deg)
        x, y, z = np.cos(d) * np.cos(h), -np.cos(d) * np.sin(h), np.sin(d) + np.zeros_like(h)
        first, second = np.array(self.delay_lines.pairs).T
        return np.stack([a * x + b * y + c * z for a, b, c in self._xyz_m[first] - self._xyz_m[second]])

    def dark(self, times: ArrayLike) -> Bools:
        """Whether the Sun is below the array's limit, shape of `times`."""
        sun = self._between(self._hours, self._sun, times)
        h = np.radians(self.hour_angle_deg(np.degrees(np.arctan2(sun[..., 1], sun[..., 0])), times))
        phi = np.radians(self.site.latitude_deg)
        height = np.sin(phi) * sun[..., 2] + np.cos(phi) * np.hypot(sun[..., 0], sun[..., 1]) * np.cos(h)
        return np.asarray(height < np.sin(np.radians(self.array.limits.sun_altitude_max_deg)))

    def above(self, ra_deg: ArrayLike, dec_deg: ArrayLike, times: ArrayLike) -> Bools:
        """Whether places stand above the altitude limit and every station's horizon."""
        hour_angle = self.hour_angle_deg(ra_deg, times)
        h, d, latitude = np.radians(hour_angle), np.radians(dec_deg), np.radians(self.site.latitude_deg)
        lowest = self.array.limits.altitude_min_deg
        height = np.sin(latitude) * np.sin(d) + np.cos(latitude) * np.cos(d) * np.cos(h)
        holds = height >= np.sin(np.radians(lowest))
        if self.walled:
            altitude, azimuth = altitude_azimuth_deg(hour_angle, dec_deg, self.site.latitude_deg)
            for station in self.walled:
                holds &= altitude >= self.horizon_deg(station, azimuth)
        return np.asarray(holds)

    @staticmethod
    def horizon_deg(station: Station, azimuth_deg: ArrayLike) -> Floats:
        """The horizon's altitude, linear between the points of the mask, shape of `azimuth_deg`."""
        if not station.horizon:
            return np.zeros(np.shape(azimuth_deg))
        azimuths, heights = np.array(sorted(station.horizon)).T
        return np.interp(np.asarray(azimuth_deg, float), azimuths, heights, period=360)

    def moon_clear(self, ra_deg: ArrayLike, dec_deg: ArrayLike, times: ArrayLike) -> Bools:
        """Whether places are far enough from the Moon; it counts while it is below the horizon too."""
        moon = self._between(self.times, self._moon, times)
        toward = unit_vectors(ra_deg, dec_deg)
        cosine = toward[..., 0] * moon[..., 0] + toward[..., 1] * moon[..., 1] + toward[..., 2] * moon[..., 2]
        return np.asarray(cosine <= np.cos(np.radians(self.array.limits.moon_distance_min_deg)))

    def observable(self, ra_deg: ArrayLike, dec_deg: ArrayLike, times: ArrayLike) -> Bools:
        """All conditions but the delay lines."""
        return self.dark(times) & self.above(ra_deg, dec_deg, times) & self.moon_clear(ra_deg, dec_deg, times)


def moment_clock(array: Array, stations: tuple[Station, ...], at: str) -> Clock:
    """The clock of one moment of UTC; raises InputError if it is none."""
    return Clock(array, stations, np.array([parse_utc(at, "at")]))


def span_clock(array: Array, stations: tuple[Station, ...], start: str, end: str) -> Clock:
    """The clock of a span of UTC.

    Raises
    ------
    InputError
        If a time is none, or the span is empty or longer than two days.
    """
    first, last = parse_utc(start, "from"), parse_utc(end, "to")
    if not first <= last <= first + _LONGEST_SPAN_DAY:
        raise InputError(f"to is {end}; it must lie within two days after from, {start}")
    return Clock(array, stations, _even_times(first, last, _step_min(array, stations)))


def night_clock(array: Array, stations: tuple[Station, ...], night: str) -> Clock:
    """The clock of the dark hours that follow the noon of a date at the site.

    Raises
    ------
    InputError
        If the date is none, or the Sun does not go below the array's limit that night.
    """
    if len(night.strip()) > 10:
        raise InputError(f"night is {night!r}; write the date of its evening, such as 2026-12-01")
    longitude = (array.longitude_deg + 180) % 360 - 180
    try:
        noon = parse_utc(night, "night") + 0.5 - longitude / 360
    except InputError as error:
        raise InputError(str(error).replace("UTC as 2026-12-01T22:30:00Z", "a date as 2026-12-01")) from error
    day = Clock(array, stations, noon + np.arange(145, dtype=np.float64) * 10 * _MINUTE_DAY)
    [windows] = find_windows(day.times, day.dark(day.times)[None], lambda _, times: day.dark(times))
    if not windows:
        limit = array.limits.sun_altitude_max_deg
        raise InputError(f"night is {night}; at {array.name} the Sun does not go below {limit:g} deg then")
    start, end = max(windows, key=lambda window: window[1] - window[0])
    return Clock(array, stations, _even_times(start, end, _step_min(array, stations)))


def _walled(array: Array, stations: tuple[Station, ...]) -> list[Station]:
    lowest = array.limits.altitude_min_deg
    return [s for s in stations if max((height for _, height in s.horizon), default=0.0) > lowest]


def _step_min(array: Array, stations: tuple[Station, ...]) -> float:
    return _WALLED_STEP_MIN if _walled(array, stations) else _STEP_MIN


def _even_times(first: float, last: float, step_min: float) -> Floats:
    """Times from first to last, evenly apart, by `step_min` at the most."""
    steps = int(np.ceil((last - first) / (step_min * _MINUTE_DAY) - 1e-6))
    return np.asarray(np.linspace(first, last, steps + 1), dtype=np.float64)
