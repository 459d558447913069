import pytest
from alembic import command
from alembic.script import ScriptDirectory
from sqlalchemy import create_engine, inspect

from pinlight.catalogue.schema import alembic_config, downgrade, upgrade
from pinlight.catalogue.tables import SCHEMA, Base


@pytest.fixture
def connection(tmp_path):
    engine = create_engine(f"sqlite:///{tmp_path / 'm.db'}")
    with engine.connect() as opened:
        yield opened
    engine.dispose()


def test_the_code_knows_the_newest_migration(connection):
    assert ScriptDirectory.from_config(alembic_config(connection)).get_current_head() == SCHEMA


def test_migrations_make_the_tables_of_the_code(connection):
    upgrade(connection)
    assert set(inspect(connection).get_table_names()) == set(Base.metadata.tables) | {"alembic_version"}
    command.check(alembic_config(connection))  # raises where a table and its migration differ


def test_migrations_go_down_again(connection):
    upgrade(connection)
    downgrade(connection)
    assert set(inspect(connection).get_table_names()) == {"alembic_version"}
    upgrade(connection)
    command.check(alembic_config(connection))
