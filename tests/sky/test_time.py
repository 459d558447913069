import numpy as np
import pytest
from astropy.time import Time
from astropy.utils import iers

from pinlight.errors import InputError
from pinlight.sky.time import format_utc, has_rotation_data, parse_utc, rotation_angle_deg


@pytest.fixture(autouse=True)
def _offline(monkeypatch):
    monkeypatch.setattr(iers.conf, "auto_download", False)
    monkeypatch.setattr(iers.conf, "auto_max_age", None)
    monkeypatch.setattr(iers.conf, "iers_degraded_accuracy", "ignore")


@pytest.mark.parametrize(
    "text",
    [
        "1972-01-01T00:00:00",
        "1999-12-31T23:59:59",
        "2016-12-31T23:59:60",
        "2017-01-01T00:00:00",
        "2026-12-01T22:30:00",
    ],
)
def test_times_agree_with_astropy(text):
    ours = parse_utc(f"{text}Z")
    assert ours == pytest.approx(Time(text, scale="utc").tai.mjd, abs=1e-10)
    assert format_utc(ours) == f"{text}Z"


@pytest.mark.filterwarnings("ignore:ERFA function")  # astropy warns of years without announced leap seconds
@pytest.mark.parametrize("text", ["1970-01-01T00:00:00Z", "2100-06-30T12:00:00Z"])
def test_far_dates_work_and_come_back(text):
    time = parse_utc(text)
    assert format_utc(time) == text
    assert time == pytest.approx(Time(text.rstrip("Z"), scale="utc").tai.mjd, abs=1e-9)
    assert np.isfinite(rotation_angle_deg(time))
    assert not has_rotation_data(time)


def test_a_leap_second_is_a_second():
    before, leap, after = (
        parse_utc(t) for t in ("2016-12-31T23:59:59Z", "2016-12-31T23:59:60Z", "2017-01-01T00:00:00Z")
    )
    assert (leap - before) * 86_400 == pytest.approx(1, abs=1e-5)
    assert (after - leap) * 86_400 == pytest.approx(1, abs=1e-5)


def test_earth_rotation_agrees_with_astropy():
    times = np.array([parse_utc(t) for t in ("1980-03-01T05:00Z", "2008-12-31T12:00Z", "2026-06-01T00:00Z")])
    theirs = Time(times, format="mjd", scale="tai").earth_rotation_angle("tio").deg
    # 5e-6 deg is 1 millisecond of rotation: astropy takes early UT1 from the other bulletin.
    np.testing.assert_allclose(rotation_angle_deg(times), theirs, rtol=0, atol=5e-6)
    assert has_rotation_data(times).all()


def test_ut1_between_the_days_of_the_table_agrees_with_astropys_reading_of_it():
    # The same table read and interpolated by astropy; a day's step is up to a millisecond (4e-6 deg).
    table = iers.IERS_A.open(iers.IERS_A_FILE)
    times = np.random.default_rng(3).uniform(parse_utc("1993-01-01"), parse_utc("2026-09-01"), 300)
    there = Time(times, format="mjd", scale="tai")
    there.delta_ut1_utc = table.ut1_utc(there.utc).to_value("s")
    ours, theirs = rotation_angle_deg(times), there.earth_rotation_angle("tio").deg
    apart = (ours - theirs + 180) % 360 - 180
    # Bulletin B, which astropy prefers where it has it, is within 0.25 ms of Bulletin A in early years.
    assert np.abs(apart).max() < 1e-6
    assert np.median(np.abs(apart)) < 1e-7


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("tomorrow", "from is 'tomorrow'; write UTC as 2026-12-01T22:30:00Z"),
        ("2026-13-01", "from is '2026-13-01'; write UTC"),
        ("2026-02-30", "write UTC"),
        ("2026-12-01T25:00", "write UTC"),
        ("2026-12-01T22:61", "write UTC"),
        ("1926-12-01", "its year must lie between 1960 and 2200"),
        ("2026-12-01T22:30:00+02:00", "write UTC"),
    ],
)
def test_what_is_no_utc_is_named(text, message):
    with pytest.raises(InputError, match=message.replace("+", r"\+")):
        parse_utc(text, "from")
