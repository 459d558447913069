import csv
from pathlib import Path

import numpy as np
import pytest

from pinlight.diameters.atmosphere import (
    effective_temperature_k,
    expected_v_ks,
    gravity_from_radius,
    spectral_code_from_colour,
    surface_gravity,
)
from pinlight.diameters.limb_darkening import coefficients, coefficients_at, uniform_disk_ratio
from pinlight.diameters.spectral import parse_spectral_type

MEASURED = Path(__file__).parents[1] / "data" / "measured_diameters.csv"
NAN = np.array([np.nan])
DWARF, GIANT = np.array(["dwarf"]), np.array(["giant"])


def rows():
    with MEASURED.open(encoding="utf-8", newline="") as file:
        return [row for row in csv.DictReader(file) if row["teff_k"]]


def test_temperatures_by_type_agree_with_measured_ones():
    # von Braun et al. (2014), MNRAS 438, 2413: temperatures from diameters and bolometric fluxes.
    codes = np.array([parse_spectral_type(row["spectral_type"]).code for row in rows()])
    measured = np.array([float(row["teff_k"]) for row in rows()])
    ours = effective_temperature_k(codes, np.full(codes.size, "dwarf"), np.full(codes.size, np.nan))
    assert abs(np.median(ours - measured)) < 100
    assert np.percentile(abs(ours - measured), 80) < 250


def test_temperatures_by_colour_agree_with_measured_m_dwarfs():
    # Colours V - Ks of Mann et al. (2015), temperatures of von Braun et al. (2014).
    cool = [row for row in rows() if row["K_good_system"] == "Ks"]
    v_ks = np.array([float(row["V"]) - float(row["K_good"]) for row in cool])
    measured = np.array([float(row["teff_k"]) for row in cool])
    ours = effective_temperature_k(np.full(v_ks.size, np.nan), np.full(v_ks.size, "dwarf"), v_ks)
    assert len(cool) >= 5
    assert np.abs(ours - measured).max() < 200


def test_the_sun_by_colour():
    # Willmer (2018): V - Ks of the Sun 1.537; effective temperature 5772 K, IAU 2015 resolution B3.
    assert effective_temperature_k(NAN, DWARF, np.array([1.537]))[0] == pytest.approx(5772, abs=30)


def test_the_dwarf_table_meets_the_colour_relation():
    # The two routes share no star and no method: they may differ by 120 K between F0 and K5.
    v_ks = np.linspace(0.9, 2.8, 20)
    by_colour = effective_temperature_k(np.full(20, np.nan), np.full(20, "dwarf"), v_ks)
    by_table = effective_temperature_k(spectral_code_from_colour(v_ks), np.full(20, "dwarf"), v_ks)
    assert np.abs(by_colour - by_table).max() < 120


def test_gravity_of_the_sun_and_of_a_clump_giant():
    # The Sun: log g = 4.44 (exact from GM and R); clump giants 2.3-2.8 (common practice, no source).
    assert surface_gravity(np.array([42.0]), DWARF)[0] == pytest.approx(4.44, abs=0.05)
    assert 2.3 <= surface_gravity(np.array([50.0]), GIANT)[0] <= 2.8


def test_what_a_wrong_temperature_costs():
    def ratio(teff, um):
        u = coefficients(np.array([teff]), np.array([2.0]))
        return float(uniform_disk_ratio(coefficients_at(um, u))[0])

    for um, limit in ((2.19, 0.0015), (0.545, 0.0035)):
        assert abs(ratio(4400.0, um) - ratio(4250.0, um)) < limit


def test_temperatures_of_giants_by_colour():
    # HD 29139: V = 0.85, K = -2.85 (Johnson, memory), 3910 K from its measured diameter (Richichi &
    # Roccatagliata 2005); and the table of giants by type, through their V - Ks.
    ours = effective_temperature_k(NAN, GIANT, np.array([0.85 + 2.85 + 0.04]))[0]
    assert ours == pytest.approx(3910, abs=80)
    codes = np.array([48.0, 50.0, 52.0, 55.0])
    group = np.full(4, "giant")
    by_type = effective_temperature_k(codes, group, np.full(4, np.nan))
    by_colour = effective_temperature_k(np.full(4, np.nan), group, expected_v_ks(codes, group))
    np.testing.assert_allclose(by_colour, by_type, atol=150)


def test_the_colours_of_types_are_those_of_the_seed():
    # Bessell & Brett (1988) and Pecaut & Mamajek (2013), from memory, against medians of the seed's stars.
    from pinlight.catalogue.seed import read_seed

    seed = read_seed()
    types = [parse_spectral_type(text) for text in seed.spectral_types]
    codes, group = np.array([s.code for s in types]), np.array([s.group for s in types])
    v_ks, near = seed.magnitudes[:, 1] - seed.magnitudes[:, 4], seed.parallax_mas > 5
    for name, low, high in (
        ("dwarf", 20, 22), ("dwarf", 30, 32), ("dwarf", 40, 42), ("dwarf", 50, 52), ("dwarf", 62, 64),
        ("giant", 48, 50), ("giant", 50, 52), ("giant", 52, 54), ("giant", 54, 56),
    ):  # fmt: skip
        here = (group == name) & (codes >= low) & (codes < high) & (seed.magnitudes[:, 4] > 4) & near
        off = v_ks[here] - expected_v_ks(codes[here], group[here])
        assert np.nanmedian(off) == pytest.approx(0, abs=0.17)


def test_gravity_from_a_radius():
    # The Sun (exact: R = M = 1, log g = 4.438), and a red clump giant of 10.5 solar radii: Newton's law
    # with 1.1 to 2.2 solar masses gives 2.44 to 2.74.
    def logg(teff, radius, typical):
        return gravity_from_radius(np.array([teff]), np.array([radius * 9.30093e-3]), np.array([typical]))[0]

    assert logg(5772.0, 1.0, 4.4) == pytest.approx(4.438, abs=0.03)
    assert 2.44 <= logg(4750.0, 10.5, 2.5) <= 2.74
    # Torres et al. (2010) tell masses to 6 %, so the same from either guess.
    assert logg(6000.0, 1.7, 3.9) == pytest.approx(logg(6000.0, 1.7, 4.4), abs=0.06)
    # A radius that no star of that type has changes nothing.
    assert logg(5772.0, 100.0, 4.4) == 4.4
    assert np.isnan(logg(5772.0, 1.0, np.nan))
