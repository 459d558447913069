"""Tables taken in: formats, matching, resuming, repeating."""

import csv
import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from astropy import units
from astropy.coordinates import SkyCoord
from astropy.table import Table
from astropy.time import Time
from sqlalchemy import text

from pinlight.catalogue.intake import IntakeOptions, preview_file, rejected_rows, take_in
from pinlight.catalogue.making import make_catalogue
from pinlight.catalogue.store import open_catalogue
from pinlight.errors import InputError
from pinlight.faces.library import rank

SLOW = "PINLIGHT_TEST_SLOW" in os.environ
OPTIONS = IntakeOptions("A survey", "2020Survey")


def table(count=400, seed=7):
    """Invented stars, all over the sky."""
    random_ = np.random.default_rng(seed)
    colour = random_.uniform(0.3, 1.5, count).round(3)
    v = random_.uniform(4, 9, count).round(3)
    found = Table(
        {
            "name": [f"Invented {n}" for n in range(count)],
            "ra": random_.uniform(0, 360, count).round(7) * units.deg,
            "dec": np.degrees(np.arcsin(random_.uniform(-1, 1, count))).round(7) * units.deg,
            "pmRA": random_.normal(0, 30, count).round(3) * units.mas / units.yr,
            "pmDE": random_.normal(0, 30, count).round(3) * units.mas / units.yr,
            "Plx": random_.uniform(2, 50, count).round(3) * units.mas,
            "SpType": random_.choice(["F5V", "G2V", "K0III", "K5III", "A0V"], count),
            "Vmag": v * units.mag,
            "Jmag": (v - 1.2 * colour).round(3) * units.mag,
            "Hmag": (v - 1.7 * colour).round(3) * units.mag,
            "Kmag": (v - 1.8 * colour).round(3) * units.mag,
            "e_Kmag": np.full(count, 0.02) * units.mag,
        }
    )
    found["HD"] = np.ma.masked_less(np.arange(count) + 400_000, 400_100)
    return found


def contents(catalogue):
    """What the catalogue says of its stars, whatever batches they came in."""
    found = {}
    with catalogue.reading() as connection:
        for name, columns in (
            ("star", "id, name, ra_deg, dec_deg, pm_ra_mas_yr, parallax_mas, spectral_type, flags, cell"),
            ("identifier", "star_id, name, key"),
            ("magnitude", "star_id, band, source_id, value, error, CAST(error_assumed AS integer)"),
            ("companion", "star_id, neighbour_id, separation_arcsec"),
            ("diameter", "star_id, limb_darkened_mas, own_error_mas, parts"),
            ("reject", "line, reason"),
        ):
            found[name] = sorted(map(str, connection.execute(text(f"SELECT {columns} FROM {name}"))))
    return found


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """The table taken in at one go, and what then is in the catalogue."""
    folder = tmp_path_factory.mktemp("whole")
    path = folder / "survey.csv"
    table().write(path)
    catalogue = make_catalogue(str(folder / "p.db"), seed=False)
    report = take_in(catalogue, path, OPTIONS)
    assert (report.rows, report.added, report.matched, report.rejected) == (400, 400, 0, 0)
    yield path, contents(catalogue), catalogue.freeze()
    catalogue.close()


@pytest.mark.parametrize("ending", ["csv", "ecsv", "vot", "fits", "parquet"])
def test_every_format_gives_the_same_catalogue(whole, tmp_path, ending):
    path = tmp_path / f"survey.{ending}"
    made = table()
    made.write(path, **({"format": "votable"} if ending == "vot" else {}))
    catalogue = make_catalogue(str(tmp_path / "p.db"), seed=False)
    report = take_in(catalogue, path, OPTIONS)
    assert (report.added, report.rejected) == (400, 0), rejected_rows(catalogue, 1)[:3]
    assert contents(catalogue) == whole[1]
    assert catalogue.freeze() == whole[2]
    catalogue.close()


def test_either_database_ends_with_the_same_edition(whole, empty_url):
    catalogue = make_catalogue(empty_url, seed=False)
    take_in(catalogue, whole[0], OPTIONS, batch_rows=150)
    assert contents(catalogue) == whole[1]
    assert catalogue.freeze() == whole[2]
    found = rank(catalogue, "10:00:00 +20:00:00", baseline_m=100, wavelength_um=2.2, separation_max_deg=60)
    assert len(found.calibrators) == 20
    catalogue.close()


def test_taking_it_in_twice_changes_nothing(whole, tmp_path):
    catalogue = make_catalogue(str(tmp_path / "p.db"), seed=False)
    take_in(catalogue, whole[0], OPTIONS)
    log = catalogue.changes(most=1000)
    again = take_in(catalogue, whole[0], OPTIONS)
    assert again.already
    assert catalogue.changes(most=1000) == log
    # The same rows in another file: each is known by now, and nothing about it is new.
    other = tmp_path / "other.ecsv"
    table().write(other)
    report = take_in(catalogue, other, IntakeOptions("A survey", "2020Survey"))
    assert (report.added, report.matched) == (0, 400)
    assert contents(catalogue) == whole[1]
    with catalogue.reading() as connection:
        assert connection.execute(text("SELECT count(*) FROM change_value")).scalar() == 0
    catalogue.close()


def test_an_interrupted_intake_goes_on_where_it_stopped(whole, empty_url):
    catalogue = make_catalogue(empty_url, seed=False)

    def interrupt(done, _total):
        if done >= 200:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        take_in(catalogue, whole[0], OPTIONS, progress=interrupt, batch_rows=100)
    with catalogue.reading() as connection:
        assert connection.execute(text("SELECT count(*) FROM star")).scalar() == 200
    report = take_in(catalogue, whole[0], OPTIONS, batch_rows=100)
    assert (report.resumed_at, report.rows, report.added) == (200, 400, 400)
    assert contents(catalogue) == whole[1]
    catalogue.close()


def test_bad_rows_are_told_and_stop_nothing(tmp_path, empty_url):
    path = tmp_path / "list.csv"
    path.write_text(
        "# a list\nname,ra,dec,V,K\nA1,10,20,5,3\nA2,11,20,5\nA3,abc,20,5,3\nA4,12,20,99.9,3\n"
        "A5,13,20,6,4\n\nA1,10.00001,20,5,3\nA6,13.0001,20,6,4\n",
        encoding="utf-8",
    )
    catalogue = make_catalogue(empty_url, seed=False)
    rejects = tmp_path / "rejects.csv"
    report = take_in(catalogue, path, OPTIONS, rejects=rejects)
    assert (report.rows, report.added, report.rejected) == (7 + 1, 2, 6) or (report.rows, report.rejected) == (
        7,
        5,
    )
    with rejects.open(newline="", encoding="utf-8") as file:
        found = {int(row["line"]): row["reason"] for row in csv.DictReader(file)}
    assert found == {
        4: "has 4 fields, not 5",
        5: "ra is 'abc', which is no number",
        6: "V is 99.9; it must lie between -5 and 30",
        9: "it is the same star as line 3",
        10: "it is the same star as line 7",
    }
    catalogue.close()


def test_a_star_is_known_by_name_or_by_place_at_the_epoch_of_the_table(seeded_url, opened, tmp_path):
    catalogue = opened(seeded_url)
    names = ["HD 201091", "HD 10700", "HIP 87937"]  # 61 Cyg A, tau Cet, Barnard's star: fast ones
    stars = [catalogue.star(catalogue.find(name)) for name in names]
    # Where they stand in 2016, by astropy; catalogues of that epoch list them there.
    then = SkyCoord(
        [star["ra_deg"] for star in stars] * units.deg, [star["dec_deg"] for star in stars] * units.deg,
        pm_ra_cosdec=[star["pm_ra_mas_yr"] for star in stars] * units.mas / units.yr,
        pm_dec=[star["pm_dec_mas_yr"] for star in stars] * units.mas / units.yr,
        distance=[1000 / star["parallax_mas"] for star in stars] * units.pc, obstime=Time(2000.0, format="jyear"),
    ).apply_space_motion(Time(2016.0, format="jyear"))  # fmt: skip
    moved = [
        3600 * then[i].separation(SkyCoord(s["ra_deg"], s["dec_deg"], unit="deg")).deg
        for i, s in enumerate(stars)
    ]
    assert min(moved) > 25  # arcsec: nobody would find them by their places of 2000
    path = tmp_path / "gaia.csv"
    rows = [
        f"{ra:.8f},{dec:.8f},{s['magnitudes']['V']['value'] + 0.01:.3f},0.005"
        for ra, dec, s in zip(then.ra.deg, then.dec.deg, stars, strict=True)
    ]
    path.write_text("ra,dec,V,e_V\n" + "\n".join(rows) + "\n", encoding="utf-8")
    report = take_in(catalogue, path, IntakeOptions("Places of 2016", "2016P", epoch_yr=2016.0))
    assert (report.added, report.matched, report.rejected) == (0, 3, 0), rejected_rows(catalogue, 1)
    after = catalogue.star(stars[1]["star_id"])
    assert after["magnitudes"]["V"]["source"] == "Places of 2016"  # the smaller error counts
    assert after["ra_deg"] == stars[1]["ra_deg"]
    changes = catalogue.changes(stars[1]["star_id"])
    assert changes[-1]["action"] == "intake"
    assert {line["table"] for line in changes[-1]["overwritten"]} == {"diameter"}
    old = catalogue.changes(stars[1]["star_id"], changes[0]["made_utc"])["rows"]["diameter"][0]
    assert old["limb_darkened_mas"]["value"] == stars[1]["diameter"]["limb_darkened_mas"]


def test_a_row_that_contradicts_the_catalogue_is_refused(seeded_url, opened, tmp_path):
    catalogue = opened(seeded_url)
    tau = catalogue.star(catalogue.find("HD 10700"))
    path = tmp_path / "odd.csv"
    path.write_text(
        "name,ra,dec,V\n"
        "HD 10700,40,50,3.5\n"  # the name is elsewhere
        f",{tau['ra_deg']},{tau['dec_deg']},12.5\n"  # the place shines otherwise
        f"HD 10307,{tau['ra_deg']},{tau['dec_deg']},5\n",
        encoding="utf-8",
    )
    report = take_in(catalogue, path, OPTIONS)
    assert report.rejected == 3
    reasons = [row["reason"] for row in rejected_rows(catalogue, report.intake_id)]
    assert reasons[0].startswith(f"it bears a name of star {tau['star_id']}, which is")
    assert f"it lies at the place of star {tau['star_id']}, but its V is 12.5, not" in reasons[1]
    assert "it bears a name of star" in reasons[2]


def test_a_new_star_near_another_is_its_neighbour(seeded_url, opened, tmp_path):
    catalogue = opened(seeded_url)
    tau = catalogue.star(catalogue.find("HD 10700"))
    path = tmp_path / "near.csv"
    path.write_text(
        f"ra,dec,V,K,sep\n{tau['ra_deg']},{tau['dec_deg'] + 20 / 3600},8.5,7,0.4\n", encoding="utf-8"
    )
    take_in(catalogue, path, OPTIONS)
    near = [one for one in catalogue.star(tau["star_id"])["companions"] if one["separation_arcsec"] < 25]
    assert near[0]["separation_arcsec"] == pytest.approx(20, abs=0.01)
    assert near[0]["delta_v_mag"] == pytest.approx(8.5 - tau["magnitudes"]["V"]["value"], abs=2e-3)
    other = catalogue.star(near[0]["neighbour_id"])
    assert other["name"] == near[0]["name"] == "J014404.08-155554.9"
    assert [one["separation_arcsec"] for one in other["companions"]] == [0.4, near[0]["separation_arcsec"]]


def test_a_dry_run_shows_the_mapping_and_ten_rows(whole):
    found = preview_file(whole[0], OPTIONS)
    assert len(found["rows"]) == 10
    assert found["mapping"]["columns"]["Ks"] == {"column": "Kmag", "unit": "mag", "how": "name"}
    assert found["rows"][0]["values"]["name"] == "Invented 0"


@pytest.mark.parametrize(
    ("name", "content", "message"),
    [
        ("a.txt", "x", "its name may end in one of .csv"),
        ("a.csv", "", "has 0 columns|no column is ra_deg|holds no table"),
        ("a.csv", "ra,dec\n1,2\n", "no column is a magnitude"),
        ("a.csv", "ra,ra,dec\n1,2\n", "has the column 'ra' twice"),
        ("a.fits", "junk", "cannot read .*a.fits as fits"),
        ("a.vot", "<junk", "cannot read .*a.vot as votable"),
        ("a.parquet", "junk", "cannot read .*a.parquet as parquet"),
        ("a.ecsv", "junk", "cannot read .*a.ecsv as ecsv"),
    ],
)
def test_a_file_that_is_no_table_is_named(tmp_path, name, content, message):
    (tmp_path / name).write_text(content, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        preview_file(tmp_path / name, OPTIONS)


KILLED = """
import sys
from pathlib import Path
from pinlight.catalogue.intake import IntakeOptions, take_in
from pinlight.catalogue.store import open_catalogue
catalogue = open_catalogue(sys.argv[1])
print("go", flush=True)
take_in(catalogue, Path(sys.argv[2]), IntakeOptions("A survey", "2020Survey"), batch_rows=20)
catalogue.freeze()
print("done", flush=True)
"""


def test_killed_at_any_moment_it_goes_on_and_loses_nothing(whole, tmp_path):
    """SIGKILL again and again, until it is through; 100 kills with PINLIGHT_TEST_SLOW."""
    path = str(tmp_path / "p.db")
    make_catalogue(path, seed=False).close()
    environment = os.environ | {"PYTHONPATH": str(Path(__file__).parents[2] / "service")}
    moments = random.Random(3)
    kills, wanted, finished = 0, 100 if SLOW else 4, False
    while kills < wanted or not finished:
        process = subprocess.Popen(
            [sys.executable, "-c", KILLED, path, str(whole[0])],
            env=environment,
            stdout=subprocess.PIPE,
            text=True,
        )
        assert process.stdout is not None
        assert process.stdout.readline() == "go\n"
        if kills < wanted:
            time.sleep(moments.uniform(0, 0.8))
            process.send_signal(signal.SIGKILL)
        rest = process.stdout.read()
        process.wait()
        process.stdout.close()
        kills += process.returncode == -signal.SIGKILL
        finished = finished or "done" in rest
        if finished and kills < wanted and SLOW:  # from the beginning, for more kills
            for left in tmp_path.glob("p.db*"):
                if left.is_file():
                    left.unlink()
            make_catalogue(path, seed=False).close()
            finished = False
        elif finished:
            kills = wanted
        catalogue = open_catalogue(path)
        with catalogue.reading() as connection:
            assert connection.execute(text("PRAGMA integrity_check")).scalar() == "ok"
            assert connection.execute(text("PRAGMA foreign_key_check")).all() == []
            state = connection.execute(text("SELECT rows_done, added FROM intake")).first()
            stars = connection.execute(text("SELECT count(*) FROM star")).scalar()
        assert stars == (state.added if state else 0)  # whole batches only
        for edition in catalogue.editions():
            assert catalogue.check(edition["name"])["sound"]
        catalogue.close()
    catalogue = open_catalogue(path)
    assert contents(catalogue) == whole[1]
    assert catalogue.freeze() == whole[2]
    catalogue.close()


def test_the_log_says_which_rows_a_batch_brought(whole, tmp_path):
    catalogue = make_catalogue(str(tmp_path / "p.db"), seed=False)
    take_in(catalogue, whole[0], OPTIONS, batch_rows=250)
    details = [json.dumps(change["detail"]) for change in catalogue.changes(most=10)]
    assert details[:2] == [
        '{"intake": 1, "file": "survey.csv", "rows": [250, 400]}', '{"intake": 1, "file": "survey.csv", "rows": [0, 250]}',
    ]  # fmt: skip
    assert catalogue.changes(300)[0]["detail"]["rows"] == [250, 400]
    catalogue.close()
