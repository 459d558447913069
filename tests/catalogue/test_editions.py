import json
import shutil

import numpy as np
import pytest

from pinlight.catalogue.editions import MANIFEST, open_edition
from pinlight.catalogue.store import open_catalogue
from pinlight.errors import CatalogueError
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
