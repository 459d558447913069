import gzip
import json
import os
import re
import signal
import socket
import subprocess
import sys
import threading
import time
import urllib.error
import urllib.request

import pytest

from pinlight.faces.http import create_app
from pinlight.resources import seed_folder

RANKING = "/api/v1/rankings?target=tau+Cet&array=north&mode=H"


@pytest.fixture(scope="module")
def client(catalogue):
    return create_app(catalogue).test_client()


@pytest.mark.parametrize(
    "path", ["/", RANKING, "/api/v1/nothing", "/static/pinlight.css", "/vo/cone", "/star/1"]
)
def test_every_answer_carries_the_security_headers(client, path):
    with client.get(path) as answer:
        policy = answer.headers["Content-Security-Policy"]
        assert policy.startswith("default-src 'none'; script-src 'self'; ")
        assert "unsafe" not in policy
        assert "frame-ancestors 'none'" in policy
        assert answer.headers["X-Content-Type-Options"] == "nosniff"
        assert answer.headers["Cross-Origin-Resource-Policy"] == "same-origin"


def test_answers_are_packed_for_those_who_read_it(client):
    plain = client.get(RANKING)
    packed = client.get(RANKING, headers={"Accept-Encoding": "gzip"})
    assert "Content-Encoding" not in plain.headers
    assert packed.headers["Content-Encoding"] == "gzip"
    assert gzip.decompress(packed.data) == plain.data
    assert len(packed.data) < len(plain.data) / 3
    assert "Accept-Encoding" in packed.headers["Vary"]
    small = client.get("/api/v1/health", headers={"Accept-Encoding": "gzip"})
    assert "Content-Encoding" not in small.headers


def test_an_answer_that_has_not_changed_is_not_sent_or_worked_out_again(seeded_url, opened, monkeypatch):
    own = opened(seeded_url)
    star_id = own.find("tau Cet")
    client = create_app(own).test_client()
    for address in (f"/api/v1/stars/{star_id}", RANKING, "/vo/cone?RA=26&DEC=-16&SR=1"):
        assert client.get(address).headers["Cache-Control"] == "private, no-cache"
    address = f"/api/v1/stars/{star_id}"
    tag = client.get(address).headers["ETag"]
    monkeypatch.setattr(type(own), "star", lambda *_: pytest.fail("worked out again"))
    kept = client.get(address, headers={"If-None-Match": tag})
    assert (kept.status_code, kept.data, kept.headers["ETag"]) == (304, b"", tag)
    monkeypatch.undo()
    assert client.get("/api/v1/stars/99999999", headers={"If-None-Match": tag}).status_code == 404
    own.set_standing(star_id, "doubted", "a companion was seen")
    again = client.get(address, headers={"If-None-Match": tag})
    assert again.status_code == 200
    assert again.json["standing"] == "doubted"


def test_an_array_file_that_has_changed_changes_the_tag(catalogue, tmp_path):
    file = tmp_path / "south.toml"
    text = (seed_folder() / "arrays" / "south.toml").read_text(encoding="utf-8")
    question = "/api/v1/rankings?target=HD+117521&array=south&mode=H"
    tags, errors = [], []
    for spread in ("0.03", "0.5"):
        file.write_text(re.sub(r"(?m)^spread = .*$", f"spread = {spread}", text), encoding="utf-8")
        answer = create_app(catalogue, arrays_folder=tmp_path).test_client().get(question)
        tags.append(answer.headers["ETag"])
        errors.append(answer.json["calibrators"][0]["calibration_error_percent"])
    assert tags[0] != tags[1]
    assert errors[1] > 5 * errors[0]


def test_bad_questions_have_no_tag(client):
    wrong = client.get("/api/v1/rankings?target=tau+Ceet&array=north&mode=H")
    assert "ETag" not in wrong.headers
    assert wrong.headers["Cache-Control"] == "no-store"


def test_ready_is_told_from_alive(catalogue, monkeypatch):
    from pinlight.errors import CatalogueError

    app = create_app(catalogue)
    client = app.test_client()
    assert client.get("/api/v1/health").json["status"] == "ok"
    assert client.get("/api/v1/health/live").json["status"] == "alive"

    def lost(*_):
        raise CatalogueError("the catalogue is gone")

    monkeypatch.setattr(type(catalogue), "columns", lost)
    assert client.get("/api/v1/health").status_code == 503
    assert client.get("/api/v1/health/live").status_code == 200
    monkeypatch.undo()
    app.extensions["pinlight_stopping"].set()
    stopping = client.get("/api/v1/health")
    assert stopping.status_code == 503
    assert stopping.headers["Retry-After"] == "5"
    assert client.get("/api/v1/health/live").status_code == 200


def test_a_few_nights_are_planned_at_once_and_the_rest_are_told(client, monkeypatch):
    from pinlight.faces import service

    monkeypatch.setattr(service, "_WAIT_S", 0.05)
    monkeypatch.setattr(service, "_PLANS_AT_ONCE", threading.BoundedSemaphore(1))
    query = "targets=upsilon+And&array=north&mode=H&night=2026-12-01"
    with service.planning():
        body = {"targets": [{"name": "upsilon And"}], "array": "north", "mode": "H", "night": "2026-12-01"}
        busy = client.post("/api/v1/plans", json=body)
        assert (busy.status_code, busy.headers["Retry-After"]) == (503, "10")
        assert "other nights are being planned" in json.loads(busy.data)["detail"]
        page = client.get(f"/plan?{query}")
        assert page.status_code == 503
        assert "other nights are being planned" in page.text
    assert client.get(f"/plan?{query}").status_code == 200


def free_port():
    with socket.socket() as one:
        one.bind(("127.0.0.1", 0))
        return one.getsockname()[1]


def test_a_stop_finishes_what_is_under_way_and_the_log_has_it(seeded_path, tmp_path):
    port, log = free_port(), tmp_path / "access.jsonl"
    command = [sys.executable, "-c", "from pinlight.faces.cli import main; main()", "serve"]
    options = ["--db", str(seeded_path), "--port", str(port), "--access-log", str(log)]
    process = subprocess.Popen([*command, *options], stderr=subprocess.PIPE, text=True, env=os.environ)
    try:
        assert f"http://127.0.0.1:{port}/" in process.stderr.readline()
        body = {
            "targets": [{"name": f"T{i}", "ra_deg": 15.0 * i, "dec_deg": 30 + i} for i in range(24)],
            "array": "north", "mode": "H", "night": "2026-12-01",
        }  # fmt: skip
        plan = urllib.request.Request(
            f"http://127.0.0.1:{port}/api/v1/plans",
            json.dumps(body).encode(),
            {"Content-Type": "application/json"},
        )
        found = []

        def ask():
            with urllib.request.urlopen(plan, timeout=60) as answer:
                found.append(json.load(answer))

        thread = threading.Thread(target=ask)
        thread.start()
        time.sleep(0.4)
        assert not found, "the plan came too soon to be interrupted"
        process.send_signal(signal.SIGTERM)
        thread.join(timeout=60)
        assert process.wait(timeout=30) == 0
        assert len(found[0]["blocks"]) > 5
        with pytest.raises((urllib.error.URLError, ConnectionError)):
            urllib.request.urlopen(f"http://127.0.0.1:{port}/api/v1/health", timeout=2)
    finally:
        process.kill()
        process.wait()
        process.stderr.close()
    [line] = [json.loads(line) for line in log.read_text(encoding="utf-8").splitlines()]
    assert (line["method"], line["path"], line["status"]) == ("POST", "/api/v1/plans", 200)
    assert line["milliseconds"] > 100
    assert line["bytes"] > 1000
    assert line["time"].endswith("Z")
