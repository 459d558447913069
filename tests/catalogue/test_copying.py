import pytest
from sqlalchemy import text

from pinlight.catalogue.copying import copy_catalogue
from pinlight.catalogue.intake import IntakeOptions, take_in
from pinlight.catalogue.making import make_catalogue
from pinlight.catalogue.members import add_member
from pinlight.catalogue.store import open_catalogue
from pinlight.catalogue.tables import Base
from pinlight.errors import CatalogueError, InputError


def dump(catalogue):
    with catalogue.reading() as connection:
        return {
            table.name: sorted(map(repr, connection.execute(table.select())))
            for table in Base.metadata.sorted_tables
        }


@pytest.fixture
def places(server, tmp_path, monkeypatch):
    monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "editions"))
    return {
        "sqlite": str(tmp_path / "one.db"),
        "again": str(tmp_path / "two.db"),
        "postgresql": server.new_database(),
    }


@pytest.fixture
def full(places, tmp_path):
    """A small catalogue with something in every table."""
    table = tmp_path / "list.csv"
    rows = [f"Invented {n},{n / 7:.5f},{n / 9 - 20:.5f},{5 + n / 50},{3 + n / 50},0.3" for n in range(200)]
    table.write_text("name,ra,dec,V,K,sep\n" + "\n".join(rows) + "\nbad,x,0,5,5,\n", encoding="utf-8")
    catalogue = make_catalogue(places["sqlite"], seed=False)
    kit = catalogue.acting(add_member(catalogue, "Kit", "keeper"))
    take_in(kit, table, IntakeOptions("A list", "2020Ref"))
    table.write_text("name,ra,dec,B,sptype\nInvented 3,0.42857,-19.66667,7,K0III\n", encoding="utf-8")
    take_in(kit, table, IntakeOptions("Another", "2021Ref"))
    kit.set_standing(3, "doubted", "ÅΩ\"'\\ odd \t text", band="H", evidence=[{"x": 1.5}])
    kit.freeze()
    catalogue.close()
    return places


def test_there_and_back_nothing_is_lost(full):
    copy_catalogue(full["sqlite"], full["postgresql"])
    copy_catalogue(full["postgresql"], full["again"])
    catalogues = [open_catalogue(full[name]) for name in ("sqlite", "postgresql", "again")]
    dumps = [dump(catalogue) for catalogue in catalogues]
    assert all(dumps[0].values()), [name for name, rows in dumps[0].items() if not rows]
    assert dumps[0] == dumps[1] == dumps[2]
    edition = catalogues[0].editions()[0]["name"]
    for catalogue in catalogues[1:]:
        assert catalogue.check(edition)["sound"]
        token = add_first_free(catalogue)
        # The counters go on after what was copied, and the same content is the same edition.
        assert catalogue.acting(token).freeze() == edition
        catalogue.acting(token).set_standing(3, "vouched", "looked again")
    for catalogue in catalogues:
        catalogue.close()


def add_first_free(catalogue):
    """A keeper's token, put in by hand: the copied ones are known to nobody here."""
    from pinlight.catalogue.members import _hash

    with catalogue._engine.begin() as connection:
        connection.execute(text("UPDATE member SET token_hash = :hash"), {"hash": _hash("known")})
    return "known"


def test_a_place_that_holds_something_is_left_alone(full):
    copy_catalogue(full["sqlite"], full["postgresql"])
    with pytest.raises(CatalogueError, match="is no empty catalogue: its table change has rows"):
        copy_catalogue(full["sqlite"], full["postgresql"])
    with pytest.raises(InputError, match="name another place for the copy"):
        copy_catalogue(full["sqlite"], full["sqlite"])
    with pytest.raises(CatalogueError, match="there is no catalogue at"):
        copy_catalogue(full["again"], full["postgresql"])


def test_editions_come_along(full, tmp_path, monkeypatch):
    edition = open_catalogue(full["sqlite"])
    name = edition.editions()[0]["name"]
    edition.close()
    # Beside each file now, as without the setting.
    monkeypatch.delenv("PINLIGHT_EDITIONS")
    (tmp_path / "editions").rename(tmp_path / "one.db.editions")
    copy_catalogue(full["sqlite"], full["again"])
    copied = open_catalogue(full["again"])
    assert copied.check(name)["sound"]
    assert len(copied.columns(name)) == 200
    copied.close()
