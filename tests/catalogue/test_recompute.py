"""Re-computation of diameters when the relation set changes."""

import json
from dataclasses import replace

import numpy as np
import pytest
from sqlalchemy import delete, insert, select

from pinlight.catalogue.making import make_catalogue
from pinlight.catalogue.predicting import renew_diameters
from pinlight.catalogue.recompute import recompute_diameters
from pinlight.catalogue.seed import read_seed
from pinlight.catalogue.tables import Change, ChangeValue, Diameter, Magnitude, Source, Star
from pinlight.diameters.relations import load_relations
from pinlight.photometry.systems import CATALOGUE_BANDS

COUNT = 60
SOURCE = {"id": 1, "title": "seed", "reference": "", "licence": "", "retrieved": ""}


@pytest.fixture
def other_set():
    """The shipped relations without K04's V - K, as a team's file would have it."""
    shipped = load_relations()
    return replace(
        shipped,
        relations=tuple(r for r in shipped.relations if r.name != "K04_VK"),
        hash="fedcba987654",
        file="ours.csv",
    )


@pytest.fixture(scope="module")
def seed():
    return read_seed()


@pytest.fixture
def small(empty_url, seed):
    """A catalogue of the seed's first stars, with diameters by the shipped relations."""
    catalogue = make_catalogue(empty_url, seed=False)
    with catalogue.changing("test", "keeper", "prepare", {}) as change:
        mark = {"change_id": change.id}
        change.connection.execute(insert(Source).values(**SOURCE))
        for row in range(COUNT):
            change.connection.execute(
                insert(Star).values(
                    id=row + 1, name=seed.names[row], ra_deg=seed.ra_deg[row], dec_deg=seed.dec_deg[row],
                    parallax_mas=seed.parallax_mas[row], spectral_type=seed.spectral_types[row],
                    object_type="*", flags="", cell=0, source_id=1, **mark,
                )
            )  # fmt: skip
        change.connection.execute(
            insert(Magnitude),
            [
                {"star_id": row + 1, "band": band, "source_id": 1, "value": float(value), "error": 0.02,
                 "error_assumed": True, "quality": "", "chosen": False, **mark}
                for row in range(COUNT)
                for band, value in zip(CATALOGUE_BANDS, seed.magnitudes[row], strict=True)
                if np.isfinite(value)
            ],
        )  # fmt: skip
        renew_diameters(change, range(1, COUNT + 1))
    yield catalogue
    catalogue.close()


def diameters(catalogue):
    with catalogue.reading() as connection:
        query = select(Diameter.__table__).where(Diameter.star_id <= COUNT).order_by(Diameter.star_id)
        return [dict(row) for row in connection.execute(query).mappings()]


def test_all_stars_of_another_set_are_predicted_and_old_values_stay_in_the_log(small, other_set):
    before, told = diameters(small), []
    assert recompute_diameters(small, other_set, lambda *step: told.append(step), batch=25) == COUNT
    after = diameters(small)
    assert {row["relation_set"] for row in after} == {other_set.hash}
    assert not any("K04_VK" in json.loads(row["parts"]) for row in after)
    assert any("K04_VK" in json.loads(row["parts"]) for row in before)
    assert told == [(0, COUNT), (25, COUNT), (50, COUNT), (60, COUNT)]
    with small.reading() as connection:
        changes = connection.execute(select(Change.id, Change.detail).where(Change.action == "recompute")).all()
        lines = connection.execute(
            select(ChangeValue.__table__).where(ChangeValue.table_name == "diameter").order_by(ChangeValue.star_id)
        ).mappings().all()  # fmt: skip
    assert len(changes) == 3
    assert json.loads(changes[0].detail) == {"relation_set": other_set.hash, "relations_file": "ours.csv"}
    assert len(lines) == COUNT
    for line, old, new in zip(lines, before, after, strict=True):
        logged, now = json.loads(line["before"]), json.loads(line["after"])
        assert line["star_id"] == old["star_id"]
        assert logged == {name: old[name] for name in logged}
        assert now == {name: new[name] for name in now}
        assert logged["relation_set"] != other_set.hash
        unchanged = set(old) - set(logged)
        assert {name: old[name] for name in unchanged} == {name: new[name] for name in unchanged}


def test_stopped_halfway_it_goes_on_where_it_was(small, other_set):
    def stop(done, _total):
        if done >= 40:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        recompute_diameters(small, other_set, stop, batch=20)
    halfway = [row["relation_set"] == other_set.hash for row in diameters(small)]
    assert halfway == [True] * 40 + [False] * 20
    assert recompute_diameters(small, other_set, batch=20) == 20
    assert recompute_diameters(small, other_set, batch=20) == 0


def test_a_batch_that_fails_leaves_nothing_half_done(small, other_set, monkeypatch):
    before = diameters(small)

    def fail(*_):
        raise RuntimeError("no prediction today")

    monkeypatch.setattr("pinlight.catalogue.predicting.predict_diameters", fail)
    with pytest.raises(RuntimeError):
        recompute_diameters(small, other_set)
    assert diameters(small) == before
    assert small.changes(1)[-1]["action"] != "recompute"


def test_going_back_to_the_first_set_gives_the_first_diameters(small, other_set):
    before = diameters(small)
    recompute_diameters(small, other_set)
    assert recompute_diameters(small, load_relations()) == COUNT
    for old, new in zip(before, diameters(small), strict=True):
        assert json.loads(old["parts"]) == json.loads(new["parts"])
        for name, value in old.items():
            if isinstance(value, float):  # the last digit that is kept may turn
                assert new[name] == pytest.approx(value, abs=2e-6)
            elif name != "parts":
                assert new[name] == value


def test_a_star_without_a_diameter_gets_one(small, other_set):
    with small.changing("test", "keeper", "prepare", {}) as change:
        change.connection.execute(delete(Diameter).where(Diameter.star_id.in_((3, 4))))
    assert recompute_diameters(small, other_set) == COUNT
    assert [row["star_id"] for row in diameters(small)] == list(range(1, COUNT + 1))
    assert small.changes(3)[-1]["added"] == {"diameter": 1}


def test_only_a_keeper_may(small, other_set):
    from pinlight.catalogue.members import add_member
    from pinlight.errors import NotAllowedError

    keeper = add_member(small, "Ada", "keeper")
    editor = add_member(small.acting(keeper), "Bo", "editor")
    with pytest.raises(NotAllowedError, match="Bo is an editor; to re-compute diameters takes a keeper"):
        recompute_diameters(small.acting(editor), other_set)
