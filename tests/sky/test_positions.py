import numpy as np
import pytest
from astropy import units
from astropy.coordinates import SkyCoord
from astropy.time import Time

from pinlight.errors import InputError
from pinlight.sky.positions import (
    check_position,
    galactic_latitude_deg,
    move_to_epoch,
    parse_coordinates,
    separation_deg,
)

RANDOM = np.random.default_rng(7)
RA, DEC = RANDOM.uniform(0, 360, (2, 500)), np.degrees(np.arcsin(RANDOM.uniform(-1, 1, (2, 500))))


def test_separations_agree_with_astropy():
    ours = separation_deg(RA[0], DEC[0], RA[1], DEC[1])
    theirs = SkyCoord(RA[0], DEC[0], unit="deg").separation(SkyCoord(RA[1], DEC[1], unit="deg")).deg
    np.testing.assert_allclose(ours, theirs, rtol=0, atol=1e-11)


@pytest.mark.parametrize("arcsec", [1e-6, 1e-3, 1.0])
def test_tiny_separations_keep_their_digits(arcsec):
    assert separation_deg(150.0, 40.0, 150.0, 40.0 + arcsec / 3600) * 3600 == pytest.approx(arcsec, rel=1e-4)


def test_galactic_latitudes_agree_with_astropy():
    theirs = SkyCoord(RA[0], DEC[0], unit="deg").galactic.b.deg
    # The pole of ESA SP-1200 and that of astropy's rotation differ by less than 0.1 arcsec.
    np.testing.assert_allclose(galactic_latitude_deg(RA[0], DEC[0]), theirs, rtol=0, atol=1e-4)


def test_proper_motion_epochs_agree_with_astropy():
    count = 200
    pm_ra, pm_dec = RANDOM.normal(0, 3000, (2, count))
    parallax, velocity = RANDOM.uniform(2, 700, count), RANDOM.normal(0, 80, count)
    ra, dec = RA[0][:count], DEC[0][:count]
    ours = move_to_epoch(ra, dec, pm_ra, pm_dec, parallax, velocity, 2000.0, 2026.9)
    stars = SkyCoord(
        ra * units.deg,
        dec * units.deg,
        distance=(1000 / parallax) * units.pc,
        pm_ra_cosdec=pm_ra * units.mas / units.yr,
        pm_dec=pm_dec * units.mas / units.yr,
        radial_velocity=velocity * units.km / units.s,
        obstime=Time(2000.0, format="jyear"),
    )
    theirs = stars.apply_space_motion(new_obstime=Time(2026.9, format="jyear"))
    apart = SkyCoord(*ours, unit="deg").separation(SkyCoord(theirs.ra, theirs.dec)).mas
    assert apart.max() < 0.1  # a tenth of a milliarcsecond in 27 years


def test_a_star_without_motion_stays():
    ra, dec = move_to_epoch([10.0], [-20.0], [np.nan], [np.nan], [np.nan], [np.nan], 2000.0, 2030.0)
    np.testing.assert_allclose([ra[0], dec[0]], [10.0, -20.0], atol=1e-12)


@pytest.mark.parametrize(
    "text",
    [
        "10:15:30.6 +20:05:06",
        "10 15 30.6 +20 05 06",
        "10h15m30.6s +20d05m06s",
        "10h15m30.6s+20d05m06s",
        "10 15 30.6 20 05 06",
        "10:15:30.6 20:05:06",
        "10:15:30.6, +20:05:06",
        "153.8775 20.085",
        "153.8775, +20.085",
        "153.8775d 20.085d",
    ],
)
def test_the_ways_people_write_positions_agree_with_astropy(text):
    theirs = SkyCoord("10h15m30.6s +20d05m06s")
    assert parse_coordinates(text) == pytest.approx((theirs.ra.deg, theirs.dec.deg), abs=1e-9)


@pytest.mark.parametrize("text", ["10:06 18:16", "10 06 18 16", "10h06m 18d16m", "10:06 +18:16"])
def test_seconds_may_be_left_out(text):
    theirs = SkyCoord("10h06m00s +18d16m00s")
    assert parse_coordinates(text) == pytest.approx((theirs.ra.deg, theirs.dec.deg), abs=1e-9)


def test_a_declination_just_south_of_the_equator_is_south():
    assert parse_coordinates("10:00:00 -00:30:00") == (150.0, -0.5)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("10:15:30 +95:00:00", "dec_deg is 95; it must lie between -90 and 90"),
        ("400 20", "ra_deg is 400; it must lie between 0 and 360"),
        ("25:00:00 +20:00:00", "ra_deg is 375"),
        ("10:75:00 +20:00:00", "has 75 minutes or seconds"),
        ("nan 20", "ra_deg is nan"),
        ("10 inf", "dec_deg is inf"),
        ("somewhere", "is no position"),
        ("10 20 30", "leaves open where the declination begins"),
        ("10:15:30 20", "has 1 numbers in a coordinate; it takes 2 or 3"),
        ("10:15:30.5 12", "has 1 numbers in a coordinate"),
        ("10h15m30s20d05m06s", "leaves open where the declination begins"),
        ("1:1:1" + " " * 90 + "1" + " " * 90 + "x", "is no position"),
        ("1" * 100_000, "is no position"),
    ],
)
def test_an_impossible_position_is_named(text, message):
    with pytest.raises(InputError, match=message):
        parse_coordinates(text)


def test_dec_95_is_refused():
    with pytest.raises(InputError, match="dec_deg is 95; it must lie between -90 and 90"):
        check_position(10.0, 95.0)
