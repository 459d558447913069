"""The calls that every face makes: rank, the best set, a plan, a track."""

from pathlib import Path
from typing import Any

from pinlight.arrays.files import Array
from pinlight.catalogue.store import Catalogue
from pinlight.errors import InputError
from pinlight.faces.setups import array_of, make_clock, make_setup, station_names
from pinlight.faces.targets import resolve_target
from pinlight.planning.night import NightPlan, Request
from pinlight.planning.night import plan_night as plan_columns
from pinlight.ranking.rank import rank as rank_columns
from pinlight.ranking.result import CalibratorSet, Ranking
from pinlight.ranking.setup import setup_of
from pinlight.ranking.target import Target
from pinlight.ranking.track import track

__all__ = ["best_set", "plan_night", "rank", "track_target"]


def rank(
    catalogue: Catalogue,
    target: str | Target,
    *,
    array: str | Path | Array | None = None,
    stations: list[str] | str | None = None,
    mode: str | None = None,
    baseline_m: float | None = None,
    wavelength_um: float | None = None,
    separation_max_deg: float | None = None,
    magnitude_max: float | None = None,
    v2_min: float | None = None,
    judge: str = "rms",
    best: int = 20,
    edition: str | None = None,
    night: str | None = None,
    at: str | None = None,
    from_: str | None = None,
    to: str | None = None,
    with_: list[str] | None = None,
) -> Ranking:
    """Rank calibrators for a target, with an array or just a baseline and a wavelength.

    Parameters
    ----------
    catalogue : Catalogue
    target : str or Target
        A star's name, coordinates as text, or a target of your own.
    array : path, name or Array, optional
        With `stations` (all by default) and `mode`.
    baseline_m, wavelength_um : float, optional
        The quick answer, in place of `array`.
    separation_max_deg, magnitude_max, v2_min : float, optional
        In place of the array's limits.
    judge : str
        ``rms`` over baselines and channels, or ``worst``.
    best : int
        How many to list.
    edition : str, optional
        The newest by default.
    night : str, optional
        Date of an evening at the array: its dark hours. Stars then have to be in reach together
        with the target, and baselines are the projected ones.
    at, from_, to : str, optional
        One time, or the beginning and end of a span, in UTC; in place of `night`.
    with_ : list of str, optional
        Names of stars whose set is evaluated beside the best sets.

    Returns
    -------
    Ranking

    Raises
    ------
    InputError, NotFoundError
        If something asked for is impossible or unknown.
    CatalogueError
        If the catalogue cannot be read.
    """
    if with_ is not None and not with_:
        raise InputError("with is empty; name the stars of a set, parted by commas")
    array = None if array is None else array_of(array)
    setup = make_setup(array, stations, mode, baseline_m, wavelength_um)
    if array is None and (timed := night or at or from_ or to):
        raise InputError(f"a time, {timed}, is given without an array; give the array too")
    clock = None
    if array is not None:
        clock = make_clock(array, stations, night, at, from_, to)
    return rank_columns(
        catalogue.columns(edition),
        resolve_target(catalogue, target),
        setup,
        limits=setup.limits.replace(separation_max_deg, v2_min, magnitude_max),
        judge=judge,
        best=best,
        standings=catalogue.standings(setup.band, setup.mode_name, setup.array_name),
        clock=clock,
        with_ids=[catalogue.find(name) for name in with_ or ()],
    )


def best_set(catalogue: Catalogue, target: str | Target, size: int = 2, **options: Any) -> CalibratorSet:
    """The set of calibrators of one size that costs a target least.

    Parameters
    ----------
    catalogue, target
        As `rank` takes them, and so all other options.
    size : int
        1 to 4.

    Raises
    ------
    InputError, NotFoundError
        As `rank`; also where fewer stars than `size` pass every gate.
    """
    sets = {len(one.star_ids): one for one in rank(catalogue, target, **options).best_sets}
    if size not in sets:
        raise InputError(
            f"size is {size}; it may be one of {', '.join(map(str, sets)) or 'none: no star ranks'}"
        )
    return sets[size]


def track_target(
    catalogue: Catalogue | None,
    target: str | Target,
    array: str | Path | Array,
    *,
    stations: list[str] | str | None = None,
    night: str | None = None,
    from_: str | None = None,
    to: str | None = None,
    step_min: float = 10.0,
) -> dict[str, Any]:
    """Where a target stands over an array, ready for JSON; see `ranking.track.track`.

    Coordinates need no catalogue.
    """
    clock = make_clock(array_of(array), stations, night, None, from_, to)
    if clock is None:
        raise InputError("from is missing; give from and to, or a night")
    return track(clock, resolve_target(catalogue, target), step_min)


def plan_night(
    catalogue: Catalogue,
    requests: list[Request],
    *,
    array: str | Path | Array,
    stations: list[str] | str | None = None,
    mode: str | None = None,
    night: str | None = None,
    from_: str | None = None,
    to: str | None = None,
    edition: str | None = None,
    time_limit_s: float = 5.0,
) -> NightPlan:
    """A night of blocks for many targets; see `planning.night`.

    Parameters
    ----------
    catalogue : Catalogue
    requests : list of Request
        Of `read_requests`, or your own.
    array, stations, mode
        As `rank` takes them.
    night, from_, to : str, optional
        The evening's date at the array, or a span of UTC.
    edition : str, optional
    time_limit_s : float
        For the solver.
    """
    found = array_of(array)
    clock = make_clock(found, stations, night, None, from_, to)
    if clock is None:
        raise InputError("night is missing; write the date of its evening, such as 2026-12-01")
    setup = setup_of(found, station_names(stations), mode)
    return plan_columns(
        catalogue.columns(edition),
        requests,
        setup,
        clock,
        standings=catalogue.standings(setup.band, setup.mode_name, setup.array_name),
        time_limit_s=time_limit_s,
    )
