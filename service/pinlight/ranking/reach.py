"""Which stars an array can look at together with the target, when, and with what baselines."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from pinlight.ranking.clock import Clock
from pinlight.ranking.columns import StarColumns
from pinlight.ranking.target import Target
from pinlight.sky.windows import Window, find_windows

__all__ = ["StarsReach", "TargetReach", "reach_of_target"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

# Parts of a star's time in reach at which its baselines are taken: to find the best, and of the best.
_FEW_MOMENTS = (0.2, 0.8)
_MOMENTS = (0.0, 0.25, 0.5, 0.75, 1.0)
_LONG = 36  # times; three hours
_CHUNK = 64  # stars whose longest stretches are sought at a time


@dataclass(frozen=True)
class StarsReach:
    """Reach of N stars together with the target.

    up : shape (N,), observable at some time when the target is
    times : shape (N, T), in reach together with the target
    baselines_m : shape (N, M), projected baselines of all pairs at the moments of the star's times
    settings : shape (N, stations), the coarse settings that the times are under; None where they are
        those under any settings
    """

    up: Bools
    times: Bools
    baselines_m: Floats
    settings: Ints | None = None

    def only(self, which: Bools | Ints) -> "StarsReach":
        """The same of some of the stars."""
        settings = None if self.settings is None else self.settings[which]
        return StarsReach(self.up[which], self.times[which], self.baselines_m[which], settings)


@dataclass(frozen=True)
class TargetReach:
    """When the target can be observed and with which coarse settings.

    place : apparent right ascension and declination of date, each shape ()
    observable : shape (T,), all conditions but the delay lines
    delays_m : shape (P, T)
    settings : the coarse settings that keep it in reach for longest, None if none ever do
    """

    clock: Clock
    place: tuple[Floats, Floats]
    observable: Bools
    delays_m: Floats
    settings: tuple[int, ...] | None

    def stars(self, columns: StarColumns, rows: Ints) -> StarsReach:
        """When some stars are in reach together with the target, under any settings.

        Of a long span every third time is looked at: what is shorter holds no block.
        """
        lines = self.clock.delay_lines
        every = 3 if len(self.clock.times) > _LONG else 1
        observable, delays = self._together(columns, rows, every)
        star, when = np.nonzero(observable)
        theirs, its = delays[:, star, when], self.delays_m[:, ::every][:, when]
        times = np.zeros_like(observable)
        times[star, when] = lines.settings_for(np.minimum(theirs, its), np.maximum(theirs, its))[1]
        baselines_m = self._baselines_m(times, delays, _FEW_MOMENTS)
        return StarsReach(np.asarray(observable.any(axis=1)), times, baselines_m)

    def longest(self, columns: StarColumns, rows: Ints) -> StarsReach:
        """The same under those settings, a star, that keep it and the target in reach for longest."""
        lines = self.clock.delay_lines
        observable, delays = self._together(columns, rows)
        low = np.minimum(delays, self.delays_m[:, None])
        high = np.maximum(delays, self.delays_m[:, None])
        chunks = [slice(start, start + _CHUNK) for start in range(0, max(len(rows), 1), _CHUNK)]
        found = [lines.longest(low[:, chunk], high[:, chunk], observable[chunk]).settings for chunk in chunks]
        settings = np.concatenate(found)
        each = settings.T[:, :, None]
        times = observable & lines.with_settings(each, low) & lines.with_settings(each, high)
        baselines_m = self._baselines_m(times, delays, _MOMENTS)
        return StarsReach(np.asarray(observable.any(axis=1)), times, baselines_m, settings)

    def ever_together(self, columns: StarColumns, rows: Ints, sets: Ints) -> Bools:
        """Whether some sets of stars share a moment and a coarse setting, with the target too.

        Parameters
        ----------
        rows : array, shape (N,)
        sets : array, shape (S, K)
            Which of the rows each set is.

        Returns
        -------
        together : array of bool, shape (S,)
        """
        used, sets = np.unique(sets, return_inverse=True)
        observable, delays = self._together(columns, rows[used])
        together = np.zeros(len(sets), dtype=bool)
        one, when = np.nonzero(observable[sets].all(axis=1))
        all_delays = np.concatenate(
            [delays[:, sets[one], when[:, None]], self.delays_m[:, when][..., None]], axis=-1
        )
        served = self.clock.delay_lines.settings_for(all_delays.min(axis=-1), all_delays.max(axis=-1))[1]
        together[one[served]] = True
        return together

    def _together(self, columns: StarColumns, rows: Ints, every: int = 1) -> tuple[Bools, Floats]:
        """When stars and target are observable, the delay lines aside, and the stars' delays."""
        times = self.clock.times[::every]
        ra, dec = (angle[:, None] for angle in self._places(columns, rows))
        observable = self.clock.observable(ra, dec, times) & self.observable[::every]
        return observable, self.clock.delays_m(ra, dec, times)

    def _baselines_m(self, times: Bools, delays_m: Floats, parts: tuple[float, ...]) -> Floats:
        """Projected lengths of all pairs at the moments of each star's times, shape (N, M)."""
        counts = times.cumsum(axis=1)
        moments = [(counts >= np.maximum(1, np.ceil(part * counts[:, -1:]))).argmax(axis=1) for part in parts]
        if times.shape[1] == 1:
            moments = moments[:1]
        delays_then = delays_m[:, np.arange(len(times))[:, None], np.stack(moments, axis=1)]
        squares = self.clock.baseline_lengths_m[:, None, None] ** 2 - delays_then**2
        projected = np.sqrt(np.maximum(squares, 0.0)).transpose(1, 2, 0)
        return projected.reshape(len(times), projected.shape[1] * projected.shape[2])

    def _places(self, columns: StarColumns, rows: Ints) -> tuple[Floats, Floats]:
        pm_ra, pm_dec, parallax, velocity = columns.motion(rows)
        return self.clock.apparent(
            columns.ra_deg[rows], columns.dec_deg[rows], (pm_ra, pm_dec, parallax, velocity)
        )

    def windows(self, columns: StarColumns, rows: Ints, settings: Ints) -> list[list[Window]]:
        """Each star's windows together with the target under its settings, edges to 10 s.

        Settings, shape (N, stations).
        """
        ra, dec = self._places(columns, rows)
        clock = self.clock

        def holds(star_ra: Floats, star_dec: Floats, setting: Ints, when: Floats) -> Bools:
            good = clock.observable(*self.place, when) & clock.observable(star_ra, star_dec, when)
            for place in (self.place, (star_ra, star_dec)):
                good &= clock.delay_lines.with_settings(setting, clock.delays_m(*place, when))
            return good

        def test(which: Ints, when: Floats) -> Bools:
            return holds(ra[which], dec[which], settings[which].T, when)

        on_grid = holds(ra[:, None], dec[:, None], settings.T[..., None], clock.fine_times)
        return find_windows(clock.fine_times, on_grid, test)

    @cached_property
    def target_windows(self) -> list[Window]:
        """The target's own windows under its settings, edges to 10 s."""
        if self.settings is None:
            return []
        clock, settings = self.clock, self.settings

        def test(_: object, when: Floats) -> Bools:
            in_reach = clock.delay_lines.with_settings(settings, clock.delays_m(*self.place, when))
            return clock.observable(*self.place, when) & in_reach

        return find_windows(clock.fine_times, test(None, clock.fine_times)[None], test)[0]

    @property
    def why_not(self) -> str | None:
        """Why the target has no window at all, None if it has one."""
        if self.settings is not None:
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
        delays = self.delays_m[:, self.observable]
        failure = clock.delay_lines.shortfall(delays, delays)
        pair = " and ".join(failure.stations)
        return f"no coarse setting brings the delay lines together: {pair} lack {failure.short_by_m:.1f} m"


def reach_of_target(clock: Clock, target: Target) -> TargetReach:
    """When and how an array reaches a target."""
    place = clock.apparent(target.ra_deg, target.dec_deg, target.motion)
    observable = clock.observable(*place, clock.times)
    delays = clock.delays_m(*place, clock.times)
    found = clock.delay_lines.longest(delays[:, None], delays[:, None], observable[None])
    settings = tuple(found.settings[0].tolist()) if found.length[0] else None
    return TargetReach(clock, place, observable, delays, settings)
