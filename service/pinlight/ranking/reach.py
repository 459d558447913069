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
_MOMENTS = (0.0, 0.5, 1.0)
_LONG = 18  # times; three hours
_FEWEST = 6  # steps of a short span
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
    times : shape (T,), the clock's from the first to the last that the target can be observed at
    fine_times : shape (F,), the same for windows
    """

    clock: Clock
    place: tuple[Floats, Floats]
    times: Floats
    fine_times: Floats

    def stars(self, columns: StarColumns, rows: Ints) -> StarsReach:
        """When some stars are in reach together with the target, under any settings.

        Of a long span every other time is looked at: what is shorter holds no block.
        """
        lines = self.clock.delay_lines
        observable, delays, its = self._together(columns, rows, 2 if len(self.times) > _LONG else 1)
        star, when = np.nonzero(observable)
        theirs, its = delays[:, star, when], its[:, when]
        times = np.zeros_like(observable)
        times[star, when] = lines.settings_for(np.minimum(theirs, its), np.maximum(theirs, its))[1]
        baselines_m = self._baselines_m(times, delays, _FEW_MOMENTS)
        return StarsReach(np.asarray(observable.any(axis=1)), times, baselines_m)

    def longest(self, columns: StarColumns, rows: Ints) -> StarsReach:
        """The same at the fine times, under those settings, a star, that serve it and the target longest."""
        observable, delays = self._on_fine_times(*self.clock.places(columns, rows))
        settings, times = self._served(delays, delays, observable)
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
        observable, delays, its = self._together(columns, rows[used])
        together = np.zeros(len(sets), dtype=bool)
        one, when = np.nonzero(observable[sets].all(axis=1))
        all_delays = np.concatenate([delays[:, sets[one], when[:, None]], its[:, when][..., None]], axis=-1)
        served = self.clock.delay_lines.settings_for(all_delays.min(axis=-1), all_delays.max(axis=-1))[1]
        together[one[served]] = True
        return together

    def _together(self, columns: StarColumns, rows: Ints, every: int = 1) -> tuple[Bools, Floats, Floats]:
        """When stars and target are observable, the delay lines aside; the stars' delays and the target's.

        Shapes (N, T), (P, N, T) and (P, T).
        """
        clock, times = self.clock, self.times[::every]
        ra, dec = (angle[:, None] for angle in self.clock.places(columns, rows))
        observable = clock.observable(ra, dec, times) & clock.observable(*self.place, times)
        return observable, clock.delays_m(ra, dec, times), clock.delays_m(*self.place, times)

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

    def windows(self, columns: StarColumns, rows: Ints, reach: StarsReach) -> list[list[Window]]:
        """Each star's windows together with the target, edges to 10 s; `reach` is that of `longest`."""
        assert reach.settings is not None
        places = self.clock.places(columns, rows)
        return self._edges(places, np.arange(len(rows))[:, None], reach.settings, reach.times)

    def common_windows(self, columns: StarColumns, sets: list[Ints]) -> tuple[Ints, list[list[Window]]]:
        """The settings that serve sets of stars and the target for longest, and when, edges to 10 s.

        Parameters
        ----------
        sets : list of S arrays
            Rows of the stars of each.

        Returns
        -------
        settings : array, shape (S, stations)
        windows : list of S lists of (start, end)
        """
        rows = np.unique(np.concatenate(sets))
        places = self.clock.places(columns, rows)
        up, delays = self._on_fine_times(*places)
        stars = [rows.searchsorted(one) for one in sets]
        low = np.stack([delays[:, one].min(axis=1) for one in stars], axis=1)
        high = np.stack([delays[:, one].max(axis=1) for one in stars], axis=1)
        settings, holds = self._served(low, high, np.stack([up[one].all(axis=0) for one in stars]))
        width = max(len(one) for one in stars)
        filled = np.stack([np.pad(one, (0, width - len(one)), mode="edge") for one in stars])
        return settings, self._edges(places, filled, settings, holds)

    def _on_fine_times(self, ra: Floats, dec: Floats) -> tuple[Bools, Floats]:
        """When places and the target are observable, shape (N, F), and the places' delays, shape (P, N, F)."""
        ra, dec = ra[:, None], dec[:, None]
        return self.clock.observable(ra, dec, self.fine_times) & self._target_up, self.clock.delays_m(
            ra, dec, self.fine_times
        )

    @cached_property
    def _target_up(self) -> Bools:
        return self.clock.observable(*self.place, self.fine_times)

    @cached_property
    def _target_delays_m(self) -> Floats:
        return self.clock.delays_m(*self.place, self.fine_times)[:, None]

    def _served(self, low: Floats, high: Floats, observable: Bools) -> tuple[Ints, Bools]:
        """Settings that serve blocks and the target for longest, shape (B, stations); when they do, (B, F)."""
        lines = self.clock.delay_lines
        low, high = np.minimum(low, self._target_delays_m), np.maximum(high, self._target_delays_m)
        chunks = [slice(start, start + _CHUNK) for start in range(0, max(len(observable), 1), _CHUNK)]
        found = [lines.longest(low[:, some], high[:, some], observable[some]).settings for some in chunks]
        settings = np.concatenate(found)
        each = settings.T[..., None]
        return settings, observable & lines.with_settings(each, low) & lines.with_settings(each, high)

    def _edges(
        self, places: tuple[Floats, Floats], stars: Ints, settings: Ints, holds: Bools
    ) -> list[list[Window]]:
        """Windows of blocks of stars, shape (B, K), under their settings."""
        clock, lines = self.clock, self.clock.delay_lines
        alone = ([angle] * len(stars) for angle in self.place)
        ra, dec = (np.vstack([own, angle[stars].T]) for own, angle in zip(alone, places, strict=True))

        def test(which: Ints, when: Floats) -> Bools:
            up = clock.observable(ra[:, which], dec[:, which], when)
            delays = clock.delays_m(ra[:, which], dec[:, which], when)
            return np.asarray((up & lines.with_settings(settings[which].T, delays)).all(axis=0))

        return find_windows(self.fine_times, holds, test)

    @cached_property
    def _alone(self) -> tuple[Ints, list[Window]]:
        settings, holds = self._served(self._target_delays_m, self._target_delays_m, self._target_up[None])
        nobody = (np.empty(0), np.empty(0))
        [windows] = self._edges(nobody, np.empty((1, 0), dtype=np.int64), settings, holds)
        return settings[0], windows

    @property
    def target_windows(self) -> list[Window]:
        """The target's own windows under its settings, edges to 10 s."""
        return self._alone[1]

    @property
    def settings(self) -> tuple[int, ...] | None:
        """The coarse settings that keep it in reach for longest, None if none ever do."""
        return tuple(self._alone[0].tolist()) if self.target_windows else None

    @property
    def why_not(self) -> str | None:
        """Why the target has no window at all, None if it has one."""
        if self.settings is not None:
            return None
        clock, limits, fine = self.clock, self.clock.array.limits, self.clock.fine_times
        horizons = " and the stations' horizons" if clock.walled else ""
        conditions = {
            f"the Sun is never below {limits.sun_altitude_max_deg:g} deg": clock.dark(fine),
            f"it never rises above {limits.altitude_min_deg:g} deg{horizons}": clock.above(*self.place, fine),
            f"the Moon is always within {limits.moon_distance_min_deg:g} deg": clock.moon_clear(
                *self.place, fine
            ),
        }
        for reason, holds in conditions.items():
            if not holds.any():
                return reason
        observable, delays = clock.observable(*self.place, fine), clock.delays_m(*self.place, fine)
        if not observable.any():
            return "it is never above the altitude limit in darkness and clear of the Moon at once"
        failure = clock.delay_lines.shortfall(delays[:, observable], delays[:, observable])
        pair = " and ".join(failure.stations)
        return f"no coarse setting brings the delay lines together: {pair} lack {failure.short_by_m:.1f} m"


def reach_of_target(clock: Clock, target: Target) -> TargetReach:
    """When and how an array reaches a target."""
    place = clock.apparent(target.ra_deg, target.dec_deg, target.motion)
    fine = clock.fine_times
    observable = np.flatnonzero(clock.observable(*place, fine))
    delays = clock.delays_m(*place, fine[observable])
    when = observable[clock.delay_lines.settings_for(delays, delays)[1]]
    if len(when):  # one time more on either side, for the windows' edges
        fine = fine[max(when[0] - 1, 0) : when[-1] + 2]
    steps = max(round((len(clock.times) - 1) * np.ptp(fine) / max(np.ptp(clock.times), 1e-9)), _FEWEST)
    times = np.linspace(fine[0], fine[-1], steps + 1) if len(fine) > 1 else fine
    return TargetReach(clock, place, times, fine)
