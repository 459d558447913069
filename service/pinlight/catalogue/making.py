"""Making a catalogue, and bringing an older one to the newest schema."""

import os
import tempfile
from collections.abc import Callable
from pathlib import Path

from sqlalchemy import Connection, Engine, inspect

from pinlight.catalogue.changes import Changing
from pinlight.catalogue.database import (
    Place,
    database_errors,
    engine_of,
    place_of,
    refuse_newer,
    schema_of,
    writing,
)
from pinlight.catalogue.editions import record_edition, write_edition
from pinlight.catalogue.store import Catalogue, open_catalogue
from pinlight.catalogue.tables import SCHEMA
from pinlight.errors import CatalogueError

__all__ = ["make_catalogue"]

_LOCK_S = 600
Progress = Callable[[str], object]


def make_catalogue(url: str | None = None, *, seed: bool = True, progress: Progress = str) -> Catalogue:
    """Make the catalogue, or bring an existing one to the newest schema, and open it.

    A new catalogue appears whole: a file is built aside and renamed, on a server everything is
    one transaction. Two processes that make the same one end with one. `seed` fills a new one
    with the stars that Pinlight ships and freezes the first edition.

    Raises
    ------
    InputError
        If the URL is none that a catalogue can be kept at.
    CatalogueError
        If the place cannot be written, or holds something else or newer.
    """
    place = place_of(url)
    if place.path is None:
        _make_on_server(place, seed, progress)
    else:
        _make_file(place, place.path, seed, progress)
    catalogue = open_catalogue(url)
    try:
        if catalogue.editions():
            catalogue.columns()
    except CatalogueError:  # its files were lost or left behind; the same content makes them again
        with catalogue.reading() as connection:
            write_edition(connection, catalogue.editions_folder)
    return catalogue


def _make_file(place: Place, path: Path, seed: bool, progress: Progress) -> None:
    from filelock import FileLock, Timeout

    with database_errors(place, "make"):
        if path.exists() and not path.is_file():
            raise CatalogueError(f"{path} is no ordinary file; choose another for the catalogue")
        path.parent.mkdir(parents=True, exist_ok=True)
        if not path.exists():
            with tempfile.TemporaryFile(dir=path.parent):  # fails at once where nothing can be written
                pass
        try:
            with FileLock(f"{path}.lock", timeout=_LOCK_S):
                if path.exists() and path.stat().st_size > 0:
                    _migrate_file(place)
                else:
                    _build_file(place, path, seed, progress)
        except Timeout as error:
            raise CatalogueError(
                f"another process has been making {path} for {_LOCK_S} s; try later"
            ) from error


def _migrate_file(place: Place) -> None:
    engine = engine_of(place, foreign_keys=False)
    try:
        with engine.connect() as connection:
            if not _needs_migration(connection, place):
                return
        with writing(engine, place, "make") as connection:
            if _needs_migration(connection, place):
                _upgrade(connection)
                if broken := connection.exec_driver_sql("PRAGMA foreign_key_check").all():
                    raise CatalogueError(f"catalogue {place} has {len(broken)} rows that refer to nothing")
    finally:
        engine.dispose()


def _build_file(place: Place, path: Path, seed: bool, progress: Progress) -> None:
    for left_over in path.parent.glob(f"{path.name}.unfinished*"):
        left_over.unlink()
    aside = path.with_name(f"{path.name}.unfinished")
    engine = engine_of(Place(place.url.set(database=str(aside)), aside))
    try:
        _outside_transaction(engine, "PRAGMA journal_mode = WAL")
        with engine.begin() as connection:
            _fill(connection, place, seed, progress)
        _outside_transaction(engine, "PRAGMA wal_checkpoint(TRUNCATE)")
        engine.dispose()
        os.replace(aside, path)
    finally:
        engine.dispose()
        for left_over in path.parent.glob(f"{path.name}.unfinished*"):
            left_over.unlink()


def _outside_transaction(engine: Engine, statement: str) -> None:
    connection = engine.raw_connection()
    try:
        connection.cursor().execute(statement)
    finally:
        connection.close()


def _make_on_server(place: Place, seed: bool, progress: Progress) -> None:
    engine = engine_of(place)
    try:
        with writing(engine, place, "make") as connection:
            if schema_of(connection) is not None:
                if _needs_migration(connection, place):
                    _upgrade(connection)
            elif inspect(connection).get_table_names():
                raise CatalogueError(
                    f"{place} holds tables, but no Pinlight catalogue; choose another database"
                )
            else:
                _fill(connection, place, seed, progress)
    finally:
        engine.dispose()


def _needs_migration(connection: Connection, place: Place) -> bool:
    schema = schema_of(connection)
    if schema is None:
        raise CatalogueError(f"{place} is a database, but no Pinlight catalogue; choose another file")
    refuse_newer(schema, place)
    return schema < SCHEMA


def _upgrade(connection: Connection) -> None:
    from pinlight.catalogue.schema import upgrade  # Alembic is slow to import

    upgrade(connection)


def _fill(connection: Connection, place: Place, seed: bool, progress: Progress) -> None:
    """Tables, and with `seed` the stars and the first edition, in the transaction of `connection`."""
    _upgrade(connection)
    if seed:
        from pinlight.catalogue.seed import fill_from_seed

        change = Changing(connection, "Pinlight", "seed", {})
        fill_from_seed(change, progress)
        progress("freezing the first edition")
        name, facts = write_edition(connection, place.editions_folder)
        record_edition(change, name, facts, change.id)
