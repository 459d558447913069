"""A whole catalogue copied from one database to another, SQLite or PostgreSQL either way."""

import os
import shutil
import tempfile
from collections.abc import Callable
from pathlib import Path

from sqlalchemy import func, select

from pinlight.catalogue.database import bulk_insert, engine_of, place_of, set_counters, snapshot, writing
from pinlight.catalogue.making import make_catalogue
from pinlight.catalogue.store import open_catalogue
from pinlight.catalogue.tables import Base
from pinlight.errors import CatalogueError, InputError

__all__ = ["copy_catalogue"]

_ROWS = 20_000


def copy_catalogue(source_url: str, target_url: str, progress: Callable[[str], object] = str) -> dict[str, int]:
    """Copy every row of every table, ids and all, and the files of the editions.

    The rows are one transaction: the new catalogue is whole, or empty as if it had just been made.

    Parameters
    ----------
    source_url : str
        The catalogue to copy; it is only read, as it is at this moment.
    target_url : str
        A place without a catalogue, or with an empty one.
    progress : callable
        Told each table's name.

    Returns
    -------
    counts : dict
        Rows by table.

    Raises
    ------
    InputError
        If both are the same place.
    CatalogueError
        If there is no catalogue to copy, or the other place holds stars or members.
    """
    source_place, target_place = place_of(source_url), place_of(target_url)
    if source_place.url == target_place.url:
        raise InputError(f"both are {source_place}; name another place for the copy")
    source = open_catalogue(source_url)
    try:
        target = make_catalogue(target_url, seed=False)
        target.close()
        engine, source_engine = engine_of(target_place), engine_of(source_place)
        counts: dict[str, int] = {}
        try:
            with snapshot(source_engine, source_place) as reader, writing(engine, target_place) as writer:
                for table in Base.metadata.sorted_tables:
                    if writer.execute(select(func.count()).select_from(table)).scalar_one():
                        told = f"its table {table.name} has rows; choose another place"
                        raise CatalogueError(f"{target_place} is no empty catalogue: {told}")
                for table in Base.metadata.sorted_tables:
                    progress(table.name)
                    rows = reader.execution_options(yield_per=_ROWS).execute(select(table)).mappings()
                    counts[table.name] = bulk_insert(writer, table, map(dict, rows))
                set_counters(writer)
        finally:
            engine.dispose()
            source_engine.dispose()
        _copy_editions(source.editions_folder, target.editions_folder)
    finally:
        source.close()
    return counts


def _copy_editions(source: Path, target: Path) -> None:
    """The editions' folders that the other place does not have, each whole or not at all."""
    if source.resolve() == target.resolve() or not source.is_dir():
        return
    try:
        target.mkdir(parents=True, exist_ok=True)
        for folder in sorted(source.iterdir()):
            if folder.name.startswith(".") or not folder.is_dir() or (target / folder.name).exists():
                continue
            aside = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=target))
            try:
                shutil.copytree(folder, aside, dirs_exist_ok=True)
                os.replace(aside, target / folder.name)
            finally:
                shutil.rmtree(aside, ignore_errors=True)
    except OSError as error:
        raise CatalogueError(f"cannot copy editions to {target}: {error.strerror or error}") from error
