import json
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path

import pytest
from alembic import command
from alembic.script import ScriptDirectory
from sqlalchemy import create_engine, inspect, text

from pinlight.catalogue.database import engine_of, place_of, set_counters
from pinlight.catalogue.making import make_catalogue
from pinlight.catalogue.schema import alembic_config, downgrade, upgrade
from pinlight.catalogue.store import open_catalogue
from pinlight.catalogue.tables import SCHEMA, Base
from pinlight.errors import CatalogueError

# A small catalogue of the first schema, as that version wrote it.
FIRST = {
    "source": [
        {"id": 1, "title": "A list", "reference": "2020Ref", "licence": "CC0", "retrieved": "2020-01-01"},
    ],
    "star": [
        {
            "id": key, "name": f"HD {key}", "ra_deg": 10.0 + key, "dec_deg": -5.5, "pm_ra_mas_yr": None,
            "pm_dec_mas_yr": 3.25, "parallax_mas": 12.5, "radial_velocity_km_s": None, "spectral_type": "K0III",
            "object_type": "*", "flags": "", "cell": 4000 + key, "source_id": 1,
        }
        for key in (1, 2)
    ],
    "identifier": [
        {"id": key, "star_id": key, "name": f"HD {key}", "key": f"hd{key}", "short": False, "source_id": 1}
        for key in (1, 2)
    ],
    "magnitude": [
        {"star_id": key, "band": band, "source_id": 1, "value": 5.25, "error": 0.03, "error_assumed": True}
        for key in (1, 2)
        for band in ("V", "Ks")
    ],
    "companion": [
        {
            "id": 1, "star_id": 1, "neighbour_id": 2, "separation_arcsec": 21.5, "delta_v_mag": 0.5,
            "delta_ks_mag": None, "source_id": 1,
        }
    ],
    "diameter": [
        {
            "star_id": 1, "limb_darkened_mas": 0.5, "own_error_mas": 0.01, "shared_error_mas": 0.01,
            "chi_squared": 1.0, "degrees_of_freedom": 2, "probability": 0.6, "discordant": False, "culprit": None,
            "av_mag": 0.0, "av_error_mag": 0.05, "luminosity_group": "giant", "spectral_code": 50.0,
            "teff_k": 4800.0, "logg": 2.5, "relation_set": "abc", "parts": "{}",
        }
    ],
    "standing": [
        {
            "id": key, "star_id": 2, "standing": standing, "reason": "seen", "made_by": who,
            "made_utc": f"2026-02-0{key}T00:00:00Z",
        }
        for key, standing, who in ((1, "doubted", "Ada"), (2, "barred", "Bo"))
    ],
    "edition": [
        {"name": "0123456789ab", "made_utc": "2026-02-01T12:00:00Z", "star_count": 2, "relation_set": "abc"},
    ],
}  # fmt: skip


@pytest.fixture
def connection(empty_url):
    engine = create_engine(empty_url)
    with engine.connect() as opened:
        yield opened
    engine.dispose()


def fill_first(connection):
    for table, rows in FIRST.items():
        names = list(rows[0])
        marks = ", ".join(f":{name}" for name in names)
        connection.execute(text(f"INSERT INTO {table} ({', '.join(names)}) VALUES ({marks})"), rows)
    set_counters(connection)


def contents(connection, names=None):
    """Every table's rows, or the columns that `names` lists of it."""
    found = {}
    for table in sorted(inspect(connection).get_table_names()):
        if table != "alembic_version" and (names is None or table in names):
            columns = ", ".join(names[table]) if names else "*"
            rows = connection.execute(text(f"SELECT {columns} FROM {table}")).all()
            found[table] = sorted(json.dumps([*row]) for row in rows)
    return found


def test_the_code_knows_the_newest_migration(connection):
    assert ScriptDirectory.from_config(alembic_config(connection)).get_current_head() == SCHEMA


def test_migrations_make_the_tables_of_the_code(connection):
    upgrade(connection)
    assert set(inspect(connection).get_table_names()) == set(Base.metadata.tables) | {"alembic_version"}
    command.check(alembic_config(connection))  # raises where a table and its migration differ


def test_migrations_go_up_down_and_up_with_data_in_them(connection):
    upgrade(connection, "0001")
    fill_first(connection)
    first = contents(connection)
    upgrade(connection)
    full = contents(connection)
    command.check(alembic_config(connection))
    downgrade(connection, "0001")
    again = contents(connection)
    # Only the times of standings and editions are written more precisely than they were.
    precise = {name: [row.replace("00Z", "00.000000Z") for row in rows] for name, rows in first.items()}
    assert again == precise
    upgrade(connection)
    once_more = contents(connection)
    once_more.pop("standing"), full.pop("standing")  # each is given a new random name
    assert once_more == full
    downgrade(connection)
    assert set(inspect(connection).get_table_names()) == {"alembic_version"}


def test_a_catalogue_of_the_first_schema_opens_at_the_newest(empty_url):
    engine = create_engine(empty_url)
    with engine.begin() as connection:
        upgrade(connection, "0001")
        fill_first(connection)
    engine.dispose()
    with pytest.raises(CatalogueError, match="has schema 0001; run 'pinlight init' to renew it"):
        open_catalogue(empty_url)
    catalogue = make_catalogue(empty_url)
    assert catalogue.find("HD 1") == 1
    record = catalogue.star(2)
    assert record["standing"] == "barred"
    assert [row["reason"] for row in record["standings"]] == ["seen", "seen"]
    assert [change["made_by"] for change in catalogue.changes(2)] == ["Pinlight", "Ada", "Bo"]
    then = catalogue.changes(2, "2026-02-01T18:00:00Z")["rows"]
    assert [row["standing"]["value"] for row in then["standing"]] == ["doubted"]
    # What is added from now on comes after what there was.
    catalogue.set_standing(2, "vouched", "looked again")
    assert [change["change_id"] for change in catalogue.changes(2)] == [1, 2, 3, 4]
    assert catalogue.standings() == {2: "vouched"}
    catalogue.close()


MIGRATE = """
import sys
from pinlight.catalogue.making import make_catalogue
print("go", flush=True)
make_catalogue(sys.argv[1]).close()
print("done", flush=True)
"""


def test_a_migration_killed_at_any_moment_is_whole_or_not_there(seeded_path, tmp_path):
    """SIGKILL in the middle of bringing the seed from the first schema up; 100 with PINLIGHT_TEST_SLOW."""
    old = tmp_path / "old.db"
    old.write_bytes(seeded_path.read_bytes())
    engine = engine_of(place_of(str(old)), foreign_keys=False)
    with engine.begin() as connection:
        downgrade(connection, "0001")
        tables = [table for table in Base.metadata.tables if inspect(connection).has_table(table)]
        counts = {table: connection.execute(text(f"SELECT count(*) FROM {table}")).scalar() for table in tables}
    engine.dispose()
    assert counts["star"] > 70_000
    environment = os.environ | {
        "PYTHONPATH": str(Path(__file__).parents[2] / "service"), "PINLIGHT_EDITIONS": f"{seeded_path}.editions",
    }  # fmt: skip
    moments, kills, through = random.Random(5), 0, 0
    while kills < (100 if "PINLIGHT_TEST_SLOW" in os.environ else 2):
        path = tmp_path / "p.db"
        for left in tmp_path.glob("p.db*"):
            left.unlink()
        path.write_bytes(old.read_bytes())
        process = subprocess.Popen(
            [sys.executable, "-c", MIGRATE, str(path)], env=environment, stdout=subprocess.PIPE, text=True
        )
        assert process.stdout is not None
        assert process.stdout.readline() == "go\n"
        time.sleep(moments.uniform(0.2, 4.0))
        process.send_signal(signal.SIGKILL)
        through += process.stdout.read() == "done\n"
        process.wait()
        process.stdout.close()
        kills += process.returncode == -signal.SIGKILL
        connection = sqlite3.connect(path)
        assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        assert connection.execute("PRAGMA foreign_key_check").fetchall() == []
        schema = connection.execute("SELECT version_num FROM alembic_version").fetchone()[0]
        assert schema in ("0001", SCHEMA)
        for table, count in counts.items():
            assert connection.execute(f"SELECT count(*) FROM {table}").fetchone() == (count,)
        connection.close()
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("PINLIGHT_EDITIONS", f"{seeded_path}.editions")
        make_catalogue(str(path)).close()
        catalogue = open_catalogue(str(path))
        assert len(catalogue.columns()) == counts["star"]
        catalogue.close()
