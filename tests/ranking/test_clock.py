"""Geometry, reach and windows against astropy and against brute force."""

from itertools import product

import numpy as np
import pytest
from astropy import units
from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_body, get_sun
from astropy.time import Time
from astropy.utils import iers

from pinlight.arrays.files import Station
from pinlight.arrays.reach import DelayLines
from pinlight.errors import InputError
from pinlight.ranking.clock import Clock, night_clock, span_clock
from pinlight.ranking.reach import reach_of_target
from pinlight.ranking.target import Target
from pinlight.sky.places import apparent_place_deg
from pinlight.sky.time import format_utc, parse_utc

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


def test_sun_and_moon_agree_with_astropy(north):
    clock = span_clock(north, north.station, "2026-12-01T16:00Z", "2026-12-02T06:00Z", 7.0)
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
                str(i), 0, 0, fixed=random.uniform(0, 60), coarse=sorted(random.uniform(0, 120, random.integers(1, 5))),
                cart=random.uniform(10, 60),
            )
            for i in range(count)
        )
    )  # fmt: skip


@pytest.mark.parametrize("trial", range(40))
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

    everything = [by_definition(k) for k in product(*(range(len(s.coarse_paths_m)) for s in lines.stations))]
    best = max(longest(holds) for holds in everything)
    choices = lines.choices(delays, allowed, most=5)
    if best == 0:
        assert choices == []
    else:
        assert longest(choices[0].in_reach) == best
        lengths = [longest(choice.in_reach) for choice in choices]
        assert lengths == sorted(lengths, reverse=True)
        distinct = sorted(
            {holds.tobytes(): longest(holds) for holds in everything if holds.any()}.values(), reverse=True
        )
        assert lengths == distinct[: len(lengths)]
    for choice in choices:
        np.testing.assert_array_equal(choice.in_reach, by_definition(choice.settings))
        each = [lines.with_settings(choice.settings, delays[:, star]) for star in range(stars)]
        np.testing.assert_array_equal(np.all(each, axis=0) & allowed, choice.in_reach)


def test_the_pair_that_fails_is_named_with_its_metres():
    lines = DelayLines(
        (
            station("A", 0, 0, cart=20.0),
            station("B", 0, 0, fixed=100.0, coarse=(0.0, 10.0), cart=30.0),
            station("C", 0, 0, cart=500.0),
        )
    )
    # a_A = 0, a_B = 100 or 110: B lies 100 m ahead of A, whose cart makes up 20.
    failure = lines.worst_pair(np.zeros((3, 1, 4)))
    assert failure.stations == ("A", "B")
    assert failure.short_by_m == pytest.approx(80.0)
    assert lines.choices(np.zeros((3, 1, 4)), np.ones(4, dtype=bool)) == []


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
    clock = night_clock(array, array.station, "2026-12-01", 10.0)
    reached = [bool(reach_of_target(clock, Target(float(ra), 25.0)).choices) for ra in range(0, 180, 20)]
    assert all(reached)


@pytest.mark.parametrize("trial", range(6))
def test_windows_agree_with_a_dense_scan(north, trial):
    random = np.random.default_rng(300 + trial)
    clock = night_clock(north, north.station[:4], "2026-09-15", 5.0)
    reach = reach_of_target(clock, Target(float(random.uniform(270, 400) % 360), float(random.uniform(0, 70))))
    windows = reach.target_windows()
    dense = np.arange(clock.times[0], clock.times[-1], 4 / 86_400)
    holds = clock.observable(*reach.place, dense)
    if reach.choices:
        holds &= clock.delay_lines.with_settings(reach.choices[0].settings, clock.delays_m(*reach.place, dense))
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
    clock = span_clock(array, array.station, "2026-12-01T00:00Z", "2026-12-02T00:00Z", 4.0)
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
    ("start", "end", "step", "message"),
    [
        (
            "2026-12-01T10:00",
            "2026-12-01T09:00",
            5,
            "to is 2026-12-01T09:00; it must lie within two days after from",
        ),
        ("2026-12-01", "2026-12-09", 5, "within two days after from"),
        ("2026-12-01", "2026-12-02", 0, "step_min is 0; it must lie between 0 and 1440"),
        ("2026-12-01", "2026-12-02", float("nan"), "step_min is nan"),
        ("2026-12-01", "2026-12-02", 0.01, "20000 are the most"),
    ],
)
def test_a_span_that_is_none_is_named(north, start, end, step, message):
    with pytest.raises(InputError, match=message):
        span_clock(north, north.station, start, end, step)


def test_why_a_target_cannot_be_observed_is_told(north):
    clock = night_clock(north, north.station, "2026-12-01", 10.0)
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


@pytest.mark.parametrize("step_min", [0.0, -1.0, float("nan"), float("inf"), 1e-9])
def test_a_nights_impossible_step_is_named(north, step_min):
    with pytest.raises(InputError, match="step_min is "):
        night_clock(north, north.station, "2026-12-01", step_min)
