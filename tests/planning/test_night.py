"""A night plan, every block of it checked by code that shares nothing with the planner but the sky."""

from itertools import pairwise

import numpy as np
import pytest

from pinlight.errors import InputError
from pinlight.faces.library import plan_night as plan
from pinlight.faces.models import PlanAnswer
from pinlight.faces.targets import read_requests
from pinlight.fringes.companions import suspected_companion_error
from pinlight.planning.night import Request, _Prepared, _star_errors, _Start, _worth
from pinlight.ranking.budget import error_budget, fixed_terms
from pinlight.ranking.clock import night_clock
from pinlight.ranking.columns import flag_bits
from pinlight.ranking.sets import field_covariance
from pinlight.ranking.setup import setup_of
from pinlight.ranking.target import Target
from pinlight.resources import seed_folder
from pinlight.sky.time import parse_utc

NIGHT = "2026-12-01"


@pytest.fixture(scope="module")
def requests():
    random = np.random.default_rng(5)
    return [
        Request(
            Target(float(ra % 360), float(dec), name=f"Lamp {i}", magnitudes={"H": float(h)}),
            priority=float(1 + i % 3),
            repeats=1 + (i % 5 == 0),
        )
        for i, (ra, dec, h) in enumerate(
            zip(random.uniform(330, 510, 14), random.uniform(0, 65, 14), random.uniform(2, 6, 14), strict=True)
        )
    ]


@pytest.fixture(scope="module")
def night(catalogue, north, requests):
    return plan(catalogue, requests, array=north, mode="H", night=NIGHT)


def test_every_block_satisfies_every_constraint(night, catalogue, north, requests):
    clock = night_clock(north, north.station, NIGHT)
    columns = catalogue.columns()
    setup = setup_of(north, None, "H")
    look_day = (setup.mode.integration_s / 60 + 5) / 1440
    assert len(night.blocks) >= 8
    placed = {}
    for block, following in zip(night.blocks, [*night.blocks[1:], None], strict=True):
        placed[block.target] = placed.get(block.target, 0) + 1
        assert clock.times[0] - 1e-9 <= block.start < block.end <= clock.times[-1] + 1e-9
        assert following is None or block.end <= following.start + 1e-9
        assert [look.role for look in block.looks] == ["calibrator", "target"] * (len(block.looks) // 2) + [
            "calibrator"
        ]
        assert block.looks[0].start == block.start
        assert block.looks[-1].end == block.end
        for look, after in zip(block.looks, block.looks[1:], strict=False):
            assert look.end == pytest.approx(after.start, abs=1e-9)
            assert look.end - look.start == pytest.approx(look_day, abs=1e-9)
        assert all(block.coarse_paths_m[s.name] in s.coarse_paths_m for s in north.station)
        target = next(r.target for r in requests if r.target.name == block.target)
        times = np.linspace(block.start, block.end, 25)
        for look in block.looks:
            if look.role == "target":
                place = clock.apparent(target.ra_deg, target.dec_deg)
            else:
                row = int(np.flatnonzero(columns.ids == look.star_id)[0])
                assert columns.names[row].decode() == look.name
                place = clock.apparent(
                    columns.ra_deg[row],
                    columns.dec_deg[row],
                    tuple(c[0] for c in columns.motion(np.array([row]))),
                )
            assert clock.observable(*place, times).all(), (block.target, look.name)
            # a_i = F_i + k_i - w_i; max(a) <= min(a + S), to the metres that five minutes hide.
            w = np.stack([clock.uvw_m(*place, t)[:, 2] for t in times])
            w_of = np.concatenate([np.zeros((len(times), 1)), w[:, : len(north.station) - 1]], axis=1)
            paths = np.array([s.fixed_path_m + block.coarse_paths_m[s.name] for s in north.station])
            a = paths - w_of
            carts = np.array([s.cart_m for s in north.station])
            assert (a.max(axis=1) <= (a + carts).min(axis=1) + 0.05).all(), (block.target, look.name)
    for request in requests:
        assert placed.get(request.target.name, 0) <= request.repeats
    missing = {target for target, _ in night.unscheduled}
    for request in requests:
        if placed.get(request.target.name, 0) < request.repeats:
            assert request.target.name in missing
    assert night.objective <= night.bound + 1e-9


def test_a_blocks_error_is_the_kriging_of_its_looks_by_loops(night, catalogue, north, requests):
    clock = night_clock(north, north.station, NIGHT)
    columns, setup = catalogue.columns(), setup_of(north, None, "H")
    drift, look = setup.drift, setup.look_interval_min
    for block in night.blocks:
        target = next(r.target for r in requests if r.target.name == block.target)
        ids = [one.star_id for one in block.looks if one.role == "calibrator"]
        rows = np.array([int(np.flatnonzero(columns.ids == star_id)[0]) for star_id in ids])
        # Projected baselines of each star in the middle of the block, from u and v.
        motion = tuple(columns.motion(rows))
        places = clock.apparent(columns.ra_deg[rows], columns.dec_deg[rows], motion)
        uvw = clock.uvw_m(*places, np.full(len(rows), (block.start + block.end) / 2))
        lengths = np.hypot(uvw[..., 0], uvw[..., 1])
        fixed = fixed_terms(columns, rows, np.zeros(len(rows)), setup, target.magnitudes["H"])
        budget = error_budget(columns, rows, setup, fixed | {"drift": None}, "rms", lengths)
        count = len(rows)
        errors = np.zeros((count, count))
        for i in range(count):
            for j in range(count):
                if rows[i] == rows[j]:
                    # One star in two looks: all but the photon noise is the same error twice.
                    errors[i, j] = sum(
                        term[i] ** 2
                        for name, term in budget.terms.items()
                        if term is not None and name not in ("drift", "photon")
                    )
                elif columns.relations_used[rows[i]] & columns.relations_used[rows[j]]:
                    relative = [columns.shared_error_mas[r] / columns.diameter_mas[r] for r in rows[[i, j]]]
                    errors[i, j] = np.mean(budget.slopes[i] * budget.slopes[j]) * relative[0] * relative[1]
                if i == j:
                    errors[i, j] += budget.terms["photon"][i] ** 2
        assert budget.terms["brightness"].max() > 0
        ra, dec = (
            np.append(columns.ra_deg[rows], target.ra_deg),
            np.append(columns.dec_deg[rows], target.dec_deg),
        )
        variances = []
        for between in range(count - 1):
            minutes = np.append(2 * look * np.arange(count), look * (2 * between + 1))
            field = field_covariance(drift.spread, drift.time_min, drift.angle_deg, minutes, ra, dec)
            system = np.ones((count + 1, count + 1))
            system[:count, :count] = field[:-1, :-1] + errors
            system[count, count] = 0
            right = np.append(field[:-1, -1], 1)
            variances.append(drift.spread**2 - np.linalg.solve(system, right) @ right)
        assert block.calibration_error == pytest.approx(np.sqrt(np.mean(variances)), rel=1e-4)


def test_blocks_of_a_leap_second_night_start_on_whole_minutes(catalogue, north):
    requests = [Request(Target(60.0, 28.0, name="Leap", magnitudes={"H": 4.0}), repeats=3)]
    night = plan(catalogue, requests, array=north, mode="H", from_="2016-12-31T19:00Z", to="2016-12-31T22:00Z")
    assert night.blocks
    for block in night.blocks:
        assert block.to_dict()["start_utc"].endswith(":00Z")


def test_two_targets_of_one_name_are_refused(catalogue, north):
    same = [Request(Target(60.0, 28.0, name="Twin")), Request(Target(61.0, 28.0, name="Twin"))]
    with pytest.raises(InputError, match="targets has Twin twice"):
        plan(catalogue, same, array=north, mode="H", night=NIGHT)
    nameless = [Request(Target(60.0, 28.0)), Request(Target(61.0, 28.0))]
    with pytest.raises(InputError, match="targets has 2 without a name"):
        plan(catalogue, nameless, array=north, mode="H", night=NIGHT)


def test_a_star_alone_serves_where_no_set_fits_a_block(catalogue, north):
    # Short carts and a short span: the best sets share a moment, but not half an hour.
    stations = [s.model_copy(update={"cart_m": 25.0}) for s in north.station]
    array = north.model_copy(update={"station": tuple(stations)})
    target = Target(9.3866, 10.3812, name="Brief", magnitudes={"H": 4.0})
    night = plan(
        catalogue,
        [Request(target)],
        array=array,
        mode="H",
        from_="2026-12-01T19:49:47Z",
        to="2026-12-01T21:39:24Z",
    )
    assert len(night.blocks) == 1


def test_priority_decides_who_gets_the_only_room(catalogue, north):
    target, until = {"magnitudes": {"H": 4.0}}, parse_utc("2026-12-01T19:40Z")
    for first, second in ((3.0, 1.0), (1.0, 3.0)):
        pair = [
            Request(Target(60.0, 28.0, name=f"Twin {p:g}", **target), priority=p, latest=until)
            for p in (first, second)
        ]
        night = plan(catalogue, pair, array=north, mode="H", from_="2026-12-01T18:50Z", to="2026-12-01T19:40Z")
        assert [block.target for block in night.blocks] == ["Twin 1"]
        assert night.objective == pytest.approx(1.0, abs=0.01)


def test_a_block_is_worth_less_the_farther_its_error_is_from_the_best():
    starts = {0: _Start(0.02, ()), 5: _Start(0.04, ())}
    one = _Prepared(Request(Target(60.0, 28.0), priority=2.0), np.empty(0, dtype=np.int64), None, starts, None)
    assert _worth(one, 0.02) == pytest.approx(1 / 2)
    assert _worth(one, 0.04) == pytest.approx(1 / 4)


def test_a_free_block_stands_where_its_error_is_least(catalogue, north):
    request = Request(Target(60.0, 28.0, name="Free", magnitudes={"H": 4.0}))
    [block] = plan(catalogue, [request], array=north, mode="H", night=NIGHT).blocks
    errors = []
    for hour in range(18, 29):
        day, clock_hour = divmod(hour, 24)
        earliest = parse_utc(f"2026-12-{1 + day:02d}T{clock_hour:02d}:00Z")
        bounded = Request(request.target, earliest=earliest, latest=earliest + 1 / 24)
        errors += [
            one.calibration_error
            for one in plan(catalogue, [bounded], array=north, mode="H", night=NIGHT).blocks
        ]
    assert len(errors) > 3
    assert block.calibration_error <= min(errors) * 1.001


def test_a_time_window_that_just_fits_a_block_is_used(catalogue, north):
    target = Target(60.0, 28.0, name="Tight", magnitudes={"H": 4.0})
    free = plan(catalogue, [Request(target)], array=north, mode="H", night=NIGHT).blocks[0]
    length = free.end - free.start
    earliest = parse_utc("2026-12-01T22:03Z")
    just = Request(target, earliest=earliest, latest=earliest + length + 1e-6)
    [block] = plan(catalogue, [just], array=north, mode="H", night=NIGHT).blocks
    assert block.start == pytest.approx(earliest, abs=1e-6)
    # A little less leaves room for fewer looks, much less for none.
    less = Request(target, earliest=earliest, latest=earliest + length - 2 / 1440)
    assert all(
        len(one.looks) < len(block.looks)
        for one in plan(catalogue, [less], array=north, mode="H", night=NIGHT).blocks
    )
    short = Request(target, earliest=earliest, latest=earliest + 20 / 1440)
    night = plan(catalogue, [short], array=north, mode="H", night=NIGHT)
    assert night.blocks == ()
    assert "within its from and to" in dict(night.unscheduled)["Tight"]


def test_terms_left_out_and_changes_without_time_are_noted(catalogue, north):
    requests = [
        Request(Target(60.0, 28.0, name="Blind")), Request(Target(20.0, 40.0, magnitudes={"H": 4.0}, name="Seen")),
        Request(Target(110.0, 30.0, magnitudes={"H": 4.0}, name="Later")),
    ]  # fmt: skip
    night = plan(catalogue, requests, array=north, mode="H", night=NIGHT)
    assert "Without a H magnitude the brightness term is left out: Blind." in night.notes
    assert any("No time is kept for changing coarse delay settings" in note for note in night.notes)
    limits = north.limits.model_copy(update={"coarse_change_min": 12.0})
    slow = plan(catalogue, requests, array=north.model_copy(update={"limits": limits}), mode="H", night=NIGHT)
    assert not any("No time is kept" in note for note in slow.notes)
    assert len(slow.blocks) == 3
    for one, following in pairwise(slow.blocks):
        assert following.start - one.end >= 12 / 1440 - 1e-9


def test_blocks_that_are_wanted_again_and_find_no_room_are_counted(catalogue, north):
    target = Target(60.0, 28.0, name="Often", magnitudes={"H": 4.0})
    night = plan(
        catalogue, [Request(target, repeats=20)], array=north, mode="H",
        from_="2026-12-01T19:00Z", to="2026-12-01T22:00Z",
    )  # fmt: skip
    placed = len(night.blocks)
    assert 1 < placed < 20
    assert (
        dict(night.unscheduled)["Often"]
        == f"{placed} of 20 blocks placed; no room: other blocks fill its windows"
    )


def test_a_target_may_be_named_alone(catalogue, tmp_path):
    name = catalogue.columns().names[int(np.flatnonzero(catalogue.columns().dec_deg > 20)[0])].decode()
    (tmp_path / "t.csv").write_text(f"name,priority,H\n{name},2,3.5\n", encoding="utf-8")
    [request] = read_requests(tmp_path / "t.csv", catalogue)
    assert request.target.star_id is not None
    assert request.target.motion is not None
    assert request.target.magnitudes["H"] == 3.5
    (tmp_path / "u.csv").write_text("name\nNo Such Star\n", encoding="utf-8")
    with pytest.raises(InputError, match=r"u\.csv line 2: .*No Such Star"):
        read_requests(tmp_path / "u.csv", catalogue)
    (tmp_path / "v.csv").write_text("name,ra_deg,dec_deg\nHalf,10,\n", encoding="utf-8")
    with pytest.raises(InputError, match="dec_deg of Half is missing"):
        read_requests(tmp_path / "v.csv", catalogue)


def test_a_plan_charges_a_calibrator_for_its_companions_as_a_ranking_does(catalogue, north):
    columns, setup = catalogue.columns(), setup_of(north, None, "H")
    component = np.uint64(flag_bits("component"))
    rows = np.flatnonzero(((columns.flags & component) != 0) & np.isfinite(columns.diameter_mas))
    rows = rows[(columns.dec_deg[rows] > 0) & np.isfinite(columns.magnitudes["H"][rows])][:50]
    clock = night_clock(north, north.station, NIGHT)
    errors = _star_errors(columns, rows, setup, Target(30.0, 20.0), clock, clock.times[len(clock.times) // 2])
    companion = fixed_terms(columns, rows, np.zeros(len(rows)), setup, None)["companion"]
    alone = ~np.isin(rows, columns.companion_rows)
    assert alone.any()
    assert companion[alone] == pytest.approx(suspected_companion_error())
    assert (errors.star_variance >= companion**2 * (1 - 1e-9)).all()


def test_the_json_is_the_documented_one(night):
    told = night.to_dict()
    PlanAnswer.model_validate(told)
    assert set(told["blocks"][0]) == {
        "target", "start_utc", "end_utc", "coarse_paths_m", "calibration_error_percent", "looks",
    }  # fmt: skip
    assert set(told["blocks"][0]["looks"][0]) == {"role", "name", "star_id", "start_utc", "end_utc"}
    assert {"unscheduled", "objective", "bound", "edition"} <= set(told)


def test_what_cannot_be_placed_says_why(catalogue, north):
    requests = [
        Request(Target(60.0, -60.0, name="Never up")),
        Request(Target(60.0, 28.0, name="Too good", magnitudes={"H": 4.0}), required_error=0.001),
        Request(
            Target(60.0, 28.0, name="At noon", magnitudes={"H": 4.0}), earliest=parse_utc("2026-12-02T11:00Z")
        ),
    ]
    night = plan(catalogue, requests, array=north, mode="H", night=NIGHT)
    assert night.blocks == ()
    reasons = dict(night.unscheduled)
    assert reasons["Never up"] == "it never rises above 30 deg"
    assert reasons["Too good"].startswith("required error 0.1 % is not reached; the best is")
    assert reasons["At noon"] == "its from and to lie outside the night"


def test_no_room_is_a_reason(catalogue, north):
    target, until = {"magnitudes": {"H": 4.0}}, parse_utc("2026-12-02T00:30Z")
    same = [Request(Target(60.0, 28.0, name=f"Twin {i}", **target), latest=until) for i in range(12)]
    night = plan(catalogue, same, array=north, mode="H", night=NIGHT)
    assert night.blocks
    assert "no room: other blocks fill its windows" in dict(night.unscheduled).values()


def test_a_required_error_is_kept_and_a_time_window_too(catalogue, north):
    earliest = parse_utc("2026-12-01T23:00Z")
    target = Target(61.9, 27.3, name="Slow Ember", magnitudes={"H": 3.9})
    loose = plan(catalogue, [Request(target)], array=north, mode="H", night=NIGHT)
    late = plan(catalogue, [Request(target, earliest=earliest)], array=north, mode="H", night=NIGHT)
    assert late.blocks[0].start >= earliest - 1e-9
    wanted = loose.blocks[0].calibration_error * 1.05
    kept = plan(catalogue, [Request(target, required_error=wanted)], array=north, mode="H", night=NIGHT)
    assert kept.blocks[0].calibration_error <= wanted * 1.001


def test_the_demo_targets_are_planned(catalogue, north):
    night = plan(catalogue, read_requests(seed_folder() / "targets.csv"), array=north, mode="H", night=NIGHT)
    assert {"Slow Ember", "Copper Wren"} <= {block.target for block in night.blocks}


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"priority": 0.0}, "priority of X is 0; it must lie between 0.001 and 1000"),
        ({"priority": 5e-324}, "priority of X is 4.94066e-324; it must lie between"),
        ({"priority": float("nan")}, "priority of X is nan"),
        ({"repeats": 0}, "repeats of X is 0; it must lie between 1 and 20"),
        ({"required_error": -0.01}, "required_error_percent of X is -1; it must lie between 0 and 100"),
    ],
)
def test_an_impossible_request_is_named(change, message):
    with pytest.raises(InputError, match=message):
        Request(Target(10.0, 10.0, name="X"), **change)


def test_a_plan_of_nothing_or_without_a_night_is_refused(catalogue, north):
    with pytest.raises(InputError, match="targets is empty"):
        plan(catalogue, [], array=north, mode="H", night=NIGHT)
    with pytest.raises(InputError, match="night is missing"):
        plan(catalogue, [Request(Target(10.0, 10.0))], array=north, mode="H")
    with pytest.raises(InputError, match="time_limit_s is 0"):
        plan(catalogue, [Request(Target(10.0, 10.0))], array=north, mode="H", night=NIGHT, time_limit_s=0)
