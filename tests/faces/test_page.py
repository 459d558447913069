import json
import re
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest

import pinlight as pl
from pinlight.faces.http import create_app
from pinlight.ranking.figure import NO_DATA, plot_data

RANKING = {"target": "upsilon And", "array": "north", "mode": "H", "night": "2026-12-01"}


@pytest.fixture(scope="module")
def client(catalogue):
    return create_app(catalogue).test_client()


class Outline(HTMLParser):
    """Tags that are open, texts, and every address that a page asks for."""

    VOID = ("meta", "link", "input", "img", "br", "rect", "circle", "line")

    def __init__(self, text):
        super().__init__()
        self.open, self.addresses, self.texts, self.scripts = [], [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        if tag not in self.VOID:
            self.open.append(tag)
        if tag == "script":
            self.scripts.append(dict(attributes))
        for name, value in attributes:
            assert name != "style", "the policy refuses style attributes"
            assert not name.startswith("on"), "the policy refuses inline handlers"
            if name in ("href", "src", "action") and not value.startswith("#"):
                self.addresses.append(value)

    def handle_endtag(self, tag):
        if tag not in self.VOID:
            assert self.open.pop() == tag

    def handle_data(self, data):
        self.texts.append(data.strip())


def test_the_first_page_asks_for_a_target(client):
    page = client.get("/")
    outline = Outline(page.text)
    assert outline.open == []
    assert {"Target", "Array", "Mode", "Stations", "Rank"} <= set(outline.texts)
    assert "Quillstone" in outline.texts
    assert 'data-state="nothing"' in page.text


def test_a_ranking_on_the_page_is_that_of_the_library(client, catalogue):
    page = client.get("/", query_string=RANKING)
    ranking = pl.rank(catalogue, "upsilon And", array="north", mode="H", night="2026-12-01")
    rows = re.findall(r'<tr data-star="(\d+)".*?</tr>', page.text, re.DOTALL)
    assert [int(row) for row in rows] == [star.star_id for star in ranking.calibrators]
    outline = Outline(page.text)
    assert outline.open == []
    for star in ranking.calibrators:
        assert star.name in outline.texts
        assert f"{100 * star.calibration_error:.2f}" in outline.texts
    assert ranking.edition in page.text
    for reason in ranking.excluded:
        if reason != "too_far":
            assert ranking.left_out[reason][0].name in outline.texts


def test_the_parts_for_the_pages_script_are_those_of_the_page(client):
    page, view = client.get("/", query_string=RANKING), client.get("/view", query_string=RANKING).json
    for name in ("head", "list", "sets", "more"):
        assert view["parts"][name].strip() in page.text
    within = re.search(r'<script type="application/json" id="plots">(.*?)</script>', page.text, re.DOTALL)
    assert json.loads(within[1]) == view["plots"]


def test_the_plots_show_the_ranking(catalogue):
    ranking = pl.rank(catalogue, "upsilon And", array="north", mode="H", night="2026-12-01", best=8)
    data = plot_data(ranking)
    assert {name: list(columns) for name, columns in data["sources"].items()} == {
        name: list(columns) for name, columns in NO_DATA["sources"].items()
    }
    stars = data["sources"]["stars"]
    for east, north, star in zip(stars["east"], stars["north"], ranking.calibrators, strict=True):
        assert (east**2 + north**2) ** 0.5 == pytest.approx(star.separation_deg, abs=2e-4)
        assert (north > 0) == (star.dec_deg > ranking.target.dec_deg)  # true this near to the target
        assert (east > 0) == (star.ra_deg > ranking.target.ra_deg)
    windows = data["sources"]["windows"]
    assert windows["row"].count(0) == len(ranking.target_windows)
    assert all(start < end for start, end in zip(windows["start"], windows["end"], strict=True))
    for low, middle, star in zip(
        data["sources"]["bands"]["v2"], data["sources"]["curves"]["v2"], ranking.calibrators, strict=True
    ):
        points = len(middle)
        assert all(a <= b <= c for a, b, c in zip(low[:points], middle, low[:points:-1], strict=False))
        # The exact budget averages channels of a limb-darkened disc; the curve is the uniform disc's.
        assert middle[-1] < star.v2_max


def test_no_address_leaves_the_server(client):
    for path in ("/", "/star/12", "/plan", "/api", "/?target=tau+Cet&array=north&mode=H"):
        outline = Outline(client.get(path).text)
        assert outline.open == []
        for address in set(outline.addresses):
            assert address.startswith("/"), address
            assert not address.startswith("//")
        for address in {one for one in outline.addresses if not one.startswith(("/star", "/api/v1"))}:
            with client.get(address) as answer:
                assert answer.status_code == 200, address


def test_pages_allow_only_this_servers_scripts(client):
    answer = client.get("/", query_string=RANKING)
    policy = dict(part.strip().split(" ", 1) for part in answer.headers["Content-Security-Policy"].split(";"))
    assert policy["default-src"] == "'none'"
    assert policy["script-src"] == "'self'"
    nonce = re.fullmatch(r"'self' 'nonce-([\w-]{20,})'", policy["style-src"])[1]
    assert client.get("/").headers["Content-Security-Policy"].count(nonce) == 0  # another one every time
    assert "unsafe" not in answer.headers["Content-Security-Policy"]
    for script in Outline(answer.text).scripts:
        assert script.get("src", "").startswith("/") or script["type"] == "application/json"


def test_bad_input_is_told_on_the_page(client):
    page = client.get("/", query_string={"target": "tau Ceet", "array": "north", "mode": "H"})
    assert page.status_code == 404
    assert "no star is named" in page.text
    assert 'role="alert"' in page.text
    assert 'value="tau Ceet"' in page.text
    wrong = client.get("/?target=tau+Cet&array=east&mode=H")
    assert wrong.status_code == 404
    assert "it may be one of north, south" in wrong.text
    assert client.get("/view?target=tau+Ceet&array=north&mode=H").json["state"] == "problem"
    assert client.get("/?target=tau+Cet&colour=red").status_code == 400


def test_stations_may_be_given_one_by_one_as_a_form_gives_them(client):
    several = client.get("/view?target=tau+Cet&array=north&mode=H&stations=Ash&stations=Rowan").json
    together = client.get("/view?target=tau+Cet&array=north&mode=H&stations=Ash,Rowan").json
    assert several["plots"] == together["plots"]
    assert several["parts"]["form"].count("checked") == 2


def test_what_people_type_is_escaped(client):
    for path in ("/", "/view", "/plan"):
        query = {"target": '<script>alert(1)</script>"', "targets": "<script>", "array": "north", "mode": "H"}
        page = client.get(path, query_string=query)
        assert "<script>" not in page.text.replace('<script type="application/json"', "")


def test_the_same_question_elsewhere_gives_the_same_answer(client, catalogue, seeded_path, monkeypatch):
    query = RANKING | {"stations": "Ash,Rowan,Cedar", "separation_max_deg": "7.5", "with": "HD 9443, HD 10132"}
    page = client.get("/", query_string=query)
    from html import unescape

    snippets = [unescape(text) for text in re.findall(r"<pre[^>]*>(.*?)</pre>", page.text, re.DOTALL)]
    command, python, curl = snippets
    listed = [int(row) for row in re.findall(r'<tr data-star="(\d+)"', page.text)]

    address = curl.removeprefix("curl '").removesuffix("'")
    assert [star["star_id"] for star in client.get(address).json["calibrators"]] == listed

    monkeypatch.setattr(pl, "open_catalogue", lambda: catalogue)
    names: dict = {}
    exec(python, names)
    assert [star.star_id for star in names["ranking"].calibrators] == listed

    import shlex

    from click.testing import CliRunner

    from pinlight.faces.cli import main

    words = shlex.split(command)
    answer = CliRunner().invoke(main, [*words[1:], "--json", "--db", str(seeded_path)])
    assert [star["star_id"] for star in json.loads(answer.stdout)["calibrators"]] == listed


def test_names_are_suggested(client):
    def names(written):
        return [star["name"] for star in client.get("/suggest", query_string={"q": written}).json["stars"]]

    assert names("upsilon A")[0] == "upsilon And"
    assert "alpha Cas" in names("α c")
    assert names("hd 10700")[0] == "HD 10700"
    assert names("") == []
    assert names("%") == []
    assert names("\x00") == []


def test_a_star_shows_how_its_diameter_came_about(client, catalogue):
    star = catalogue.star(catalogue.find("tau Cet"))
    page = client.get(f"/star/{star['star_id']}")
    outline = Outline(page.text)
    assert outline.open == []
    for part in star["diameter"]["relations"]:
        assert part["relation"] in outline.texts
        assert f"{part['diameter_mas']:.4f}" in outline.texts
    assert f"{star['diameter']['limb_darkened_mas']:.4f} ±" in page.text
    assert client.get("/star/99999999").status_code == 404
    assert client.get("/star/999999999999999999999999").status_code == 404


def test_a_night_on_the_page(client):
    query = {"targets": "upsilon And\n61.9 -67.3", "array": "north", "mode": "H", "night": "2026-12-01"}
    page = client.get("/plan", query_string=query)
    assert page.status_code == 200
    outline = Outline(page.text)
    assert outline.open == []
    assert "it never rises above 30 deg" in page.text
    assert "1 left out" in page.text
    sheet = client.get("/plan.csv", query_string=query)
    assert sheet.text.splitlines()[0].startswith("block,target,role")
    assert "BEGIN:VCALENDAR" in client.get("/plan.ics", query_string=query).text
    assert "<html" in client.get("/plan.html", query_string=query).text
    looks = client.get("/looks", query_string=query | {"targets": "", "target": "upsilon And"}).json
    assert {look["role"] for look in looks["blocks"][0]["looks"]} == {"calibrator", "target"}


@pytest.mark.parametrize(
    ("targets", "told"),
    [
        ("no such star", "line 1: no star is named"),
        ("tau Cet\n10 95", "line 2: dec_deg is 95"),
        ("\n \n", "targets"),
        ("name,ra_deg,dec_deg\nA,1", "line 2: dec_deg of A is missing"),
        ("\n".join(["tau Cet"] * 201), "201 lines"),
    ],
)
def test_a_bad_night_is_told_on_the_page(client, targets, told):
    query = {"targets": targets, "array": "north", "mode": "H", "night": "2026-12-01"}
    page = client.get("/plan", query_string=query)
    if targets.strip():
        assert page.status_code in (400, 404)
        assert told in page.text
    else:
        assert 'data-state="problem"' not in page.text


def test_an_unknown_page_is_a_page(client):
    page = client.get("/no/such/page")
    assert page.status_code == 404
    assert page.content_type.startswith("text/html")
    assert Outline(page.text).open == []


def test_bokehs_script_comes_from_the_installed_package(client):
    import bokeh

    address = next(one for one in Outline(client.get("/").text).addresses if "bokeh" in one)
    answer = client.get(address)
    assert bokeh.__version__ in address
    assert "immutable" in answer.headers["Cache-Control"]
    assert client.get("/bokeh/0.1/bokeh.min.js").status_code == 404
    assert client.get("/plots/dark.json").json.keys() == {"sky", "visibility", "night"}
    assert client.get("/plots/pink.json").status_code == 404


def test_terms_are_told_apart_by_colour_blind_readers():
    # Machado, Oliveira & Fernandes (2009), as colorspacious has it; a distance of 20 in CAM02-UCS is some
    # ten times what the eye just tells (common practice, no source), and strips stand side by side.
    from itertools import combinations

    from colorspacious import cspace_convert, deltaE

    from pinlight.ranking.html import TERM_COLOURS
    from pinlight.resources import __file__ as package

    sheet = (Path(package).parent / "faces" / "static" / "pinlight.css").read_text(encoding="utf-8")
    pairs = dict(re.findall(r"--(\w+): light-dark\((#\w{6}, #\w{6})\)", sheet))
    assert {name: pairs[name].split(", ")[0] for name in TERM_COLOURS} == TERM_COLOURS
    for scheme in (0, 1):
        written = [pairs[name].split(", ")[scheme] for name in (*TERM_COLOURS, "ground")]
        colours = [[int(one[i : i + 2], 16) / 255 for i in (1, 3, 5)] for one in written]
        for kind in (None, "deuteranomaly", "protanomaly", "tritanomaly"):
            space = {"name": "sRGB1+CVD", "cvd_type": kind, "severity": 100} if kind else "sRGB1"
            seen = np.clip(cspace_convert(np.array(colours), space, "sRGB1"), 0, 1)
            for (a, one), (b, other) in combinations(zip(written, seen, strict=True), 2):
                assert deltaE(one, other, input_space="sRGB1") > 20, (a, b, kind)
