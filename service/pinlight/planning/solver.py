"""Placing blocks: which of many possible starts to take, by a constraint solver."""

from bisect import bisect_left
from collections.abc import Sequence
from dataclasses import dataclass

__all__ = ["Candidate", "choose_blocks", "greedy_blocks"]

# The solver counts in whole numbers: worth 1 is this many.
_UNIT = 100_000


@dataclass(frozen=True)
class Candidate:
    """A block of a request: the minutes when it may start and how many it takes, and what it is worth."""

    request: int
    start: int
    length: int
    worth: float


def greedy_blocks(candidates: Sequence[Candidate], repeats: Sequence[int]) -> list[Candidate]:
    """What a patient person would do: the worthiest block that still fits, again and again."""
    left = list(repeats)
    chosen: list[Candidate] = []
    for one in sorted(candidates, key=lambda c: (-c.worth, c.start, c.request)):
        free = all(one.start + one.length <= c.start or c.start + c.length <= one.start for c in chosen)
        if left[one.request] and free:
            left[one.request] -= 1
            chosen.append(one)
    return chosen


def choose_blocks(
    candidates: Sequence[Candidate], repeats: Sequence[int], time_limit_s: float
) -> tuple[list[tuple[int, int]], float, float]:
    """The blocks of greatest total worth: no two overlap, no request more often than it repeats.

    Parameters
    ----------
    candidates : sequence of Candidate
    repeats : sequence of int, one a request
    time_limit_s : float

    Returns
    -------
    chosen : list of (request, start)
    objective, bound : float
        The total worth, never below the greedy plan's, and what no plan can exceed.
    """
    if not candidates:
        return [], 0.0, 0.0
    from ortools.sat.python import cp_model  # slow to import

    model = cp_model.CpModel()
    taken = [model.new_bool_var(f"{c.request} at {c.start}") for c in candidates]
    # Of two blocks that overlap the later one's start lies in both: one condition a start is enough.
    starts = sorted({candidate.start for candidate in candidates})
    covering: list[list[int]] = [[] for _ in starts]
    by_request: list[list[int]] = [[] for _ in repeats]
    for index, candidate in enumerate(candidates):
        by_request[candidate.request].append(index)
        first = bisect_left(starts, candidate.start)
        for place in range(first, bisect_left(starts, candidate.start + candidate.length)):
            covering[place].append(index)
    for indices in covering:
        if len(indices) > 1:
            model.add_at_most_one(taken[index] for index in indices)
    for indices, times in zip(by_request, repeats, strict=True):
        model.add(sum(taken[index] for index in indices) <= times)
    worth = [round(candidate.worth * _UNIT) for candidate in candidates]
    model.maximize(sum(w * t for w, t in zip(worth, taken, strict=True)))
    greedy = greedy_blocks(candidates, repeats)
    hinted = {(candidate.request, candidate.start) for candidate in greedy}
    for candidate, variable in zip(candidates, taken, strict=True):
        model.add_hint(variable, (candidate.request, candidate.start) in hinted)
    solver = cp_model.CpSolver()
    solver.parameters.max_time_in_seconds = time_limit_s
    solver.parameters.num_workers = 2
    solver.parameters.random_seed = 1
    status = solver.solve(model)
    solved = status in (cp_model.OPTIMAL, cp_model.FEASIBLE)
    found = [c for c, t in zip(candidates, taken, strict=True) if solver.value(t)] if solved else []
    if sum(c.worth for c in found) < sum(c.worth for c in greedy):
        found = greedy
    chosen = sorted(((c.request, c.start) for c in found), key=lambda pair: pair[1])
    objective = sum(c.worth for c in found)
    bound = solver.best_objective_bound / _UNIT if solved else float(sum(c.worth for c in candidates))
    return chosen, objective, max(bound, objective)
