"""Baselines between stations."""

from dataclasses import dataclass
from itertools import combinations

import numpy as np

from pinlight.arrays.files import Station

__all__ = ["Baseline", "baselines"]


@dataclass(frozen=True)
class Baseline:
    """A pair of stations and the distance between them, its greatest projected length. [m]"""

    stations: tuple[str, str]
    length_m: float


def baselines(stations: tuple[Station, ...]) -> tuple[Baseline, ...]:
    """All pairs of the stations, longest first."""
    pairs = [
        Baseline(
            (a.name, b.name),
            float(np.hypot(np.hypot(b.east_m - a.east_m, b.north_m - a.north_m), b.up_m - a.up_m)),
        )
        for a, b in combinations(stations, 2)
    ]
    return tuple(sorted(pairs, key=lambda pair: -pair.length_m))
