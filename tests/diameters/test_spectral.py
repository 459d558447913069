import numpy as np
import pytest

from pinlight.diameters.spectral import luminosity_groups, parse_spectral_type, spectral_code
from pinlight.errors import InputError


@pytest.mark.parametrize(
    ("text", "code", "luminosity"),
    [
        ("G2V", 42, "V"),
        ("K1III-IV", 51, "III"),
        ("A0Vn", 20, "V"),
        ("F5Iab:", 35, "Iab"),
        ("G8III+G0III", 48, "III"),
        ("M4.5Ve", 64.5, "V"),
        ("K0", 50, ""),
        ("B8IVn", 18, "IV"),
        ("G0/G1V", 40, "V"),
        ("K0II-III", 50, "II"),
        ("kA5hF0mF2III", 30, "III"),
        ("sdM1.5", 61.5, "VI"),
        ("O9.7Ib", 9.7, "Ib"),
        ("K2+Vk:", 52, "V"),
        ("F2IV/V", 32, "IV"),
    ],
)
def test_types_are_read_as_catalogues_write_them(text, code, luminosity):
    spectral = parse_spectral_type(text)
    assert (spectral.code, spectral.luminosity) == (code, luminosity)
    assert spectral.normal


@pytest.mark.parametrize("text", ["", "~", "Am:", "?"])
def test_a_blank_or_unreadable_type_says_nothing(text):
    spectral = parse_spectral_type(text)
    assert spectral.luminosity == ""
    assert spectral.normal


@pytest.mark.parametrize("text", ["DA", "DAZ5", "DC9:", "C5,4", "S4/2", "WC8", "N3"])
def test_types_without_a_relation_are_told_apart(text):
    assert not parse_spectral_type(text).normal


def test_peculiarities_are_seen():
    assert parse_spectral_type("A5V(n)").broad_lined
    assert parse_spectral_type("A1Vnn").broad_lined
    assert not parse_spectral_type("K0IIICN1").broad_lined
    assert parse_spectral_type("B6Vep").emission
    assert not parse_spectral_type("F8VFe-0.5").emission
    assert parse_spectral_type("A0p").peculiar
    assert parse_spectral_type("G8III+G0III").composite
    assert not parse_spectral_type("K4+Vk:").composite
    assert parse_spectral_type("DA4").degenerate
    assert parse_spectral_type("O5V+WN6").composite
    assert parse_spectral_type("B4Ieq-K2Ib").composite
    assert not parse_spectral_type("K1III-IV").composite
    # Mercury-manganese stars rotate slowly; the n of Mn is no mark of broad lines.
    assert not parse_spectral_type("B9IIIHgMn").broad_lined
    assert not parse_spectral_type("B8IIImnp").broad_lined
    assert not parse_spectral_type("F5Vmetalweak").emission


def test_a_missing_class_is_told_from_parallax_and_colour():
    # A red clump giant and a dwarf of the same colour at their common absolute magnitudes
    # (common practice, no source): K0 III M_K = -1.6, K0 V M_K = 4.0.
    types = [parse_spectral_type("K0")] * 2
    v_ks, parallax = np.array([2.2, 1.95]), np.array([10.0, 20.0])
    ks = np.array([-1.6, 4.0]) - 5 * np.log10(parallax / 100)
    assert list(luminosity_groups(types, v_ks, ks + v_ks, parallax)) == ["giant", "dwarf"]


def test_the_limits_between_dwarf_and_giant():
    # Either side of absolute Ks 1.3 for a red star, of -1 for a blue one (common practice, no source).
    types = [parse_spectral_type(text) for text in ("K0", "K0", "A0", "A0")]
    v_ks, absolute = np.array([2.2, 2.2, 0.1, 0.1]), np.array([1.0, 1.6, -1.3, -0.7])
    groups = luminosity_groups(types, v_ks, absolute + v_ks + 5, np.full(4, 10.0))
    assert list(groups) == ["giant", "dwarf", "giant", "dwarf"]


def test_a_stated_class_is_believed():
    types = [parse_spectral_type(text) for text in ("K0III", "K0V", "F5Iab", "DA3", "G8IV", "K1II")]
    nothing = np.full(6, np.nan)
    assert list(luminosity_groups(types, nothing, nothing, nothing)) == [
        "giant", "dwarf", "supergiant", "", "subgiant", "giant",
    ]  # fmt: skip


def test_a_code_needs_a_temperature_class():
    assert spectral_code("K2.5") == 52.5
    with pytest.raises(InputError, match="spectral type is 'X1'; it must begin with one of O, B, A"):
        spectral_code("X1")
