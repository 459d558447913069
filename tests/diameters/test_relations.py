from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pinlight.diameters import relations
from pinlight.diameters.relations import load_relations
from pinlight.errors import InputError
from pinlight.photometry.systems import SYSTEM_BANDS, to_systems

# Willmer (2018), ApJS 236, 47: the Sun at 1 au, Vega magnitudes.
SUN = {
    "B": -26.135,
    "V": -26.761,
    "R": -27.148,
    "I": -27.467,
    "J": -27.904,
    "H": -28.248,
    "Ks": -28.298,
    "W3": -28.309,
}
SUN_MAS = 1_919_260.0  # twice the classical semidiameter of 959.63 arcsec


# Predicted over true diameter of the Sun, each worked by hand from the published coefficients with
# Willmer's magnitudes as they stand (2MASS JHKs in place of whichever JHK the paper used).
SUN_BY_HAND = {
    "K04_VK": 1.0225, "K04_BK": 1.0200, "K04_VJ": 1.0128, "K04_VH": 1.0332, "K04_BV": 1.0049,
    "K04_BJ": 1.0031, "K04_JK": 1.0337, "B14_VK": 1.0162, "B14_VJ": 1.0264, "B14_VH": 1.0340,
    "A18_all_VK": 1.0017, "A18_dwarf_VK": 0.9915, "CH14_VK": 1.0320, "P19_VK": 1.0279,
    "B14_VI": 1.0281, "B14_BV": 0.9805, "DB05_VK": 1.0402, "FG97_VK": 1.0451, "N02_VK": 1.0485,
    "A18_all_VH": 1.0342,
}  # fmt: skip


def sun_by(name, transformed):
    shipped = load_relations()
    relation = next(r for r in (*shipped.relations, *shipped.carried) if r.name == name)
    if transformed:
        values = to_systems(tuple(SUN), np.array([list(SUN.values())])).values[0]
        magnitude = dict(zip(SYSTEM_BANDS, values, strict=True))
    else:
        magnitude = SUN | {"J_BB": SUN["J"], "H_BB": SUN["H"], "K_BB": SUN["Ks"], "K_SAAO": SUN["Ks"]}
    colour = magnitude[relation.bluer] - magnitude[relation.redder]
    return 10 ** relation.log_diameter(magnitude[relation.zero_band], colour) / SUN_MAS, relation


@pytest.mark.parametrize(("name", "ratio"), SUN_BY_HAND.items())
def test_the_sun_comes_out_as_worked_by_hand(name, ratio):
    # Worked from magnitudes with one more digit: 0.001 mag of H moves the diameter by 0.0006.
    assert sun_by(name, transformed=False)[0] == pytest.approx(ratio, abs=5e-4)


def test_with_its_own_photometric_system_the_best_relation_gives_the_sun_to_a_third_of_a_per_cent():
    assert sun_by("K04_VK", transformed=True)[0] == pytest.approx(0.9969, abs=8e-4)  # worked with Ks + 0.040


# Those that are left out are for B and A and for M stars, or need bands that the Sun has not in Willmer's table.
@pytest.mark.parametrize(
    "name",
    [
        r.name
        for r in load_relations().relations
        if "dwarf" in r.luminosity and r.name not in ("CH14_VK", "K04_VK_M", "K04_BL", "B14_VW4")
    ],
)
def test_every_dwarf_relation_gives_the_sun_within_its_scatter(name):
    ratio, relation = sun_by(name, transformed=True)
    # Three sigma of the relation's scatter, its shared part, and 0.03 mag in the Sun's magnitudes.
    allowed = 3 * np.hypot(relation.scatter_percent, relation.shared_percent) / 100 + 0.02
    assert ratio == pytest.approx(1, abs=allowed)


@pytest.mark.parametrize(
    "relation", [*load_relations().relations, *load_relations().carried], ids=lambda r: r.name
)
def test_slopes_agree_with_finite_differences(relation):
    colours = np.linspace(relation.colour_min, relation.colour_max, 7)
    step = 1e-6
    numeric = (
        relation.log_diameter(np.zeros(7), colours + step) - relation.log_diameter(np.zeros(7), colours - step)
    ) / (2 * step)
    np.testing.assert_allclose(relation.slope(colours), numeric, rtol=1e-6, atol=1e-9)


def test_the_three_published_forms_are_the_same_thing():
    # F = 4.2207 - 0.1 S (definition), so F and S of the same star give one diameter.
    surface = next(r for r in load_relations().relations if r.form == "S" and len(r.coefficients) == 2)
    c0, c1 = surface.coefficients
    flux = replace(surface, form="F", coefficients=(4.2207 - 0.1 * c0, -0.1 * c1))
    direct = replace(surface, form="direct", coefficients=(0.2 * c0, 0.2 * c1))
    mag, colour = np.array([5.0, 7.0]), np.array([2.1, 2.6])
    for other in (flux, direct):
        np.testing.assert_allclose(
            other.log_diameter(mag, colour), surface.log_diameter(mag, colour), atol=1e-12
        )


def test_relations_at_zero_colour_agree_with_the_size_of_an_a0_star():
    # Computed from published relations: A0 V, V - K = 0, V = 0: 3.3 mas.
    for name in ("K04_VK", "B14_VK", "CH14_VK"):
        relation = next(r for r in load_relations().relations if r.name == name)
        assert 10 ** relation.log_diameter(np.array(0.0), np.array(0.0)) == pytest.approx(3.3, rel=0.04)


SHIPPED = Path(relations.__file__).with_name("relations.csv").read_text(encoding="utf-8")
HEADING, *ROWS = SHIPPED.splitlines()


def own_file(tmp_path, *rows, heading=HEADING):
    path = tmp_path / "ours.csv"
    path.write_text("\n".join((heading, *rows)) + "\n", encoding="utf-8")
    return path


def row_of(name):
    return next(row for row in ROWS if row.startswith(f"{name},"))


def test_every_published_row_is_carried_and_only_confirmed_ones_are_used():
    shipped = load_relations()
    assert len(shipped.relations) + len(shipped.carried) == len(ROWS) == 82
    assert all(r.origin != "memory" for r in shipped.relations)
    assert all(r.note for r in shipped.relations if r.origin == "validated")
    assert all(r.note for r in shipped.carried)
    assert len(set(shipped.names)) == len(shipped.names)


def test_what_a_star_shows_in_a_whole_sample_is_less_than_each_scatter():
    for relation in load_relations().relations:
        assert 0 < relation.common_percent < relation.scatter_percent
        least = min(
            r.scatter_percent
            for r in load_relations().relations
            if r.sample == relation.sample
            and r.luminosity == relation.luminosity
            and r.spectral_min == relation.spectral_min
        )
        assert relation.common_percent <= 0.8 * least + 0.01


def test_a_file_of_ones_own_adds_to_the_shipped_relations(tmp_path):
    shipped = load_relations()
    added = load_relations(own_file(tmp_path, row_of("K04_VK").replace("K04_VK,K04", "OURS_VK,OURS")))
    assert added.names == (*shipped.names, "OURS_VK")
    assert added.hash != shipped.hash
    assert (added.file, shipped.file) == ("ours.csv", "")


def test_a_row_of_a_shipped_name_takes_its_place_and_may_switch_it_off(tmp_path):
    shipped = load_relations()
    changed = load_relations(own_file(tmp_path, row_of("P19_VK").replace(",0.5,", ",0.9,")))
    assert changed.names == shipped.names
    assert next(r for r in changed.relations if r.name == "P19_VK").scatter_percent == 0.9
    without = load_relations(own_file(tmp_path, row_of("P19_VK").replace(",yes,", ",no,")))
    assert set(shipped.names) - set(without.names) == {"P19_VK"}


def test_a_file_that_changed_is_read_again(tmp_path):
    import os

    path = own_file(tmp_path, row_of("K04_VK").replace("K04_VK,K04", "OURS_VK,OURS"))
    before = load_relations(path)
    path.write_text(path.read_text(encoding="utf-8").replace("0.5175", "0.5275"), encoding="utf-8")
    os.utime(path, (1, 1))
    assert load_relations(path).hash != before.hash


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (",direct,V,V,", ",cubic,V,V,", r"ours.csv line 2: form is 'cubic'; it may be one of direct, F, S"),
        (",V,V,K_BB,", ",V,V,Z,", r"line 2: redder is 'Z'; it may be one of B, V"),
        (",dwarf subgiant<=K0,", ",dwarfs,", r"line 2: luminosity is 'dwarfs'; it may be one of dwarf, subgiant"),
        (",A0,K9.5,", ",X0,K9.5,", r"line 2: spectral type is 'X0'; it must begin with one of O, B, A"),
        (",1.01,", ",-1.01,", r"line 2: scatter_percent is -1.01; it must lie between 0.05 and 100"),
        (",1.01,", ",nan,", r"line 2: scatter_percent is nan; it must lie between"),
        (",0.2753,", ",steep,", r"line 2: c1 is 'steep'; it must be a number"),
        (",-0.15,3.2,", ",3.2,-0.15,", r"line 2: colour_min is 3.2; it must be below colour_max, -0.15"),
        (",yes,", ",perhaps,", r"line 2: active is 'perhaps'; it may be one of yes, no"),
        (",seen,", ",memory,", r"line 2: origin is 'memory' on an active row; make it 'validated'"),
        (",V,V,K_BB,", ",J_BB,V,K_BB,", r"line 2: zero_band is 'J_BB'; it must be one of the colour's two bands"),
        ("Kervella et al. 2004 A&A 426 297", "", r"line 2: reference is blank; it must be given"),
    ],
)  # fmt: skip
def test_a_wrong_row_is_named_with_its_line(tmp_path, old, new, message):
    row = row_of("K04_VK")
    assert old in row
    with pytest.raises(InputError, match=message):
        load_relations(own_file(tmp_path, row.replace(old, new, 1)))


def test_a_wrong_file_is_named(tmp_path):
    with pytest.raises(InputError, match="cannot read"):
        load_relations(tmp_path / "none.csv")
    with pytest.raises(InputError, match="has no column shared_percent; it needs relation, sample"):
        load_relations(own_file(tmp_path, heading=HEADING.replace("shared_percent,", "")))
    with pytest.raises(InputError, match=r"line 3: an earlier row is called 'K04_VK' too"):
        load_relations(own_file(tmp_path, row_of("K04_VK"), row_of("K04_VK")))
    with pytest.raises(InputError, match=r"leaves 136 active relations; there may be 1 to 60"):
        load_relations(
            own_file(tmp_path, *(row_of("K04_VK").replace("K04_VK,", f"OURS_{i},") for i in range(100)))
        )
