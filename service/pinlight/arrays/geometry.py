"""Baselines between stations, and their parts across and toward a star."""

from dataclasses import dataclass
from itertools import combinations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.arrays.files import Station

__all__ = ["Baseline", "baselines", "equatorial_m", "project_uvw_m"]

Floats = NDArray[np.float64]


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


def equatorial_m(stations: tuple[Station, ...], latitude_deg: float) -> Floats:
    """Stations' places in the equatorial frame: x toward the meridian, y east, z north. [m]

    Returns
    -------
    xyz_m : array, shape (S, 3)

    Notes
    -----
    X = -N sin phi + U cos phi, Y = E, Z = N cos phi + U sin phi. Thompson, Moran & Swenson (2017),
    Interferometry and Synthesis in Radio Astronomy, 3rd ed., sec. 4.1.
    """
    east, north, up = np.array([(s.east_m, s.north_m, s.up_m) for s in stations]).T
    phi = np.radians(latitude_deg)
    return np.stack(
        [-north * np.sin(phi) + up * np.cos(phi), east, north * np.cos(phi) + up * np.sin(phi)], axis=-1
    )


def project_uvw_m(xyz_m: Floats, hour_angle_deg: ArrayLike, dec_deg: ArrayLike) -> Floats:
    """Baselines (or stations) turned to face a star: parts east, north and toward it. [m]

    Parameters
    ----------
    xyz_m : array, shape (B, 3)
        Of `equatorial_m`, or differences of its rows.
    hour_angle_deg, dec_deg : array, shape (...)
        Apparent place of date; they broadcast.

    Returns
    -------
    uvw_m : array, shape (..., B, 3)
        Each has the length of its baseline; w is the geometric delay.

    Examples
    --------
    >>> project_uvw_m(np.array([[0.0, 100.0, 0.0]]), 0.0, 20.0).round(9) + 0.0
    array([[100.,   0.,   0.]])

    Notes
    -----
    Thompson, Moran & Swenson (2017), eq. 4.1, left in metres.
    """
    hour_angle, dec = np.broadcast_arrays(np.radians(hour_angle_deg), np.radians(dec_deg))
    sin_h, cos_h, sin_d, cos_d = np.sin(hour_angle), np.cos(hour_angle), np.sin(dec), np.cos(dec)
    turn = np.stack(
        [
            np.stack([sin_h, cos_h, np.zeros_like(sin_h)], axis=-1),
            np.stack([-sin_d * cos_h, sin_d * sin_h, cos_d], axis=-1),
            np.stack([cos_d * cos_h, -cos_d * sin_h, sin_d], axis=-1),
        ],
        axis=-2,
    )
    return np.einsum("...ij,bj->...bi", turn, xyz_m)
