import numpy as np
import pytest

from pinlight.catalogue.mapping import find_columns, read_rows
from pinlight.catalogue.tablefile import Chunk, Column
from pinlight.errors import InputError


def columns(*names):
    return [Column(name) for name in names]


def read(given, values, told=None, **options):
    mapping = find_columns(given, told or {}, **options)
    chunk = Chunk([2], {column.name: [value] for column, value in zip(given, values, strict=True)})
    return read_rows(chunk, mapping)


def test_columns_are_found_by_the_names_of_the_trade():
    given = columns(
        "_RAJ2000", "_DEJ2000", "pmRA", "pmDE", "Plx", "SpType", "Vmag", "e_Vmag", "Kmag", "HIP", "x"
    )
    found = find_columns(given, {}).columns
    assert {key: one.column for key, one in found.items()} == {
        "ra_deg": "_RAJ2000", "dec_deg": "_DEJ2000", "pm_ra_mas_yr": "pmRA", "pm_dec_mas_yr": "pmDE",
        "parallax_mas": "Plx", "spectral_type": "SpType", "V": "Vmag", "V_error": "e_Vmag", "Ks": "Kmag", "hip": "HIP",
    }  # fmt: skip
    assert {one.how for one in found.values()} == {"name"}


def test_columns_are_found_by_ucd_where_their_names_say_nothing():
    # UCD1+ words of the IVOA's controlled vocabulary.
    given = [
        Column("c1", "deg", "pos.eq.ra;meta.main"), Column("c2", "deg", "pos.eq.dec;meta.main"),
        Column("c3", "mag", "phot.mag;em.opt.V"), Column("c4", "mag", "phot.mag;em.IR.K"),
        Column("c5", "mag", "stat.error;phot.mag;em.opt.V"), Column("c6", None, "meta.id;meta.main"),
    ]  # fmt: skip
    found = find_columns(given, {}).columns
    assert {key: one.column for key, one in found.items()} == {
        "ra_deg": "c1", "dec_deg": "c2", "V": "c3", "Ks": "c4", "V_error": "c5", "name": "c6",
    }  # fmt: skip
    assert {one.how for one in found.values()} == {"UCD"}


def test_a_ucd_that_two_columns_have_tells_nothing():
    given = [
        *columns("ra", "dec"),
        Column("a", "mag", "phot.mag;em.opt.V"),
        Column("b", "mag", "phot.mag;em.opt.V"),
    ]
    assert "V" not in find_columns(given, {}).columns
    assert find_columns(given, {"V": "b"}).columns["V"].how == "told"


@pytest.mark.parametrize(
    ("column", "value", "key", "expected"),
    [
        pytest.param(Column("ra", "hourangle"), 10.5, "ra_deg", 157.5, id="hours"),
        pytest.param(Column("ra", '"h:m:s"'), "10 30 00", "ra_deg", 157.5, id="sexagesimal hours"),
        pytest.param(Column("ra"), "10:30:00.0", "ra_deg", 157.5, id="colons"),
        pytest.param(Column("ra"), "10h30m00s", "ra_deg", 157.5, id="letters"),
        pytest.param(Column("ra", "rad"), np.pi / 2, "ra_deg", 90.0, id="radians"),
        pytest.param(Column("ra_rad"), np.pi / 2, "ra_deg", 90.0, id="radians by the name"),
        pytest.param(Column("pmra", "arcsec/yr"), 1.5, "pm_ra_mas_yr", 1500.0, id="arcsec a year"),
        pytest.param(Column("parallax_arcsec"), 0.25, "parallax_mas", 250.0, id="arcsec by the name"),
        pytest.param(Column("rv", "m/s"), 1500, "radial_velocity_km_s", 1.5, id="metres a second"),
        pytest.param(Column("Vmag", "mag"), "", "V", np.nan, id="missing"),
        pytest.param(Column("Vmag", "mag"), None, "V", np.nan, id="masked"),
        pytest.param(Column("Vmag", "mmag"), 5250, "V", 5.25, id="millimagnitudes"),
    ],
)
def test_units_are_converted(column, value, key, expected):
    given = [one for one in columns("ra_deg", "dec") if not (key == "ra_deg" and one.name == "ra_deg")]
    told = {key: column.name} if column.name == "parallax_arcsec" or column.name == "ra_rad" else {}
    rows = read([*given, column], [*[10.0, 20.0][-len(given) :], value], told)
    assert rows.reasons == {}
    np.testing.assert_allclose(rows.numbers[key], [expected], rtol=1e-12)


def test_a_negative_declination_between_0_and_1_keeps_its_sign():
    assert read(columns("ra", "dec"), ["00:00:01", "-00:30:00"]).numbers["dec_deg"][0] == -0.5


def test_fluxes_become_magnitudes_with_the_zero_point_that_is_told():
    # m = -2.5 log10(F / F0); a tenth of the flux of magnitude 0 is 2.5 mag.
    given = [*columns("ra", "dec"), Column("V", "mJy"), Column("e_V", "mJy")]
    rows = read(given, [1, 2, 363_600.0, 3636.0], zero_points_jy={"V": 3636.0})
    assert rows.numbers["V"][0] == pytest.approx(2.5)
    assert rows.numbers["V_error"][0] == pytest.approx(2.5 * np.log10(1.01), rel=0.01)
    with pytest.raises(InputError, match="V is in mJy; say --zero-point V=JY"):
        find_columns(given, {})


@pytest.mark.parametrize(
    ("names", "told", "message"),
    [
        (("x", "dec", "V"), {}, "no column is ra_deg; say --map ra_deg=COLUMN, one of x, dec, V"),
        (("ra", "RA", "dec"), {}, "columns ra and RA may both be ra_deg"),
        (("ra", "dec"), {"magnitude": "V"}, "map has 'magnitude'; it may be one of name"),
        (("ra", "dec"), {"V": "Vmag"}, "map says V=Vmag, but the columns are ra, dec"),
    ],
)
def test_columns_that_cannot_be_told_are_named(names, told, message):
    with pytest.raises(InputError, match=message):
        find_columns(columns(*names), told)


def test_a_unit_that_cannot_be_is_named():
    with pytest.raises(InputError, match="Vmag is in 'km', which is no unit of V"):
        find_columns([*columns("ra", "dec"), Column("Vmag", "km")], {})


@pytest.mark.parametrize(
    ("name", "value", "reason"),
    [
        ("V", "bright", "V is 'bright', which is no number"),
        ("V", 99.9, "V is 99.9; it must lie between -5 and 30"),
        ("V", "inf", "V is infinite"),
        ("e_V", -1, "e_V is -1; it must lie between 0 and 10"),
        ("ra", 400, "ra is 400; it must lie between 0 and 360 deg"),
        ("ra", "", "ra is missing"),
        ("dec", "91", "dec is 91; it must lie between -90 and 90 deg"),
        ("flags", "wobbly", "flags has 'wobbly'"),
        ("name", "x" * 300, "name has 300 letters"),
        ("name", "***", "is no name of a star"),
    ],
)
def test_a_row_that_cannot_be_says_why(name, value, reason):
    given = {"ra": 1, "dec": 2, "V": 5.0, "e_V": 0.01, "flags": "", "name": "HD 1"} | {name: value}
    assert reason in read(columns(*given), list(given.values())).reasons[0]


def test_names_come_from_all_columns_that_have_them():
    rows = read(
        columns("ra", "dec", "HD", "hip", "source_id", "ids"),
        [1, 2, 10700, "8102", 123456, "tau Cet|LHS 146; HD 10700"],
    )
    assert rows.names == [["HD 10700", "HIP 8102", "Gaia DR3 123456", "tau Cet", "LHS 146"]]
