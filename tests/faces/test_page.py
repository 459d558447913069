from html.parser import HTMLParser

import pytest

import pinlight as pl
from pinlight.faces.http import create_app


@pytest.fixture(scope="module")
def client(catalogue):
    return create_app(catalogue).test_client()


class Outline(HTMLParser):
    """Tags in order, texts, and every address that a page asks for."""

    def __init__(self, text):
        super().__init__()
        self.open, self.addresses, self.texts = [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        if tag not in ("meta", "link", "input", "img", "br", "rect"):
            self.open.append(tag)
        self.addresses += [value for name, value in attributes if name in ("href", "src", "action")]

    def handle_endtag(self, tag):
        if tag != "rect":
            assert self.open.pop() == tag

    def handle_data(self, data):
        self.texts.append(data.strip())


def test_the_first_page_asks_for_a_target(client):
    page = client.get("/")
    outline = Outline(page.text)
    assert outline.open == []
    assert "Rank calibrators" in outline.texts
    assert "Quillstone – H, 1.65 µm" in page.text


def test_a_ranking_on_the_page_is_that_of_the_library(client, catalogue):
    page = client.get("/", query_string={"target": "tau Cet", "setup": "north/H"})
    ranking = pl.rank(catalogue, "tau Cet", array="north", mode="H", best=15)
    outline = Outline(page.text)
    assert outline.open == []
    names = [star.name for star in ranking.calibrators]
    assert [text for text in outline.texts if text in names] == names
    for star in ranking.calibrators:
        assert f"{100 * star.calibration_error:.2f}" in outline.texts
    assert ranking.edition in page.text


def test_no_address_leaves_the_server(client):
    page = client.get("/", query_string={"target": "tau Cet", "setup": "north/H"})
    for address in Outline(page.text).addresses:
        assert address.startswith("/"), address
        assert not address.startswith("//")
        with client.get(address) as answer:
            assert answer.status_code == 200, address


def test_bad_input_is_told_on_the_page(client):
    page = client.get("/", query_string={"target": "tau Ceet", "setup": "north/H"})
    assert page.status_code == 404
    assert "no star is named" in page.text
    assert 'role="alert"' in page.text
    assert 'value="tau Ceet"' in page.text
    wrong = client.get("/?target=tau+Cet&setup=east/H")
    assert wrong.status_code == 404
    assert "it may be one of north/H, north/K" in wrong.text


def test_what_people_type_is_escaped(client):
    page = client.get("/", query_string={"target": '<script>alert(1)</script>"', "setup": "north/H"})
    assert "<script" not in page.text


def test_an_unknown_page_is_a_page(client):
    page = client.get("/no/such/page")
    assert page.status_code == 404
    assert page.content_type.startswith("text/html")
    assert Outline(page.text).open == []
