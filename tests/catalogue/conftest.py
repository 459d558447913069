"""What is true of the catalogue is checked on SQLite and on PostgreSQL."""

from collections.abc import Iterator

import pytest

from pinlight.catalogue.store import Catalogue, open_catalogue


@pytest.fixture(scope="session", params=["sqlite", "postgresql"])
def catalogue(request: pytest.FixtureRequest, seeded_path: object) -> Iterator[Catalogue]:
    if request.param == "sqlite":
        opened = open_catalogue(str(seeded_path))
    else:
        server, name = (request.getfixturevalue(name) for name in ("server", "seeded_database"))
        opened = open_catalogue(server.new_database(name))  # a template may have no other connections
        opened.editions_folder = seeded_path.with_name(f"{seeded_path.name}.editions")
    yield opened
    opened.close()
