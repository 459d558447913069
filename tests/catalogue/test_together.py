"""Many writers and readers at once: no error, no lost write, log and state agree."""

import os
import subprocess
import sys
from pathlib import Path

from sqlalchemy import text

from pinlight.catalogue.members import add_member

SLOW = "PINLIGHT_TEST_SLOW" in os.environ  # eight, sixteen and a minute, as DEVELOPERS.md says
WRITERS, READERS, SECONDS = (8, 16, 60.0) if SLOW else (3, 3, 1.0)

# Each writer judges stars of its own and one that all share; each reader checks what it sees.
WRITER = """
import sys, time
from pinlight.catalogue.store import open_catalogue
url, token, number, seconds = sys.argv[1], sys.argv[2], int(sys.argv[3]), float(sys.argv[4])
catalogue = open_catalogue(url, token=token)
end, count = time.monotonic() + seconds, 0
while time.monotonic() < end:
    star_id = 7 if count % 2 else 100 + number
    catalogue.set_standing(star_id, "doubted", f"{number}: {count}")
    count += 1
print(count)
"""
READER = """
import sys, time
from pinlight.catalogue.store import open_catalogue
url, seconds = sys.argv[1], float(sys.argv[2])
catalogue = open_catalogue(url)
end, seen, count = time.monotonic() + seconds, 0, 0
while time.monotonic() < end:
    rows = catalogue.star_standings(7)["standings"]
    assert len(rows) >= seen, (len(rows), seen)
    seen = len(rows)
    made = [row["made_utc"] for row in rows]
    assert made == sorted(made)
    changes = catalogue.changes(7)
    assert sum(change["added"].get("standing", 0) for change in changes) >= seen
    assert len(catalogue.columns()) > 70_000
    count += 1
print(count)
"""


def start(program, *arguments):
    environment = os.environ | {"PYTHONPATH": str(Path(__file__).parents[2] / "service")}
    command = [sys.executable, "-W", "error", "-c", program, *map(str, arguments)]
    return subprocess.Popen(command, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def test_writers_and_readers_at_once(seeded_url, opened):
    catalogue = opened(seeded_url)
    kit = add_member(catalogue, "Kit", "keeper")
    tokens = [add_member(catalogue.acting(kit), f"Writer {n}", "editor") for n in range(WRITERS)]
    began = len(catalogue.changes(most=10_000))
    processes = [start(WRITER, seeded_url, token, n, SECONDS) for n, token in enumerate(tokens)]
    processes += [start(READER, seeded_url, SECONDS) for _ in range(READERS)]
    answers = [process.communicate(timeout=SECONDS + 120) for process in processes]
    assert [process.returncode for process in processes] == [0] * len(processes), answers
    counts = [int(out) for out, _ in answers]
    assert all(count > 0 for count in counts), counts
    written = counts[:WRITERS]
    assert len(catalogue.changes(most=1_000_000)) == began + sum(written)
    for number, count in enumerate(written):
        own = catalogue.star_standings(100 + number)["standings"]
        shared = [
            row for row in catalogue.star_standings(7)["standings"] if row["made_by"] == f"Writer {number}"
        ]
        assert {row["made_by"] for row in own} == {f"Writer {number}"}
        reasons = [row["reason"] for row in own] + [row["reason"] for row in shared]
        assert sorted(reasons) == sorted(f"{number}: {n}" for n in range(count))
    with catalogue.reading() as connection:
        # Every standing has its own line in the log, made by the same member at the same time.
        pairs = connection.execute(
            text(
                "SELECT count(*) FROM standing s JOIN change c ON c.id = s.change_id"
                " WHERE c.made_by = s.made_by AND c.made_utc = s.made_utc AND c.action = 'standing'"
            )
        ).scalar()
        ids = connection.execute(text("SELECT count(*), max(id) FROM change")).one()
    assert pairs == sum(written)
    assert ids[0] == ids[1]
