"""A night of blocks: which targets, when, with which calibrators and coarse delay settings."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.errors import InputError
from pinlight.planning.blocks import Sequence as LookSequence
from pinlight.planning.blocks import StarErrors, best_sequence, look_variances
from pinlight.planning.solver import Candidate, choose_blocks
from pinlight.ranking.budget import TERMS, error_budget, fixed_terms
from pinlight.ranking.clock import Clock
from pinlight.ranking.columns import StarColumns
from pinlight.ranking.rank import rank
from pinlight.ranking.setup import Setup
from pinlight.ranking.target import Target
from pinlight.sky.time import format_utc
from pinlight.version import __version__

__all__ = ["Block", "Look", "NightPlan", "Request", "plan_night"]

Floats = NDArray[np.float64]

_SLOT_MIN = 5.0
_MINUTE_DAY = 1 / 1440
# Coarse settings looked at for each block: those that give its stars their longest common windows.
_SETTINGS = 24
_MOMENTS = 13


@dataclass(frozen=True)
class Request:
    """A target that a night is wanted for.

    `priority` 1 counts most; a block's worth is one over it. `repeats` is how many blocks are wanted.
    `required_error` is relative; `earliest` and `latest` bound the block in time (mjd_tai).
    """

    target: Target
    priority: float = 1.0
    repeats: int = 1
    required_error: float | None = None
    earliest: float | None = None
    latest: float | None = None

    def __post_init__(self) -> None:
        name = self.target.name
        if not 0.001 <= self.priority <= 1000:
            raise InputError(
                f"priority of {name} is {self.priority:g}; it must lie between 0.001 and 1000, 1 is the usual"
            )
        if not 1 <= self.repeats <= 20:
            raise InputError(f"repeats of {name} is {self.repeats}; it must lie between 1 and 20")
        if self.required_error is not None and not 0 < self.required_error < 1:
            given = 100 * self.required_error
            raise InputError(f"required_error_percent of {name} is {given:g}; it must lie between 0 and 100")
        if self.earliest is not None and self.latest is not None and self.latest <= self.earliest:
            given_utc = f"{format_utc(self.latest)}; it must lie after from, {format_utc(self.earliest)}"
            raise InputError(f"to of {name} is {given_utc}")


@dataclass(frozen=True)
class Look:
    """One look: a slew, then an integration. Times mjd_tai; `star_id` is None for a target of one's own."""

    role: str
    name: str
    star_id: int | None
    start: float
    end: float

    def to_dict(self) -> dict[str, Any]:
        return {
            "role": self.role,
            "name": self.name,
            "star_id": self.star_id,
            "start_utc": format_utc(self.start),
            "end_utc": format_utc(self.end),
        }


@dataclass(frozen=True)
class Block:
    """Looks at one target and its calibrators, one coarse setting throughout. Error relative."""

    target: str
    start: float
    end: float
    coarse_paths_m: dict[str, float]
    calibration_error: float
    looks: tuple[Look, ...]

    def to_dict(self) -> dict[str, Any]:
        return {
            "target": self.target,
            "start_utc": format_utc(self.start),
            "end_utc": format_utc(self.end),
            "coarse_paths_m": self.coarse_paths_m,
            "calibration_error_percent": round(100 * self.calibration_error, 4),
            "looks": [look.to_dict() for look in self.looks],
        }


@dataclass(frozen=True)
class NightPlan:
    """Blocks in order of time, and what could not be placed and why.

    `objective` is the worth of the blocks, `bound` what no plan can exceed, in the same unit: a
    block of priority 1 at its best time is worth 1.
    """

    edition: str
    setup: Setup
    span: tuple[float, float]
    blocks: tuple[Block, ...]
    unscheduled: tuple[tuple[str, str], ...]
    objective: float
    bound: float
    notes: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """The JSON of a plan, as described in the project's interface."""
        return {
            "edition": self.edition,
            "pinlight": __version__,
            "setup": self.setup.to_dict(),
            "span_utc": {"start_utc": format_utc(self.span[0]), "end_utc": format_utc(self.span[1])},
            "blocks": [block.to_dict() for block in self.blocks],
            "unscheduled": [{"target": target, "reason": reason} for target, reason in self.unscheduled],
            "objective": round(self.objective, 6),
            "bound": round(self.bound, 6),
            "notes": list(self.notes),
        }


@dataclass(frozen=True)
class _Prepared:
    """A request with its sequence of looks and all places in time where the block may go."""

    request: Request
    pool: NDArray[np.int64]  # rows of the edition that the sequence's calibrators index
    sequence: LookSequence | None
    slots: dict[int, tuple[float, tuple[int, ...]]]  # slot -> error, coarse setting
    reason: str | None


def plan_night(
    stars: StarColumns,
    requests: Sequence[Request],
    setup: Setup,
    clock: Clock,
    *,
    standings: Mapping[int, str] | None = None,
    time_limit_s: float = 5.0,
) -> NightPlan:
    """Place blocks of looks for many targets in one night.

    For each target the best calibrators are ranked with the clock, a sequence of looks is chosen,
    and every start is kept at which target and calibrators stay observable and in reach with one coarse
    setting. A constraint solver then places the blocks that are worth most.

    Parameters
    ----------
    stars : StarColumns
        An edition.
    requests : sequence of Request
    setup : Setup
        With a mode and drift.
    clock : Clock
        Of the night; its grid is replaced by one of five minutes.
    standings : mapping, optional
        Star id -> standing.
    time_limit_s : float
        For the solver alone.

    Raises
    ------
    InputError
        If there is no request, or the setup has no mode.
    """
    if not requests:
        raise InputError("targets is empty; a plan needs at least one")
    if setup.mode is None or setup.drift is None or setup.look_interval_min is None:
        raise InputError("array is missing; a plan needs an array and a mode")
    if not 0 < time_limit_s <= 3600:
        raise InputError(f"time_limit_s is {time_limit_s:g}; it must lie between 0 and 3600")
    start, end = float(clock.times[0]), float(clock.times[-1])
    count = int((end - start) / (_SLOT_MIN * _MINUTE_DAY) + 1e-6) + 1
    grid = replace(clock, times=start + np.arange(count, dtype=np.float64) * _SLOT_MIN * _MINUTE_DAY)
    coarse = replace(clock, times=np.asarray(np.linspace(start, end, max(count // 2, 2)), dtype=np.float64))
    prepared = [_prepare(stars, request, setup, coarse, grid, standings or {}) for request in requests]
    candidates = [
        Candidate(index, slot, _slots_of(one.sequence), _worth(one, error))
        for index, one in enumerate(prepared)
        if one.sequence is not None
        for slot, (error, _) in one.slots.items()
    ]
    chosen, objective, bound = choose_blocks(
        candidates, [request.repeats for request in requests], count, time_limit_s
    )
    blocks = sorted(
        (_block(stars, prepared[index], setup, grid, slot) for index, slot in chosen),
        key=lambda block: block.start,
    )
    placed = [index for index, _ in chosen]
    unscheduled = []
    for index, one in enumerate(prepared):
        missing = one.request.repeats - placed.count(index)
        if missing:
            reason = one.reason or "no room: blocks worth more fill its windows"
            unscheduled.append((one.request.target.name, reason))
    return NightPlan(
        edition=stars.edition,
        setup=setup,
        span=(start, end),
        blocks=tuple(blocks),
        unscheduled=tuple(unscheduled),
        objective=objective,
        bound=bound,
        notes=tuple(clock.notes),
    )


def _slots_of(sequence: LookSequence) -> int:
    return int(np.ceil(sequence.minutes / _SLOT_MIN - 1e-9))


def _worth(one: _Prepared, error: float) -> float:
    """Of a block of that error: its weight, less the farther it is from the target's best."""
    best = min(error for error, _ in one.slots.values())
    return best / error / one.request.priority


def _prepare(
    stars: StarColumns,
    request: Request,
    setup: Setup,
    coarse: Clock,
    grid: Clock,
    standings: Mapping[int, str],
) -> _Prepared:
    """Calibrators, sequence and possible starts of one request."""
    target = request.target
    ranking = rank(stars, target, setup, clock=coarse, standings=standings, best=10)

    def nothing(reason: str) -> _Prepared:
        return _Prepared(request, np.empty(0, dtype=np.int64), None, {}, reason)

    if not ranking.target_windows:
        why = next((note for note in ranking.notes if note.startswith("The target cannot")), "no window")
        return nothing(why.removeprefix("The target cannot be observed then: ").rstrip("."))
    if not ranking.best_sets:
        return nothing("no star passes every gate as its calibrator")
    row_of = {int(stars.ids[row]): int(row) for row in _rows_of(stars, ranking.best_sets[-1].star_ids)}
    pool = np.array([row_of[star_id] for star_id in ranking.best_sets[-1].star_ids])
    look_min = setup.look_interval_min or 0.0
    errors = _star_errors(stars, pool, setup, target, grid, grid.middle)
    sequence = best_sequence(
        errors, (target.ra_deg, target.dec_deg), _drift(setup), look_min, request.required_error
    )
    slots = _possible_starts(stars, request, setup, grid, pool, sequence)
    if not slots:
        return nothing(f"no window of {sequence.minutes:.0f} min in which it and its calibrators are in reach")
    if request.required_error is not None:
        good = {slot: found for slot, found in slots.items() if found[0] <= request.required_error}
        if not good:
            best = 100 * min(error for error, _ in slots.values())
            return nothing(
                f"required error {100 * request.required_error:g} % is not reached; the best is {best:.2f} %"
            )
        slots = good
    return _Prepared(request, pool, sequence, slots, None)


def _rows_of(stars: StarColumns, star_ids: Sequence[int]) -> NDArray[np.int64]:
    return np.flatnonzero(np.isin(stars.ids, list(star_ids)))


def _drift(setup: Setup) -> tuple[float, float, float]:
    assert setup.drift is not None
    return setup.drift.spread, setup.drift.time_min, setup.drift.angle_deg


def _star_errors(
    stars: StarColumns, rows: NDArray[np.int64], setup: Setup, target: Target, clock: Clock, when: float
) -> StarErrors:
    """What a block needs to know of some calibrators, with the baselines of one time."""
    pm_ra, pm_dec, parallax, velocity = stars.motion(rows)
    ra, dec = clock.apparent(stars.ra_deg[rows], stars.dec_deg[rows], (pm_ra, pm_dec, parallax, velocity))
    delays = clock.delays_m(ra, dec, np.full(len(rows), when))
    lengths = np.sqrt(np.maximum(clock.baseline_lengths_m[:, None] ** 2 - delays**2, 0.0)).T
    magnitude = target.magnitudes.get(setup.band)
    fixed = fixed_terms(stars, rows, np.zeros(len(rows)), setup, magnitude) | {"drift": None}
    budget = error_budget(stars, rows, setup, fixed, "rms", lengths)

    def square(name: str) -> Floats:
        term = budget.terms[name]
        return np.zeros(len(rows)) if term is None else term**2

    shared = stars.shared_error_mas[rows].astype(float) / stars.diameter_mas[rows]
    scaled = budget.slopes * shared[:, None]
    common = (stars.relations_used[rows][:, None] & stars.relations_used[rows][None, :]) != 0
    together = np.where(common, scaled @ scaled.T / scaled.shape[1], 0.0)
    star = sum((square(name) for name in TERMS if name not in ("drift", "photon")), np.zeros(len(rows)))
    return StarErrors(
        ra_deg=np.asarray(stars.ra_deg[rows]),
        dec_deg=np.asarray(stars.dec_deg[rows]),
        star_variance=np.maximum(star - np.diag(together), 0.0),
        look_variance=square("photon"),
        shared=together,
    )


def _possible_starts(
    stars: StarColumns,
    request: Request,
    setup: Setup,
    grid: Clock,
    pool: NDArray[np.int64],
    sequence: LookSequence,
) -> dict[int, tuple[float, tuple[int, ...]]]:
    """Every slot where the block can start, with its error and coarse setting."""
    target = request.target
    rows = np.unique(pool[list(sequence.calibrators)])
    pm_ra, pm_dec, parallax, velocity = stars.motion(rows)
    star_ra, star_dec = grid.apparent(
        stars.ra_deg[rows], stars.dec_deg[rows], (pm_ra, pm_dec, parallax, velocity)
    )
    target_ra, target_dec = grid.apparent(target.ra_deg, target.dec_deg, target.motion)
    ra, dec = np.append(star_ra, target_ra)[:, None], np.append(star_dec, target_dec)[:, None]
    allowed = np.asarray(grid.observable(ra, dec, grid.times).all(axis=0))
    if request.earliest is not None:
        allowed &= grid.times >= request.earliest
    if request.latest is not None:
        allowed &= grid.times <= request.latest
    choices = grid.delay_lines.choices(grid.delays_m(ra, dec, grid.times), allowed, _SETTINGS)
    length = _slots_of(sequence)
    starts: dict[int, tuple[int, ...]] = {}
    for choice in choices:
        counts = np.concatenate([[0], np.cumsum(choice.in_reach)])
        whole = np.flatnonzero(counts[length + 1 :] - counts[: -length - 1] == length + 1)
        for slot in whole.tolist():
            starts.setdefault(slot, choice.settings)
    if not starts:
        return {}
    slots = np.array(sorted(starts))
    # The error changes slowly with the projected baselines: worked out at a few starts, interpolated.
    moments = np.unique(slots[np.linspace(0, len(slots) - 1, _MOMENTS).round().astype(int)])
    errors = [_error_at(stars, pool, setup, target, grid, sequence, int(slot)) for slot in moments]
    between = np.interp(slots, moments, errors)
    return {int(slot): (float(error), starts[int(slot)]) for slot, error in zip(slots, between, strict=True)}


def _error_at(
    stars: StarColumns,
    pool: NDArray[np.int64],
    setup: Setup,
    target: Target,
    grid: Clock,
    sequence: LookSequence,
    slot: int,
) -> float:
    """The error of a block that starts in a slot, with the baselines of its middle."""
    middle = float(grid.times[slot]) + sequence.minutes / 2 * _MINUTE_DAY
    errors = _star_errors(stars, pool, setup, target, grid, middle)
    assignment = np.array([sequence.calibrators], dtype=np.int64)
    place = (target.ra_deg, target.dec_deg)
    variance = look_variances(errors, assignment, place, _drift(setup), setup.look_interval_min or 0.0)
    return float(np.sqrt(variance[0]))


def _block(stars: StarColumns, one: _Prepared, setup: Setup, grid: Clock, slot: int) -> Block:
    """The block of a request at a slot; its error is worked out anew, not interpolated."""
    assert one.sequence is not None
    _, settings = one.slots[slot]
    start = float(grid.times[slot])
    look_day = (setup.look_interval_min or 0.0) * _MINUTE_DAY
    target = one.request.target
    error = _error_at(stars, one.pool, setup, target, grid, one.sequence, slot)
    looks = []
    calibrators = one.pool[list(one.sequence.calibrators)]
    for index, row in enumerate(calibrators):
        begin = start + 2 * index * look_day
        looks.append(
            Look("calibrator", stars.names[row].decode(), int(stars.ids[row]), begin, begin + look_day)
        )
        if index < len(calibrators) - 1:
            looks.append(Look("target", target.name, target.star_id, begin + look_day, begin + 2 * look_day))
    paths = {
        station.name: station.coarse_paths_m[setting]
        for station, setting in zip(grid.stations, settings, strict=True)
    }
    return Block(target.name, start, looks[-1].end, paths, error, tuple(looks))
