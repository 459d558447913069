"""Reach: where the stations' delay lines can equalise the paths to all stars of a block."""

from dataclasses import dataclass
from functools import cached_property
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from pinlight.arrays.files import Station
from pinlight.sky.windows import runs

__all__ = ["Choice", "DelayLines", "PairFailure"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Choice:
    """One coarse delay setting a station, and the times at which all stars are in reach with it.

    settings : index into each station's `coarse_paths_m`
    in_reach : shape (T,)
    longest : first and last index of the longest stretch, or None
    """

    settings: tuple[int, ...]
    in_reach: Bools
    longest: tuple[int, int] | None


@dataclass(frozen=True)
class PairFailure:
    """The pair of stations that no coarse setting brings together, and what it lacks at the least. [m]"""

    stations: tuple[str, str]
    short_by_m: float


class DelayLines:
    """The delay lines of chosen stations.

    A star is in reach when max(a_i) <= min(a_i + S_i), a_i = F_i + k_i - w_i: fixed path, coarse
    setting, geometric delay; S_i is the cart's range; everything in optical path. That is one
    condition a pair: c_ij - S_j <= w_i - w_j <= c_ij + S_i, c_ij = F_i + k_i - F_j - k_j.
    """

    def __init__(self, stations: tuple[Station, ...]) -> None:
        self.stations = stations
        self.pairs = list(combinations(range(len(stations)), 2))

    @cached_property
    def _offsets_m(self) -> list[Floats]:
        """c_ij of each pair, shape (settings of i, settings of j)."""
        paths = [s.fixed_path_m + np.asarray(s.coarse_paths_m) for s in self.stations]
        return [paths[i][:, None] - paths[j][None, :] for i, j in self.pairs]

    def with_settings(self, settings: tuple[int, ...], delays_m: Floats) -> Bools:
        """Whether stars are in reach with one coarse setting a station, shape (P, ...) to (...)."""
        return np.asarray((self.lacking_m(settings, delays_m) <= 0).all(axis=0))

    def lacking_m(self, settings: tuple[int, ...], delays_m: Floats) -> Floats:
        """By how much each pair falls short with one coarse setting; not positive where it holds. [m]

        Shape of `delays_m`, (P, ...).
        """
        lacking = []
        for (i, j), offsets, delay in zip(self.pairs, self._offsets_m, delays_m, strict=True):
            offset = offsets[settings[i], settings[j]]
            lacking.append(
                np.maximum(offset - self.stations[j].cart_m - delay, delay - offset - self.stations[i].cart_m)
            )
        return np.stack(lacking)

    def _pair_masks(self, delays_m: Floats, allowed: Bools) -> list[list[list[int]]]:
        """Times, as the bits of an integer, at which a pair holds with each of its settings."""
        low, high = delays_m.min(axis=1), delays_m.max(axis=1)  # over the stars: (P, T)
        masks = []
        for index, (i, j) in enumerate(self.pairs):
            offset = self._offsets_m[index][:, :, None]
            holds = (low[index] >= offset - self.stations[j].cart_m) & (
                high[index] <= offset + self.stations[i].cart_m
            )
            packed = np.packbits(holds & allowed, axis=-1, bitorder="little")
            masks.append([[int.from_bytes(bits.tobytes(), "little") for bits in row] for row in packed])
        return masks

    def choices(self, delays_m: Floats, allowed: Bools, most: int = 1) -> list[Choice]:
        """The coarse settings under which all of some stars are in reach together, longest stretch first.

        Parameters
        ----------
        delays_m : array, shape (P, N, T)
            w_i - w_j of every pair of `pairs`, for N stars at T times.
        allowed : array of bool, shape (T,)
            Times that count at all.
        most : int
            How many to return; the first is never worse than any other.

        Returns
        -------
        choices : list
            Empty if no setting serves at any time; no two with the same times. Every setting is
            looked at, by a search that drops a branch once it cannot beat the worst of the best `most`.
        """
        count = len(allowed)
        masks = self._pair_masks(delays_m, allowed)
        at = {pair: index for index, pair in enumerate(self.pairs)}
        everything = int.from_bytes(np.packbits(allowed, bitorder="little").tobytes(), "little")
        found: list[tuple[int, tuple[int, ...], int]] = []

        def search(chosen: tuple[int, ...], mask: int) -> None:
            station = len(chosen)
            if station == len(self.stations):
                length = _longest_run(mask)
                if length and all(mask != other for _, _, other in found):
                    found.append((-length, chosen, mask))
                    found.sort()
                    del found[most:]
                return
            for setting in range(len(self.stations[station].coarse_paths_m)):
                narrowed = mask
                for earlier, earlier_setting in enumerate(chosen):
                    narrowed &= masks[at[earlier, station]][earlier_setting][setting]
                needed = -found[-1][0] if len(found) == most else 0
                if narrowed.bit_count() > needed:
                    search((*chosen, setting), narrowed)

        search((), everything)
        return [self._choice(settings, mask, count) for _, settings, mask in found]

    @staticmethod
    def _choice(settings: tuple[int, ...], mask: int, count: int) -> Choice:
        packed = np.frombuffer(mask.to_bytes((count + 7) // 8, "little"), dtype=np.uint8)
        in_reach = np.unpackbits(packed, bitorder="little")[:count].astype(bool)
        longest = max(runs(in_reach), key=lambda run: run[1] - run[0], default=None)
        return Choice(settings, in_reach, longest)

    def worst_pair(self, delays_m: Floats) -> PairFailure | None:
        """The pair that keeps stars out of reach, None if each pair alone can hold at some time.

        Parameters
        ----------
        delays_m : array, shape (P, N, T)
        """
        low, high = delays_m.min(axis=1), delays_m.max(axis=1)
        failures = []
        for index, (i, j) in enumerate(self.pairs):
            offset = self._offsets_m[index][:, :, None]
            lacking = np.maximum(
                offset - self.stations[j].cart_m - low[index], high[index] - offset - self.stations[i].cart_m
            ).min()
            if lacking > 0:
                names = (self.stations[i].name, self.stations[j].name)
                failures.append(PairFailure(names, float(lacking)))
        return max(failures, key=lambda failure: failure.short_by_m, default=None)


def _longest_run(mask: int) -> int:
    """Length of the longest run of set bits.

    >>> _longest_run(0b1101110)
    3
    """
    length = 0
    while mask:
        mask &= mask << 1
        length += 1
    return length
