import csv
from pathlib import Path

import numpy as np
import pytest

from pinlight.diameters.atmosphere import (
    effective_temperature_k,
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
    cool = [row for row in rows() if row["K_2mass"]]
    v_ks = np.array([float(row["V"]) - float(row["K_2mass"]) for row in cool])
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
