"""What people meet of diameters: the commands relations, diameter and star, and the library call."""

import json
import shutil
from pathlib import Path

import pytest
from astropy.table import Table
from click.testing import CliRunner

from pinlight.diameters import relations as relations_module
from pinlight.errors import InputError
from pinlight.faces import cli
from pinlight.faces.cli import main
from pinlight.faces.diameter import predict_diameter, read_stars
from pinlight.faces.models import StarAnswer
from pinlight.photometry.systems import INPUT_BANDS

SHIPPED = Path(relations_module.__file__).with_name("relations.csv")
GIANT = ("--V", "5.134", "--Ks", "2.654", "--Ks-error", "0.01", "--spectral-type", "K1III")


@pytest.fixture
def run(seeded_path, monkeypatch):
    monkeypatch.setenv("PINLIGHT_DB", str(seeded_path))
    return lambda *arguments: CliRunner().invoke(main, [str(one) for one in arguments], catch_exceptions=False)


@pytest.fixture
def ours(tmp_path):
    """A file that replaces P19's relation and adds one of its own."""
    heading, *rows = SHIPPED.read_text(encoding="utf-8").splitlines()
    row = next(row for row in rows if row.startswith("P19_VK,"))
    path = tmp_path / "ours.csv"
    path.write_text("\n".join([heading, row.replace(",yes,", ",no,"), row.replace("P19_VK,P19", "OUR_VK,OUR")]))
    return path


def test_the_command_knows_the_bands_of_predictions():
    assert cli._BANDS == INPUT_BANDS


def test_relations_are_listed_with_those_only_carried(run):
    listed = run("relations")
    assert listed.exit_code == 0
    assert "K04_VK" in listed.stdout
    assert "not used: " in listed.stdout
    told = json.loads(run("relations", "--json").stdout)
    assert len(told["relations"]) == 82
    one = next(r for r in told["relations"] if r["relation"] == "K04_VK")
    # Kervella et al. (2004), A&A 426, 297: log theta = 0.2753 (V - K) + 0.5175 - 0.2 V.
    assert (one["coefficients"], one["zero_band"], one["colour"]) == ([0.5175, 0.2753], "V", ["V", "K_BB"])
    assert (one["active"], one["origin"], one["scatter_percent"]) == (True, "seen", 1.01)


def test_relations_are_checked(run, ours):
    told = json.loads(run("relations", "check", "--relations", ours, "--json").stdout)
    assert told["relations_file"] == "ours.csv"
    names = [check["relation"] for check in told["checks"]]
    assert "OUR_VK" in names
    assert "P19_VK" not in names
    shown = run("relations", "check")
    assert shown.exit_code == 0
    assert "the Sun" in shown.stdout
    wrong = run("relations", "--json", "check")
    assert wrong.exit_code == 2
    assert "write the options after 'check'" in wrong.stderr


def test_a_file_of_ones_own_is_named_in_every_result(run, ours, tmp_path):
    one = json.loads(run("diameter", *GIANT, "--relations", ours, "--json").stdout)
    assert "OUR_VK" in one["diameter"]["relations"]
    assert "P19_VK" not in one["diameter"]["relations"]
    assert one["relations_file"] == "ours.csv"
    plain = json.loads(run("diameter", *GIANT, "--json").stdout)
    assert plain["relations_file"] is None
    assert plain["relation_set"] != one["relation_set"]
    # The same relation by another name gives the same diameter.
    assert plain["diameter"]["limb_darkened_mas"] == one["diameter"]["limb_darkened_mas"]
    Table({"name": ["a"], "V": [5.134], "Ks": [2.654], "spectral_type": ["K1III"]}).write(tmp_path / "t.csv")
    [row] = json.loads(run("diameter", "--from", tmp_path / "t.csv", "--relations", ours, "--json").stdout)
    assert row["relations_file"] == "ours.csv"
    shown = run("diameter", *GIANT, "--relations", ours)
    assert "with those of ours.csv" in shown.stdout
    ours.write_text(ours.read_text().replace(",S,V,V,Ks,", ",S,V,V,Q,"))
    wrong = run("diameter", *GIANT, "--relations", ours)
    assert wrong.exit_code == 2
    assert "ours.csv line 3: redder is 'Q'; it may be one of B, V" in wrong.stderr
    missing = run("relations", "--relations", tmp_path / "none.csv")
    assert (missing.exit_code, missing.stderr.count("\n")) == (2, 1)


def test_a_diameter_explains_itself(run):
    told = json.loads(run("diameter", *GIANT, "--json").stdout)
    assert sum(part["weight"] for part in told["parts"]) == pytest.approx(1, abs=2e-3)
    mean = told["diameter"]["limb_darkened_mas"]
    for part in told["parts"]:
        assert part["residual_percent"] == pytest.approx(100 * (part["diameter_mas"] / mean - 1), abs=0.01)
    disks = told["uniform_disk_mas_by_band"]
    assert list(disks) == ["B", "V", "R", "I", "J", "H", "Ks"]
    assert sorted(disks.values()) == list(disks.values())  # limbs darken less toward the red
    assert disks["Ks"] == told["diameter"]["uniform_disk_mas"] < mean
    shown = run("diameter", *GIANT).stdout
    for word in ("residual %", "as a uniform disc: B", "log g", "A_V", "chi2"):
        assert word in shown


def test_a_star_explains_itself_in_every_band(run, catalogue):
    star_id = catalogue.find("tau Cet")
    facts = catalogue.star(star_id)
    StarAnswer.model_validate(json.loads(json.dumps(facts)))
    told = facts["diameter"]
    assert sum(part["weight"] for part in told["relations"]) == pytest.approx(1, abs=2e-3)
    assert told["luminosity_probabilities"] == {"dwarf": 1.0, "subgiant": 0.0, "giant": 0.0, "supergiant": 0.0}
    assert told["uniform_disk_mas_by_band"]["Ks"] < told["limb_darkened_mas"]
    shown = run("star", "tau Cet").stdout
    assert "residual %" in shown
    assert "as a uniform disc: B" in shown
    odd = catalogue.star(catalogue.find("HD 29206"))["diameter"]
    assert (odd["discordant"], odd["culprit"]) == (True, "spectral type")


def test_a_missing_class_is_told_with_its_probability(run):
    shown = run("diameter", "--V", 7.3, "--Ks", 5.25, "--parallax-mas", 10, "--spectral-type", "K0")
    assert "(probability 0." in shown.stdout
    told = predict_diameter({"V": 7.3, "Ks": 5.25}, spectral_type="K0", parallax_mas=10.0)
    assert sum(told["luminosity_probabilities"].values()) == pytest.approx(1, abs=0.002)


def test_other_systems_bands_do_as_well():
    # One star in five systems: the Sun at 10 pc (Willmer 2018; Gaia as in tests/photometry).
    systems = [
        {"V": 4.811, "Ks": 3.274},
        {"V": 4.811, "K_BB": 3.274 + 0.039},
        {"BT": 5.577, "VT": 4.881, "Ks": 3.274},
        {"V": 4.811, "I": 4.105},
        {"G": 4.67, "BP": 4.98, "RP": 4.16},
    ]
    errors = dict.fromkeys(INPUT_BANDS, 0.02)
    for magnitudes in systems:
        given = {band: errors[band] for band in magnitudes}
        found = predict_diameter(magnitudes, given, spectral_type="G2V")["diameter"]
        assert found["limb_darkened_mas"] == pytest.approx(0.9301, abs=2 * found["error_mas"])
    poor = predict_diameter(systems[-1], dict.fromkeys(systems[-1], 0.02), spectral_type="G2V")["diameter"]
    assert poor["error_mas"] / poor["limb_darkened_mas"] > 0.03  # 0.1 mag of scatter in the infrared


def test_every_band_may_be_a_column(tmp_path):
    table = Table({"name": ["a"]} | {band: [7.0] for band in INPUT_BANDS} | {"K_BB_error": [0.05]})
    table.write(tmp_path / "t.csv")
    [row] = read_stars(tmp_path / "t.csv")
    assert set(row.magnitudes) == set(INPUT_BANDS)
    assert row.errors == {"K_BB": 0.05}


def test_a_map_that_gives_nonsense_is_refused():
    with pytest.raises(InputError, match="av_mag is -1; it must lie between 0 and 50"):
        predict_diameter(
            {"V": 5.0, "Ks": 3.4},
            parallax_mas=20.0,
            position_deg=(10.0, 20.0),
            extinction_map=lambda *_: (-1.0, 0.1),
        )


def test_recomputing_with_the_same_relations_has_nothing_to_do(seeded_path, tmp_path, monkeypatch):
    monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "editions"))
    shutil.copy(seeded_path, tmp_path / "mine.db")
    answer = CliRunner().invoke(main, ["relations", "recompute", "--db", str(tmp_path / "mine.db"), "--json"])
    assert answer.exit_code == 0
    told = json.loads(answer.stdout)
    assert told["stars"] == 0
    assert told["edition"]
