"""Array files made from OIFITS, the open standard: tables written here as the standard describes them."""

import numpy as np
import pytest
from astropy import units
from astropy.coordinates import EarthLocation
from astropy.io import fits

from pinlight.arrays.files import load_array
from pinlight.arrays.oifits import array_file_from_oifits
from pinlight.errors import InputError


def oifits(path, array, frame="GEOCENTRIC", with_array=True, with_waves=True):
    """An OIFITS 2 file (Duvert, Young & Hummel 2017, A&A 597, A8) of an array's stations."""
    place = EarthLocation(
        array.longitude_deg * units.deg, array.latitude_deg * units.deg, array.height_m * units.m
    )
    lon, lat = np.radians(array.longitude_deg), np.radians(array.latitude_deg)
    east = np.array([-np.sin(lon), np.cos(lon), 0])
    north = np.array([-np.sin(lat) * np.cos(lon), -np.sin(lat) * np.sin(lon), np.cos(lat)])
    up = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    xyz = [s.east_m * east + s.north_m * north + s.up_m * up for s in array.station]
    hdus = [fits.PrimaryHDU()]
    if with_array:
        count = len(xyz)
        table = fits.BinTableHDU.from_columns(
            [
                fits.Column("TEL_NAME", "16A", array=[f"T{i}" for i in range(count)]),
                fits.Column("STA_NAME", "16A", array=[s.name for s in array.station]),
                fits.Column("STA_INDEX", "I", array=np.arange(count)),
                fits.Column("DIAMETER", "E", unit="m", array=np.ones(count)),
                fits.Column("STAXYZ", "3D", unit="m", array=np.array(xyz)),
            ],
            name="OI_ARRAY",
        )
        table.header["ARRNAME"] = array.name
        table.header["FRAME"] = frame
        for axis, value in zip("XYZ", (place.x, place.y, place.z), strict=True):
            table.header[f"ARRAY{axis}"] = value.to_value(units.m)
        hdus.append(table)
    if with_waves:
        waves = fits.BinTableHDU.from_columns(
            [
                fits.Column("EFF_WAVE", "E", unit="m", array=np.array([1.5, 1.6, 1.7]) * 1e-6),
                fits.Column("EFF_BAND", "E", unit="m", array=np.full(3, 0.1e-6)),
            ],
            name="OI_WAVELENGTH",
        )
        waves.header["INSNAME"] = "near infrared"
        hdus.append(waves)
    fits.HDUList(hdus).writeto(path)
    return path


BLANKS = {
    "spread": "0.03", "time_min": "40.0", "angle_deg": "12.0", "brightness_per_mag": "0.003",
    "altitude_min_deg": "30.0", "sun_altitude_max_deg": "-12.0", "moon_distance_min_deg": "10.0",
    "separation_max_deg": "15.0", "v2_min": "0.5", "fixed_path_m": "0.0", "coarse_paths_m": "[0.0]",
    "cart_m": "100.0", "horizon": "[]", "frame_ms": "10.0", "counts_per_frame_at_mag0": "1e6",
    "read_variance": "4.0", "integration_s": "300.0", "system_v2": "0.5", "limiting_magnitude": "7.0",
    "bright_limit_magnitude": "-1.0", "field_arcsec": "1.0",
}  # fmt: skip


def test_stations_come_back_where_they_stand(tmp_path, north):
    text = array_file_from_oifits(oifits(tmp_path / "a.fits", north))
    for key, value in BLANKS.items():
        text = text.replace(f'{key} = "?"', f"{key} = {value}")
    (tmp_path / "a.toml").write_text(text, encoding="utf-8")
    made = load_array(tmp_path / "a.toml")
    assert made.name == north.name
    assert (made.latitude_deg, made.longitude_deg) == pytest.approx(
        (north.latitude_deg, north.longitude_deg), abs=1e-6
    )
    assert made.height_m == pytest.approx(north.height_m, abs=0.01)
    for ours, theirs in zip(made.station, north.station, strict=True):
        assert ours.name == theirs.name
        assert (ours.east_m, ours.north_m, ours.up_m) == pytest.approx(
            (theirs.east_m, theirs.north_m, theirs.up_m), abs=1e-3
        )
    [mode] = made.mode
    assert (mode.name, mode.band, mode.channels) == ("near infrared", "H", 3)
    assert (mode.wavelength_um, mode.bandwidth_um) == pytest.approx((1.6, 0.3), abs=1e-5)


def test_blanks_are_refused_by_name_until_they_are_filled(tmp_path, north):
    text = array_file_from_oifits(oifits(tmp_path / "a.fits", north, with_waves=False))
    (tmp_path / "a.toml").write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=r"drift.spread is '\?': it must be a number"):
        load_array(tmp_path / "a.toml")
    assert text.count('"?"') > 20


def test_what_is_no_use_is_told(tmp_path, north):
    with pytest.raises(InputError, match="has no OI_ARRAY table"):
        array_file_from_oifits(oifits(tmp_path / "none.fits", north, with_array=False))
    with pytest.raises(InputError, match="FRAME SKY; only GEOCENTRIC"):
        array_file_from_oifits(oifits(tmp_path / "sky.fits", north, frame="SKY"))
    (tmp_path / "text.fits").write_text("hello", encoding="utf-8")
    for name in ("text.fits", "missing.fits"):
        with pytest.raises(InputError, match=f"cannot read .*{name} as OIFITS"):
            array_file_from_oifits(tmp_path / name)


def changed(path, extension, change):
    with fits.open(path, mode="update") as file:
        change(file[extension])
    return path


def test_what_the_file_leaves_undefined_is_a_blank(tmp_path, north):
    def forget(table):
        table.data["STAXYZ"][1] = np.nan

    path = changed(oifits(tmp_path / "a.fits", north), "OI_ARRAY", forget)

    def forget_wave(table):
        table.data["EFF_WAVE"][0] = np.nan

    text = array_file_from_oifits(changed(path, "OI_WAVELENGTH", forget_wave))
    assert text.count('east_m = "?"') == 1
    assert 'wavelength_um = "?"' in text
    assert 'band = "?"' in text
    assert "nan" not in text


def test_an_impossible_table_is_named(tmp_path, north):
    def far(table):
        table.header["ARRAYX"] = 5e9

    with pytest.raises(InputError, match=r"puts the array 5e\+06 km from the Earth's centre"):
        array_file_from_oifits(changed(oifits(tmp_path / "far.fits", north), "OI_ARRAY", far))

    def below(table):
        table.data["EFF_WAVE"][0] = -1e-6

    text = array_file_from_oifits(changed(oifits(tmp_path / "below.fits", north), "OI_WAVELENGTH", below))
    assert 'wavelength_um = "?"' in text
    with fits.open(oifits(tmp_path / "full.fits", north)) as file:
        file["OI_WAVELENGTH"].data = file["OI_WAVELENGTH"].data[:0]
        file.writeto(tmp_path / "none.fits")
    assert "channels = 0" not in array_file_from_oifits(tmp_path / "none.fits")

    def twice(table):
        table.data["STA_NAME"][1] = table.data["STA_NAME"][0]

    with pytest.raises(InputError, match="has stations named Ash more than once"):
        array_file_from_oifits(changed(oifits(tmp_path / "twice.fits", north), "OI_ARRAY", twice))

    def blank(table):
        table.data["STA_NAME"][1] = ""

    with pytest.raises(InputError, match="has stations named a blank more than once or not at all"):
        array_file_from_oifits(changed(oifits(tmp_path / "blank.fits", north), "OI_ARRAY", blank))

    def words(table):
        table.header["ARRAYY"] = "somewhere"

    with pytest.raises(InputError, match=r"cannot read .*words\.fits as OIFITS"):
        array_file_from_oifits(changed(oifits(tmp_path / "words.fits", north), "OI_ARRAY", words))
