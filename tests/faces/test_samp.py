"""Sending over SAMP, through a real hub to a real listener."""

import threading

import pytest
from astropy.table import Table
from click.testing import CliRunner
from pyvo.samp import SAMPHubServer, SAMPIntegratedClient

from pinlight.faces.cli import main

ARGUMENTS = ("send", "tau Cet", "--array", "north", "--mode", "H")


@pytest.fixture
def home(tmp_path, monkeypatch):
    """A home of its own: neither hubs nor files of whoever runs the tests."""
    monkeypatch.setenv("SAMP_HUB", f"std-lockurl:{(tmp_path / 'samp').as_uri()}")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    return tmp_path


@pytest.fixture
def hub(home):
    running = SAMPHubServer(
        lockfile=str(home / "samp"), web_profile=False, addr="127.0.0.1", label="a hub of the tests"
    )
    running.start()
    yield running
    running.stop()


def send(seeded_path):
    return CliRunner().invoke(main, [*ARGUMENTS, "--db", str(seeded_path)])


def test_a_ranking_reaches_those_who_listen(hub, seeded_path):
    viewer = SAMPIntegratedClient(name="a viewer of the tests", addr="127.0.0.1")
    viewer.connect(hub)
    told, come = [], threading.Event()

    def listen(_key, _sender, mtype, parameters, _extra):
        told.append((mtype, parameters))
        if len(told) == 2:
            come.set()

    for mtype in ("table.load.votable", "coord.pointAt.sky"):
        viewer.bind_receive_notification(mtype, listen)
    answer = send(seeded_path)
    assert answer.exit_code == 0, answer.output
    assert "to a viewer of the tests" in answer.output
    assert come.wait(10)
    viewer.disconnect()
    told = dict(told)
    table = Table.read(told["table.load.votable"]["url"].removeprefix("file://"), format="votable")
    assert told["table.load.votable"]["name"] == "Calibrators of tau Cet"
    assert len(table) == 20
    assert float(told["coord.pointAt.sky"]["ra"]) == pytest.approx(26.017, abs=0.001)


def test_a_hub_without_listeners_and_no_hub(hub, seeded_path):
    alone = send(seeded_path)
    assert (alone.exit_code, "no program there takes tables" in alone.output) == (1, True)
    hub.stop()
    nobody = send(seeded_path)
    assert nobody.exit_code == 1
    assert "no SAMP hub is running" in nobody.output
    hub.start()
