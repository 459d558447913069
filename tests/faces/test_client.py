"""The client, against the served application and against servers that answer badly."""

import json
import threading
import time
from contextlib import contextmanager
from http.server import BaseHTTPRequestHandler, HTTPServer

import pytest

import pinlight as pl
from pinlight.catalogue.members import add_member
from pinlight.faces.http import create_app
from tests.served import serving


@pytest.fixture(scope="module")
def client(served):
    return pl.Client(served)


def test_a_ranking_is_the_librarys(client, catalogue):
    options = {"array": "north", "mode": "H", "night": "2026-12-01", "stations": "Ash,Rowan,Cedar", "best": 5}
    remote = client.rank("upsilon And", with_=["HD 9443", "HD 10132"], **options)
    local = pl.rank(catalogue, "upsilon And", with_=["HD 9443", "HD 10132"], **options)
    assert isinstance(remote, pl.Ranking)
    assert json.dumps(remote.to_dict()) == json.dumps(local.to_dict())
    assert remote.table().colnames == local.table().colnames
    assert remote.paying_set.star_ids == local.paying_set.star_ids
    assert remote.figure().children
    assert "HD 10132" in remote._repr_html_()


def test_a_target_of_ones_own_and_the_quick_answer(client, catalogue):
    target = pl.Target(151.6, 18.3, name="Winter Kiln", magnitudes={"H": 2.3}, diameter_mas=1.9)
    options = {"baseline_m": 100.0, "wavelength_um": 1.65}
    assert client.rank(target, **options).to_dict() == pl.rank(catalogue, target, **options).to_dict()


def test_the_other_calls(client, catalogue):
    options = {"array": "north", "mode": "H"}
    assert (
        client.best_set("tau Cet", 3, **options).star_ids
        == pl.best_set(catalogue, "tau Cet", 3, **options).star_ids
    )
    plan = client.plan_night(
        ["upsilon And", pl.Target(61.9, 27.3, name="Slow Ember")], night="2026-12-01", **options
    )
    assert {block.target for block in plan.blocks} == {"upsilon And", "Slow Ember"}
    assert plan.to_dict()["blocks"][0]["looks"][0]["role"] == "calibrator"
    star = client.star("tau Cet")
    assert star == json.loads(json.dumps(catalogue.star(catalogue.find("tau Cet"))))
    assert client.cone(26.017, -15.937, 1.0)[0]["star_id"] == star["star_id"]
    assert [array["key"] for array in client.arrays()] == ["north", "south"]
    assert client.editions() == catalogue.editions()
    assert client.health()["status"] == "ok"


@pytest.mark.parametrize(
    ("ask", "kind", "message"),
    [
        (lambda c: c.rank("tau Ceet", array="north", mode="H"), pl.NotFoundError, "did you mean tau Cet"),
        (lambda c: c.rank("tau Cet", array="north", mode="H", best=0), pl.InputError, "best is 0"),
        (
            lambda c: c.rank("tau Cet", array="north", mode="H", colour=1),
            pl.InputError,
            "colour is not a known",
        ),
        (lambda c: c.rank("tau Cet", array="north", mode="H", v2_min=float("nan")), pl.InputError, "as JSON"),
        (lambda c: c.best_set("tau Cet", 9, array="north", mode="H"), pl.InputError, "size is 9"),
        (lambda c: c.star(99_999_999), pl.NotFoundError, "there is no such star"),
        (lambda c: c.set_standing("tau Cet", "barred", "a test"), pl.TokenError, "needs a member's token"),
    ],
)
def test_errors_are_the_librarys(client, ask, kind, message):
    with pytest.raises(kind, match=message):
        ask(client)


def test_writing_takes_a_token(seeded_url, opened):
    catalogue = opened(seeded_url)
    keeper = catalogue.acting(add_member(catalogue, "Kit", "keeper"))
    editor, reader = (add_member(keeper, name, role) for name, role in (("Ed", "editor"), ("Rea", "reader")))
    with serving(create_app(catalogue, open_reading=False)) as address:
        with pytest.raises(pl.TokenError):
            pl.Client(address).health()
        with pytest.raises(pl.NotAllowedError):
            pl.Client(address, reader).set_standing("tau Cet", "barred", "a test")
        recorded = pl.Client(address, editor).set_standing("tau Cet", "doubted", "a companion", band="H")
        assert (recorded["standing"], recorded["band"], recorded["made_by"]) == ("doubted", "H", "Ed")
        assert [one["reason"] for one in pl.Client(address, reader).standings("tau Cet")] == ["a companion"]


@contextmanager
def answering(*answers):
    """A server that gives one answer after the other: status, headers, body, and a pause before it."""
    left, asked = list(answers), []

    class Handler(BaseHTTPRequestHandler):
        def do_GET(self):
            asked.append((self.path, dict(self.headers)))
            status, headers, body, pause_s = left.pop(0) if len(left) > 1 else left[0]
            time.sleep(pause_s)
            try:
                self.send_response(status)
                for name, value in headers.items():
                    self.send_header(name, value)
                self.end_headers()
                self.wfile.write(body)
            except OSError:
                pass  # the client has gone

        def do_POST(self):
            self.rfile.read(int(self.headers["Content-Length"]))
            self.do_GET()

        def log_message(self, *_):
            pass

    server = HTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True)
    thread.start()
    yield f"http://127.0.0.1:{server.server_port}", asked
    server.shutdown()
    thread.join()
    server.server_close()


HEALTH = (200, {}, b'{"status": "ok"}', 0.0)
BUSY = (503, {"Retry-After": "0"}, b'{"detail": "the server is stopping"}', 0.0)


def test_a_busy_server_is_asked_again():
    with answering(BUSY, (502, {}, b"<html>", 0.0), HEALTH) as (url, asked):
        assert pl.Client(url).health() == {"status": "ok"}
        assert len(asked) == 3
    with answering(BUSY) as (url, asked), pytest.raises(pl.CatalogueError, match="the server is stopping"):
        pl.Client(url, retries=1).health()
    assert len(asked) == 2


def test_what_was_written_is_not_written_twice():
    with answering(BUSY) as (url, asked), pytest.raises(pl.CatalogueError):
        pl.Client(url, "token").set_standing(1, "barred", "a test")
    assert len(asked) == 1
    assert asked[0][1]["Authorization"] == "Bearer token"


def test_a_server_that_says_nothing_in_time():
    with (
        answering((200, {}, b"{}", 0.6)) as (url, asked),
        pytest.raises(pl.ServiceError, match=r"no answer in 0\.2 s"),
    ):
        pl.Client(url, timeout_s=0.2, retries=1).health()
    assert len(asked) >= 1


def test_no_server_at_all():
    with answering(HEALTH) as (url, _):
        pass
    with pytest.raises(pl.ServiceError, match="cannot be reached"):
        pl.Client(url, retries=0).health()


@pytest.mark.parametrize(
    ("answer", "message"),
    [
        ((200, {}, b"<html>hello</html>", 0.0), "something else than JSON; is it a Pinlight"),
        ((200, {}, b"[1]", 0.0), "JSON of another kind"),
        ((404, {}, b"not here", 0.0), "answered 404 Not Found; is it a Pinlight"),
        ((500, {}, b'{"detail": "an error of Pinlight\'s own"}', 0.0), "an error of Pinlight's own"),
        ((302, {"Location": "http://127.0.0.1:1/"}, b"", 0.0), "answered 302"),
    ],
)
def test_servers_that_are_no_pinlight(answer, message):
    with answering(answer) as (url, _), pytest.raises(pl.ServiceError, match=message):
        pl.Client(url, retries=0).health()


def test_a_server_of_another_version(catalogue):
    answer = pl.rank(catalogue, "tau Cet", array="north", mode="H", best=3).to_dict() | {"pinlight": "9.0.0"}
    newer = answer | {"mood": "calm"}
    newer["calibrators"] = [star | {"hue": 3} for star in answer["calibrators"]]
    with answering((200, {}, json.dumps(newer).encode(), 0.0)) as (url, _):
        ranking = pl.Client(url).rank("tau Cet", array="north", mode="H")
        assert ranking.pinlight == "9.0.0"
        assert ranking.to_dict() == answer
    older = {key: value for key, value in answer.items() if key != "counts"} | {"pinlight": "0.0.1"}
    with (
        answering((200, {}, json.dumps(older).encode(), 0.0)) as (url, _),
        pytest.raises(
            pl.ServiceError, match=r"runs Pinlight 0\.0\.1, whose answer .* cannot read: 'counts' is missing"
        ),
    ):
        pl.Client(url).rank("tau Cet", array="north", mode="H")


@pytest.mark.parametrize("url", ["ftp://example.invalid", "127.0.0.1:8765", ""])
def test_a_url_that_is_none(url):
    with pytest.raises(pl.InputError, match="write it as http://HOST:PORT"):
        pl.Client(url)
