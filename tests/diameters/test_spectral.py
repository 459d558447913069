import numpy as np
import pytest

from pinlight.diameters.spectral import (
    LUMINOSITY_GROUPS,
    luminosity_probabilities,
    parse_spectral_type,
    spectral_code,
)
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
        ("K5^+ III", 55, "III"),
        ("M0^+ IIIa", 60, "III"),
        ("K4^- III", 54, "III"),
        ("K5-III", 55, "III"),
        ("F0 V^+", 30, "V"),
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


def groups(stated, v_ks, absolute_ks, parallax=10.0):
    absolute = np.asarray(absolute_ks, float)
    ks = absolute - 5 * np.log10(parallax / 100)
    found = luminosity_probabilities(np.array(stated), np.asarray(v_ks, float), ks, np.full(ks.shape, parallax))
    np.testing.assert_allclose(found.sum(axis=1), 1.0)
    return found


def test_a_missing_class_is_told_from_parallax_and_colour():
    # A red clump giant and a dwarf of the same colour at their common absolute magnitudes
    # (common practice, no source): K0 III M_K = -1.6, K0 V M_K = 4.0; A0 V 0.5; M2 V 5.5.
    found = groups([""] * 4, [2.2, 1.95, 0.0, 4.1], [-1.6, 4.0, 0.5, 5.5])
    assert [LUMINOSITY_GROUPS[i] for i in found.argmax(axis=1)] == ["giant", "dwarf", "dwarf", "dwarf"]
    assert found[0, 2] > 0.9
    assert found[1, 0] > 0.8
    assert found[3, 0] > 0.95


def test_between_dwarfs_and_giants_the_class_is_open():
    # Red stars between the subgiants and the clump: no class has a probability above 0.6.
    assert groups([""], [2.05], [0.25]).max() < 0.6
    # Brighter is more probably a giant, all along.
    rising = groups([""] * 9, [2.3] * 9, np.linspace(3.0, -2.5, 9))[:, 2]
    assert (np.diff(rising) >= 0).all()


def test_the_probabilities_are_those_of_the_seeds_classed_stars():
    from pinlight.catalogue.seed import read_seed

    seed = read_seed()
    types = [parse_spectral_type(text) for text in seed.spectral_types]
    stated = np.array([spectral.group for spectral in types])
    v, ks = seed.magnitudes[:, 1], seed.magnitudes[:, 4]
    classed = np.isin(stated, ("dwarf", "subgiant", "giant")) & (ks > 4.5) & np.isfinite(v - ks)
    classed &= ~np.array([spectral.composite for spectral in types])
    guessed = luminosity_probabilities(np.full(stated.size, ""), v - ks, ks, seed.parallax_mas)
    for low, high in ((1.9, 2.2), (2.2, 2.6), (2.6, 3.2)):
        for bright, faint in ((-2.0, -1.0), (-1.0, 0.0), (0.0, 1.0), (3.0, 6.0)):
            absolute = ks + 5 * np.log10(seed.parallax_mas / 100)
            here = classed & (v - ks >= low) & (v - ks < high) & (absolute >= bright) & (absolute < faint)
            if here.sum() >= 100:
                assert guessed[here, 2].mean() == pytest.approx(np.mean(stated[here] == "giant"), abs=0.08)


def test_without_a_parallax_the_colour_alone_tells():
    nan = np.array([np.nan])
    red = luminosity_probabilities(np.array([""]), np.array([2.5]), np.array([5.0]), nan)[0]
    blue = luminosity_probabilities(np.array([""]), np.array([1.0]), np.array([5.0]), nan)[0]
    assert red[2] > 0.7
    assert blue[0] > 0.7
    nothing = luminosity_probabilities(np.array([""]), nan, nan, nan)[0]
    assert list(nothing) == [1, 0, 0, 0]


def test_a_stated_class_is_believed():
    types = [parse_spectral_type(text) for text in ("K0III", "K0V", "F5Iab", "G8IV", "K1II", "sdM1")]
    stated = [spectral.group for spectral in types]
    assert stated == ["giant", "dwarf", "supergiant", "subgiant", "giant", "dwarf"]
    found = groups(stated, [2.0] * 6, [9.0, -9.0, 5.0, 0.0, 0.0, 0.0])
    assert [LUMINOSITY_GROUPS[i] for i in found.argmax(axis=1)] == stated
    assert (found.max(axis=1) == 1).all()


def test_a_code_needs_a_temperature_class():
    assert spectral_code("K2.5") == 52.5
    with pytest.raises(InputError, match="spectral type is 'X1'; it must begin with one of O, B, A"):
        spectral_code("X1")
