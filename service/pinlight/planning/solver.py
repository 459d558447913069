"""Placing blocks: which of many possible starts to take, by a constraint solver."""

from collections.abc import Sequence
from dataclasses import dataclass

__all__ = ["Candidate", "choose_blocks", "greedy_blocks"]

# The solver counts in whole numbers: worth 1 is this many.
_UNIT = 100_000


@dataclass(frozen=True)
class Candidate:
    """A block of a request that may start in a slot, how many slots it takes, and what it is worth."""

    request: int
    slot: int
    length: int
    worth: float


def greedy_blocks(candidates: Sequence[Candidate], repeats: Sequence[int]) -> list[Candidate]:
    """What a patient person would do: the worthiest block that still fits, again and again."""
    taken: set[int] = set()
    left = list(repeats)
    chosen = []
    for candidate in sorted(candidates, key=lambda c: (-c.worth, c.slot, c.request)):
        span = range(candidate.slot, candidate.slot + candidate.length)
        if left[candidate.request] and taken.isdisjoint(span):
            taken.update(span)
            left[candidate.request] -= 1
            chosen.append(candidate)
    return chosen


def choose_blocks(
    candidates: Sequence[Candidate], repeats: Sequence[int], slots: int, time_limit_s: float
) -> tuple[list[tuple[int, int]], float, float]:
    """The blocks of greatest total worth: no two overlap, no request more often than it repeats.

    Parameters
    ----------
    candidates : sequence of Candidate
    repeats : sequence of int, one a request
    slots : int
        How many slots the night has.
    time_limit_s : float

    Returns
    -------
    chosen : list of (request, slot)
    objective, bound : float
        The total worth, never below the greedy plan's, and what no plan can exceed.
    """
    if not candidates:
        return [], 0.0, 0.0
    from ortools.sat.python import cp_model  # slow to import

    model = cp_model.CpModel()
    taken = [model.new_bool_var(f"{c.request} at {c.slot}") for c in candidates]
    covering: list[list[int]] = [[] for _ in range(slots + max(c.length for c in candidates))]
    by_request: list[list[int]] = [[] for _ in repeats]
    for index, candidate in enumerate(candidates):
        by_request[candidate.request].append(index)
        for slot in range(candidate.slot, candidate.slot + candidate.length):
            covering[slot].append(index)
    for indices in covering:
        if len(indices) > 1:
            model.add_at_most_one(taken[index] for index in indices)
    for indices, times in zip(by_request, repeats, strict=True):
        model.add(sum(taken[index] for index in indices) <= times)
    worth = [round(candidate.worth * _UNIT) for candidate in candidates]
    model.maximize(sum(w * t for w, t in zip(worth, taken, strict=True)))
    greedy = greedy_blocks(candidates, repeats)
    hinted = {(candidate.request, candidate.slot) for candidate in greedy}
    for candidate, variable in zip(candidates, taken, strict=True):
        model.add_hint(variable, (candidate.request, candidate.slot) in hinted)
    solver = cp_model.CpSolver()
    solver.parameters.max_time_in_seconds = time_limit_s
    solver.parameters.num_workers = 2
    solver.parameters.random_seed = 1
    status = solver.solve(model)
    solved = status in (cp_model.OPTIMAL, cp_model.FEASIBLE)
    found = [c for c, t in zip(candidates, taken, strict=True) if solver.value(t)] if solved else []
    if sum(c.worth for c in found) < sum(c.worth for c in greedy):
        found = greedy
    chosen = sorted(((c.request, c.slot) for c in found), key=lambda pair: pair[1])
    objective = sum(c.worth for c in found)
    bound = solver.best_objective_bound / _UNIT if solved else float(sum(c.worth for c in candidates))
    return chosen, objective, max(bound, objective)
