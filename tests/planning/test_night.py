"""A night plan, every block of it checked by code that shares nothing with the planner but the sky."""

import numpy as np
import pytest

from pinlight.errors import InputError
from pinlight.faces.library import plan_night as plan
from pinlight.faces.models import PlanAnswer
from pinlight.faces.targets import read_requests
from pinlight.fringes.companions import suspected_companion_error
from pinlight.planning.night import Request, _star_errors
from pinlight.ranking.budget import fixed_terms
from pinlight.ranking.clock import night_clock
from pinlight.ranking.columns import flag_bits
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
    assert reasons["At noon"].startswith("no window of")


def test_no_room_is_a_reason(catalogue, north):
    target, until = {"magnitudes": {"H": 4.0}}, parse_utc("2026-12-02T00:30Z")
    same = [Request(Target(60.0, 28.0, name=f"Twin {i}", **target), latest=until) for i in range(12)]
    night = plan(catalogue, same, array=north, mode="H", night=NIGHT)
    assert night.blocks
    assert "no room: blocks worth more fill its windows" in dict(night.unscheduled).values()


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
