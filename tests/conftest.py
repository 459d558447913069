"""What tests share: a catalogue filled from the seed, made once, and an environment of their own."""

import os
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from pinlight.catalogue.making import make_catalogue
from pinlight.catalogue.store import Catalogue, open_catalogue
from pinlight.faces.setups import known_arrays
from tests import postgresql

# Set where a test that needs PostgreSQL may not be skipped.
MUST_RUN = "PINLIGHT_TEST_POSTGRESQL"


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Fast tests first: those that make catalogues or start processes come last."""
    slow = ("tests/faces", "tests/catalogue")
    items.sort(key=lambda item: next((1 + i for i, part in enumerate(slow) if part in item.nodeid), 0))


@pytest.fixture(autouse=True)
def _own_environment(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """No test reads or writes the catalogue of whoever runs it."""
    monkeypatch.setenv("PINLIGHT_DB", str(tmp_path / "own.db"))
    monkeypatch.delenv("PINLIGHT_EDITIONS", raising=False)


@pytest.fixture(scope="session")
def seeded_path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("seeded") / "pinlight.db"
    make_catalogue(str(path)).close()
    return path


@pytest.fixture(scope="session")
def catalogue(seeded_path: Path) -> Iterator[Catalogue]:
    opened = open_catalogue(str(seeded_path))
    yield opened
    opened.close()


@pytest.fixture(scope="session")
def server() -> Iterator[postgresql.Server]:
    """A PostgreSQL server of our own."""
    if postgresql.binaries() is None:
        if os.environ.get(MUST_RUN):
            pytest.fail(f"{MUST_RUN} is set, but there is no PostgreSQL; apt-get install postgresql")
        pytest.skip("there is no PostgreSQL; apt-get install postgresql")
    running = postgresql.start()
    yield running
    running.stop()


@pytest.fixture(scope="session")
def seeded_database(server: postgresql.Server, seeded_path: Path) -> str:
    """The name of a database with the seed in it, to copy from; its editions are those of `seeded_path`."""
    server.execute("CREATE DATABASE seeded ENCODING 'UTF8' TEMPLATE template0")
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("PINLIGHT_EDITIONS", f"{seeded_path}.editions")
        make_catalogue(server.url("seeded")).close()
    return "seeded"


@pytest.fixture(params=["sqlite", "postgresql"])
def empty_url(request: pytest.FixtureRequest, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[str]:
    """Where a catalogue may be made, on either database."""
    monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "editions"))
    if request.param == "sqlite":
        yield f"sqlite:///{tmp_path / 'test.db'}"
        return
    server = request.getfixturevalue("server")
    url = server.new_database()
    yield url
    server.drop(url)


@pytest.fixture(params=["sqlite", "postgresql"])
def seeded_url(
    request: pytest.FixtureRequest, tmp_path: Path, seeded_path: Path, monkeypatch: pytest.MonkeyPatch
) -> Iterator[str]:
    """A catalogue with the seed in it, on either database, to be changed at will."""
    if request.param == "sqlite":
        copy_tree(f"{seeded_path}.editions", tmp_path / "editions")
        monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "editions"))
        (tmp_path / "test.db").write_bytes(seeded_path.read_bytes())
        yield f"sqlite:///{tmp_path / 'test.db'}"
        return
    server, template = (request.getfixturevalue(name) for name in ("server", "seeded_database"))
    copy_tree(f"{seeded_path}.editions", tmp_path / "editions")
    monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "editions"))
    url = server.new_database(template)
    yield url
    server.drop(url)


def copy_tree(source: str, target: Path) -> None:
    """Copy a folder, by links where that can be done."""
    shutil.copytree(source, target, copy_function=os.link)


@pytest.fixture
def opened() -> Iterator[Callable[[str], Catalogue]]:
    """Opens catalogues and closes them after the test."""
    catalogues: list[Catalogue] = []

    def open_one(url: str) -> Catalogue:
        catalogues.append(open_catalogue(url))
        return catalogues[-1]

    yield open_one
    for one in catalogues:
        one.close()


@pytest.fixture(scope="session")
def served(catalogue: Catalogue) -> Iterator[str]:
    """Address of the application over the seeded catalogue."""
    from pinlight.faces.http import create_app
    from tests.served import serving

    with serving(create_app(catalogue)) as address:
        yield address


@pytest.fixture(scope="session")
def north():
    return known_arrays()["north"]


@pytest.fixture(scope="session")
def south():
    return known_arrays()["south"]
