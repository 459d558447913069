"""A keeper's corrections, and that each can be undone."""

import pytest

from pinlight.catalogue.changes import now_utc
from pinlight.catalogue.curating import merge_stars, prefer_magnitude, split_star, undo_change
from pinlight.catalogue.intake import IntakeOptions, take_in
from pinlight.catalogue.making import make_catalogue
from pinlight.errors import InputError, NotFoundError

FIRST = (
    "name,ra,dec,V,K,e_V,e_K,sptype\n"
    "Pair 1,50,10,5.0,3.0,0.02,0.02,K0III\nPair 1 b,50.0011,10.0,5.1,3.1,0.02,0.02,K0III\nOther,60,10,6.0,4.0,0.02,0.02,K0III\n"
)
SECOND = "name,ra,dec,V,e_V,B\nPair 1,50,10,5.4,0.05,6.1\n"


@pytest.fixture
def catalogue(empty_url, tmp_path):
    """Three stars of one list; the first with a second magnitude of another."""
    for name, content in (("first.csv", FIRST), ("second.csv", SECOND)):
        (tmp_path / name).write_text(content, encoding="utf-8")
    catalogue = make_catalogue(empty_url, seed=False)
    assert take_in(catalogue, tmp_path / "first.csv", IntakeOptions("First", "2020F")).added == 3
    assert take_in(catalogue, tmp_path / "second.csv", IntakeOptions("Second", "2021S")).matched == 1
    yield catalogue
    catalogue.close()


def facts(catalogue, star_id=1):
    star = catalogue.star(star_id)
    return {
        key: star[key] for key in ("name", "identifiers", "magnitudes", "companions", "diameter", "standings")
    }


def test_the_rules_choose_a_magnitude_and_a_keeper_may_choose_another(catalogue):
    before = facts(catalogue)
    assert before["magnitudes"]["V"]["source"] == "First"  # the smaller error
    assert [one["source"] for one in before["magnitudes"]["V"]["others"]] == ["Second"]
    assert before["magnitudes"]["B"]["source"] == "Second"
    edition = catalogue.freeze()
    change_id = prefer_magnitude(catalogue, 1, "V", "Second")
    after = facts(catalogue)
    assert (after["magnitudes"]["V"]["value"], after["magnitudes"]["V"]["chosen"]) == (5.4, True)
    assert after["diameter"]["limb_darkened_mas"] != before["diameter"]["limb_darkened_mas"]
    assert catalogue.freeze() != edition
    assert prefer_magnitude(catalogue, 1, "V", "Second") == 0
    undo_change(catalogue, change_id)
    assert facts(catalogue) == before
    assert catalogue.freeze() == edition
    prefer_magnitude(catalogue, 1, "V", "Second")
    prefer_magnitude(catalogue, 1, "V", None)
    assert facts(catalogue) == before


def test_a_letter_that_says_no_measurement_leaves_a_magnitude_out(catalogue, tmp_path):
    (tmp_path / "third.csv").write_text(
        "name,ra,dec,V,e_V,V_quality\nOther,60,10,9.9,0.001,U\n", encoding="utf-8"
    )
    take_in(
        catalogue,
        tmp_path / "third.csv",
        IntakeOptions("Third", "2022T"),
    )
    assert catalogue.star(3)["magnitudes"]["V"]["source"] == "First"
    prefer_magnitude(catalogue, 3, "V", "Third")  # a keeper may know better
    assert catalogue.star(3)["magnitudes"]["V"]["value"] == 9.9


def test_entries_of_one_star_are_merged_and_parted_again(catalogue):
    catalogue.set_standing(2, "doubted", "odd")
    before, other, edition = facts(catalogue), facts(catalogue, 2), catalogue.freeze()
    assert before["companions"][0]["neighbour_id"] == 2
    change_id = merge_stars(catalogue, 2, 1)
    merged = catalogue.star(1)
    assert merged["merged"] == [{"star_id": 2, "name": "Pair 1 b"}]
    assert merged["companions"] == []  # it is no neighbour of itself
    assert merged["standing"] == "doubted"
    assert catalogue.find("Pair 1 b") == 1
    assert catalogue.star(2)["star_id"] == 1
    assert catalogue.standings() == {1: "doubted", 2: "doubted"}
    assert len(catalogue.columns(catalogue.freeze())) == 2
    assert {one["value"] for one in merged["magnitudes"]["V"]["others"]} == {5.1, 5.4}
    assert catalogue.changes(2)[-1]["overwritten"][0]["after"] == {"merged_into": 1}
    undo_change(catalogue, change_id)
    assert facts(catalogue) == before
    assert facts(catalogue, 2) == other
    assert catalogue.freeze() == edition
    assert catalogue.find("Pair 1 b") == 2


def test_a_row_of_a_merged_star_is_the_star(catalogue, tmp_path):
    merge_stars(catalogue, 2, 1)
    (tmp_path / "more.csv").write_text(
        "name,ra,dec,H\nPair 1 b,50.0011,10,3.2\n,50.0011,10,3.2\n", encoding="utf-8"
    )
    report = take_in(catalogue, tmp_path / "more.csv", IntakeOptions("More", "2023M"))
    assert (report.added, report.matched, report.rejected) == (0, 1, 1)
    assert catalogue.star(1)["magnitudes"]["H"]["value"] == 3.2


def test_an_impossible_merger_is_refused(catalogue):
    merge_stars(catalogue, 2, 1)
    for star, into, message in (
        (3, 3, "both are star 3; name two entries"),
        (3, 2, "star 2 is part of star 1 already"),
        (1, 3, "star 1 stands for others; merge 3 into it instead"),
    ):
        with pytest.raises(InputError, match=message):
            merge_stars(catalogue, star, into)
    with pytest.raises(NotFoundError, match="star_id is 99; there is no such star"):
        merge_stars(catalogue, 3, 99)


def test_what_a_source_brought_is_split_off_and_put_back(catalogue):
    before, edition, then = facts(catalogue), catalogue.freeze(), now_utc()
    ids = split_star(catalogue, 1, "Second", "Faint 7", (50.0005, 10.0))
    new = catalogue.star(ids["star_id"])
    assert (new["name"], new["magnitudes"]["V"]["value"], new["magnitudes"]["B"]["value"]) == (
        "Faint 7",
        5.4,
        6.1,
    )
    assert catalogue.find("Faint 7") == ids["star_id"]
    left = catalogue.star(1)["magnitudes"]
    assert left["V"]["others"] == []
    assert "B" not in left
    # How it stood is still known: the magnitudes were the first star's.
    rows = catalogue.changes(1, then)["rows"]["magnitude"]
    assert sorted(row["value"]["value"] for row in rows if row["band"]["value"] in "BV") == [5.0, 5.4, 6.1]
    undo_change(catalogue, ids["change_id"])
    after = facts(catalogue)
    assert after["magnitudes"] == before["magnitudes"]
    assert after["diameter"] == before["diameter"]
    assert catalogue.find("Faint 7") == 1  # nothing is removed: the entry is part of the first now
    assert catalogue.check(edition)["sound"]
    with pytest.raises(InputError, match="was changed again since; undo that first"):
        undo_change(catalogue, ids["change_id"])


def test_an_impossible_split_or_undoing_is_refused(catalogue):
    for arguments, error, message in (
        ((1, "First", "X 1"), InputError, "star 1 itself came with 'First'"),
        ((3, "Second", "X 1"), NotFoundError, "which brought nothing to star 3"),
        ((1, "Fourth", "X 1"), NotFoundError, "the catalogue has no such source"),
        ((1, "Second", "Other"), InputError, "name is 'Other', which star 3 bears"),
        ((1, "Second", " "), InputError, "write a star's name"),
    ):
        with pytest.raises(error, match=message):
            split_star(catalogue, *arguments)
    with pytest.raises(NotFoundError, match="change is 999; there is no such change"):
        undo_change(catalogue, 999)
    with pytest.raises(InputError, match="is of the kind intake; only preference, merge, split can be undone"):
        undo_change(catalogue, 1)
    with pytest.raises(NotFoundError, match="source is 'Third'; star 1 has V of First, Second"):
        prefer_magnitude(catalogue, 1, "V", "Third")
