"""Reach: where the stations' delay lines can equalise the paths to all stars of a block."""

from dataclasses import dataclass
from functools import cached_property, reduce
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from pinlight.arrays.files import Station

__all__ = ["TOLERANCE_M", "DelayLines", "Longest", "PairFailure", "coarse_paths_m"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

TOLERANCE_M = 1e-9  # far below a wavelength, far above rounding
_SHORTFALL_STEP_M = 0.01


@dataclass(frozen=True)
class Longest:
    """The longest time that blocks stay in reach under one coarse setting a station.

    settings : shape (B, stations), index into each station's `coarse_paths_m`
    first : shape (B,), the time step where that begins; of several equally long, the earliest
    length : shape (B,), steps in reach; 0 if the block never is, under any settings
    """

    settings: Ints
    first: Ints
    length: Ints


@dataclass(frozen=True)
class PairFailure:
    """The pair of stations that no coarse setting brings together, and what it lacks at the least. [m]"""

    stations: tuple[str, str]
    short_by_m: float


class DelayLines:
    """The delay lines of chosen stations.

    A star is in reach when max(a_i) <= min(a_i + S_i), a_i = F_i + k_i - w_i: fixed path, coarse
    setting, geometric delay; S_i is the cart's range; everything in optical path. That is one
    condition a pair, with paths p_i = F_i + k_i: p_i - p_j - S_j <= w_i - w_j <= p_i - p_j + S_i.
    """

    def __init__(self, stations: tuple[Station, ...]) -> None:
        self.stations = stations
        self.pairs = list(combinations(range(len(stations)), 2))

    @cached_property
    def _order(self) -> list[Ints]:
        """Each station's coarse settings from the shortest path to the longest."""
        return [np.argsort(station.coarse_paths_m, kind="stable") for station in self.stations]

    @cached_property
    def _paths_m(self) -> list[Floats]:
        """Fixed path and coarse setting of each station, from the shortest to the longest."""
        return [
            station.fixed_path_m + np.asarray(station.coarse_paths_m)[order]
            for station, order in zip(self.stations, self._order, strict=True)
        ]

    def with_settings(self, settings: tuple[int, ...] | Ints, delays_m: Floats) -> Bools:
        """Whether stars are in reach with a coarse setting a station: (stations, ...) and (P, ...) to (...)."""
        return np.asarray((self.lacking_m(settings, delays_m) <= TOLERANCE_M).all(axis=0))

    def lacking_m(self, settings: tuple[int, ...] | Ints, delays_m: Floats) -> Floats:
        """By how much each pair falls short with a coarse setting a station; not positive where it holds. [m]

        Settings, shape (stations, ...), broadcast with the delays, shape (P, ...).
        """
        paths = [
            station.fixed_path_m + np.asarray(station.coarse_paths_m)[setting]
            for station, setting in zip(self.stations, settings, strict=True)
        ]
        lacking = []
        for (i, j), delay in zip(self.pairs, delays_m, strict=True):
            offset = paths[i] - paths[j]
            lacking.append(
                np.maximum(offset - self.stations[j].cart_m - delay, delay - offset - self.stations[i].cart_m)
            )
        return np.stack(lacking)

    def settings_for(self, low_m: Floats, high_m: Floats, slack_m: float = 0.0) -> tuple[Ints, Bools]:
        """Coarse settings under which blocks stay in reach, those of the shortest paths.

        Parameters
        ----------
        low_m, high_m : array, shape (P, B)
            The least and the greatest w_i - w_j of each pair, over the stars and times of a block.
        slack_m : float
            What every cart is longer by.

        Returns
        -------
        settings : array, shape (stations, B)
            Index into each station's `coarse_paths_m`.
        served : array, shape (B,)
            Whether those settings serve. If not, none do.

        Notes
        -----
        Each condition bounds one path from below by another: p_i >= p_j + need_ij. Starting with all paths
        at their shortest, whatever breaks a bound is lengthened to the next setting that keeps it, until
        none is broken or no setting is left. No path is ever longer than any solution needs, so that what
        stands at the end is the solution of shortest paths (the least fixed point of these bounds).
        """
        carts = [station.cart_m + slack_m for station in self.stations]
        needs: dict[tuple[int, int], Floats] = {}
        for (i, j), low, high in zip(self.pairs, low_m, high_m, strict=True):
            needs[i, j], needs[j, i] = high - carts[i], -low - carts[j]
        blocks = low_m.shape[1]
        chosen = np.zeros((len(self.stations), blocks), dtype=np.int64)
        served = np.ones(blocks, dtype=bool)
        moving = np.arange(blocks)
        while len(moving):
            path = [paths[index] for paths, index in zip(self._paths_m, chosen[:, moving], strict=True)]
            moved = np.zeros(len(moving), dtype=bool)
            alive = np.ones(len(moving), dtype=bool)
            for i, paths in enumerate(self._paths_m):
                bounds = (path[j] + needs[i, j] for j in range(len(path)) if j != i)
                needed = reduce(np.maximum, bounds) - TOLERANCE_M / 2
                short = np.flatnonzero(path[i] < needed)
                longer = paths.searchsorted(needed[short])
                out = longer == len(paths)
                alive[short[out]] = False
                short, longer = short[~out], longer[~out]
                moved[short] = True
                chosen[i, moving[short]] = longer
                path[i][short] = paths[longer]
            served[moving[~alive]] = False
            keep = moved & alive
            moving = moving[keep]
            needs = {pair: need[keep] for pair, need in needs.items()}
        return np.stack([order[index] for order, index in zip(self._order, chosen, strict=True)]), served

    def longest(self, low_m: Floats, high_m: Floats, allowed: Bools) -> Longest:
        """The coarse settings that keep blocks in reach for the longest stretch of time.

        Parameters
        ----------
        low_m, high_m : array, shape (P, B, T)
            The least and the greatest w_i - w_j of each pair over a block's stars, at T times.
        allowed : array of bool, shape (B, T)
            Times that count at all.

        Returns
        -------
        Longest
            No settings serve for longer: a length is tried at every start, and lengths are halved in on,
            since a stretch that can be served can be served in part.
        """
        blocks = len(allowed)
        lows, highs = [low_m], [high_m]  # over 1, 2, 4, ... times from each
        runs_to = _run_lengths(allowed)  # how many allowed times begin with each
        length, most = np.zeros(blocks, dtype=np.int64), runs_to.max(axis=1, initial=0)
        while 2 ** len(lows) <= most.max(initial=0):
            half = 2 ** (len(lows) - 1)
            lows.append(np.minimum(lows[-1][..., :-half], lows[-1][..., half:]))
            highs.append(np.maximum(highs[-1][..., :-half], highs[-1][..., half:]))
        first = np.zeros(blocks, dtype=np.int64)
        settings = np.zeros((len(self.stations), blocks), dtype=np.int64)
        block, start = np.nonzero(allowed)  # the starts that may still be good
        while (length < most).any():
            tried = (length + most + 1) // 2
            fits = (runs_to[block, start] >= tried[block]) & (length < most)[block]
            some = np.flatnonzero(fits)
            low = np.empty((len(self.pairs), len(some)))
            high = np.empty_like(low)
            level = np.log2(np.maximum(tried, 1)).astype(np.int64)[block[some]]
            for one in np.unique(level):  # two overlapping powers of two cover a stretch
                where = np.flatnonzero(level == one)
                who, begin = block[some[where]], start[some[where]]
                end = begin + tried[who] - 2**one
                low[:, where] = np.minimum(lows[one][:, who, begin], lows[one][:, who, end])
                high[:, where] = np.maximum(highs[one][:, who, begin], highs[one][:, who, end])
            found, served = self.settings_for(low, high)
            good = some[served]
            grown, place = np.unique(block[good], return_index=True)
            settings[:, grown], first[grown] = found[:, served][:, place], start[good[place]]
            shrunk = np.setdiff1d(np.flatnonzero(length < most), grown)
            length[grown] = tried[grown]
            most[shrunk] = tried[shrunk] - 1
            keep = ~np.isin(block, grown)
            keep[good] = True
            block, start = block[keep], start[keep]
        return Longest(settings.T, first, length)

    def shortfall(self, low_m: Floats, high_m: Floats) -> PairFailure:
        """What keeps a block out of reach: the pair that lacks most, when all carts lack least.

        Parameters
        ----------
        low_m, high_m : array, shape (P, T)
            The least and the greatest w_i - w_j of each pair over the block's stars, at T times.

        Returns
        -------
        PairFailure
            With the metres that the carts would have to grow for some settings to serve at some time.
        """
        enough, too_little = 1.0, 0.0
        while not self.settings_for(low_m, high_m, enough)[1].any():
            enough, too_little = 2 * enough, enough
        while enough - too_little > _SHORTFALL_STEP_M:
            middle = (enough + too_little) / 2
            if self.settings_for(low_m, high_m, middle)[1].any():
                enough = middle
            else:
                too_little = middle
        settings, served = self.settings_for(low_m, high_m, enough)
        when = int(np.flatnonzero(served)[0])
        both = np.stack([low_m[:, when], high_m[:, when]], axis=1)
        lacking = self.lacking_m(settings[:, [when]], both).max(axis=1)
        i, j = self.pairs[int(lacking.argmax())]
        return PairFailure((self.stations[i].name, self.stations[j].name), float(lacking.max()))


def coarse_paths_m(stations: tuple[Station, ...], settings: tuple[int, ...]) -> dict[str, float]:
    """The coarse path of each station, by its name."""
    return {s.name: s.coarse_paths_m[setting] for s, setting in zip(stations, settings, strict=True)}


def _run_lengths(holds: Bools) -> Ints:
    """How many True follow one another from each place on, shape of `holds`.

    >>> _run_lengths(np.array([[True, True, False, True]]))
    array([[2, 1, 0, 1]])
    """
    lengths = np.zeros(holds.shape, dtype=np.int64)
    count = np.zeros(len(holds), dtype=np.int64)
    for place in reversed(range(holds.shape[1])):
        count = (count + 1) * holds[:, place]
        lengths[:, place] = count
    return lengths
