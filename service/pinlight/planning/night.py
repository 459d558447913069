"""A night of blocks: which targets, when, with which calibrators and coarse delay settings."""

from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from pinlight.arrays.reach import coarse_paths_m
from pinlight.errors import InputError
from pinlight.planning.blocks import Sequence as LookSequence
from pinlight.planning.blocks import StarErrors, best_sequences, look_variances, worth_most
from pinlight.planning.solver import Candidate, choose_blocks
from pinlight.ranking.budget import TERMS, error_budget, fixed_terms, shared_covariance
from pinlight.ranking.clock import Clock
from pinlight.ranking.columns import StarColumns
from pinlight.ranking.rank import rank
from pinlight.ranking.result import Ranking
from pinlight.ranking.setup import Setup
from pinlight.ranking.target import Target
from pinlight.sky.time import format_utc, next_minute
from pinlight.sky.windows import runs
from pinlight.version import __version__

__all__ = ["Block", "Look", "NightPlan", "Request", "plan_night"]

Floats = NDArray[np.float64]

_MINUTE_DAY = 1 / 1440
# Blocks start on whole minutes of UTC: on every fifth, and on the first and last possible ones.
_EVERY_MIN = 5
_MOMENTS = 13
_LISTED = 20  # stars of which any may be a block's only calibrator


@dataclass(frozen=True)
class Request:
    """A target that a night is wanted for.

    A block's worth is one over `priority`; 1 is the usual. `repeats` is how many blocks are wanted.
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
    pinlight: str = __version__

    def to_dict(self) -> dict[str, Any]:
        """The JSON of a plan, as described in the project's interface."""
        return {
            "edition": self.edition,
            "pinlight": self.pinlight,
            "setup": self.setup.to_dict(),
            "span_utc": {"start_utc": format_utc(self.span[0]), "end_utc": format_utc(self.span[1])},
            "blocks": [block.to_dict() for block in self.blocks],
            "unscheduled": [{"target": target, "reason": reason} for target, reason in self.unscheduled],
            "objective": round(self.objective, 6),
            "bound": round(self.bound, 6),
            "notes": list(self.notes),
        }


@dataclass(frozen=True)
class _Start:
    """Where a block may start: the error that it then has, and the coarse setting of each station."""

    error: float
    settings: tuple[int, ...]


@dataclass(frozen=True)
class _Prepared:
    """A request with its sequence of looks and all minutes of the night at which the block may start."""

    request: Request
    pool: NDArray[np.int64]  # rows of the edition that the sequence's calibrators index
    sequence: LookSequence | None
    starts: dict[int, _Start]
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
        Of the night.
    standings : mapping, optional
        Star id -> standing.
    time_limit_s : float
        For the solver alone.

    Raises
    ------
    InputError
        If there is no request, the setup has no mode, or the night is shorter than a minute.
    """
    if not requests:
        raise InputError("targets is empty; a plan needs at least one")
    names = Counter(request.target.name for request in requests)
    if twice := next((name for name, count in names.items() if count > 1), None):
        raise InputError(f"targets has {twice} twice; give it once, and repeats for more blocks")
    if names[""] > 1:
        raise InputError(f"targets has {names['']} without a name; a plan of several tells them apart by it")
    if setup.mode is None or setup.drift is None or setup.look_interval_min is None:
        raise InputError("array is missing; a plan needs an array and a mode")
    if not 0 < time_limit_s <= 3600:
        raise InputError(f"time_limit_s is {time_limit_s:g}; it must lie between 0 and 3600")
    start, end = float(clock.times[0]), float(clock.times[-1])
    first = next_minute(start)
    count = int((end - first) / _MINUTE_DAY + 1e-5) + 1
    if count < 2:
        raise InputError(f"to is {format_utc(end)}; it must lie a minute or more after {format_utc(start)}")
    minutes = replace(clock, times=first + np.arange(count, dtype=np.float64) * _MINUTE_DAY)
    prepared = [_prepare(stars, request, setup, clock, minutes, standings or {}) for request in requests]
    change_min = clock.array.limits.coarse_change_min
    candidates = [
        Candidate(index, minute, _whole_minutes(one.sequence.minutes + change_min), _worth(one, where.error))
        for index, one in enumerate(prepared)
        if one.sequence is not None
        for minute, where in one.starts.items()
    ]
    chosen, objective, bound = choose_blocks(
        candidates, [request.repeats for request in requests], time_limit_s
    )
    blocks = sorted(
        (_block(stars, prepared[index], setup, minutes, minute) for index, minute in chosen),
        key=lambda block: block.start,
    )
    placed = [index for index, _ in chosen]
    return NightPlan(
        edition=stars.edition,
        setup=setup,
        span=(start, end),
        blocks=tuple(blocks),
        unscheduled=tuple(
            (one.request.target.name, reason)
            for index, one in enumerate(prepared)
            if (reason := _why_missing(one, placed.count(index)))
        ),
        objective=objective,
        bound=bound,
        notes=(*_notes(requests, setup, blocks, change_min), *clock.notes),
    )


def _whole_minutes(minutes: float) -> int:
    return int(np.ceil(minutes - 1e-9))


def _why_missing(one: _Prepared, placed: int) -> str | None:
    """Why a request has fewer blocks than it asks for, None if it has them all."""
    repeats = one.request.repeats
    if placed == repeats:
        return None
    reason = one.reason or "no room: other blocks fill its windows"
    return reason if one.reason or repeats == 1 else f"{placed} of {repeats} blocks placed; {reason}"


def _notes(requests: Sequence[Request], setup: Setup, blocks: Sequence[Block], change_min: float) -> list[str]:
    """What was left out or assumed."""
    blind = [one.target.name for one in requests if one.target.magnitudes.get(setup.band) is None]
    notes = []
    if blind:
        names = ", ".join(blind)
        notes.append(f"Without a {setup.band} magnitude the brightness term is left out: {names}.")
    changes = any(one.coarse_paths_m != following.coarse_paths_m for one, following in pairwise(blocks))
    if change_min:
        notes.append(f"After each block {change_min:g} min are kept free for changing coarse delay settings.")
    elif changes:
        notes.append(
            "No time is kept for changing coarse delay settings between blocks;"
            " give the array coarse_change_min for it."
        )
    return notes


def _worth(one: _Prepared, error: float) -> float:
    """Of a block of that error: its weight, less the farther it is from the target's best."""
    best = min(where.error for where in one.starts.values())
    return best / error / one.request.priority


def _prepare(
    stars: StarColumns,
    request: Request,
    setup: Setup,
    clock: Clock,
    minutes: Clock,
    standings: Mapping[int, str],
) -> _Prepared:
    """Calibrators, sequence and possible starts of one request."""
    when = _clock_of(request, clock)
    if when is None:
        return _Prepared(
            request, np.empty(0, dtype=np.int64), None, {}, "its from and to lie outside the night"
        )
    ranking = rank(stars, request.target, setup, clock=when, standings=standings, best=_LISTED)

    def nothing(reason: str) -> _Prepared:
        return _Prepared(request, np.empty(0, dtype=np.int64), None, {}, reason)

    if not ranking.target_windows:
        why = next((note for note in ranking.notes if note.startswith("The target cannot")), "no window")
        return nothing(why.removeprefix("The target cannot be observed then: ").rstrip("."))
    if not ranking.best_sets:
        return nothing("no star passes every gate as its calibrator")
    start, end = max(ranking.target_windows, key=lambda window: window[1] - window[0])
    shortest, best = np.inf, np.inf
    for pool in _pools(stars, ranking):
        for sequence in _sequences(stars, pool, setup, request, minutes, (start + end) / 2):
            starts = _possible_starts(stars, request, setup, minutes, pool, sequence)
            if not starts:
                shortest = min(shortest, sequence.minutes)
                continue
            if request.required_error is None:
                return _Prepared(request, pool, sequence, starts, None)
            best = min(best, *(where.error for where in starts.values()))
            starts = {m: where for m, where in starts.items() if where.error <= request.required_error}
            if starts:
                return _Prepared(request, pool, sequence, starts, None)
    if np.isfinite(best):
        wanted = 100 * (request.required_error or 0.0)
        return nothing(f"required error {wanted:g} % is not reached; the best is {100 * best:.2f} %")
    within = "" if request.earliest is None and request.latest is None else " within its from and to"
    return nothing(f"no window of {shortest:.0f} min{within} in which it and its calibrators are in reach")


def _sequences(
    stars: StarColumns,
    pool: NDArray[np.int64],
    setup: Setup,
    request: Request,
    minutes: Clock,
    when: float,
) -> list[LookSequence]:
    """The sequences to try, in order.

    Without a required error the one that is worth its time most, and shorter ones where that finds no
    window; with one, from the shortest to the longest.
    """
    target = request.target
    errors = _star_errors(stars, pool, setup, target, minutes, when)
    place = (target.ra_deg, target.dec_deg)
    sequences = best_sequences(errors, place, _drift(setup), setup.look_interval_min or 0.0)
    if request.required_error is not None:
        return sequences
    favourite = worth_most(sequences)
    return [one for one in reversed(sequences) if one.minutes <= favourite.minutes]


def _clock_of(request: Request, clock: Clock) -> Clock | None:
    """The clock between a request's from and to; None if nothing is left of it."""
    times = clock.times
    earliest = times[0] if request.earliest is None else max(request.earliest, times[0])
    latest = times[-1] if request.latest is None else min(request.latest, times[-1])
    if earliest >= latest:
        return None
    if earliest == times[0] and latest == times[-1]:
        return clock
    inside = times[(times > earliest) & (times < latest)]
    return replace(clock, times=np.array([earliest, *inside, latest]))


def _pools(stars: StarColumns, ranking: Ranking) -> Iterator[NDArray[np.int64]]:
    """Rows of the calibrators to choose a block's from, the pools to be tried in turn.

    The largest best set first; a smaller one may be in reach for longer, and in the end one star alone.
    """
    sets = [one.star_ids for one in reversed(ranking.best_sets)]
    for star_ids in [*sets, *((star.star_id,) for star in ranking.calibrators)]:
        rows = np.flatnonzero(np.isin(stars.ids, list(star_ids)))
        yield rows[np.argsort([star_ids.index(int(star_id)) for star_id in stars.ids[rows]])]


def _drift(setup: Setup) -> tuple[float, float, float]:
    assert setup.drift is not None
    return setup.drift.spread, setup.drift.time_min, setup.drift.angle_deg


def _star_errors(
    stars: StarColumns, rows: NDArray[np.int64], setup: Setup, target: Target, clock: Clock, when: float
) -> StarErrors:
    """What a block needs to know of some calibrators, with the baselines of one time."""
    delays = clock.delays_m(*clock.places(stars, rows), np.full(len(rows), when))
    lengths = np.sqrt(np.maximum(clock.baseline_lengths_m[:, None] ** 2 - delays**2, 0.0)).T
    magnitude = target.magnitudes.get(setup.band)
    fixed = fixed_terms(stars, rows, np.zeros(len(rows)), setup, magnitude) | {"drift": None}
    budget = error_budget(stars, rows, setup, fixed, "rms", lengths)

    def square(name: str) -> Floats:
        term = budget.terms[name]
        return np.zeros(len(rows)) if term is None else term**2

    together = shared_covariance(stars, rows, budget.slopes, "rms")
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
    minutes: Clock,
    pool: NDArray[np.int64],
    sequence: LookSequence,
) -> dict[int, _Start]:
    """Minutes at which the block can start, with its error and the coarse setting that holds throughout."""
    target, lines = request.target, minutes.delay_lines
    rows = np.unique(pool[list(sequence.calibrators)])
    star_ra, star_dec = minutes.places(stars, rows)
    target_ra, target_dec = minutes.apparent(target.ra_deg, target.dec_deg, target.motion)
    ra, dec = np.append(star_ra, target_ra)[:, None], np.append(star_dec, target_dec)[:, None]
    allowed = np.asarray(minutes.observable(ra, dec, minutes.times).all(axis=0))
    steps = _whole_minutes(sequence.minutes) + 1  # times that a block touches, both its ends included
    if steps > len(allowed):
        return {}
    starts = np.flatnonzero(sliding_window_view(allowed, steps).all(axis=1))
    begin = minutes.times[starts]
    if request.earliest is not None:
        starts = starts[begin >= request.earliest - 1e-9]
    if request.latest is not None:
        starts = starts[minutes.times[starts] + sequence.minutes * _MINUTE_DAY <= request.latest + 1e-9]
    delays = minutes.delays_m(ra, dec, minutes.times)
    low = sliding_window_view(delays.min(axis=1), steps, axis=1)[:, starts].min(axis=-1)
    high = sliding_window_view(delays.max(axis=1), steps, axis=1)[:, starts].max(axis=-1)
    settings, served = lines.settings_for(low, high)
    starts, settings = starts[served], settings[:, served]
    if not len(starts):
        return {}
    possible = np.zeros(len(allowed), dtype=bool)
    possible[starts] = True
    edges = {minute for stretch in runs(possible) for minute in stretch}
    kept = [place for place, minute in enumerate(starts) if minute % _EVERY_MIN == 0 or int(minute) in edges]
    # The error changes slowly with the projected baselines: worked out at a few starts, interpolated.
    moments = np.unique(starts[np.linspace(0, len(starts) - 1, _MOMENTS).round().astype(int)])
    errors = [_error_at(stars, pool, setup, target, minutes, sequence, int(minute)) for minute in moments]
    between = np.interp(starts, moments, errors)
    return {
        int(starts[place]): _Start(float(between[place]), tuple(settings[:, place].tolist())) for place in kept
    }


def _error_at(
    stars: StarColumns,
    pool: NDArray[np.int64],
    setup: Setup,
    target: Target,
    minutes: Clock,
    sequence: LookSequence,
    minute: int,
) -> float:
    """The error of a block that starts at a minute, with the baselines of its middle."""
    middle = float(minutes.times[minute]) + sequence.minutes / 2 * _MINUTE_DAY
    errors = _star_errors(stars, pool, setup, target, minutes, middle)
    assignment = np.array([sequence.calibrators], dtype=np.int64)
    place = (target.ra_deg, target.dec_deg)
    each, _ = look_variances(errors, assignment, place, _drift(setup), setup.look_interval_min or 0.0)
    return float(np.sqrt(each[0]))


def _block(stars: StarColumns, one: _Prepared, setup: Setup, minutes: Clock, minute: int) -> Block:
    """The block of a request at a minute; its error is worked out anew, not interpolated."""
    assert one.sequence is not None
    start = float(minutes.times[minute])
    look_day = (setup.look_interval_min or 0.0) * _MINUTE_DAY
    target = one.request.target
    error = _error_at(stars, one.pool, setup, target, minutes, one.sequence, minute)
    looks = []
    calibrators = one.pool[list(one.sequence.calibrators)]
    for index, row in enumerate(calibrators):
        begin = start + 2 * index * look_day
        looks.append(
            Look("calibrator", stars.names[row].decode(), int(stars.ids[row]), begin, begin + look_day)
        )
        if index < len(calibrators) - 1:
            looks.append(Look("target", target.name, target.star_id, begin + look_day, begin + 2 * look_day))
    paths = coarse_paths_m(minutes.stations, one.starts[minute].settings)
    return Block(target.name, start, looks[-1].end, paths, error, tuple(looks))
