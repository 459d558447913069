from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from pinlight.sky.windows import EDGE_S, find_windows, runs


@given(st.lists(st.booleans(), max_size=60))
def test_runs_cover_what_holds_and_nothing_else(values):
    holds = np.array(values, dtype=bool)
    found = runs(holds)
    covered = np.zeros(len(values), dtype=bool)
    for first, last in found:
        covered[first : last + 1] = True
    assert (covered == holds).all()
    assert all(b[0] - a[1] >= 2 for a, b in pairwise(found))


@given(st.lists(st.floats(0.02, 0.98), min_size=2, max_size=2, unique=True), st.integers(12, 80))
def test_edges_are_found_to_ten_seconds(edges, steps):
    low, high = sorted(edges)
    times = np.linspace(0.0, 1.0, steps)

    def test(_, when):
        return (when >= low) & (when <= high)

    [windows] = find_windows(times, test(None, times)[None], test)
    if windows:
        [(start, end)] = windows
        assert 0 <= start - low < 10 / 86_400
        assert 0 <= high - end < 10 / 86_400
    else:
        assert high - low < times[1]
    assert EDGE_S <= 10
