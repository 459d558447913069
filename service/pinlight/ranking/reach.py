"""Which stars an array can look at together with the target, when, and with what baselines."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pinlight.arrays.reach import Choice
from pinlight.ranking.clock import Clock
from pinlight.ranking.columns import StarColumns
from pinlight.ranking.target import Target
from pinlight.sky.windows import Window, find_windows

__all__ = ["StarsReach", "TargetReach", "reach_of_target"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Coarse settings looked at, those that give the target its longest windows: the first few for every
# star, the rest for the stars that none of those reaches.
_MOST_CHOICES = 24
_FIRST_CHOICES = 4
# Parts of a star's window at which its baselines are taken.
_MOMENTS = (0.2, 0.8)


@dataclass(frozen=True)
class StarsReach:
    """Reach of N stars together with the target.

    up : shape (N,), observable at some time when the target is
    times : shape (N, T), in reach together with the target, under the setting that gives most
    choice : shape (N,), index into the target's choices
    baselines_m : shape (N, M), projected baselines of all pairs at the moments of the star's window
    """

    up: Bools
    times: Bools
    choice: NDArray[np.int64]
    baselines_m: Floats

    def only(self, which: NDArray[np.bool_] | NDArray[np.int64]) -> "StarsReach":
        """The same of some of the stars."""
        return StarsReach(self.up[which], self.times[which], self.choice[which], self.baselines_m[which])


@dataclass(frozen=True)
class TargetReach:
    """When the target can be observed and with which coarse settings.

    place : apparent right ascension and declination of date, each shape ()
    observable : shape (T,), all conditions but the delay lines
    choices : the coarse settings that give it its longest windows
    """

    clock: Clock
    place: tuple[Floats, Floats]
    observable: Bools
    choices: list[Choice]
    delays_m: Floats  # (P, T)

    def stars(self, columns: StarColumns, rows: NDArray[np.int64]) -> StarsReach:
        """The reach of some stars of an edition."""
        clock, lines = self.clock, self.clock.delay_lines
        ra, dec = self._places(columns, rows)
        observable = clock.observable(ra[:, None], dec[:, None], clock.times) & self.observable
        delays = clock.delays_m(ra[:, None], dec[:, None], clock.times)
        times = np.zeros(observable.shape, dtype=bool)
        choice = np.zeros(len(rows), dtype=np.int64)
        longest = np.zeros(len(rows), dtype=np.int64)
        for index, option in enumerate(self.choices):
            which = np.arange(len(rows)) if index < _FIRST_CHOICES else np.flatnonzero(longest == 0)
            if not len(which):
                break
            together = (
                lines.with_settings(option.settings, delays[:, which]) & observable[which] & option.in_reach
            )
            if index < _FIRST_CHOICES:
                length = _longest_runs(together)
            else:  # of the later choices the first that reaches a star will do
                length = np.asarray(together.any(axis=1), dtype=np.int64)
            better = length > longest[which]
            gained = which[better]
            times[gained], choice[gained], longest[gained] = together[better], index, length[better]
        lengths_m = clock.baseline_lengths_m
        counts = times.cumsum(axis=1)
        moments = [
            (counts >= np.maximum(1, np.ceil(part * counts[:, -1:]))).argmax(axis=1) for part in _MOMENTS
        ]
        if len(clock.times) == 1:
            moments = moments[:1]
        delays_then = delays[:, np.arange(len(rows))[:, None], np.stack(moments, axis=1)]
        squares = lengths_m[:, None, None] ** 2 - delays_then**2
        projected = np.sqrt(np.maximum(squares, 0.0)).transpose(1, 2, 0)
        samples = projected.shape[1] * projected.shape[2]
        up = np.asarray(observable.any(axis=1))
        return StarsReach(up, times, choice, projected.reshape(len(rows), samples))

    def together(self, columns: StarColumns, rows: NDArray[np.int64], choices: NDArray[np.int64]) -> Bools:
        """Which stars are in reach at each time under each of some settings, shape (N, C T)."""
        clock, lines = self.clock, self.clock.delay_lines
        ra, dec = self._places(columns, rows)
        observable = clock.observable(ra[:, None], dec[:, None], clock.times) & self.observable
        delays = clock.delays_m(ra[:, None], dec[:, None], clock.times)
        options = [self.choices[index] for index in choices]
        return np.concatenate(
            [lines.with_settings(one.settings, delays) & observable & one.in_reach for one in options], axis=1
        )

    def _places(self, columns: StarColumns, rows: NDArray[np.int64]) -> tuple[Floats, Floats]:
        pm_ra, pm_dec, parallax, velocity = columns.motion(rows)
        return self.clock.apparent(
            columns.ra_deg[rows], columns.dec_deg[rows], (pm_ra, pm_dec, parallax, velocity)
        )

    def windows(
        self, columns: StarColumns, rows: NDArray[np.int64], times: Bools, choice: NDArray[np.int64]
    ) -> list[list[Window]]:
        """Each star's windows together with the target, edges to 10 s; arrays as `StarsReach` has them."""
        ra, dec = self._places(columns, rows)
        settings = np.array([self.choices[index].settings for index in choice], dtype=np.int64).reshape(
            len(rows), len(self.clock.stations)
        )

        def test(which: NDArray[np.int64], when: Floats) -> Bools:
            good = self._target_holds(when) & self.clock.observable(ra[which], dec[which], when)
            for setting in np.unique(settings[which], axis=0):
                same = (settings[which] == setting).all(axis=1)
                key = tuple(int(index) for index in setting)
                for place_ra, place_dec in ((ra[which][same], dec[which][same]), self.place):
                    delays = self.clock.delays_m(place_ra, place_dec, when[same])
                    good[same] &= self.clock.delay_lines.with_settings(key, delays)
            return good

        return find_windows(self.clock.times, times, test)

    def target_windows(self) -> list[Window]:
        """The target's own windows under the first choice, edges to 10 s."""
        if not self.choices:
            return []
        best = self.choices[0]

        def test(_: NDArray[np.int64], when: Floats) -> Bools:
            delays = self.clock.delays_m(*self.place, when)
            return self._target_holds(when) & self.clock.delay_lines.with_settings(best.settings, delays)

        return find_windows(self.clock.times, best.in_reach[None], test)[0]

    def _target_holds(self, when: Floats) -> Bools:
        return self.clock.observable(*self.place, when)

    @property
    def why_not(self) -> str | None:
        """Why the target has no window at all, None if it has one."""
        if self.choices:
            return None
        clock, limits = self.clock, self.clock.array.limits
        conditions = {
            f"the Sun is never below {limits.sun_altitude_max_deg:g} deg": clock.dark(clock.times),
            f"it never rises above {limits.altitude_min_deg:g} deg": clock.above(*self.place, clock.times),
            f"the Moon is always within {limits.moon_distance_min_deg:g} deg": clock.moon_clear(
                *self.place, clock.times
            ),
        }
        for reason, holds in conditions.items():
            if not holds.any():
                return reason
        if not self.observable.any():
            return "it is never above the altitude limit in darkness and clear of the Moon at once"
        failure = clock.delay_lines.worst_pair(self.delays_m[:, None, self.observable])
        if failure is not None:
            pair = " and ".join(failure.stations)
            return f"the delay lines of {pair} never meet: they lack {failure.short_by_m:.1f} m"
        return "no coarse setting brings all stations' delay lines together at any time"


def reach_of_target(clock: Clock, target: Target) -> TargetReach:
    """When and how an array reaches a target."""
    place = clock.apparent(target.ra_deg, target.dec_deg, target.motion)
    observable = clock.observable(*place, clock.times)
    delays = clock.delays_m(*place, clock.times)
    choices = clock.delay_lines.choices(delays[:, None], observable, _MOST_CHOICES)
    return TargetReach(clock, place, observable, choices, delays)


def _longest_runs(holds: Bools) -> NDArray[np.int64]:
    """Length of the longest run of True in each row."""
    longest = np.zeros(len(holds), dtype=np.int64)
    current = np.zeros(len(holds), dtype=np.int64)
    for column in holds.T:
        current = (current + 1) * column
        np.maximum(longest, current, out=longest)
    return longest
