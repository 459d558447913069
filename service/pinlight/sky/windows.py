"""Windows: the stretches of time where a condition holds, with their edges found finely."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

__all__ = ["EDGE_S", "Window", "find_windows", "runs"]

Window = tuple[float, float]  # start and end, mjd_tai
EDGE_S = 5.0
_DAY_S = 86_400.0


def runs(holds: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First and last index of each stretch of True.

    >>> runs(np.array([True, True, False, True]))
    [(0, 1), (3, 3)]
    """
    padded = np.concatenate([[False], holds, [False]]).astype(np.int8)
    change = np.diff(padded)
    ends = np.flatnonzero(change == -1) - 1
    return list(zip(np.flatnonzero(change == 1).tolist(), ends.tolist(), strict=True))


def find_windows(
    times: NDArray[np.float64],
    holds: NDArray[np.bool_],
    test: Callable[[NDArray[np.int64], NDArray[np.float64]], NDArray[np.bool_]],
) -> list[list[Window]]:
    """The windows of N stars whose condition is known on a grid, with edges bisected to `EDGE_S`.

    Parameters
    ----------
    times : array, shape (T,)
        Increasing, mjd_tai.
    holds : array of bool, shape (N, T)
        The condition on the grid. What holds for less than a step may go unseen.
    test : function of rows and times, both shape (E,)
        The condition anywhere, for many edges at once.

    Returns
    -------
    windows : list of N lists of (start, end)
        Edges inside the grid lie on the side where the condition holds.
    """
    found: list[list[list[float]]] = []
    edges: list[tuple[int, list[float], int, float]] = []  # row, window, which end, the time outside
    for row, line in enumerate(holds):
        windows = []
        for first, last in runs(line):
            window = [float(times[first]), float(times[last])]
            if first > 0:
                edges.append((row, window, 0, float(times[first - 1])))
            if last < len(times) - 1:
                edges.append((row, window, 1, float(times[last + 1])))
            windows.append(window)
        found.append(windows)
    if edges:
        rows = np.array([row for row, _, _, _ in edges])
        inside = np.array([window[end] for _, window, end, _ in edges])
        outside = np.array([time for _, _, _, time in edges])
        while np.abs(inside - outside).max() * _DAY_S > EDGE_S:
            middle = (inside + outside) / 2
            good = test(rows, middle)
            inside, outside = np.where(good, middle, inside), np.where(good, outside, middle)
        for (_, window, end, _), time in zip(edges, inside.tolist(), strict=True):
            window[end] = time
    return [[(start, end) for start, end in windows] for windows in found]
