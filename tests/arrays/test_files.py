import re
from pathlib import Path

import pytest

from pinlight.arrays.files import load_array
from pinlight.errors import InputError
from pinlight.resources import seed_folder

SHIPPED = seed_folder() / "arrays" / "north.toml"


def changed(tmp_path: Path, old: str, new: str) -> Path:
    text = SHIPPED.read_text(encoding="utf-8")
    assert old in text
    path = tmp_path / "mine.toml"
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    return path


def test_the_shipped_arrays_lie_in_both_hemispheres(north, south):
    assert north.latitude_deg > 0 > south.latitude_deg
    assert len(north.station) >= 4
    assert len(south.station) >= 4


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (
            "latitude_deg = 38.4",
            "latitude_deg = 98.4",
            "latitude_deg is 98.4: input should be less than or equal to 90",
        ),
        ("latitude_deg = 38.4", "latitude_deg = nan", "latitude_deg is nan: input should be a finite number"),
        ("latitude_deg = 38.4\n", "", "latitude_deg is missing"),
        ("height_m", "altitude_m", r"height_m is missing; altitude_m is not a known key"),
        ("spread = 0.03", "spread = -0.1", r"drift.spread is -0.1: input should be greater than or equal to 0"),
        (
            "wavelength_um = 1.65",
            "wavelength_um = 1650",
            r"mode\[0\].wavelength_um is 1650: input should be less than or equal to 30 \(1650 nm is 1.65 um\)",
        ),
        ('band = "H"', 'band = "X"', r"mode\[0\].band is 'X': it may be one of B, V"),
        ("east_m = 11.8", 'east_m = "far"', r"station\[0\].east_m is 'far': it must be a number"),
        (
            "cart_m = 60.0",
            "cart_length_m = 60.0",
            r"station\[0\].cart_m is missing; station\[0\].cart_length_m is not a known key",
        ),
        (
            "coarse_paths_m = [0.0, 30.0, 60.0, 90.0]",
            "coarse_paths_m = []",
            r"station\[0\].coarse_paths_m is \[\]",
        ),
        ('name = "Birch"', 'name = "ash"', r"two entries of \[\[station\]\] are named 'ash'"),
        ("bright_limit_magnitude = -1.0", "bright_limit_magnitude = 9.0", "must be below limiting_magnitude"),
        ("bandwidth_um = 0.28", "bandwidth_um = 4.0", "bandwidth_um must be below twice wavelength_um"),
        ("channels = 5", "channels = 2.5", r"mode\[0\].channels is 2.5: input should be a valid integer"),
        ("[drift]", "[drift", "is not TOML"),
        ("up_m = 1.5", "up_m = true", r"station\[0\].up_m is True: it must be a number"),
        ('name = "Birch"', 'name = "Bi,rch"', r"station\[1\].name is 'Bi,rch': a name must be printable"),
        ("read_variance = 4.0", "read_variance = 1e300", r"read_variance is 1e\+300: input should be less"),
        ("[limits]", "[limitations]", r"limits is missing; limitations is not a known key"),
    ],
)
def test_a_wrong_file_is_told_its_key_and_value(tmp_path, old, new, message):
    with pytest.raises(InputError, match=f"array file .*mine.toml.*{message}") as caught:
        load_array(changed(tmp_path, old, new))
    assert "\n" not in str(caught.value).split(" is not TOML", 1)[0]


def test_an_unreadable_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"cannot read array file .*none.toml: No such file"):
        load_array(tmp_path / "none.toml")
    with pytest.raises(InputError, match=r"cannot read array file .*: Is a directory"):
        load_array(tmp_path)
    binary = tmp_path / "picture.toml"
    binary.write_bytes(b"\x89PNG\xff\xfe")
    with pytest.raises(InputError, match="is not TOML"):
        load_array(binary)


def test_the_keys_of_the_array_file_are_the_documented_ones():
    """The interface that teams write by hand: every key, and no other."""
    keys = set(re.findall(r"^(\w+) =", SHIPPED.read_text(encoding="utf-8"), re.MULTILINE))
    assert keys == set(
        "name latitude_deg longitude_deg height_m spread time_min angle_deg brightness_per_mag "
        "altitude_min_deg sun_altitude_max_deg moon_distance_min_deg separation_max_deg v2_min "
        "east_m north_m up_m fixed_path_m coarse_paths_m cart_m horizon "
        "band wavelength_um bandwidth_um channels frame_ms counts_per_frame_at_mag0 read_variance "
        "integration_s system_v2 limiting_magnitude bright_limit_magnitude field_arcsec".split()
    )


def test_stations_and_modes_are_chosen_by_name(north):
    assert [s.name for s in north.choose_stations(["ash", " Rowan"])] == ["Ash", "Rowan"]
    assert north.choose_mode("h").name == "H"
    with pytest.raises(InputError, match="station is 'Oak'; Quillstone has Ash, Birch"):
        north.choose_stations(["Ash", "Oak"])
    with pytest.raises(InputError, match="station Ash is given twice"):
        north.choose_stations(["Ash", "ash"])
    with pytest.raises(InputError, match="stations is Ash; it takes at least two"):
        north.choose_stations(["Ash"])
    with pytest.raises(InputError, match="mode is 'J'; Quillstone has H, K, red"):
        north.choose_mode("J")
    with pytest.raises(InputError, match="mode is missing; Quillstone has H, K, red"):
        north.choose_mode(None)
