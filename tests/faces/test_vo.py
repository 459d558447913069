"""The doors to the Virtual Observatory, with pyvo and astropy as clients and stilts as an independent one."""

import io
import os
import shutil
import subprocess

import numpy as np
import pytest
import pyvo
from astropy.io.votable import parse, parse_single_table
from astropy.table import QTable, Table

import pinlight as pl
from pinlight.faces.http import create_app
from pinlight.sky.positions import separation_deg

# Set where a test that needs stilts may not be skipped.
MUST_RUN = "PINLIGHT_TEST_STILTS"

TAU_CET = (26.017, -15.937)


@pytest.fixture(scope="module")
def client(catalogue):
    return create_app(catalogue).test_client()


def cone(client, **parameters):
    answer = client.get("/vo/cone", query_string=parameters)
    assert answer.content_type == "application/x-votable+xml"
    return answer


def stilts(*arguments, given: bytes = b"") -> str:
    program = shutil.which("stilts")
    if program is None and not os.environ.get(MUST_RUN):
        pytest.skip("there is no stilts; apt-get install stilts")
    return subprocess.run(
        [program, *arguments], input=given, capture_output=True, check=True, timeout=60
    ).stdout.decode()


def test_pyvo_finds_the_stars_that_the_library_finds(served, catalogue):
    found = pyvo.conesearch(f"{served}/vo/cone", pos=TAU_CET, radius=3.0)
    columns = catalogue.columns()
    # Against astropy's separations of the whole edition.
    apart = separation_deg(*TAU_CET, columns.ra_deg, columns.dec_deg)
    assert {int(star["star_id"]) for star in found} == set(columns.ids[apart <= 3.0].tolist())
    first = found[0]
    assert first.pos.separation(first.pos).deg == 0
    assert first.id == str(catalogue.find("tau Cet"))
    assert (first.pos.ra.deg, first.pos.dec.deg) == pytest.approx(TAU_CET, abs=0.001)


def test_an_error_reaches_pyvo_as_its_message(served):
    with pytest.raises(pyvo.DALQueryError, match="SR is -1; it must lie between 0 and 180"):
        pyvo.conesearch(f"{served}/vo/cone", pos=TAU_CET, radius=-1.0)


@pytest.mark.parametrize(
    ("parameters", "message"),
    [
        ({}, "RA is missing"),
        ({"RA": 10, "DEC": 95, "SR": 1}, "dec_deg is 95"),
        ({"RA": "ten", "DEC": 5, "SR": 1}, "RA is 'ten'; it must be a number"),
        ({"RA": "nan", "DEC": 5, "SR": 1}, "RA is 'nan'"),
        ({"RA": 10, "DEC": 5, "SR": 200}, "SR is 200"),
        ({"RA": 10, "DEC": 5, "SR": 1, "VERB": 0}, "VERB is 0"),
        ({"RA": 10, "DEC": 5, "SR": 1, "MAXREC": "all"}, "MAXREC is 'all'"),
        ({"RA": 10, "DEC": 5, "SR": 1, "RESPONSEFORMAT": "png"}, "RESPONSEFORMAT is 'png'"),
        ({"RA": [10, 11], "DEC": 5, "SR": 1}, "RA is given twice"),
    ],
)
def test_errors_are_votables(client, parameters, message):
    # Simple Cone Search 1.03, section 2.3: an INFO or PARAM named Error, whose value is the message.
    answer = cone(client, **parameters)
    assert answer.status_code == 200
    resource = parse(io.BytesIO(answer.data)).resources[0]
    infos = {info.name: info.value for info in resource.infos}
    assert message in infos["Error"]
    assert infos["QUERY_STATUS"] == "ERROR"


def test_the_answer_has_the_fields_of_the_standard(client):
    # Simple Cone Search 1.03, section 2.2: exactly one field with each of these UCDs.
    answer = cone(client, RA=TAU_CET[0], DEC=TAU_CET[1], SR=1, VERB=3)
    votable = parse(io.BytesIO(answer.data))
    assert votable.version == "1.4"
    [table] = votable.resources[0].tables
    for ucd, datatype in (("ID_MAIN", "char"), ("POS_EQ_RA_MAIN", "double"), ("POS_EQ_DEC_MAIN", "double")):
        [field] = [one for one in table.fields if one.ucd == ucd]
        assert field.datatype == datatype
    [system] = votable.resources[0].coordinate_systems
    assert (system.ID, system.system) == ("ICRS", "ICRS")
    for field in table.fields:
        if field.datatype in ("double", "float"):
            assert field.unit is not None, field.name


def test_verbosity_radius_nought_and_maxrec(client):
    place = {"RA": TAU_CET[0], "DEC": TAU_CET[1]}
    tables = [parse_single_table(io.BytesIO(cone(client, **place, SR=2, VERB=v).data)) for v in (1, 2, 3)]
    names = [[field.name for field in table.fields] for table in tables]
    assert len(names[0]) < len(names[1]) < len(names[2])
    assert names[1] == names[2][: len(names[1])]
    for nothing in ({"SR": 0}, {"SR": 2, "MAXREC": 0}):
        empty = parse_single_table(io.BytesIO(cone(client, **place, **nothing).data))
        assert [field.name for field in empty.fields] == names[1]
        assert len(empty.array) == 0
    cut = cone(client, **{name.lower(): value for name, value in place.items()}, sr=10, maxrec=7)
    votable = parse(io.BytesIO(cut.data))
    assert len(votable.resources[0].tables[0].array) == 7
    assert votable.resources[0].infos[0].value == "OVERFLOW"


def test_stilts_finds_no_fault(client, tmp_path):
    place = {"RA": TAU_CET[0], "DEC": TAU_CET[1]}
    answers = {
        "cone": cone(client, **place, SR=5, VERB=3),
        "empty": cone(client, **place, SR=0),
        "error": cone(client, RA="x"),
        "ranking": client.get("/api/v1/rankings?target=tau+Cet&array=north&mode=H&format=votable"),
        "arrays": client.get("/api/v1/arrays?format=votable"),
    }
    for name, answer in answers.items():
        assert answer.status_code == 200
        (tmp_path / name).write_bytes(answer.data)
        assert stilts("votlint", "ucd=false", str(tmp_path / name)) == "", name
    stars = parse_single_table(io.BytesIO(answers["cone"].data)).array
    counted = stilts("tpipe", "ifmt=votable", f"in={tmp_path / 'cone'}", "omode=count")
    assert counted.split() == ["columns:", str(len(stars.dtype)), "rows:", str(len(stars))]
    shown = stilts(
        "tpipe",
        "ifmt=votable",
        f"in={tmp_path / 'ranking'}",
        "ofmt=csv",
        "cmd=keepcols 'name calibration_error_percent'",
    )
    ranked = client.get("/api/v1/rankings?target=tau+Cet&array=north&mode=H").json["calibrators"]
    rows = [line.split(",") for line in shown.splitlines()[1:]]
    assert [name for name, _ in rows] == [star["name"] for star in ranked]
    errors = [star["calibration_error_percent"] for star in ranked]
    np.testing.assert_allclose([float(error) for _, error in rows], errors, atol=1e-4)


LISTS = (
    "rankings?target=tau+Cet&array=north&mode=H",
    "stars?ra_deg=26.017&dec_deg=-15.937&radius_deg=2",
    "stars?name=tau+Cet",
    "arrays",
    "editions",
)


@pytest.mark.parametrize("path", LISTS)
def test_every_list_comes_in_every_format(client, path):
    joined = f"/api/v1/{path}{'&' if '?' in path else '?'}format="
    as_json = client.get(joined + "json").json
    rows = next(
        value
        for key, value in as_json.items()
        if key in ("calibrators", "stars", "arrays", "editions") and value
    )
    votable = Table.read(io.BytesIO(client.get(joined + "votable").data), format="votable")
    ecsv = QTable.read(client.get(joined + "ecsv").text, format="ascii.ecsv")
    csv = Table.read(client.get(joined + "csv").text, format="ascii.csv")
    assert len(votable) == len(ecsv) == len(csv) == len(rows)
    assert votable.colnames == ecsv.colnames == csv.colnames
    assert [str(name) for name in csv["name"]] == [row["name"] for row in rows]
    wrong = client.get(joined + "xls")
    assert wrong.status_code == 400
    assert b"format is 'xls'; it may be one of json, votable, ecsv, csv" in wrong.data


def test_a_plan_comes_as_a_table_of_looks(client):
    body = {
        "targets": [{"name": "upsilon And"}], "array": "north", "mode": "H", "night": "2026-12-01",
    }  # fmt: skip
    looks = client.post("/api/v1/plans", json=body).json["blocks"][0]["looks"]
    table = Table.read(client.post("/api/v1/plans?format=csv", json=body).text, format="ascii.csv")
    assert list(table["name"]) == [look["name"] for look in looks]


@pytest.mark.parametrize("form", ["ascii.ecsv", "fits", "votable"])
def test_the_librarys_table_survives_a_file(catalogue, tmp_path, form):
    table = pl.rank(catalogue, "tau Cet", array="north", mode="H", best=5).table()
    table.write(tmp_path / "ranking", format=form)
    back = QTable.read(tmp_path / "ranking", format=form)
    assert back.colnames == table.colnames
    for name in table.colnames:
        if table[name].dtype.kind == "f":
            unit = getattr(table[name], "unit", None)
            assert getattr(back[name], "unit", None) == unit, name
            np.testing.assert_allclose(
                np.asarray(back[name], float), np.asarray(table[name], float), rtol=1e-12, err_msg=name
            )
        else:
            assert [str(value) for value in back[name]] == [str(value) for value in table[name]]
