import pytest

from pinlight.catalogue.members import add_member
from pinlight.catalogue.standings import standings_for
from pinlight.errors import InputError, NotFoundError
from pinlight.faces.library import rank


def row(standing, band=None, mode=None):
    return {"star_id": 7, "standing": standing, "band": band, "mode": mode}


def test_standings_are_added_and_the_newest_counts(seeded_url, opened):
    catalogue = opened(seeded_url)
    ada = catalogue.acting(add_member(catalogue, "Ada", "keeper"))
    bo = ada.acting(add_member(ada, "Bo", "editor"))
    star_id = catalogue.find("HD 10700")
    assert catalogue.standings() == {}
    ada.set_standing(star_id, "doubted", "looked double in one night", evidence=["night of 2026-11-03"])
    bo.set_standing(star_id, "barred", " a companion\nat 40 mas ", evidence=[{"closure_phase_deg": 12.5}])
    assert catalogue.standings() == {star_id: "barred"}
    record = catalogue.star(star_id)
    assert record["standing"] == "barred"
    assert [entry["standing"] for entry in record["standings"]] == ["doubted", "barred"]
    assert [entry["made_by"] for entry in record["standings"]] == ["Ada", "Bo"]
    assert record["standings"][0]["evidence"] == ["night of 2026-11-03"]
    assert record["standings"][1]["evidence"] == [{"closure_phase_deg": 12.5}]
    assert record["standings"][1]["reason"] == "a companion at 40 mas"
    assert catalogue.star_standings(star_id) == {
        "star_id": star_id, "standing": "barred", "standings": record["standings"],
    }  # fmt: skip


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("good", "x"), "standing is 'good'; it may be one of vouched"),
        (("barred", " "), "reason is empty"),
        (("barred", "x" * 3000), "reason has 3000 letters; 2000 are the most"),
    ],
)
def test_an_impossible_standing_is_refused(catalogue, arguments, message):
    with pytest.raises(InputError, match=message):
        catalogue.set_standing(1, *arguments)


def test_an_impossible_scope_or_evidence_is_refused(catalogue):
    for options, message in (
        ({"band": "Q"}, "band is 'Q'; it may be one of"),
        ({"mode": " "}, "mode is empty"),
        ({"evidence": [{1, 2}]}, "evidence cannot be written as JSON"),
        ({"evidence": ["x" * 30_000]}, "evidence has 30004 letters; 20000 are the most"),
    ):
        with pytest.raises(InputError, match=message):
            catalogue.set_standing(1, "barred", "x", **options)
    with pytest.raises(NotFoundError, match="star_id is 10000000; there is no such star"):
        catalogue.set_standing(10_000_000, "barred", "x")


@pytest.mark.parametrize(
    ("rows", "scope", "counts"),
    [
        pytest.param([row("vouched"), row("doubted", band="Ks")], ("H", None, None), "vouched", id="another band"),
        pytest.param([row("vouched"), row("doubted", band="Ks")], ("Ks", None, None), "doubted", id="that band"),
        pytest.param([row("doubted", band="Ks"), row("vouched")], ("Ks", None, None), "doubted", id="narrower, though older"),
        pytest.param([row("vouched", band="H"), row("barred")], ("H", None, None), "barred", id="a general bar"),
        pytest.param([row("barred"), row("unproven")], ("H", None, None), "unproven", id="a bar that was lifted"),
        pytest.param([row("barred", band="H"), row("vouched", mode="Hi-res")], ("H", "Hi-res", "North"), "vouched", id="a mode is narrower than a band"),
        pytest.param([row("doubted", mode="North/H")], ("H", "H", "North"), "doubted", id="mode of an array"),
        pytest.param([row("doubted", mode="North/H")], ("H", "H", "South"), None, id="mode of another array"),
        pytest.param([row("doubted", mode="H")], (None, None, None), None, id="no mode asked for"),
    ],
)  # fmt: skip
def test_which_standing_counts(rows, scope, counts):
    assert standings_for(rows, *scope).get(7) == counts


def test_a_bar_of_one_band_excludes_a_star_in_that_band_only(seeded_url, opened):
    catalogue = opened(seeded_url)
    best = {band: rank(catalogue, "tau Cet", array="north", mode=band).calibrators[0] for band in ("H", "K")}
    star_id = best["H"].star_id
    catalogue.set_standing(star_id, "barred", "resolved disc at H", band="H")
    barred = rank(catalogue, "tau Cet", array="north", mode="H")
    assert star_id not in [star.star_id for star in barred.calibrators]
    assert barred.excluded["barred"] == 1
    assert "barred" not in rank(catalogue, "tau Cet", array="north", mode="K").excluded
