"""Ranking with a clock: reach, windows and projected baselines."""

from itertools import product

import numpy as np
import pytest

from pinlight.errors import InputError
from pinlight.faces.library import rank as rank_named
from pinlight.faces.targets import resolve_target
from pinlight.ranking.clock import night_clock, span_clock
from pinlight.ranking.rank import rank
from pinlight.ranking.reach import reach_of_target
from pinlight.ranking.setup import setup_of
from pinlight.ranking.target import Target
from pinlight.sky.time import parse_utc
from pinlight.sky.windows import runs
from tests.ranking.stars import columns

TARGET = Target(60.0, 28.0, magnitudes={"H": 4.0})


@pytest.fixture(scope="module")
def answer(catalogue, north):
    return rank_named(catalogue, TARGET, array=north, mode="H", night="2026-12-01")


def place_of(clock, edition, star_id):
    """Apparent place of a star of the edition, its motion included."""
    row = np.flatnonzero(edition.ids == star_id)
    return tuple(
        angle[0] for angle in clock.apparent(edition.ra_deg[row], edition.dec_deg[row], edition.motion(row))
    )


def holds(clock, paths, place, times):
    """max(a_i) <= min(a_i + S_i), a_i = F_i + k_i - w_i, written out; a centimetre for the edges' 5 s."""
    w = clock.uvw_m(*place, times)[:, : len(clock.stations) - 1, 2]  # of all stations from the first
    a = np.array([s.fixed_path_m + paths[s.name] for s in clock.stations]) - np.pad(w, ((0, 0), (1, 0)))
    return a.max(axis=1) <= (a + [s.cart_m for s in clock.stations]).min(axis=1) + 0.01


def test_every_calibrator_has_windows_inside_the_night_and_its_conditions(answer, catalogue, north):
    clock = night_clock(north, north.station, "2026-12-01")
    target_place = clock.apparent(TARGET.ra_deg, TARGET.dec_deg)
    assert len(answer.calibrators) == 20
    for star in answer.calibrators:
        assert star.windows
        place = place_of(clock, catalogue.columns(), star.star_id)
        for start, end in star.windows:
            assert clock.times[0] - 1e-9 <= start < end <= clock.times[-1] + 1e-9
            inside = np.linspace(start, end, 15)
            assert clock.observable(*place, inside).all()
            assert clock.observable(*target_place, inside).all()
            for one in (place, target_place):
                assert holds(clock, star.coarse_paths_m, one, inside).all(), star.name


def test_sets_have_windows_in_which_all_their_stars_are_in_reach_under_one_setting(answer, catalogue, north):
    clock = night_clock(north, north.station, "2026-12-01")
    assert [len(one.star_ids) for one in answer.best_sets] == [1, 2, 3, 4]
    for one in answer.best_sets:
        assert one.windows
        places = [place_of(clock, catalogue.columns(), star_id) for star_id in one.star_ids]
        for start, end in one.windows:
            inside = np.linspace(start, end, 15)
            for place in (clock.apparent(TARGET.ra_deg, TARGET.dec_deg), *places):
                assert clock.observable(*place, inside).all()
                assert holds(clock, one.coarse_paths_m, place, inside).all()
    ranking = rank_named(
        catalogue, TARGET, array=north, mode="H", night="2026-12-01",
        with_=[c.name for c in answer.calibrators[:2]],
    )  # fmt: skip
    assert ranking.named_set.windows
    assert ranking.named_set.to_dict(ranking.names)["window_utc"]


def test_baselines_are_those_of_the_whole_window(answer, north):
    # Begin, middle and end of the star's time with the target; projected lengths from u and v.
    clock = night_clock(north, north.station, "2026-12-01")
    for star in answer.calibrators:
        within = [
            time
            for time in clock.fine_times
            if any(start - 1e-6 <= time <= end + 1e-6 for start, end in star.windows)
        ]
        u, v, _ = np.moveaxis(clock.uvw_m(*clock.apparent(star.ra_deg, star.dec_deg), np.array(within)), -1, 0)
        longest = np.hypot(u, v).max(axis=1)
        # What three moments miss of a slow change, and a few minutes at either end.
        assert longest.max() * 0.985 <= star.longest_baseline_m <= longest.max() * 1.002


def test_no_other_coarse_setting_serves_star_and_target_for_longer(catalogue, north):
    array = north.model_copy(update={"station": north.station[:4]})
    found = rank_named(catalogue, TARGET, array=array, mode="H", night="2026-12-01", best=6)
    clock = night_clock(array, array.station, "2026-12-01")
    target_place = clock.apparent(TARGET.ra_deg, TARGET.dec_deg)
    for star in found.calibrators:
        place = clock.apparent(star.ra_deg, star.dec_deg)
        allowed = clock.observable(*place, clock.times) & clock.observable(*target_place, clock.times)
        delays = [clock.delays_m(*p, clock.times) for p in (place, target_place)]
        best = 0
        for k in product(*(range(len(s.coarse_paths_m)) for s in array.station)):
            holds = allowed & np.all([clock.delay_lines.with_settings(k, d) for d in delays], axis=0)
            best = max([best, *(last - first for first, last in runs(holds))])
        longest = max(end - start for start, end in star.windows)
        step = clock.times[1] - clock.times[0]
        assert longest >= best * step - 1e-6
        assert longest <= (best + 2) * step


def test_the_json_has_windows_and_coarse_paths(answer):
    told = answer.to_dict()
    assert told["span_utc"]["start_utc"].startswith("2026-12-01T")
    assert set(told["coarse_paths_m"]) == {"Ash", "Birch", "Cedar", "Hazel", "Rowan", "Willow"}
    for star in told["calibrators"]:
        for window in star["window_utc"]:
            assert window["start_utc"] < window["end_utc"]
            assert window["start_utc"].endswith("Z")
    assert not any("No time given" in note for note in told["notes"])


def test_a_moment_is_a_span_of_no_length(catalogue, north):
    now = rank_named(catalogue, TARGET, array=north, mode="H", at="2026-12-01T21:00Z")
    assert now.calibrators
    [(start, end)] = now.calibrators[0].windows
    assert start == end == pytest.approx(parse_utc("2026-12-01T21:00Z"))
    day = rank_named(catalogue, TARGET, array=north, mode="H", at="2026-12-01T10:00Z")
    assert day.calibrators == ()
    assert any("the Sun is never below" in note for note in day.notes)
    assert day.ranked + sum(day.excluded.values()) == day.stars


def test_a_star_that_is_not_up_and_one_out_of_reach_are_told_apart(north):
    lines = [s.model_copy(update={"cart_m": 6.0}) for s in north.station[:3]]
    array = north.model_copy(update={"station": tuple(lines)})
    setup = setup_of(array, None, "H")
    limits = setup.limits.replace(separation_max_deg=100.0)
    clock = span_clock(array, array.station, "2026-12-01T20:00Z", "2026-12-01T23:00Z")
    stars = columns(
        [
            {"ra_deg": 60.0, "dec_deg": 27.9},
            {"ra_deg": 130.0, "dec_deg": 0.0},
            {"ra_deg": 90.0, "dec_deg": 60.0},
        ]
    )
    found = rank(stars, TARGET, setup, limits=limits, clock=clock)
    assert found.excluded == {"not_up": 1, "out_of_reach": 1}
    assert [c.star_id for c in found.calibrators] == [1]


def test_a_named_target_stands_where_it_has_moved_to(catalogue, north):
    # A star of large proper motion: its track is that of its row of the edition, motion and all.
    columns = catalogue.columns()
    speed = np.hypot(columns.pm_ra_mas_yr, columns.pm_dec_mas_yr)
    up = (columns.dec_deg > 20) & np.isfinite(speed) & np.isfinite(columns.parallax_mas)
    row = int(np.flatnonzero(up)[np.argmax(speed[up])])
    assert speed[row] > 1000
    target = resolve_target(catalogue, columns.names[row].decode())
    assert target.star_id == columns.ids[row]
    clock = night_clock(north, north.station, "2026-12-01")
    place = columns.ra_deg[row], columns.dec_deg[row]
    moved = clock.apparent(*place, tuple(column[0] for column in columns.motion(np.array([row]))))
    uvw = clock.uvw_m(*moved, clock.times)
    assert np.abs(clock.uvw_m(*reach_of_target(clock, target).place, clock.times) - uvw).max() < 0.005
    assert np.abs(clock.uvw_m(*clock.apparent(*place), clock.times) - uvw).max() > 0.02


def test_stars_that_no_coarse_setting_serves_at_one_moment_are_no_set(north):
    # Two stations east and west, no cart to speak of: a star needs the setting that its hour angle asks for.
    first = north.station[0].model_copy(
        update={"east_m": 0.0, "north_m": 0.0, "up_m": 0.0, "cart_m": 10.2, "coarse_paths_m": (0.0,)}
    )
    paths = tuple(float(path) for path in range(-100, 101, 20))
    second = first.model_copy(
        update={"name": "East", "east_m": 100.0, "coarse_paths_m": paths, "fixed_path_m": first.fixed_path_m}
    )
    array = north.model_copy(update={"station": (first, second)})
    setup = setup_of(array, None, "H")
    limits = setup.limits.replace(separation_max_deg=60.0)
    clock = span_clock(array, array.station, "2026-12-01T22:00Z", "2026-12-01T23:00Z")
    east, west = {"ra_deg": 67.0, "dec_deg": 28.0}, {"ra_deg": 53.0, "dec_deg": 28.0}
    both = columns([east, west])
    apart = rank(both, TARGET, setup, limits=limits, clock=clock)
    delays = clock.delays_m(
        *(angle[:, None] for angle in clock.apparent([67.0, 53.0], [28.0, 28.0])), clock.times
    )
    # By definition: |path + delay| within the carts' 10.2 m for one path, both stars and a moment.
    shared = [(abs(delays[0] + path) <= 10.2).all(axis=0).any() for path in paths]
    assert not any(shared)
    assert len(apart.calibrators) == 2
    assert [len(one.star_ids) for one in apart.best_sets] == [1]
    generous = [s.model_copy(update={"cart_m": 60.0}) for s in array.station]
    roomy = span_clock(
        array.model_copy(update={"station": tuple(generous)}),
        tuple(generous),
        "2026-12-01T22:00Z",
        "2026-12-01T23:00Z",
    )
    assert [len(one.star_ids) for one in rank(both, TARGET, setup, limits=limits, clock=roomy).best_sets] == [
        1,
        2,
    ]


def test_stars_that_are_never_up_together_are_no_set(north):
    stations = [s.model_copy(update={"cart_m": 500.0}) for s in north.station[:3]]
    array = north.model_copy(update={"station": tuple(stations)})
    setup = setup_of(array, None, "H")
    limits = setup.limits.replace(separation_max_deg=180.0)
    clock = night_clock(array, array.station, "2026-12-01")
    evening, midnight, morning = ({"ra_deg": ra, "dec_deg": 30.0} for ra in (330.0, 75.0, 190.0))
    target = Target(75.0, 80.0)
    apart = rank(columns([evening, morning]), target, setup, limits=limits, clock=clock)
    assert len(apart.calibrators) == 2
    assert apart.calibrators[0].windows[-1][1] < apart.calibrators[1].windows[0][0] or (
        apart.calibrators[1].windows[-1][1] < apart.calibrators[0].windows[0][0]
    )
    assert [len(one.star_ids) for one in apart.best_sets] == [1]
    with pytest.raises(InputError, match="never in reach together with the target under one coarse"):
        rank(columns([evening, morning]), target, setup, limits=limits, clock=clock, with_ids=[1, 2])
    three = rank(columns([evening, midnight, morning]), target, setup, limits=limits, clock=clock)
    assert [len(one.star_ids) for one in three.best_sets] == [1, 2]


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"night": "2026-12-01", "at": "2026-12-01T20:00"}, "night and at are both given"),
        ({"from_": "2026-12-01T20:00"}, "to is missing; give both, or a night"),
        ({"night": "2026-06-32"}, "night is '2026-06-32'; write a date as 2026-12-01"),
        ({"night": "2026-12-01", "stations": "Ash"}, "stations is Ash; it takes at least two"),
    ],
)
def test_a_time_that_is_none_is_named(catalogue, options, message):
    with pytest.raises(ValueError, match=message):
        rank_named(catalogue, TARGET, array="north", mode="H", **options)


def test_a_time_needs_an_array(catalogue):
    with pytest.raises(ValueError, match="is given without an array"):
        rank_named(catalogue, TARGET, baseline_m=100.0, wavelength_um=1.6, night="2026-12-01")


@pytest.mark.parametrize("date", ["1970-01-05", "2016-12-31", "2100-01-05"])
def test_leap_second_days_and_far_dates_work(catalogue, north, date):
    found = rank_named(catalogue, TARGET, array=north, mode="H", night=date)
    assert found.calibrators
    assert found.calibrators[0].windows
