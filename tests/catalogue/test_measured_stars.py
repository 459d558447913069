"""The seed's diameters against interferometry, and the figures that the README gives for them."""

import csv
import re
from pathlib import Path

import numpy as np
import pytest

ROOT = Path(__file__).parents[2]
README = " ".join((ROOT / "README.md").read_text(encoding="utf-8").split())
MEASURED = ROOT / "tests" / "data" / "measured_diameters.csv"


@pytest.fixture(scope="module")
def stars(catalogue):
    """Ks, predicted over measured, and pull of every measured star that the seed has a diameter for."""
    columns = catalogue.columns()
    row_of = {int(star_id): row for row, star_id in enumerate(columns.ids)}
    found = []
    with MEASURED.open(encoding="utf-8", newline="") as file:
        for star in csv.DictReader(file):
            if star["kind"] != "published":
                continue
            try:
                row = row_of[catalogue.find(f"HIP {star['hip']}")]
            except LookupError:
                continue
            measured, error = float(star["theta_ld_mas"]), float(star["err_mas"])
            predicted = float(columns.diameter_mas[row])
            own = float(np.hypot(columns.own_error_mas[row], columns.shared_error_mas[row]))
            if np.isfinite(predicted):
                pull = (predicted - measured) / np.hypot(own, error)
                found.append((float(columns.magnitudes["Ks"][row]), predicted / measured, pull))
    return np.array(found)


def test_saturated_stars_are_honest_in_the_sense_that_the_readme_states(stars):
    saturated = stars[~(stars[:, 0] >= 4.5)]
    match = re.search(
        r"Of (\d+) measured stars there, (\d+) lie within one sigma and (\d+) within two; "
        r"their predictions come out (\d) % too small in the median",
        README,
    )
    assert match
    assert len(saturated) == int(match[1])
    assert (np.abs(saturated[:, 2]) < 1).sum() == int(match[2])
    assert (np.abs(saturated[:, 2]) < 2).sum() == int(match[3])
    assert round(100 * (1 - np.median(saturated[:, 1]))) == int(match[4])
    assert (np.abs(saturated[:, 2]) < 2).mean() > 0.9


def test_unsaturated_stars_agree_within_two_per_cent_in_the_median(stars):
    # Nine stars, two of which are known trouble: a metal-poor subdwarf whose published diameters
    # themselves disagree by 8 %, and a metal-rich dwarf measured at 0.46 mas.
    unsaturated = stars[stars[:, 0] >= 4.5]
    assert len(unsaturated) >= 9
    assert np.median(unsaturated[:, 1]) == pytest.approx(1, abs=0.02)
    assert (np.abs(unsaturated[:, 2]) < 2).sum() >= len(unsaturated) - 2
