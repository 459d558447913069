import time

import pytest
from sqlalchemy import create_engine, select, text
from sqlalchemy.exc import DBAPIError

from pinlight.catalogue.changes import now_utc
from pinlight.catalogue.tables import Magnitude
from pinlight.errors import InputError, NotFoundError


def set_magnitude(catalogue, star_id, band, value):
    with catalogue.changing("correction", "editor", "correct a magnitude", {"band": band}) as change:
        query = select(Magnitude.__table__).where(Magnitude.star_id == star_id, Magnitude.band == band)
        row = change.connection.execute(query).mappings().one()
        return change.overwrite(Magnitude, [(row, {"value": value})])


def magnitude_then(catalogue, star_id, band, at):
    rows = catalogue.changes(star_id, at)["rows"]["magnitude"]
    return next(row for row in rows if row["band"]["value"] == band)["value"]


def test_who_changed_what_is_known_of_any_value_at_any_time(seeded_url, opened, monkeypatch):
    catalogue = opened(seeded_url)
    star_id = catalogue.find("HD 10700")
    original = catalogue.star(star_id)["magnitudes"]["V"]["value"]
    times, values = [now_utc()], [original]
    for who, value in (("ada", 3.7), ("bo", 3.6), ("cy", 3.5)):
        monkeypatch.setenv("LOGNAME", who)
        time.sleep(0.002)
        assert set_magnitude(catalogue, star_id, "V", value) == 1
        assert set_magnitude(catalogue, star_id, "V", value) == 0  # and leaves no line
        times.append(now_utc())
        values.append(value)
    for at, value, who in zip(times, values, ("Pinlight", "ada", "bo", "cy"), strict=True):
        then = magnitude_then(catalogue, star_id, "V", at)
        assert (then["value"], then["made_by"]) == (value, who)
        assert then["made_utc"] <= at
        # Another band was not touched.
        assert magnitude_then(catalogue, star_id, "Ks", at)["made_by"] == "Pinlight"
    changes = catalogue.changes(star_id)
    assert [change["made_by"] for change in changes] == ["Pinlight", "ada", "bo", "cy"]
    assert changes[0]["added"]["magnitude"] == 5
    assert changes[2]["overwritten"] == [
        {"table": "magnitude", "row": f"{star_id}/V/1", "before": {"value": 3.7}, "after": {"value": 3.6}}
    ]
    assert [change["made_by"] for change in catalogue.changes(most=2)] == ["cy", "bo"]


def test_a_standing_is_in_the_log(seeded_url, opened):
    catalogue = opened(seeded_url)
    before = now_utc()
    catalogue.set_standing(1, "barred", "double")
    assert [row["standing"]["value"] for row in catalogue.changes(1, now_utc())["rows"]["standing"]] == [
        "barred"
    ]
    assert "standing" not in catalogue.changes(1, before)["rows"]
    assert catalogue.changes(1)[-1]["action"] == "standing"


def test_a_time_before_the_catalogue_has_no_stars(catalogue):
    with pytest.raises(NotFoundError, match="star_id is 1; there was no such star at 1999-12-31"):
        catalogue.changes(1, "1999-12-31")
    with pytest.raises(InputError, match="at is 'yesterday'; write a time such as"):
        catalogue.changes(1, "yesterday")
    with pytest.raises(InputError, match="at is given without a star"):
        catalogue.changes(None, "1999-12-31")
    with pytest.raises(NotFoundError, match="there is no such star"):
        catalogue.changes(10_000_000)


@pytest.mark.parametrize("table", ["change", "standing", "change_value"])
def test_nothing_rewrites_the_log(seeded_url, opened, table):
    catalogue = opened(seeded_url)
    catalogue.set_standing(1, "barred", "double")
    set_magnitude(catalogue, 1, "V", 1.23)
    engine = create_engine(seeded_url)
    for statement in (f"UPDATE {table} SET id = id + 100", f"DELETE FROM {table}"):
        with pytest.raises(DBAPIError, match=f"{table} is append-only"), engine.begin() as connection:
            connection.execute(text(statement))
    engine.dispose()


def test_times_in_the_log_do_not_run_backwards(seeded_url, opened, monkeypatch):
    catalogue = opened(seeded_url)
    first = catalogue.set_standing(1, "doubted", "x")["made_utc"]
    monkeypatch.setattr("pinlight.catalogue.changes.now_utc", lambda: "2001-01-01T00:00:00.000000Z")
    assert catalogue.set_standing(1, "vouched", "x")["made_utc"] == first
    assert catalogue.changes(most=1)[0]["made_utc"] == first
