import csv
import json
import subprocess
import sys

import click
import icalendar
import numpy as np
import pytest
from astropy.table import Table
from click.testing import CliRunner

import pinlight as pl
from pinlight.faces.cli import main
from pinlight.faces.models import PlanAnswer, RankingAnswer
from pinlight.resources import seed_folder
from tests.arrays.test_oifits import oifits


@pytest.fixture
def run(seeded_path, monkeypatch):
    monkeypatch.setenv("PINLIGHT_DB", str(seeded_path))

    def call(*arguments):
        return CliRunner().invoke(main, [str(argument) for argument in arguments], catch_exceptions=False)

    return call


def commands(group=main, path=()):
    for name, command in group.commands.items():
        yield (*path, name), command
        if isinstance(command, click.Group):
            yield from commands(command, (*path, name))


@pytest.mark.parametrize(("path", "command"), list(commands()), ids=lambda value: str(value))
def test_every_command_and_every_option_has_help(path, command):
    assert command.help, path
    answer = CliRunner().invoke(main, [*path, "--help"])
    assert answer.exit_code == 0
    assert answer.output.startswith("Usage:")


def test_the_command_prints_what_the_library_returns(run, catalogue):
    answer = run(
        "rank", "tau Cet", "--array", "north", "--mode", "H", "--stations", "Ash,Rowan,Cedar", "--json"
    )
    ranking = pl.rank(catalogue, "tau Cet", array="north", mode="H", stations=["Ash", "Rowan", "Cedar"])
    assert json.loads(answer.stdout) == json.loads(json.dumps(ranking.to_dict()))
    RankingAnswer.model_validate(json.loads(answer.stdout))


def test_a_ranking_reads_well(run):
    answer = run("rank", "10:06:28 +18:16:26", "--array", "north", "--mode", "K", "--best", "5")
    assert answer.exit_code == 0
    lines = answer.stdout.splitlines()
    assert "Quillstone, K, baselines to 228 m, 2.17 um" in answer.stdout
    assert sum(line.startswith(tuple("12345")) and "±" in line for line in lines) == 5
    assert "error %" in answer.stdout
    assert " too far, " in answer.stdout
    assert max(len(line) for line in lines) <= 150
    assert "…" not in answer.stdout.split("stars rank")[0]


def test_the_quick_answer(run):
    answer = json.loads(run("rank", "tau Cet", "--baseline-m", 330, "--wavelength-um", 0.7, "--json").stdout)
    assert answer["setup"]["array"] is None
    assert answer["calibrators"][0]["budget_percent"]["photon"] is None
    assert answer["notes"][0].startswith("No array given")


def test_a_file_of_targets(run):
    answer = run(
        "rank", seed_folder() / "targets.csv", "--array", "south", "--mode", "H", "--json", "--best", 5
    )
    rankings = json.loads(answer.stdout)["rankings"]
    assert [r["target"]["name"] for r in rankings][:2] == ["Copper Wren", "Slow Ember"]


def test_an_empty_result_is_an_answer_not_an_error(run):
    answer = run("rank", "tau Cet", "--baseline-m", 330, "--wavelength-um", 0.7, "--separation-max-deg", 0.001)
    assert answer.exit_code == 0
    assert "No star passes every gate." in answer.stdout


def test_a_star_explains_itself(run):
    answer = run("star", "τ Cet")
    assert "HD 10700" in answer.stdout
    assert "limb-darkened diameter" in answer.stdout
    assert "K04_VK" in answer.stdout
    facts = json.loads(run("star", "τ Cet", "--json").stdout)
    assert facts["diameter"]["relations"][0]["relation"] == "K04_BV"
    assert run("star", "alpha PsA").exit_code == 0  # no infrared magnitudes


def test_a_diameter_from_the_command_line(run):
    answer = run(
        "diameter", "--V", 5.134, "--Ks", 2.654, "--Ks-error", 0.01, "--spectral-type", "K1III", "--json"
    )
    assert json.loads(answer.stdout)["diameter"]["relations"] == [
        "A18_giant_VK",
        "P19_VK",
        "N02_VK",
        "DB05_VK",
    ]
    shown = run("diameter", "--V", 5.134, "--Ks", 2.654, "--spectral-type", "K1III", "--band", "H")
    assert "uniform-disc diameter in H" in shown.stdout


@pytest.mark.parametrize("kind", ["csv", "ecsv", "vot", "fits"])
def test_diameters_of_a_table(run, tmp_path, kind):
    table = Table(
        {
            "name": ["clump", "sunlike", "white", "one band", "absurd"],
            "spectral_type": ["K1III", "G2V", "DA3", "G2V", "G2V"],
            "V": [5.134, 4.811, 12.0, 6.0, 99.0],
            "V_error": [0.01, 0.02, 0.02, 0.02, 0.02],
            "Ks": [2.654, 3.274, 12.3, np.nan, 5.0],
            "Ks_error": [0.01, 0.02, 0.02, np.nan, 0.02],
            "note": ["a", "b", "c", "d", "e"],
        }
    )
    formats = {"csv": "ascii.csv", "ecsv": "ascii.ecsv", "vot": "votable", "fits": "fits"}
    table.write(tmp_path / f"t.{kind}", format=formats[kind])
    answer = run("diameter", "--from", tmp_path / f"t.{kind}", "--json")
    rows = json.loads(answer.stdout)
    assert [row["name"] for row in rows] == ["clump", "sunlike", "white", "one band", "absurd"]
    one = json.loads(
        run(
            "diameter",
            "--V",
            5.134,
            "--V-error",
            0.01,
            "--Ks",
            2.654,
            "--Ks-error",
            0.01,
            "--spectral-type",
            "K1III",
            "--json",
        ).stdout
    )
    # FITS and VOTable keep doubles; nothing is lost on the way.
    assert rows[0]["diameter"] == one["diameter"]
    assert rows[1]["diameter"]["limb_darkened_mas"] == pytest.approx(0.93, rel=0.02)
    reasons = [row["reason"] for row in rows[2:]]
    assert reasons[0] == "no published relation applies to a star of this type with these colours"
    assert reasons[1].startswith("1 magnitude is given")
    assert reasons[2] == "V is 99; a magnitude lies between -5 and 30"
    shown = run("diameter", "--from", tmp_path / f"t.{kind}").stdout
    assert "clump" in shown
    assert "V is 99" in shown


def test_an_array_is_checked(run, tmp_path):
    answer = run("array", "check", seed_folder() / "arrays" / "north.toml")
    assert "Quillstone: 6 stations, 15 baselines, all keys in order" in answer.stdout
    assert json.loads(run("array", "check", "south", "--json").stdout)["stations"][0] == "Heron"
    (tmp_path / "bad.toml").write_text("name = 3", encoding="utf-8")
    bad = run("array", "check", tmp_path / "bad.toml")
    assert bad.exit_code == 2
    assert bad.stderr.startswith("pinlight: array file")
    assert bad.stderr.count("\n") == 1


def test_init_says_what_there_is(run, tmp_path):
    answer = run("init")
    assert "74733 stars, edition" in answer.stdout
    empty = run("init", "--empty", "--db", tmp_path / "e.db")
    assert "no stars yet" in empty.stdout


def test_the_demo_ranks_every_target_and_ends(run):
    answer = run("demo", "--once", "--json")
    demo = json.loads(answer.stdout)
    assert len(demo["rankings"]) >= 8
    for ranking in demo["rankings"]:
        RankingAnswer.model_validate(ranking)
        assert len(ranking["calibrators"]) >= 5
        assert ranking["edition"] == demo["edition"]
    assert {ranking["setup"]["array"] for ranking in demo["rankings"]} == {"Quillstone", "Ember Pan"}
    shown = run("demo", "--once")
    assert shown.stdout.count("error %") == len(demo["rankings"])


NIGHT = ("--array", "north", "--mode", "H", "--night", "2026-12-01")


def test_a_ranking_with_a_clock(run, catalogue):
    answer = run("rank", "upsilon And", *NIGHT, "--with", "HD 9443, HIP 8000", "--json")
    ranking = pl.rank(
        catalogue, "upsilon And", array="north", mode="H", night="2026-12-01", with_=["HD 9443", "HIP 8000"]
    )
    told = json.loads(answer.stdout)
    assert told == json.loads(json.dumps(ranking.to_dict()))
    RankingAnswer.model_validate(told)
    assert told["named_set"]["size"] == 2
    shown = run("rank", "upsilon And", *NIGHT, "--best", 3).stdout
    assert "in reach " in shown
    assert "best set of 2: " in shown


def test_a_track_over_an_array(run):
    answer = run(
        "array",
        "track",
        "north",
        "60 28",
        "--from",
        "2026-12-01T20:00Z",
        "--to",
        "2026-12-01T22:00Z",
        "--step-min",
        30,
        "--stations",
        "Ash,Birch,Cedar",
        "--json",
    )
    told = json.loads(answer.stdout)
    assert [row["utc"] for row in told["times"]] == [
        f"2026-12-01T{t}:00Z" for t in ("20:00", "20:30", "21:00", "21:30", "22:00")
    ]
    assert set(told["times"][0]) == {
        "utc", "altitude_deg", "azimuth_deg", "hour_angle_h", "baselines", "in_reach", "blocked_by",
    }  # fmt: skip
    assert set(told["times"][0]["baselines"][0]) == {"stations", "u_m", "v_m", "w_m", "projected_m"}
    assert len(told["times"][0]["baselines"]) == 3
    for window in told["windows"]:
        assert set(window) == {"start_utc", "end_utc"}
    for row in told["times"]:
        inside = any(w["start_utc"] <= row["utc"] <= w["end_utc"] for w in told["windows"])
        assert row["in_reach"] == inside == (not row["blocked_by"])
    noon = run("array", "track", "north", "60 28", "--from", "2026-12-01T11:00Z", "--to", "2026-12-01T12:00Z")
    assert "sun" in noon.stdout
    assert "in reach never" in noon.stdout


def test_an_array_file_from_oifits(run, tmp_path, north):
    made = oifits(tmp_path / "a.fits", north)
    assert 'name = "Quillstone"' in run("array", "import", made).stdout
    written = run("array", "import", made, "--output", tmp_path / "a.toml")
    assert written.exit_code == 0
    refused = run("array", "check", tmp_path / "a.toml")
    assert refused.exit_code == 2
    assert "drift.spread is '?'" in refused.stderr


def test_a_night_is_planned_and_written_down(run, tmp_path):
    papers = {kind: tmp_path / f"night.{kind}" for kind in ("csv", "ics", "html")}
    answer = run(
        "plan", seed_folder() / "targets.csv", *NIGHT, "--json", "--csv", papers["csv"], "--ics", papers["ics"],
        "--report", papers["html"],
    )  # fmt: skip
    told = json.loads(answer.stdout)
    PlanAnswer.model_validate(told)
    looks = sum(len(block["looks"]) for block in told["blocks"])
    with papers["csv"].open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == looks
    assert rows[0]["start_utc"] == told["blocks"][0]["start_utc"]
    calendar = icalendar.Calendar.from_ical(papers["ics"].read_bytes())
    events = calendar.walk("VEVENT")
    assert len(events) == len(told["blocks"])
    assert events[0].decoded("dtstart").strftime("%Y-%m-%dT%H:%M:%SZ") == told["blocks"][0]["start_utc"]
    page = papers["html"].read_text(encoding="utf-8")
    assert "operating limits, Sun avoidance and laser and aircraft rules come first" in page
    assert "http" not in page
    for block in told["blocks"]:
        assert block["target"] in page
    shown = run("plan", seed_folder() / "targets.csv", *NIGHT)
    assert "left out: Quiet Anvil: it never rises above 30 deg" in shown.stdout
    assert "no plan exceeds" in shown.stdout


def test_a_paper_that_cannot_be_written_is_named(run, tmp_path):
    answer = run("plan", seed_folder() / "targets.csv", *NIGHT, "--csv", tmp_path / "no" / "such" / "n.csv")
    assert answer.exit_code == 1
    assert answer.stderr.splitlines()[-1].startswith("pinlight: cannot write ")


def test_no_paper_takes_the_place_of_another_file(run, tmp_path):
    path = tmp_path / "t.csv"
    written = "name,ra_deg,dec_deg,H\nA,60,28,4\n"
    path.write_text(written, encoding="utf-8")
    answer = run("plan", path, *NIGHT, "--ics", tmp_path / "." / "t.csv")
    assert answer.exit_code == 2
    assert "--ics is" in answer.stderr
    assert "which is also TARGETS" in answer.stderr
    twice = run("plan", path, *NIGHT, "--csv", tmp_path / "n", "--ics", tmp_path / "n")
    assert "which is also --csv" in twice.stderr
    folder = run("plan", path, *NIGHT, "--csv", tmp_path)
    assert folder.stderr.splitlines()[-1].endswith("it is no ordinary file")
    assert path.read_text(encoding="utf-8") == written
    assert sorted(tmp_path.iterdir()) == [path]


def test_what_people_write_is_no_markup(run, tmp_path):
    path = tmp_path / "t.csv"
    path.write_text("name,ra_deg,dec_deg,H\n[/x],60,28,4\n[red]A,61,27,4\n", encoding="utf-8")
    shown = run("rank", path, *NIGHT)
    assert shown.exit_code == 0
    assert "[/x]" in shown.stdout
    assert "[red]A" in shown.stdout
    assert "[/x]" in run("plan", path, *NIGHT).stdout


QUICK = ("--baseline-m", 100, "--wavelength-um", 1.65)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("rank", "tau Ceet", *QUICK), "no star is named 'tau Ceet'; did you mean tau Cet"),
        (("rank", "mu Sco", *QUICK), "name 'mu Sco' may be any of mu1 Sco, mu2 Sco; give one of them"),
        (("rank", "10 95", *QUICK), "dec_deg is 95; it must lie between -90 and 90"),
        (("rank", "nan 20", *QUICK), "ra_deg is nan; it must lie between 0 and 360"),
        (
            ("rank", "tau Cet", "--baseline-m", 0, "--wavelength-um", 1.65),
            "baseline_m is 0; it must lie above 0",
        ),
        (("rank", "tau Cet", "--baseline-m", 100, "--wavelength-um", 2200), "(2200 nm is 2.2 um)"),
        (("rank", "tau Cet", *QUICK, "--judge", "mean"), "judge is 'mean'; it may be rms or worst"),
        (("rank", "tau Cet", *QUICK, "--best", 0), "best is 0; it must lie between 1 and 1000"),
        (("rank", "tau Cet", *QUICK, "--edition", "abc"), "edition is 'abc'; the catalogue has"),
        (("rank", "tau Cet", "--array", "none.toml"), "cannot read array file none.toml: No such file"),
        (("rank", "none.csv", *QUICK), "cannot read targets file none.csv: No such file"),
        (("star", "HD 99999999"), "no star is named 'HD 99999999'"),
        (("diameter", "--V", 5), "1 magnitude is given; a colour takes at least two bands"),
        (("diameter", "--V", 5, "--Ks", 3, "--ra-deg", 5), "dec_deg is missing; give both or neither"),
        (("rank", "x" * 5000, *QUICK), "name has 5000 letters; 200 are the most"),
        (("rank", "tau Cet", "--array", "y" * 5000, "--mode", "H"), "it may be one of north, south"),
        (("rank", "tau Cet", "--best", "many"), "Invalid value for '--best': 'many' is not a valid integer"),
        (("rank",), "Missing argument 'TARGET'"),
        (("nonsense",), "No such command 'nonsense'"),
        (
            ("rank", "tau Cet", "--array", "north", "--mode", "H", "--night", "soon"),
            "night is 'soon'; write a date as",
        ),
        (("rank", "tau Cet", *QUICK, "--night", "2026-12-01"), "is given without an array"),
        (
            ("plan", "none.csv", "--array", "north", "--mode", "H", "--night", "2026-12-01"),
            "cannot read targets file",
        ),
        (("array", "track", "north", "60 28"), "from is missing; give from and to, or a night"),
        (("array", "import", "none.fits"), "cannot read none.fits as OIFITS"),
        (("diameter", "--from", "none.csv"), "cannot read none.csv as csv: No such file"),
        (("diameter", "--from", "none.txt"), "none.txt may end in one of .csv, .ecsv"),
        (("diameter", "--from", "none.csv", "--V", 5), "from and V are both given"),
        (("serve", "--host", "no.such.invalid", "--open"), "cannot serve on no.such.invalid port 8765"),
        (("serve", "--host", "0.0.0.0"), "host is 0.0.0.0, which others can reach; add --open"),
        (("serve", "--arrays", "no-such-folder"), "arrays is no-such-folder, a folder without .toml files"),
    ],
)
def test_bad_input_gets_one_line_and_exit_code_2(run, arguments, message):
    answer = run(*arguments)
    assert answer.exit_code == 2, answer.output
    assert message in answer.stderr
    assert answer.stderr.startswith("pinlight: ")
    assert answer.stderr.count("\n") == 1
    assert answer.stdout == ""


def test_a_missing_catalogue_is_exit_code_1(run, tmp_path):
    answer = run("rank", "tau Cet", *QUICK, "--db", tmp_path / "none.db")
    assert answer.exit_code == 1
    assert "run 'pinlight init' to make one" in answer.stderr


def test_help_imports_nothing_heavy():
    code = (
        "import sys; from pinlight.faces.cli import main\n"
        "try: main(['--help'])\nexcept SystemExit: pass\n"
        "heavy = {'numpy', 'scipy', 'astropy', 'sqlalchemy', 'flask', 'rich'}\n"
        "print(sorted({m.split('.')[0] for m in sys.modules} & heavy))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, env=_environment()
    )
    assert done.stdout.strip().endswith("[]")


def test_a_ranking_imports_no_astropy_and_no_alembic(seeded_path):
    code = (
        "import sys; from pinlight.faces.cli import main\n"
        f"try: main(['rank', 'tau Cet', '--array', 'north', '--mode', 'H', '--db', {str(seeded_path)!r}])\n"
        "except SystemExit as end: print('code', end.code)\n"
        "print(sorted({m.split('.')[0] for m in sys.modules} & {'astropy','alembic','flask'}))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, env=_environment()
    )
    assert done.stdout.strip().endswith("code 0\n[]")


def _environment():
    import os
    from pathlib import Path

    return os.environ | {"PYTHONPATH": str(Path(__file__).parents[2] / "service")}
