"""Speed and memory of taking in a million invented stars. `python -m tests.bench.intake [ROWS]`

The peer writes the very rows that the intake made, table by table, by plain `executemany` of sqlite3 into
a file with the same columns and keys: no matching, no diameters, nothing read or computed.
"""

import csv
import resource
import sqlite3
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from pinlight.catalogue.intake import IntakeOptions, take_in
from pinlight.catalogue.making import make_catalogue

__all__ = ["main", "write_table"]

TABLES = ("star", "identifier", "magnitude", "companion", "diameter")


def write_table(path: Path, count: int) -> None:
    """A CSV of invented stars all over the sky, with five magnitudes and two names each."""
    random = np.random.default_rng(5)
    v, colour = random.uniform(5, 11, count), random.uniform(0.3, 1.5, count)
    columns = [
        np.char.add("Invented ", np.arange(count).astype(str)),
        np.arange(count) + 400_000,
        random.uniform(0, 360, count).round(7),
        np.degrees(np.arcsin(random.uniform(-1, 1, count))).round(7),
        *(random.normal(0, 20, count).round(2) for _ in range(2)),
        random.uniform(1, 20, count).round(3),
        random.choice(["F5V", "G2V", "K0III", "K5V", "A0V", "M0III"], count),
        *((v + slope * colour).round(3) for slope in (1.0, 0.0, -1.2, -1.7, -1.8)),
        np.full(count, 0.01),
        np.full(count, 0.02),
    ]
    names = "name hd ra dec pmra pmdec parallax sptype B V J H Ks e_V e_Ks".split()
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(names)
        writer.writerows(zip(*(column.tolist() for column in columns), strict=True))


def peer_s(made: Path, other: Path) -> tuple[float, int]:
    """How long plain executemany takes for the rows of a catalogue, and how many they are."""
    source, target = sqlite3.connect(made), sqlite3.connect(other)
    target.execute("PRAGMA journal_mode = WAL")
    for (statement,) in source.execute(
        "SELECT sql FROM sqlite_master WHERE sql IS NOT NULL AND type IN ('table', 'index')"
        f" AND tbl_name IN ({', '.join('?' * len(TABLES))}) ORDER BY type DESC",
        TABLES,
    ):
        target.execute(statement)
    seconds, count = 0.0, 0
    for table in TABLES:
        cursor = source.execute(f"SELECT * FROM {table}")
        statement = f"INSERT INTO {table} VALUES ({', '.join('?' * len(cursor.description))})"
        while rows := cursor.fetchmany(100_000):
            start = time.perf_counter()
            with target:
                target.executemany(statement, rows)
            seconds += time.perf_counter() - start
            count += len(rows)
    source.close()
    target.close()
    return seconds, count


def main(count: int = 1_000_000) -> None:
    """Take a table in and print how it compares."""
    folder = Path(tempfile.mkdtemp())
    table, path = folder / "stars.csv", folder / "pinlight.db"
    write_table(table, count)
    catalogue = make_catalogue(str(path), seed=False)
    start = time.perf_counter()
    report = take_in(catalogue, table, IntakeOptions("Invented", "none"))
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    assert report.added + report.rejected == count
    plain, rows = peer_s(path, folder / "plain.db")
    print(
        f"{count} stars taken in, {rows} rows of the database: {seconds:.1f} s, {count / seconds:.0f} stars a second"
    )
    print(
        f"plain executemany of the same rows: {plain:.1f} s; the intake runs at {plain / seconds:.0%} of its rate"
    )
    print(f"most memory: {peak:.2f} GB")
    start = time.perf_counter()
    catalogue.freeze()
    print(f"freezing the edition: {time.perf_counter() - start:.1f} s")
    catalogue.close()


if __name__ == "__main__":
    main(*map(int, sys.argv[1:2]))
