import hashlib
import itertools
import json

import pytest

from pinlight.catalogue.bundles import export_bundle, import_bundle
from pinlight.catalogue.intake import IntakeOptions, take_in
from pinlight.catalogue.making import make_catalogue
from pinlight.errors import InputError

TABLE = "name,ra,dec,V,K\n" + "".join(
    f"Common {n},{10 + n},{5 + n},{5 + n / 10},{3 + n / 10}\n" for n in range(5)
)


@pytest.fixture
def sites(tmp_path, monkeypatch):
    """Three sites that began with the same stars; one of them then added one of its own."""
    monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "editions"))
    table, own = tmp_path / "common.csv", tmp_path / "own.csv"
    table.write_text(TABLE, encoding="utf-8")
    own.write_text("name,ra,dec,V,K\nOwn 1,100,-20,6.0,4.0\n", encoding="utf-8")
    catalogues = []
    for name in ("Ada", "Bo", "Cy"):
        monkeypatch.setenv("LOGNAME", name)
        catalogue = make_catalogue(str(tmp_path / f"{name}.db"), seed=False)
        take_in(catalogue, table, IntakeOptions("Common list", "2020C"))
        if name == "Bo":
            take_in(catalogue, own, IntakeOptions("Own list", "2021O"))
        catalogues.append(catalogue)
    yield catalogues
    for catalogue in catalogues:
        catalogue.close()


def judge(site, name, star, standing, monkeypatch, **options):
    monkeypatch.setenv("LOGNAME", name)
    return site.set_standing(site.find(star), standing, f"{name} says {standing}", **options)


def said(site):
    """What a site says of its stars, whatever ids they have there."""
    stars = [f"Common {n}" for n in range(5)] + ["Own 1"]
    found = {}
    for star in stars:
        try:
            record = site.star(site.find(star))
        except LookupError:
            continue
        found[star] = (record["standing"], record["standings"], record["diameter"]["limb_darkened_mas"])
    return found


def test_bundles_in_any_order_and_any_number_bring_the_sites_together(sites, monkeypatch):
    ada, bo, cy = sites
    judge(ada, "Ada", "Common 1", "vouched", monkeypatch)
    judge(bo, "Bo", "Common 1", "barred", monkeypatch, evidence=["2020A&A", {"x": 1}])
    judge(cy, "Cy", "Common 1", "doubted", monkeypatch)
    judge(bo, "Bo", "Own 1", "vouched", monkeypatch, band="H")
    judge(ada, "Ada", "Common 2", "unproven", monkeypatch)
    bundles = [export_bundle(site) for site in sites]
    for site, order in zip(sites, itertools.permutations(bundles), strict=False):
        for bundle in (*order, *order):
            import_bundle(site, bundle)
    assert said(ada) == said(bo) == said(cy)
    assert said(ada)["Common 1"][0] == "doubted"  # the newest counts, wherever it was made
    assert said(ada)["Own 1"][1][0]["band"] == "H"
    assert len({export_bundle(site) for site in sites}) == 1


def test_importing_twice_changes_nothing(sites, monkeypatch):
    ada, bo, _ = sites
    judge(bo, "Bo", "Own 1", "doubted", monkeypatch)
    bundle = export_bundle(bo)
    first = import_bundle(ada, bundle)
    assert (first["standings_added"], first["stars_added"], first["magnitudes_added"]) == (1, 1, 2)
    log = ada.changes(most=1000)
    second = import_bundle(ada, bundle)
    assert (second["standings_added"], second["standings_known"], second["stars_added"]) == (0, 1, 0)
    assert ada.changes(most=1000) == log
    assert log[0]["action"] == "import"
    assert ada.star(ada.find("Own 1"))["magnitudes"]["V"]["source"] == "Own list"


def test_conflicts_are_shown_and_both_kept(sites, monkeypatch):
    ada, bo, _ = sites
    judge(ada, "Ada", "Common 3", "vouched", monkeypatch)
    judge(bo, "Bo", "Common 3", "barred", monkeypatch)
    report = import_bundle(ada, export_bundle(bo))
    (conflict,) = report["conflicts"]
    assert (conflict["name"], conflict["ours"]["made_by"], conflict["theirs"]["made_by"]) == (
        "Common 3",
        "Ada",
        "Bo",
    )
    assert conflict["counts"] == "theirs"
    assert [row["made_by"] for row in ada.star_standings(ada.find("Common 3"))["standings"]] == ["Ada", "Bo"]
    assert import_bundle(bo, export_bundle(ada))["conflicts"][0]["counts"] == "ours"


def test_a_standing_of_a_star_that_is_not_here_is_told(sites, monkeypatch):
    ada, bo, _ = sites
    judge(bo, "Bo", "Own 1", "doubted", monkeypatch)
    lines = [line for line in export_bundle(bo).splitlines()[1:] if '"kind":"star"' not in line]
    report = import_bundle(ada, sealed(lines))
    assert report["unknown"][0]["name"] == "Own 1"
    assert "there is no such star here" in report["unknown"][0]["reason"]


def sealed(lines):
    body = "".join(f"{line}\n" for line in lines)
    return json.dumps({"pinlight_bundle": 1, "sha256": hashlib.sha256(body.encode()).hexdigest()}) + "\n" + body


def test_a_bundle_that_was_changed_is_refused(sites, monkeypatch):
    ada, bo, _ = sites
    judge(bo, "Bo", "Common 4", "barred", monkeypatch)
    bundle = export_bundle(bo)
    for damaged, message in (
        (bundle.replace("barred", "vouched"), "not what its hash says"),
        (bundle.rsplit("\n", 2)[0] + "\n", "not what its hash says"),
        ("{}", "line 1 is no head of a bundle"),
        (bundle.replace('"pinlight_bundle":1', '"pinlight_bundle":9'), "has format 9; this Pinlight reads 1"),
    ):
        with pytest.raises(InputError, match=message):
            import_bundle(ada, damaged)
    (line,) = [line for line in bundle.splitlines() if '"kind":"standing"' in line]
    import_bundle(ada, bundle)
    for change, message in (
        ({"reason": "another"}, "line 2: standing [0-9a-f]{32} says something else here"),
        ({"standing": "good"}, "line 2: standing is 'good'"),
        ({"made_utc": "2999-01-01T00:00:00.000000Z"}, "line 2: made_utc is 2999.*which is yet to come"),
        ({"made_utc": "soon"}, "line 2: uid or made_utc is not of its form"),
        ({"kind": "song"}, "line 2: kind is 'song'"),
        ({"star": 3}, "line 2 is no star and no standing"),
    ):
        with pytest.raises(InputError, match=message):
            import_bundle(ada, sealed([json.dumps(json.loads(line) | change)]))


def test_a_bundle_goes_from_one_database_to_the_other(seeded_url, opened, sites, monkeypatch):
    catalogue = opened(seeded_url)
    bo = sites[1]
    judge(bo, "Bo", "Own 1", "vouched", monkeypatch)
    report = import_bundle(catalogue, export_bundle(bo, all_stars=True))
    assert (report["stars_added"], report["standings_added"]) == (6, 1)
    assert catalogue.star(catalogue.find("Own 1"))["standing"] == "vouched"
    assert import_bundle(catalogue, export_bundle(catalogue))["standings_known"] == 1
