"""Rank the stars of an edition as calibrators of one target."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pinlight.arrays.reach import coarse_paths_m
from pinlight.diameters.limb_darkening import uniform_disk_ratio
from pinlight.errors import InputError
from pinlight.ranking.budget import (
    SECOND_LOBE_V2,
    TERMS,
    Budget,
    error_budget,
    fixed_terms,
    lowest_v2,
    shared_covariance,
)
from pinlight.ranking.clock import Clock
from pinlight.ranking.columns import StarColumns, flag_words
from pinlight.ranking.gates import REASONS, close_gates
from pinlight.ranking.reach import StarsReach, TargetReach, reach_of_target
from pinlight.ranking.result import Calibrator, CalibratorSet, LeftOut, Ranking
from pinlight.ranking.sets import best_subsets, field_covariance, subset_variances
from pinlight.ranking.setup import Setup, Thresholds
from pinlight.ranking.target import Target
from pinlight.sky.positions import separation_deg
from pinlight.sky.windows import Window
from pinlight.version import __version__

__all__ = ["rank"]

# Sets are looked for among this many of the best stars.
SET_CANDIDATES = 40
_CHUNK = 64
# Stars named for each reason to leave stars out.
_MOST_LEFT_OUT = 40


@dataclass(frozen=True)
class _Ranked:
    """The best of the stars that passed every gate; arrays of shape (N,) unless said.

    `count` is how many passed, the best or not; `excluded` has the rows that failed, by reason.
    """

    rows: NDArray[np.int64]
    separations: NDArray[np.float64]
    budget: Budget
    longest_m: NDArray[np.float64]
    reach: StarsReach | None
    count: int
    excluded: dict[str, NDArray[np.int64]]


def rank(
    stars: StarColumns,
    target: Target,
    setup: Setup,
    *,
    limits: Thresholds | None = None,
    judge: str = "rms",
    best: int = 20,
    standings: Mapping[int, str] | None = None,
    clock: Clock | None = None,
    with_ids: Sequence[int] = (),
) -> Ranking:
    """The stars that calibrate a target best, by the error that each would cost.

    Parameters
    ----------
    stars : StarColumns
        An edition.
    target : Target
    setup : Setup
        Of `setup_of` or `quick_setup`.
    limits : Thresholds, optional
        In place of the setup's.
    judge : str
        Summarise over baselines and channels by ``rms`` or take the ``worst``.
    best : int
        How many to list.
    standings : mapping, optional
        Star id -> standing, laid over the edition.
    clock : Clock, optional
        When: stars then have to be in reach together with the target, and baselines are those
        projected in each star's window. Without one they count at full length, the hardest case.
    with_ids : sequence of int
        A set of stars to evaluate beside the best sets.

    Returns
    -------
    Ranking
        An empty list of calibrators is an answer, not an error.

    Raises
    ------
    InputError
        If `judge` or `best` is impossible, or a star of `with_ids` fails a gate.
    """
    if not 1 <= best <= 1000:
        raise InputError(f"best is {best}; it must lie between 1 and 1000")
    limits = limits or setup.limits
    standings = standings or {}
    barred = frozenset(star_id for star_id, standing in standings.items() if standing == "barred")
    reach = None if clock is None else reach_of_target(clock, target)

    most = max(best, SET_CANDIDATES)

    def assess(rows: NDArray[np.int64], separations: NDArray[np.float64]) -> _Ranked:
        return _assess(stars, rows, separations, target, setup, limits, barred, judge, reach, most)

    rows, separations = stars.cone(target.ra_deg, target.dec_deg, limits.separation_max_deg)
    ranked = assess(rows, separations)
    excluded = {reason: len(failing) for reason, failing in ranked.excluded.items()}
    if too_far := len(stars) - len(rows):
        excluded["too_far"] = too_far
    listed = range(min(best, len(ranked.rows)))
    whens: list[_When] = [_When() for _ in listed] if reach is None else _whens(stars, ranked, reach, best)
    calibrators = [_calibrator(stars, ranked, standings, index, whens[index]) for index in listed]
    sets = _best_sets(stars, ranked, target, setup, judge, reach)
    named = None
    if with_ids:
        named = _named_set(stars, target, setup, judge, limits, with_ids, assess, reach)
    return Ranking(
        edition=stars.edition,
        pinlight=__version__,
        target=target,
        setup=setup,
        limits=limits,
        judge=judge,
        best=best,
        calibrators=tuple(calibrators),
        stars=len(stars),
        ranked=ranked.count,
        excluded=dict(sorted(excluded.items(), key=lambda item: -item[1])),
        best_sets=tuple(sets),
        named_set=named,
        span=None if clock is None else (float(clock.times[0]), float(clock.times[-1])),
        target_windows=None if reach is None else tuple(reach.target_windows),
        coarse_paths_m=_coarse_paths(reach),
        names=_names(stars, [*sets, *([named] if named else [])]),
        left_out=_left_out(stars, target, ranked.excluded),
        notes=tuple(_notes(setup, limits, target, reach)),
    )


def _assess(
    stars: StarColumns,
    rows: NDArray[np.int64],
    separations: NDArray[np.float64],
    target: Target,
    setup: Setup,
    limits: Thresholds,
    barred: frozenset[int],
    judge: str,
    reach: TargetReach | None,
    most: int,
) -> _Ranked:
    """Gates and budget of some stars, those that pass in order of their error."""
    rows, separations, excluded = close_gates(stars, rows, separations, target, setup, limits, barred)
    together = None
    if reach is not None:
        together = reach.stars(stars, rows)
        in_reach = np.asarray(together.times.any(axis=1))
        for reason, failing in (("not_up", ~together.up), ("out_of_reach", together.up & ~in_reach)):
            if failing.any():
                excluded[reason] = rows[failing]
        rows, separations = rows[in_reach], separations[in_reach]
        together = together.only(in_reach)
        lengths_m = together.baselines_m
    else:
        lengths_m = np.broadcast_to(setup.baselines_m, (len(rows), len(setup.baselines)))
    longest = lengths_m.max(axis=1)
    magnitude = target.magnitudes.get(setup.band)
    fixed = fixed_terms(stars, rows, separations, setup, magnitude)
    order, budget, resolved = _in_order(stars, rows, setup, fixed, judge, lengths_m, limits.v2_min, most)
    count = len(rows) - len(resolved)
    too_large = rows[resolved]
    if reach is not None:
        # Of the best, the one coarse setting that serves star and target for longest, and its baselines.
        rows, separations = rows[order], separations[order]
        together = reach.longest(stars, rows)
        lost = ~together.times.any(axis=1)  # in reach for less than the steps of its windows
        if lost.any():
            excluded["out_of_reach"] = np.append(excluded.get("out_of_reach", rows[:0]), rows[lost])
            rows, separations, together = rows[~lost], separations[~lost], together.only(np.flatnonzero(~lost))
        lengths_m, longest = together.baselines_m, together.baselines_m.max(axis=1)
        fixed = fixed_terms(stars, rows, separations, setup, magnitude)
        order, budget, more = _in_order(stars, rows, setup, fixed, judge, lengths_m, limits.v2_min, most)
        count, too_large = count - int(lost.sum()) - len(more), np.append(too_large, rows[more])
    if len(too_large):
        excluded["resolved"] = too_large
    return _Ranked(
        rows=rows[order],
        separations=separations[order],
        budget=budget,
        longest_m=longest[order],
        reach=None if together is None else together.only(order),
        count=count,
        excluded=excluded,
    )


def _in_order(
    stars: StarColumns,
    rows: NDArray[np.int64],
    setup: Setup,
    fixed: dict[str, NDArray[np.float64] | None],
    judge: str,
    lengths_m: NDArray[np.float64],
    v2_min: float,
    most: int,
) -> tuple[NDArray[np.int64], Budget, NDArray[np.int64]]:
    """The best `most` of some stars, their budget, and those of all that fall below the floor of V^2.

    The fixed terms alone bound a star's error from below. Stars are worked out in the order of that
    bound, and the work ends when the next bound exceeds the worst of the best `most`.
    """
    # Past its first null a star is no calibrator: there V^2 does not follow its diameter's error.
    floor = max(v2_min, SECOND_LOBE_V2)
    passes = lowest_v2(stars, rows, setup, lengths_m.max(axis=1)) >= floor
    passing = np.flatnonzero(passes)
    bound = np.sqrt(np.sum([term**2 for term in fixed.values() if term is not None], axis=0))
    queue = passing[np.argsort(bound[passing], kind="stable")]
    done = np.empty(0, dtype=np.int64)
    parts: list[Budget] = []
    totals = np.empty(0)
    while len(done) < len(queue) or not parts:
        if len(totals) >= most and bound[queue[len(done)]] > np.partition(totals, most - 1)[most - 1]:
            break
        chunk = queue[len(done) : len(done) + max(_CHUNK, most)]
        some = {name: None if term is None else term[chunk] for name, term in fixed.items()}
        parts.append(error_budget(stars, rows[chunk], setup, some, judge, lengths_m[chunk]))
        done = np.append(done, chunk)
        totals = np.append(totals, parts[-1].total)
    best = np.lexsort([stars.ids[rows[done]], totals])[:most]
    return done[best], Budget.joined(parts).only(best), np.flatnonzero(~passes)


def _left_out(
    stars: StarColumns, target: Target, excluded: dict[str, NDArray[np.int64]]
) -> dict[str, tuple[LeftOut, ...]]:
    """The stars nearest to the target that failed each gate, nearest first."""
    shown = {}
    for reason, rows in excluded.items():
        apart = separation_deg(target.ra_deg, target.dec_deg, stars.ra_deg[rows], stars.dec_deg[rows])
        nearest = np.argsort(apart, kind="stable")[:_MOST_LEFT_OUT]
        shown[reason] = tuple(
            LeftOut(int(stars.ids[row]), stars.names[row].decode(), float(separation))
            for row, separation in zip(rows[nearest], apart[nearest], strict=True)
        )
    return shown


class _When(NamedTuple):
    """The windows of stars together with the target, and the coarse paths that they are under."""

    windows: tuple[Window, ...] | None = None
    coarse_paths_m: dict[str, float] | None = None


def _whens(stars: StarColumns, ranked: _Ranked, reach: TargetReach, best: int) -> list[_When]:
    """Of the listed stars."""
    assert ranked.reach is not None
    theirs = ranked.reach.only(np.arange(min(best, len(ranked.rows))))
    assert theirs.settings is not None
    return _told(reach, theirs.settings, reach.windows(stars, ranked.rows[:best], theirs))


def _told(reach: TargetReach, settings: NDArray[np.int64], windows: list[list[Window]]) -> list[_When]:
    stations = reach.clock.stations
    return [
        _When(tuple(when), coarse_paths_m(stations, tuple(chosen)) if when else None)
        for chosen, when in zip(settings.tolist(), windows, strict=True)
    ]


def _calibrator(
    stars: StarColumns,
    ranked: _Ranked,
    standings: Mapping[int, str],
    index: int,
    when: _When,
) -> Calibrator:
    row, budget = int(ranked.rows[index]), ranked.budget
    star_id = int(stars.ids[row])
    theta = float(stars.diameter_mas[row])
    used = int(stars.relations_used[row])
    return Calibrator(
        rank=index + 1,
        star_id=star_id,
        name=stars.names[row].decode(),
        ra_deg=float(stars.ra_deg[row]),
        dec_deg=float(stars.dec_deg[row]),
        separation_deg=float(ranked.separations[index]),
        spectral_type=stars.spectral_types[row].decode(),
        magnitudes={
            band: (float(values[row]), float(stars.magnitude_errors[band][row]))
            for band, values in stars.magnitudes.items()
            if np.isfinite(values[row])
        },
        limb_darkened_mas=theta,
        uniform_disk_mas=theta * float(uniform_disk_ratio(budget.limb_darkening[index])),
        own_error_mas=float(stars.own_error_mas[row]),
        shared_error_mas=float(stars.shared_error_mas[row]),
        relations=tuple(name for bit, name in enumerate(stars.relation_names) if used >> bit & 1),
        flags=tuple(flag_words(int(stars.flags[row]))),
        v2_min=float(budget.v2_min[index]),
        v2_max=float(budget.v2_max[index]),
        longest_baseline_m=float(ranked.longest_m[index]),
        budget={name: None if (term := budget.terms[name]) is None else float(term[index]) for name in TERMS},
        calibration_error=float(budget.total[index]),
        standing=standings.get(star_id),
        windows=when.windows,
        coarse_paths_m=when.coarse_paths_m,
    )


def _set_covariance(
    stars: StarColumns, ranked: _Ranked, target: Target, setup: Setup, judge: str, members: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], float]:
    """What `subset_variances` needs of some ranked stars: covariances, that to the target, the sill.

    A look is one interval before or after the target's. A star's own terms stand on the diagonal, as its
    budget sums them; the diameters' shared part correlates stars.
    """
    rows, budget = ranked.rows[members], ranked.budget
    drift, interval = setup.drift, setup.look_interval_min
    diagonal = np.zeros(len(members))
    for name in TERMS:
        term = budget.terms[name]
        if name != "drift" and term is not None:
            diagonal += term[members] ** 2
    shared = shared_covariance(stars, rows, budget.slopes[members], judge)
    errors = np.where(np.eye(len(members), dtype=bool), diagonal[:, None], shared)
    if drift is None or interval is None:
        return errors, errors, np.zeros(len(members)), 0.0
    ra, dec = np.append(stars.ra_deg[rows], target.ra_deg), np.append(stars.dec_deg[rows], target.dec_deg)
    numbers = (drift.spread, drift.time_min, drift.angle_deg)
    together = field_covariance(*numbers, np.zeros(len(ra)), ra, dec)
    apart, once = (np.exp(-minutes / drift.time_min) for minutes in (2 * interval, interval))
    field, to_target = together[:-1, :-1], together[:-1, -1] * once
    return errors + field, errors + field * apart, to_target, drift.spread**2


def _best_sets(
    stars: StarColumns,
    ranked: _Ranked,
    target: Target,
    setup: Setup,
    judge: str,
    reach: TargetReach | None,
) -> list[CalibratorSet]:
    members = np.arange(min(SET_CANDIDATES, len(ranked.rows)))
    if not len(members):
        return []
    covariance = _set_covariance(stars, ranked, target, setup, judge, members)
    possible = None if reach is None else partial(reach.ever_together, stars, ranked.rows[members])
    found = best_subsets(*covariance, possible=possible)
    rows = [ranked.rows[list(subset)] for subset, _ in found]
    whens = [_When() for _ in found]
    if reach is not None:
        whens = _told(reach, *reach.common_windows(stars, rows))
    return [
        CalibratorSet(tuple(stars.ids[some].tolist()), float(np.sqrt(variance)), *when)
        for some, (_, variance), when in zip(rows, found, whens, strict=True)
    ]


def _named_set(
    stars: StarColumns,
    target: Target,
    setup: Setup,
    judge: str,
    limits: Thresholds,
    with_ids: Sequence[int],
    assess: Callable[[NDArray[np.int64], NDArray[np.float64]], _Ranked],
    reach: TargetReach | None,
) -> CalibratorSet:
    """The error of a set that the caller named, or an error that says which gate a star fails."""
    members = []
    for star_id in dict.fromkeys(with_ids):
        row = np.flatnonzero(stars.ids == star_id)
        if not len(row):
            raise InputError(f"with names star {star_id}, which this edition does not have")
        apart = separation_deg(target.ra_deg, target.dec_deg, stars.ra_deg[row], stars.dec_deg[row])
        reason = "too_far" if apart[0] > limits.separation_max_deg else None
        reason = reason or next(iter(assess(row, apart).excluded), None)
        if reason:
            name = stars.names[int(row[0])].decode()
            raise InputError(f"with names {name}, which is left out: {REASONS[reason]}")
        members.append((int(row[0]), float(apart[0])))
    if len(members) > SET_CANDIDATES:
        raise InputError(f"with names {len(members)} stars; it may be {SET_CANDIDATES} at the most")
    rows, separations = np.array(members).T
    ranked = assess(rows.astype(np.int64), separations)
    everyone = np.arange(len(members))
    if reach is not None and not reach.ever_together(stars, ranked.rows, everyone[None])[0]:
        raise InputError(
            "with names stars that are never in reach together with the target under one coarse setting"
        )
    covariance = _set_covariance(stars, ranked, target, setup, judge, everyone)
    variance = subset_variances(*covariance, everyone[None])[0]
    when = _When() if reach is None else _told(reach, *reach.common_windows(stars, [ranked.rows]))[0]
    return CalibratorSet(tuple(stars.ids[ranked.rows].tolist()), float(np.sqrt(variance)), *when)


def _names(stars: StarColumns, sets: list[CalibratorSet]) -> dict[int, str]:
    members = sorted({star_id for one in sets for star_id in one.star_ids})
    rows = np.flatnonzero(np.isin(stars.ids, members))
    return {int(stars.ids[row]): stars.names[row].decode() for row in rows}


def _coarse_paths(reach: TargetReach | None) -> dict[str, float] | None:
    if reach is None or reach.settings is None:
        return None
    return coarse_paths_m(reach.clock.stations, reach.settings)


def _notes(setup: Setup, limits: Thresholds, target: Target, reach: TargetReach | None) -> list[str]:
    """What was left out or assumed."""
    notes = []
    if setup.mode is None:
        notes.append("No array given: photon, drift and brightness terms are left out.")
        if limits.magnitude_max is not None:
            notes.append(f"Stars fainter than {setup.band} = {limits.magnitude_max:g} are left out.")
    elif target.magnitudes.get(setup.band) is None:
        notes.append(f"The target has no {setup.band} magnitude: the brightness term is left out.")
    lowest, highest = setup.dec_range_deg or (-90.0, 90.0)
    if not lowest <= target.dec_deg <= highest:
        notes.append("The target never rises above the array's altitude limit.")
    if reach is None:
        notes.append("No time given: baselines count at full length and windows are not computed.")
    else:
        if why := reach.why_not:
            notes.append(f"The target cannot be observed then: {why}.")
        notes.extend(reach.clock.notes)
    if setup.wavelength_um > 2.4:
        notes.append("Beyond the K band limb darkening is held at its K value.")
    return notes
