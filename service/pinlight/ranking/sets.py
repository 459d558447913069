"""Sets of calibrators: ordinary kriging of the transfer function, and the best set of each size."""

from collections.abc import Callable
from functools import lru_cache
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from pinlight.sky.positions import separation_deg

__all__ = [
    "LARGEST_SET",
    "best_subsets",
    "field_covariance",
    "kriging_variance",
    "subset_variances",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

LARGEST_SET = 4
_BATCH = 256  # subsets asked for at a time whether they are possible
_CHUNK = 8192  # subsets at a time: their arrays then stay in the processor's cache


def field_covariance(
    spread: float, time_min: float, angle_deg: float, times_min: Floats, ra_deg: Floats, dec_deg: Floats
) -> Floats:
    """Covariance of ln T^2 between looks: s^2 exp(-|dt|/tau) exp(-psi/psi0).

    Parameters
    ----------
    spread, time_min, angle_deg : float
        The array's drift.
    times_min, ra_deg, dec_deg : array, shape (K,)
        When and where each look is.

    Returns
    -------
    covariance : array, shape (K, K)
    """
    apart = separation_deg(ra_deg[:, None], dec_deg[:, None], ra_deg[None, :], dec_deg[None, :])
    lag = np.abs(times_min[:, None] - times_min[None, :])
    return spread**2 * np.exp(-lag / time_min - apart / angle_deg)


def kriging_variance(covariance: Floats, to_target: Floats, sill: float) -> tuple[Floats, Floats]:
    """Variance and weights of the best linear unbiased estimate at the target's look.

    Parameters
    ----------
    covariance : array, shape (..., K, K)
        Of what the looks show: the field's covariance plus that of the looks' own errors.
    to_target : array, shape (..., K)
        Covariance of the field between each look and the target's.
    sill : float
        The field's own variance, s^2.

    Returns
    -------
    variance : array, shape (...)
    weights : array, shape (..., K)
        They add up to 1: the field's mean is not known.

    Notes
    -----
    Ordinary kriging, Cressie (1993), Statistics for Spatial Data, rev. ed., eq. 3.2.12-3.2.16:
    with A the covariance and c the vector to the target, the variance is
    s^2 - c' A^-1 c + (1 - 1' A^-1 c)^2 / (1' A^-1 1).
    """
    ones = np.ones_like(to_target)
    solved = np.linalg.solve(covariance, np.stack([ones, to_target], axis=-1))
    by_one, by_target = solved[..., 0], solved[..., 1]
    multiplier = (1 - by_target.sum(axis=-1)) / by_one.sum(axis=-1)
    weights = by_target + by_one * multiplier[..., None]
    variance = sill - (to_target * by_target).sum(axis=-1) + multiplier * (1 - by_target.sum(axis=-1))
    return np.maximum(variance, 0.0), weights


def subset_variances(
    same_side: Floats, other_side: Floats, to_target: Floats, sill: float, subsets: NDArray[np.int64]
) -> Floats:
    """Kriging variance of many subsets at once, their looks half before and half after the target's.

    Parameters
    ----------
    same_side, other_side : array, shape (M, M)
        Covariance of what the looks show, of two looks on the same side of the target's in time and
        on opposite sides.
    to_target : array, shape (M,)
    sill : float
    subsets : array of int, shape (N, K)

    Returns
    -------
    variances : array, shape (N,)
        With the best way of sharing each subset out between the two sides; past four looks they
        alternate in the order given.

    Notes
    -----
    A Cholesky factor of each K by K block, one array an element: ten times as fast as a batched solver
    for such small blocks. With L z = 1 and L y = c the variance is
    s^2 - y.y + (1 - z.y)^2 / z.z.
    """
    size = subsets.shape[1]
    sides = _HALVES.get(size, [tuple(look % 2 for look in range(size))])
    variances = np.empty(len(subsets))
    for start in range(0, len(subsets), _CHUNK):
        chunk = subsets[start : start + _CHUNK]
        ways = [_one_way(same_side, other_side, to_target, sill, chunk, side) for side in sides]
        variances[start : start + _CHUNK] = np.min(ways, axis=0)
    return variances


# Which side each look of a subset may be on, up to turning all of them around.
_HALVES: dict[int, list[tuple[int, ...]]] = {
    1: [(0,)],
    2: [(0, 1)],
    3: [(0, 1, 1), (1, 0, 1), (1, 1, 0)],
    4: [(0, 0, 1, 1), (0, 1, 0, 1), (0, 1, 1, 0)],
}


def _one_way(
    same_side: Floats,
    other_side: Floats,
    to_target: Floats,
    sill: float,
    subsets: NDArray[np.int64],
    sides: tuple[int, ...],
) -> Floats:
    """The variances with the looks on the given sides."""
    members = np.ascontiguousarray(subsets.T)
    factor: list[list[Floats]] = []
    z: list[Floats] = []
    y: list[Floats] = []
    for i, side in enumerate(sides):
        row: list[Floats] = []
        for j in range(i + 1):
            covariance = same_side if sides[j] == side else other_side
            value = covariance.take(members[i] * len(to_target) + members[j])
            for k in range(j):
                value -= row[k] * (factor[j][k] if j < i else row[k])
            row.append(np.sqrt(np.maximum(value, 1e-300)) if j == i else value / factor[j][j])
        factor.append(row)
        one, target = np.ones(len(subsets)), to_target.take(members[i])
        for k in range(i):
            one -= row[k] * z[k]
            target -= row[k] * y[k]
        z.append(one / row[i])
        y.append(target / row[i])

    def dot(p: list[Floats], q: list[Floats]) -> Floats:
        return sum((a * b for a, b in zip(p, q, strict=True)), np.zeros(len(subsets)))

    return np.maximum(sill - dot(y, y) + (1 - dot(z, y)) ** 2 / dot(z, z), 0.0)


@lru_cache(maxsize=16)
def _all_subsets(count: int, size: int) -> NDArray[np.int64]:
    subsets = np.array(list(combinations(range(count), size)), dtype=np.int64)
    subsets.flags.writeable = False
    return subsets


def best_subsets(
    same_side: Floats,
    other_side: Floats,
    to_target: Floats,
    sill: float,
    largest: int = LARGEST_SET,
    possible: Callable[[NDArray[np.int64]], Bools] | None = None,
) -> list[tuple[tuple[int, ...], float]]:
    """The best subset of each size from 1, by trying all of them: members and variance.

    Parameters as of `subset_variances`, and `possible`, a function that tells of subsets, shape (N, K),
    which can be looked at together, shape (N,); what holds of a set holds of its parts. A size without
    any such subset is left out. Members stand in the order of the rows.
    """
    count = len(to_target)
    best = []
    pairs: Bools | None = None
    for size in range(1, min(largest, count) + 1):
        subsets = _all_subsets(count, size)
        variances = subset_variances(same_side, other_side, to_target, sill, subsets)
        winner = int(variances.argmin())
        if possible is not None and size > 1 and not possible(subsets[[winner]])[0]:
            if pairs is None:
                pairs = _pairs_possible(count, possible)
            left = np.flatnonzero(
                np.all([pairs[subsets[:, i], subsets[:, j]] for i, j in combinations(range(size), 2)], axis=0)
            )
            left = left[np.argsort(variances[left], kind="stable")]
            batches = (left[start : start + _BATCH] for start in range(0, len(left), _BATCH))
            found = (batch[possible(subsets[batch])] for batch in batches)
            first = next((int(batch[0]) for batch in found if len(batch)), None)
            if first is None:
                break
            winner = first
        best.append((tuple(int(member) for member in subsets[winner]), float(variances[winner])))
    return best


def _pairs_possible(count: int, possible: Callable[[NDArray[np.int64]], Bools]) -> Bools:
    """Which pairs of some looks are possible together, shape (M, M)."""
    together = np.zeros((count, count), dtype=bool)
    pairs = _all_subsets(count, 2)
    together[tuple(pairs.T)] = possible(pairs)
    return together
