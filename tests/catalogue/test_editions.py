import json
import shutil

import numpy as np
import pytest
from sqlalchemy import select

from pinlight.catalogue.comparison import check_edition
from pinlight.catalogue.editions import MANIFEST, open_edition
from pinlight.catalogue.store import open_catalogue
from pinlight.catalogue.tables import Diameter, Star
from pinlight.errors import CatalogueError
from pinlight.faces.library import rank
from pinlight.sky.cells import cells_of


@pytest.fixture
def edition(catalogue, tmp_path):
    name = catalogue.editions()[0]["name"]
    shutil.copytree(catalogue.editions_folder / name, tmp_path / name)
    return tmp_path, name


def test_columns_are_mapped_and_sorted_by_cell(catalogue):
    columns = catalogue.columns()
    assert isinstance(columns.diameter_mas, np.memmap)
    cells = cells_of(columns.ra_deg, columns.dec_deg)
    assert (np.diff(cells) >= 0).all()
    np.testing.assert_array_equal(
        np.searchsorted(cells, np.arange(len(columns.cell_starts))), columns.cell_starts
    )


def test_the_manifest_names_the_content(edition):
    folder, name = edition
    manifest = json.loads((folder / name / MANIFEST).read_text(encoding="utf-8"))
    assert manifest["hash"].startswith(name)
    assert manifest["stars"] == len(open_edition(folder, name))


def test_a_damaged_edition_says_so(edition):
    folder, name = edition
    (folder / name / "diameter_mas.npy").unlink()
    with pytest.raises(CatalogueError, match="is missing or damaged"):
        open_edition(folder, name)
    (folder / name / MANIFEST).write_text('{"format": 99}', encoding="utf-8")
    with pytest.raises(CatalogueError, match="has format 99; this Pinlight reads 1"):
        open_edition(folder, name)
    (folder / name / MANIFEST).write_text("{", encoding="utf-8")
    with pytest.raises(CatalogueError, match="is missing or damaged"):
        open_edition(folder, name)


def test_editions_may_live_elsewhere(catalogue, seeded_path, tmp_path, monkeypatch):
    monkeypatch.setenv("PINLIGHT_EDITIONS", str(tmp_path / "elsewhere"))
    shutil.copytree(catalogue.editions_folder, tmp_path / "elsewhere")
    moved = open_catalogue(str(seeded_path))
    assert moved.editions_folder == tmp_path / "elsewhere"
    assert len(moved.columns()) == len(catalogue.columns())
    moved.close()


def test_a_damaged_edition_fails_its_check(edition, catalogue):
    folder, name = edition
    assert check_edition(folder, name)["sound"]
    file = folder / name / "own_error_mas.npy"
    data = file.read_bytes()
    file.write_bytes(data[:-1] + bytes([data[-1] ^ 1]))
    verdict = check_edition(folder, name)
    assert not verdict["sound"]
    assert "its files have the hash" in verdict["problem"]
    file.unlink()
    assert not check_edition(folder, name)["sound"]
    (folder / name / MANIFEST).unlink()
    assert "missing or damaged" in check_edition(folder, name)["problem"]
    assert catalogue.check(name)["hash"].startswith(name)


def test_editions_are_compared_and_old_ones_still_rank(seeded_url, opened):
    catalogue = opened(seeded_url)
    first = catalogue.editions()[0]["name"]
    before = rank(catalogue, "tau Cet", baseline_m=100, wavelength_um=2.2)
    star_id = before.calibrators[0].star_id
    catalogue.set_standing(star_id, "doubted", "looks double")
    with catalogue.changing("correction", "editor", "correct", {}) as change:
        for table, wanted in ((Diameter, {"limb_darkened_mas": 9.5}), (Star, {"flags": "double"})):
            key = table.id if table is Star else table.star_id
            row = change.connection.execute(select(table.__table__).where(key == star_id)).mappings().one()
            change.overwrite(table, [(row, wanted)])
    second = catalogue.freeze()
    assert second != first
    assert [row["name"] for row in catalogue.editions()] == [second, first]
    found = catalogue.compare(first)
    assert (found["one"], found["other"]) == (first, second)
    assert found["added"]["count"] == found["removed"]["count"] == 0
    assert [star["star_id"] for star in found["changed"]["stars"]] == [star_id]
    assert found["changed"]["stars"][0]["values"]["flags"][1] == "double"
    assert list(found["diameters"]["stars"][0]["values"]) == ["diameter_mas"]
    assert found["diameters"]["stars"][0]["values"]["diameter_mas"][1] == 9.5
    assert found["standings"]["stars"][0]["values"] == {"standing": [None, "doubted"]}
    now = rank(catalogue, "tau Cet", baseline_m=100, wavelength_um=2.2)
    assert star_id not in [star.star_id for star in now.calibrators]
    again = rank(catalogue, "tau Cet", baseline_m=100, wavelength_um=2.2, edition=first)
    assert again.edition == first
    assert again.calibrators[0].calibration_error == before.calibrators[0].calibration_error
    assert again.calibrators[0].standing == "doubted"  # standings are laid over an edition live
