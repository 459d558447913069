"""Where a catalogue is kept and how it is reached: a SQLite file, or a PostgreSQL server by URL."""

import gc
import os
import re
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice
from operator import itemgetter
from pathlib import Path
from typing import Any
from urllib.parse import quote

from sqlalchemy import Connection, Engine, FromClause, create_engine, event, insert, inspect, text
from sqlalchemy.engine import URL, make_url
from sqlalchemy.exc import ArgumentError, DBAPIError, SQLAlchemyError

from pinlight.catalogue.tables import SCHEMA
from pinlight.errors import CatalogueError, InputError

__all__ = [
    "Place",
    "bulk_insert",
    "database_errors",
    "default_url",
    "engine_of",
    "many_rows",
    "place_of",
    "reading",
    "refuse_newer",
    "rows_in",
    "schema_of",
    "set_counters",
    "snapshot",
    "writing",
]

_BUSY_S = 60
_CONNECT_S = 10
_CHUNK = 20_000
_MOST_VALUES = 10_000
# Any number will do, so long as nothing else in that database locks by it.
_WRITER_LOCK = 0x50494E4C


def default_url() -> str:
    """`PINLIGHT_DB`, or a file in the user's data folder."""
    from platformdirs import user_data_path

    return os.environ.get("PINLIGHT_DB") or f"sqlite:///{user_data_path('pinlight') / 'pinlight.db'}"


@dataclass(frozen=True)
class Place:
    """Where a catalogue is: its URL, and its file where it is one. As text it shows no password."""

    url: URL
    path: Path | None

    def __str__(self) -> str:
        return str(self.path or self.url.set(query={}).render_as_string(hide_password=True))

    @property
    def editions_folder(self) -> Path:
        """Where the edition files are: `PINLIGHT_EDITIONS`, else beside the file or in the data folder."""
        if chosen := os.environ.get("PINLIGHT_EDITIONS"):
            return Path(chosen)
        if self.path is not None:
            return self.path.with_name(f"{self.path.name}.editions")
        from platformdirs import user_data_path

        where = f"{self.url.host or 'local'}-{self.url.port or 5432}-{self.url.database}"
        return user_data_path("pinlight") / "editions" / re.sub(r"[^\w.-]", "_", where)


def place_of(url: str | None) -> Place:
    """The place behind ``sqlite:///FILE`` or ``postgresql+psycopg://…``; all else is a file name.

    Raises
    ------
    InputError
        If it is a URL that no catalogue can be kept at.
    """
    given = url or default_url()
    match = re.match(r"(\w+)(?:\+\w+)?:(?://)?", given)
    if match and (match[1] in ("sqlite", "postgresql") or "://" in match[0]):
        # Only the kind of database is repeated: a URL may hold a password.
        if match[1] == "postgresql":
            return _server(given)
        if match[1] != "sqlite":
            raise InputError(
                f"db is a {match[1]} URL; write sqlite:///FILE or postgresql+psycopg://HOST/DATABASE"
            )
        name = given.removeprefix("sqlite:///") if given.startswith("sqlite:///") else ""
        if not name or name == ":memory:" or "?" in name:
            raise InputError(f"db is {given!r}; write sqlite:///FILE or a file name")
        given = name
    try:
        path = Path(given).expanduser().resolve()
    except (OSError, RuntimeError, ValueError) as error:
        raise InputError(f"db is {given[:60]!r}, which is no usable file name: {error}") from error
    return Place(URL.create("sqlite", database=str(path)), path)


def _server(given: str) -> Place:
    try:
        url = make_url(given)
    except (ArgumentError, ValueError):
        url = None
    if url is None or url.drivername not in ("postgresql", "postgresql+psycopg") or not url.database:
        raise InputError("db is a postgresql URL, but not postgresql+psycopg://USER@HOST:PORT/DATABASE")
    return Place(url.set(drivername="postgresql+psycopg"), None)


@contextmanager
def database_errors(place: Place, doing: str) -> Iterator[None]:
    """Driver errors become one line that says which catalogue and what to do."""
    try:
        yield
    except (DBAPIError, OSError) as error:
        reason = str(getattr(error, "orig", None) or getattr(error, "strerror", None) or error)
        reason = reason.strip().splitlines()[0] if reason.strip() else type(error).__name__
        raise CatalogueError(f"cannot {doing} catalogue {place}: {reason}; nothing was changed") from error
    except SQLAlchemyError as error:
        raise CatalogueError(f"cannot {doing} catalogue {place}: {error}") from error


def engine_of(place: Place, *, foreign_keys: bool = True) -> Engine:
    """An engine whose transactions begin as `reading` and `writing` need them.

    On ground that cannot be written, SQLite is asked for no lock or log file. `foreign_keys` is
    False for migrations, which make tables anew; they check afterwards.
    """
    if place.path is None:
        return _server_engine(place)
    path, url = place.path, place.url
    effective = os.access in os.supports_effective_ids
    if path.exists() and not os.access(path.parent, os.W_OK, effective_ids=effective):
        # Without a log beside it nobody is writing; with one, what it holds must be read too.
        how = "mode=ro" if path.with_name(f"{path.name}-wal").exists() else "immutable=1"
        as_uri = f"file:{quote(str(path))}?{how}"
        url = URL.create("sqlite", database=as_uri, query={"uri": "true"})
    engine = create_engine(url, connect_args={"timeout": _BUSY_S})

    @event.listens_for(engine, "connect")
    def _settings(connection: Any, _record: Any) -> None:
        connection.isolation_level = None  # transactions begin below, so that table changes are in them too
        connection.execute(f"PRAGMA foreign_keys = {'ON' if foreign_keys else 'OFF'}")

    @event.listens_for(engine, "begin")
    def _begin(connection: Connection) -> None:
        # A writer takes its lock at once: one that read first could not write after another's commit.
        writes = connection.get_execution_options().get("pinlight_writes")
        connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")

    return engine


def _server_engine(place: Place) -> Engine:
    try:
        engine = create_engine(
            place.url,
            pool_pre_ping=True,
            connect_args={"connect_timeout": _CONNECT_S, "application_name": "pinlight"},
        )
    except ImportError as error:
        raise CatalogueError(
            f"cannot open catalogue {place}: its driver is missing; run pip install 'pinlight[postgresql]'"
        ) from error

    @event.listens_for(engine, "begin")
    def _begin(connection: Connection) -> None:
        # One writer at a time, as on SQLite: ids follow the order of commits on both.
        if connection.get_execution_options().get("pinlight_writes"):
            connection.exec_driver_sql(f"SELECT pg_advisory_xact_lock({_WRITER_LOCK})")

    return engine


@contextmanager
def reading(engine: Engine, place: Place) -> Iterator[Connection]:
    """A connection to read by."""
    with database_errors(place, "read"), engine.connect() as connection:
        yield connection


@contextmanager
def snapshot(engine: Engine, place: Place) -> Iterator[Connection]:
    """A connection that sees the catalogue as it is now, whatever others commit meanwhile."""
    with database_errors(place, "read"), engine.connect() as connection:
        if place.path is None:
            connection = connection.execution_options(isolation_level="REPEATABLE READ")
        yield connection


@contextmanager
def writing(engine: Engine, place: Place, doing: str = "write to") -> Iterator[Connection]:
    """A transaction that no other writer's runs beside; committed when left in peace."""
    with database_errors(place, doing), engine.connect() as connection:
        connection = connection.execution_options(pinlight_writes=True)
        with connection.begin():
            yield connection


@contextmanager
def many_rows() -> Iterator[None]:
    """No search for cycles of garbage meanwhile: rows in their millions have none, and it takes a quarter."""
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was_on:
            gc.enable()


def schema_of(connection: Connection) -> str | None:
    """The revision of a database, None for one that holds no catalogue."""
    if not inspect(connection).has_table("alembic_version"):
        return None
    revision = connection.execute(text("SELECT version_num FROM alembic_version")).scalar()
    return str(revision) if revision else None


def set_counters(connection: Connection) -> None:
    """Let a server's counters go on after the highest id, where rows were written with theirs."""
    if connection.dialect.name != "postgresql":
        return
    for name in inspect(connection).get_table_names():
        sequence = f"pg_get_serial_sequence('{name}', 'id')"
        if any(column["name"] == "id" for column in inspect(connection).get_columns(name)):
            top = f"(SELECT max(id) FROM {name})"
            connection.execute(text(f"SELECT setval({sequence}, {top}) WHERE {top} IS NOT NULL"))


def refuse_newer(schema: str, place: Place) -> None:
    """Raise CatalogueError for a schema that this version does not know."""
    if schema > SCHEMA:
        raise CatalogueError(
            f"catalogue {place} was made by a newer Pinlight (schema {schema}, this one knows {SCHEMA}); "
            "install that version"
        )


def rows_in(connection: Connection, query: Any, column: Any, values: Sequence[Any]) -> Iterator[Any]:
    """The rows of a query where a column is one of many values, asked for in portions."""
    for start in range(0, len(values), _MOST_VALUES):
        part = values[start : start + _MOST_VALUES]
        yield from connection.execute(query.where(column.in_(part)))


def bulk_insert(connection: Connection, table: type[Any] | FromClause, rows: Iterable[dict[str, Any]]) -> int:
    """Insert many rows, all with the same keys, in chunks, as fast as the database takes them.

    Returns
    -------
    count : int
        How many.
    """
    target: Any = table if isinstance(table, FromClause) else table.__table__
    iterator, count = iter(rows), 0
    statement: Any = None
    while chunk := list(islice(iterator, _CHUNK)):
        count += len(chunk)
        if statement is None:
            names = list(chunk[0])
            compiled = insert(target).compile(dialect=connection.dialect, column_keys=names)
            if connection.dialect.name == "sqlite":
                names = list(compiled.positiontup or names)
                statement = str(compiled)
            else:
                quoted = ", ".join(connection.dialect.identifier_preparer.quote(name) for name in names)
                statement = f"COPY {target.name} ({quoted}) FROM STDIN"
        values = list(map(itemgetter(*names), chunk))  # every table has two columns or more
        if connection.dialect.name == "sqlite":
            connection.exec_driver_sql(statement, values)
            continue
        cursor = connection.connection.cursor()
        with cursor.copy(statement) as copy:
            for row in values:
                copy.write_row(row)
    return count
