"""Geometry, reach and windows against astropy and against brute force."""

from itertools import pairwise, product

import numpy as np
import pytest
from astropy import units
from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_body, get_sun
from astropy.time import Time
from astropy.utils import iers

from pinlight.arrays.files import Station
from pinlight.arrays.reach import DelayLines
from pinlight.errors import InputError
from pinlight.ranking.clock import Clock, moment_clock, night_clock, span_clock
from pinlight.ranking.reach import reach_of_target
from pinlight.ranking.target import Target
from pinlight.ranking.track import track
from pinlight.sky.places import apparent_place_deg
from pinlight.sky.time import format_utc, parse_utc
from pinlight.sky.windows import runs

RANDOM = np.random.default_rng(21)


@pytest.fixture(autouse=True)
def _offline(monkeypatch):
    monkeypatch.setattr(iers.conf, "auto_download", False)
    monkeypatch.setattr(iers.conf, "auto_max_age", None)
    monkeypatch.setattr(iers.conf, "iers_degraded_accuracy", "ignore")


def station(name, east, north, up=0.0, fixed=0.0, coarse=(0.0,), cart=50.0, horizon=()):
    return Station(
        name=name, east_m=east, north_m=north, up_m=up, fixed_path_m=fixed, coarse_paths_m=list(coarse), cart_m=cart,
        horizon=[list(point) for point in horizon],
    )  # fmt: skip


def at_site(array, latitude, longitude, stations=None):
    change = {"latitude_deg": latitude, "longitude_deg": longitude}
    return array.model_copy(update=change | ({"station": tuple(stations)} if stations else {}))


def astropy_frame(array, times):
    place = EarthLocation(
        array.longitude_deg * units.deg, array.latitude_deg * units.deg, array.height_m * units.m
    )
    return AltAz(obstime=Time(times, format="mjd", scale="tai"), location=place, pressure=0 * units.hPa)


@pytest.mark.parametrize("trial", range(8))
def test_uvw_agree_with_astropys_altaz_to_five_millimetres(north, trial):
    random = np.random.default_rng(trial)
    pair = [station("A", 0, 0), station("B", *random.uniform(-200, 200, 2), random.uniform(-20, 20))]
    array = at_site(north, random.uniform(-80, 80), random.uniform(-180, 180), pair)
    start = parse_utc("1995-01-01") + random.uniform(0, 11_500)
    clock = Clock(array, array.station, start + np.linspace(0, 0.4, 7))
    ra, dec = random.uniform(0, 360, 40), np.degrees(np.arcsin(random.uniform(-1, 1, 40)))
    place_ra, place_dec = clock.apparent(ra, dec)
    uvw = clock.uvw_m(place_ra[:, None], place_dec[:, None], clock.times)[:, :, 0]
    seen = SkyCoord(ra[:, None], dec[:, None], unit="deg").transform_to(astropy_frame(array, clock.times))
    alt, az = seen.alt.rad, seen.az.rad
    toward = np.stack([np.sin(az) * np.cos(alt), np.cos(az) * np.cos(alt), np.sin(alt)], axis=-1)
    b = array.station[1]
    enu = np.array([b.east_m, b.north_m, b.up_m])
    w = toward @ enu
    scale = 300 / np.linalg.norm(enu)
    assert np.abs(uvw[..., 2] - w).max() * scale < 0.005
    np.testing.assert_allclose(np.linalg.norm(uvw, axis=-1), np.linalg.norm(enu), rtol=1e-12)
    # u and v span the plane across the line of sight: the projected length is what is left of B.
    np.testing.assert_allclose(np.hypot(uvw[..., 0], uvw[..., 1]), np.sqrt(enu @ enu - w**2), atol=0.02)
    # u points east: its part along astropy's direction of growing right ascension.
    step = SkyCoord(ra[:, None] + 1e-3 / np.cos(np.radians(dec))[:, None], dec[:, None], unit="deg")
    moved = step.transform_to(astropy_frame(array, clock.times))
    east = (
        np.stack(
            [
                np.sin(moved.az.rad) * np.cos(moved.alt.rad),
                np.cos(moved.az.rad) * np.cos(moved.alt.rad),
                np.sin(moved.alt.rad),
            ],
            axis=-1,
        )
        - toward
    )
    east /= np.linalg.norm(east, axis=-1, keepdims=True)
    gentle = np.abs(dec) < 80
    # East of date differs from east of J2000 by the turn of precession, up to half a degree here.
    assert np.abs(uvw[gentle][..., 0] - (east @ enu)[gentle]).max() < 0.02 * np.linalg.norm(enu)
    # v points north: what is left of a right-handed set, north = toward x east.
    north_of = np.cross(toward, east)
    assert np.abs(uvw[gentle][..., 1] - (north_of @ enu)[gentle]).max() < 0.02 * np.linalg.norm(enu)


def test_sun_and_moon_agree_with_astropy(north):
    clock = span_clock(north, north.station, "2026-12-01T16:00Z", "2026-12-02T06:00Z")
    frame = astropy_frame(north, clock.times)
    sun = get_sun(frame.obstime).transform_to(frame).alt.deg
    close = np.abs(sun - north.limits.sun_altitude_max_deg) < 0.01
    np.testing.assert_array_equal(
        clock.dark(clock.times)[~close], (sun < north.limits.sun_altitude_max_deg)[~close]
    )
    moon = get_body("moon", frame.obstime, frame.location).transform_to(frame)
    ra, dec = RANDOM.uniform(0, 360, 400), np.degrees(np.arcsin(RANDOM.uniform(-1, 1, 400)))
    place = clock.apparent(ra, dec)
    stars = SkyCoord(ra[:, None], dec[:, None], unit="deg").transform_to(frame)
    distance = stars.separation(moon[None, :]).deg
    close = np.abs(distance - north.limits.moon_distance_min_deg) < 0.02
    ours = clock.moon_clear(place[0][:, None], place[1][:, None], clock.times)
    np.testing.assert_array_equal(ours[~close], (distance >= north.limits.moon_distance_min_deg)[~close])
    assert 0 < (~ours).sum() < ours.size


def test_apparent_places_follow_proper_motion():
    motion = (1000.0, -2000.0, 100.0, 50.0)
    still, moved = (apparent_place_deg(150.0, 20.0, parse_utc("2026-12-01"), m) for m in (None, motion))
    years = 26.917
    assert (moved[1] - still[1]) * 3600 == pytest.approx(-2.0 * years, abs=0.4)
    assert (moved[0] - still[0]) * 3600 * np.cos(np.radians(20)) == pytest.approx(1.0 * years, abs=0.4)


def random_lines(random, count=4):
    return DelayLines(
        tuple(
            station(
                str(i), 0, 0, fixed=random.uniform(0, 60), coarse=random.uniform(0, 120, random.integers(1, 5)),
                cart=random.uniform(1, 60),
            )
            for i in range(count)
        )
    )  # fmt: skip


def sizes(lines):
    return [len(s.coarse_paths_m) for s in lines.stations]


@pytest.mark.parametrize("trial", range(60))
def test_reach_agrees_with_brute_force_over_all_coarse_choices(trial):
    random = np.random.default_rng(100 + trial)
    lines = random_lines(random)
    times, stars = 30, 3
    w = np.cumsum(random.normal(0, 6, (len(lines.stations), stars, times)), axis=2) + random.uniform(
        -60, 60, (4, 1, 1)
    )
    first, second = np.array(lines.pairs).T
    delays = w[first] - w[second]
    allowed = random.uniform(size=times) < 0.95

    def by_definition(settings):
        # max(a_i) <= min(a_i + S_i), a_i = F_i + k_i - w_i, for all stars.
        a = np.array(
            [s.fixed_path_m + s.coarse_paths_m[k] for s, k in zip(lines.stations, settings, strict=True)]
        )
        a = a[:, None, None] - w
        carts = np.array([s.cart_m for s in lines.stations])[:, None, None]
        return (a.max(axis=0) <= (a + carts).min(axis=0)).all(axis=0) & allowed

    def longest(holds):
        best = run = 0
        for one in holds:
            run = run + 1 if one else 0
            best = max(best, run)
        return best

    everything = [by_definition(k) for k in product(*map(range, sizes(lines)))]
    best = max(longest(holds) for holds in everything)
    # Two blocks at once: all stars together, and the first alone.
    low = np.stack([delays.min(axis=1), delays[:, 0]], axis=1)
    high = np.stack([delays.max(axis=1), delays[:, 0]], axis=1)
    found = lines.longest(low, high, np.stack([allowed, allowed]))
    assert found.length[0] == best
    assert found.length[1] >= best
    settings = tuple(found.settings[0].tolist())
    holds = by_definition(settings)
    assert longest(holds) == best
    first = int(found.first[0])
    assert holds[first : first + best].all()
    each = [lines.with_settings(settings, delays[:, star]) for star in range(stars)]
    np.testing.assert_array_equal(np.all(each, axis=0) & allowed, holds)
    # At every single time: settings are found exactly where any serve, and they do serve.
    settings_then, served = lines.settings_for(low[:, 0], high[:, 0])
    ever = np.any([by_definition(k) | ~allowed for k in product(*map(range, sizes(lines)))], axis=0)
    np.testing.assert_array_equal(served[allowed], ever[allowed])
    holding = lines.with_settings(settings_then, low[:, 0]) & lines.with_settings(settings_then, high[:, 0])
    assert holding[served].all()
    if not served.any():
        failure = lines.shortfall(low[:, 0], high[:, 0])
        longer = [s.model_copy(update={"cart_m": s.cart_m + failure.short_by_m + 0.02}) for s in lines.stations]
        shorter = [
            s.model_copy(update={"cart_m": s.cart_m + failure.short_by_m - 0.02}) for s in lines.stations
        ]
        assert DelayLines(tuple(longer)).settings_for(low[:, 0], high[:, 0])[1].any()
        assert not DelayLines(tuple(shorter)).settings_for(low[:, 0], high[:, 0])[1].any()


def test_the_pair_that_fails_is_named_with_its_metres():
    lines = DelayLines(
        (
            station("A", 0, 0, cart=20.0),
            station("B", 0, 0, fixed=100.0, coarse=(0.0, 10.0), cart=30.0),
            station("C", 0, 0, cart=500.0),
        )
    )
    # a_A = 0, a_B = 100 or 110: B lies 100 m ahead of A, whose cart makes up 20.
    failure = lines.shortfall(np.zeros((3, 4)), np.zeros((3, 4)))
    assert failure.stations == ("A", "B")
    assert failure.short_by_m == pytest.approx(80.0, abs=0.02)
    assert not lines.settings_for(np.zeros((3, 4)), np.zeros((3, 4)))[1].any()


def test_three_stations_that_meet_two_by_two_only_are_out_of_reach():
    # B reaches A and C, each with another setting; A and C reach each other: only the three fail.
    lines = DelayLines(
        (
            station("A", 0, 0, cart=0.0),
            station("B", 0, 0, coarse=(0.0, 10.0), cart=0.0),
            station("C", 0, 0, fixed=10.0, cart=10.0),
        )
    )
    pairs = [DelayLines((lines.stations[i], lines.stations[j])) for i, j in ((0, 1), (1, 2))]
    assert all(pair.settings_for(np.zeros((1, 1)), np.zeros((1, 1)))[1].all() for pair in pairs)
    delays = np.zeros((3, 1))
    assert not lines.settings_for(delays, delays)[1].any()
    assert lines.shortfall(delays, delays).short_by_m == pytest.approx(10.0, abs=0.02)


def test_a_generous_array_is_searched_at_once():
    # 45 settings on each of six stations: 8e9 choices, most of them good.
    random = np.random.default_rng(3)
    stations = [
        station(str(i), 0, 0, fixed=random.uniform(0, 60), coarse=9.14 * np.arange(45), cart=150.0)
        for i in range(6)
    ]
    lines = DelayLines(tuple(stations))
    turn = np.linspace(-1.5, 1.5, 170)
    w = 200 * np.sin(turn + random.uniform(-3, 3, (6, 1))) * random.uniform(0, 1, (6, 1))
    first, second = np.array(lines.pairs).T
    delays = (w[first] - w[second])[:, None]
    found = lines.longest(delays, delays, np.ones((1, 170), dtype=bool))
    begin, end = int(found.first[0]), int(found.first[0] + found.length[0])
    assert found.length[0] > 20
    assert lines.with_settings(tuple(found.settings[0].tolist()), delays[:, 0, begin:end]).all()


def test_a_zero_cart_reaches_only_equal_paths():
    lines = DelayLines((station("A", 0, 0, cart=0.0), station("B", 0, 0, cart=0.0)))
    np.testing.assert_array_equal(lines.with_settings((0, 0), np.array([[0.0, 1e-6]])), [True, False])


def test_a_common_long_array_reaches_most_of_the_sky(north):
    # Common practice, no source: coarse steps of about 9 m, carts with about 30 m of travel used out
    # and back, three arms of about 230 m.
    coarse = [9.14 * step for step in range(45)]
    arms = [(230 * np.sin(a), 230 * np.cos(a)) for a in np.radians([10, 130, 250])]
    stations = [station(f"{i}", *arm, coarse=coarse, cart=61.0) for i, arm in enumerate(arms)]
    array = at_site(north, 34.0, 0.0, stations)
    clock = night_clock(array, array.station, "2026-12-01")
    reached = [reach_of_target(clock, Target(float(ra), 25.0)).settings is not None for ra in range(0, 180, 20)]
    assert all(reached)


@pytest.mark.parametrize("trial", range(6))
def test_windows_agree_with_a_dense_scan(north, trial):
    random = np.random.default_rng(300 + trial)
    clock = night_clock(north, north.station[:4], "2026-09-15")
    reach = reach_of_target(clock, Target(float(random.uniform(270, 400) % 360), float(random.uniform(0, 70))))
    windows = reach.target_windows
    dense = np.arange(clock.times[0], clock.times[-1], 4 / 86_400)
    holds = clock.observable(*reach.place, dense)
    if reach.settings is not None:
        holds &= clock.delay_lines.with_settings(reach.settings, clock.delays_m(*reach.place, dense))
    else:
        assert windows == []
        return
    inside = np.zeros(len(dense), dtype=bool)
    for start, end in windows:
        inside |= (dense >= start) & (dense <= end)
    # Edges differ by at most ten seconds on either side of each window.
    assert (inside != holds).sum() * 4 <= 20 * max(len(windows), 1)


def test_a_horizon_blocks_only_where_it_stands(north):
    wall = [(0, 0), (89, 0), (90, 60), (180, 60), (181, 0)]
    stations = [station("A", 0, 0, horizon=wall), station("B", 50, 0)]
    array = at_site(north, 38.0, 0.0, stations)
    clock = span_clock(array, array.station, "2026-12-01T00:00Z", "2026-12-02T00:00Z")
    ra, dec = clock.apparent(100.0, 10.0)
    above = clock.above(ra, dec, clock.times)
    hours = clock.hour_angle_deg(ra, clock.times)
    assert not above[(hours < -20) & (hours > -60)].any()  # in the south-east, below 60 deg
    assert above[(hours > 10) & (hours < 55)].all()  # west of the meridian the wall is low
    assert clock.horizon_deg(array.station[0], 359.5) == pytest.approx(0)


def test_the_night_lies_between_twilights(north):
    clock = night_clock(north, north.station, "2026-12-01")
    frame = astropy_frame(north, clock.times[[0, -1]])
    np.testing.assert_allclose(get_sun(frame.obstime).transform_to(frame).alt.deg, -12.0, atol=0.02)
    assert format_utc(clock.times[0]).startswith("2026-12-01")
    assert format_utc(clock.times[-1]).startswith("2026-12-02")


@pytest.mark.parametrize(
    ("latitude", "night", "message"),
    [
        (80.0, "2026-06-21", "the Sun does not go below -12 deg then"),
        (38.0, "2026-12-01T10:00", "write the date of its evening"),
        (38.0, "someday", "write"),
    ],
)
def test_a_night_that_is_none_is_told_so(north, latitude, night, message):
    array = at_site(north, latitude, 15.0)
    with pytest.raises(InputError, match=message):
        night_clock(array, array.station, night)


def test_a_polar_night_is_long(north):
    array = at_site(north, 89.0, 0.0)
    clock = night_clock(array, array.station, "2026-12-21")
    assert (clock.times[-1] - clock.times[0]) * 24 > 23


@pytest.mark.parametrize(
    ("start", "end", "message"),
    [
        (
            "2026-12-01T10:00",
            "2026-12-01T09:00",
            "to is 2026-12-01T09:00; it must lie within two days after from",
        ),
        ("2026-12-01", "2026-12-09", "within two days after from"),
    ],
)
def test_a_span_that_is_none_is_named(north, start, end, message):
    with pytest.raises(InputError, match=message):
        span_clock(north, north.station, start, end)


def test_a_moment_that_is_none_is_named_as_it_was_given(north):
    with pytest.raises(InputError, match="at is 'now'; write UTC"):
        moment_clock(north, north.station, "now")


def test_why_a_target_cannot_be_observed_is_told(north):
    clock = night_clock(north, north.station, "2026-12-01")
    assert "it never rises above 30 deg" in reach_of_target(clock, Target(60.0, -60.0)).why_not
    day = span_clock(north, north.station, "2026-12-01T10:00Z", "2026-12-01T12:00Z")
    assert "the Sun is never below -12 deg" in reach_of_target(day, Target(60.0, 30.0)).why_not


def test_a_target_on_top_of_the_moon_is_told_so(north):
    # The Moon stands 63 deg high in darkness then, by astropy.
    brief = span_clock(north, north.station, "2026-11-25T00:00Z", "2026-11-25T01:00Z")
    frame = astropy_frame(north, brief.times)
    assert get_body("moon", frame.obstime, frame.location).transform_to(frame).alt.deg.min() > 40
    moon = get_body("moon", Time(brief.middle, format="mjd", scale="tai"))
    why = reach_of_target(brief, Target(float(moon.ra.deg), float(moon.dec.deg))).why_not
    assert why == "the Moon is always within 15 deg"


def test_a_date_without_rotation_data_is_noted(north):
    assert night_clock(north, north.station, "2026-10-01").notes == []
    for night in ("1970-01-05", "2100-01-05"):
        assert "No Earth-rotation data" in night_clock(north, north.station, night).notes[0]


@pytest.mark.parametrize("step_min", [0.0, -1.0, float("nan"), float("inf"), 1441.0, 1e-9])
def test_an_impossible_step_is_named(north, step_min):
    with pytest.raises(InputError, match="step_min is "):
        night_clock(north, north.station, "2026-12-01").every(step_min)


def test_steps_begin_with_the_span_and_end_with_it(north):
    clock = span_clock(north, north.station, "2026-12-01T20:00Z", "2026-12-01T20:50Z")
    assert [format_utc(time)[11:16] for time in clock.every(20.0)] == ["20:00", "20:20", "20:40", "20:50"]
    assert len(clock.every(25.0)) == 3


def test_a_tracks_windows_do_not_depend_on_its_step(north):
    clock = night_clock(north, north.station, "2026-12-01")
    tracks = [track(clock, Target(60.0, 28.0), step) for step in (1.0, 60.0, 900.0)]
    assert tracks[0]["windows"]
    assert all(one["windows"] == tracks[0]["windows"] for one in tracks)
    for one in tracks:
        for at in one["times"]:
            inside = any(w["start_utc"] <= at["utc"] <= w["end_utc"] for w in one["windows"])
            near = any(
                abs(parse_utc(at["utc"]) - parse_utc(edge)) < 15 / 86_400
                for w in one["windows"]
                for edge in w.values()
            )
            assert near or inside == at["in_reach"] == (at["blocked_by"] == [])


def test_hour_angles_are_positive_in_the_west(north):
    # Common practice, no source: past the meridian a star stands in the west and sinks.
    times = track(night_clock(north, north.station, "2026-12-01"), Target(60.0, 20.0), 30.0)["times"]
    hours = [at["hour_angle_h"] for at in times]
    assert min(hours) < -3
    assert max(hours) > 3
    for at, after in pairwise(times):
        assert (at["hour_angle_h"] > 0) == (180 < at["azimuth_deg"] < 360)
        if abs(at["hour_angle_h"]) > 0.6 and after["hour_angle_h"] > at["hour_angle_h"]:
            assert (after["altitude_deg"] < at["altitude_deg"]) == (at["hour_angle_h"] > 0)


def test_thin_masts_split_windows_and_steer_the_choice_of_settings(north):
    # Half a degree wide: the star passes each in some three minutes.
    masts = [(0.0, 0.0), (360.0, 0.0)]
    for azimuth in (70, 76, 82, 88, 94, 268, 273, 278, 283):
        masts += [(azimuth - 0.26, 0.0), (azimuth - 0.25, 60.0), (azimuth + 0.25, 60.0), (azimuth + 0.26, 0.0)]
    stations = [s.model_copy(update={"horizon": tuple(sorted(masts))}) for s in north.station[:3]]
    array = at_site(north, 38.0, 15.0, stations)
    clock = night_clock(array, array.station, "2026-12-01")
    reach = reach_of_target(clock, Target(60.0, 30.0))
    dense = np.arange(clock.times[0], clock.times[-1], 5 / 86_400)
    up, delays = clock.observable(*reach.place, dense), clock.delays_m(*reach.place, dense)
    assert len(runs(up)) >= 7
    lengths = {
        k: max(
            (last - first for first, last in runs(up & clock.delay_lines.with_settings(k, delays))), default=0
        )
        for k in product(*map(range, sizes(clock.delay_lines)))
    }
    ours = max(end - start for start, end in reach.target_windows) * 1440
    assert ours >= max(lengths.values()) * 5 / 60 - 2
    holds = up & clock.delay_lines.with_settings(reach.settings, delays)
    assert len(reach.target_windows) == len([1 for first, last in runs(holds) if last > first])
    assert sum(end - start for start, end in reach.target_windows) * 86_400 == pytest.approx(
        holds.sum() * 5, abs=15 * len(reach.target_windows)
    )


def test_what_blocks_a_star_is_named(north):
    wall = [(0, 0), (89, 0), (90, 50), (180, 50), (181, 0)]
    stations = [north.station[0].model_copy(update={"horizon": tuple(wall)}), north.station[1]]
    array = at_site(north, 38.0, 15.0, stations)
    told = track(night_clock(array, array.station, "2026-12-01"), Target(60.0, 10.0), 10.0)["times"]
    for at in told:
        assert ("altitude" in at["blocked_by"]) == (at["altitude_deg"] < array.limits.altitude_min_deg)
        behind = 91 < at["azimuth_deg"] < 179 and at["altitude_deg"] < 49.9
        assert ("horizon of Ash" in at["blocked_by"]) or not behind
        assert ("horizon of Ash" not in at["blocked_by"]) or at["altitude_deg"] < 50.1
    assert {"altitude", "horizon of Ash"} <= {word for at in told for word in at["blocked_by"]}


def test_daylight_is_not_blamed_on_the_delay_lines(north):
    clock = span_clock(north, north.station, "2026-12-01T10:00Z", "2026-12-01T12:00Z")
    told = track(clock, Target(220.0, 30.0), 10.0)
    assert told["windows"] == []
    assert told["coarse_paths_m"] is None
    assert all("sun" in at["blocked_by"] for at in told["times"])
    delays = clock.delays_m(*clock.apparent(220.0, 30.0), clock.times)
    ever = clock.delay_lines.settings_for(delays, delays)[1]
    blamed = ["delay lines at every coarse setting" in at["blocked_by"] for at in told["times"]]
    assert blamed == [not one for one in ever]
