"""What tests share: a catalogue filled from the seed, made once, and an environment of their own."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from pinlight.catalogue.store import Catalogue, make_catalogue
from pinlight.faces.setups import known_arrays


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
    from pinlight.catalogue.store import open_catalogue

    opened = open_catalogue(str(seeded_path))
    yield opened
    opened.close()


@pytest.fixture(scope="session")
def north():
    return known_arrays()["north"]


@pytest.fixture(scope="session")
def south():
    return known_arrays()["south"]
