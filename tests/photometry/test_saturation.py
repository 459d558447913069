"""What saturated 2MASS magnitudes are worth: the steps of photometry/bands.py by two routes."""

import csv
from pathlib import Path

import numpy as np
import pytest

from pinlight.catalogue.seed import read_seed
from pinlight.photometry.bands import (
    complete_photometry,
    default_errors,
    saturation_errors,
    saturation_offsets,
)

DATA = Path(__file__).parents[1] / "data"


def robust(values):
    return 1.4826 * np.median(np.abs(values - np.median(values)))


@pytest.fixture(scope="module")
def residuals():
    """V - Ks of the seed's dwarfs less what unsaturated ones have at the same B - V; and Ks."""
    with (DATA / "measured_diameters.csv").open(encoding="utf-8", newline="") as file:
        measured = {f"HIP {row['hip']}" for row in csv.DictReader(file)}
    seed = read_seed()
    b, v, _, _, ks = seed.magnitudes.T
    absolute = v + 5 * np.log10(seed.parallax_mas / 100)
    left_out = np.array([bool(measured & set(names)) for names in seed.identifiers])
    chosen = np.isin(seed.object_types, ("*", "PM*", "HV*")) & ~left_out & (seed.parallax_mas > 14)
    chosen &= (b - v > 0.4) & (b - v < 1.0) & np.isfinite(ks) & (v < 9)
    # Within 1.2 mag of a main sequence from M_V 3.0 at B - V = 0.4 to 6.4 at 1.0.
    chosen &= np.abs(absolute - (3.0 + 5.7 * (b - v - 0.4))) < 1.2
    b_v, v_ks, ks = (b - v)[chosen], (v - ks)[chosen], ks[chosen]
    clean = ks > 5.7
    for _ in range(4):
        run = np.polyfit(b_v[clean], v_ks[clean], 3)
        off = v_ks - np.polyval(run, b_v)
        clean = (ks > 5.7) & (np.abs(off) < 3 * robust(off[clean]))
    return off, ks


# 2MASS All-Sky Explanatory Supplement 1.6b: saturation from 4.5 to 4 on; how much is ours.
@pytest.mark.parametrize(("low", "high"), [(2.0, 3.5), (3.5, 4.1), (4.1, 4.5)])
def test_the_seeds_dwarfs_show_the_bias_that_is_taken_off(residuals, low, high):
    off, ks = residuals
    here = (ks >= low) & (ks < high)
    too_faint = -np.median(off[here])  # a Ks too faint makes V - Ks too small
    uncertain = 1.25 * robust(off[here]) / np.sqrt(here.sum())
    step = saturation_offsets("Ks", np.array([(low + high) / 2]))[0]
    shared = saturation_errors("Ks", np.array([low]))[0]
    assert here.sum() > 20
    assert too_faint == pytest.approx(step, abs=shared + 2 * uncertain)


def test_ground_based_magnitudes_show_the_same_bias():
    # Ground-based K of stars within 30 pc, none of them in the file of measured stars. Unsaturated, Ks is
    # 0.039 mag brighter than K (Carpenter 2001); by how much less it is here, 2MASS is too faint.
    with (DATA / "ground_based_k.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    ks, k = (np.array([float(row[key]) for row in rows]) for key in ("Ks", "K"))
    for low, high in ((-2.0, 3.5), (3.5, 4.1), (4.1, 4.5)):
        here = (ks >= low) & (ks < high)
        step = saturation_offsets("Ks", np.array([(low + high) / 2]))[0]
        shared = saturation_errors("Ks", np.array([low]))[0]
        assert here.sum() >= 20
        assert np.median((ks - k)[here]) + 0.039 == pytest.approx(step, abs=shared)
        # Their scatter is that of 2MASS and of the ground together; 0.05 mag is quoted for the ground.
        assert robust((ks - k)[here]) < 1.5 * np.hypot(default_errors("Ks", np.array([low]))[0], 0.05)


def test_only_what_is_taken_from_the_survey_is_corrected():
    magnitudes = np.array([[4.0, 3.0, 3.0], [6.0, 6.0, 6.0]])
    errors = np.array([[np.nan, 0.02, np.nan], [np.nan, np.nan, np.nan]])
    whole = complete_photometry(("V", "H", "Ks"), magnitudes, errors)
    np.testing.assert_allclose(whole.magnitudes, [[4.0, 3.0, 2.97], [6.0, 6.0, 6.0]])
    assert whole.errors[0, 1] == 0.02
    assert whole.errors[0, 2] > 0.1
    assert (whole.shared_errors > 0).tolist() == [[False, False, True], [False, False, False]]
    assert ((whole.linked_errors > 0) == (whole.shared_errors > 0)).all()
    assert (whole.linked_errors <= whole.errors).all()


def test_a_missing_magnitude_stays_missing():
    whole = complete_photometry(("V", "Ks"), np.array([[np.nan, 3.0]]), np.full((1, 2), np.nan))
    assert np.isnan([whole.magnitudes[0, 0], whole.errors[0, 0]]).all()


def test_faint_tycho_magnitudes_are_worth_less():
    # The seed's K dwarfs: the scatter of B - V about V - Ks grows from V = 8 to 11 by what is assumed.
    seed = read_seed()
    b, v, _, _, ks = seed.magnitudes.T
    absolute = v + 5 * np.log10(seed.parallax_mas / 100)
    dwarfs = (v - ks > 1.6) & (v - ks < 2.4) & (absolute > 4.3) & (ks > 5) & np.isfinite(b)
    run = np.polyfit((v - ks)[dwarfs], (b - v)[dwarfs], 1)
    off = b - v - np.polyval(run, v - ks)
    own = robust(off[dwarfs & (v < 8)])
    for low, high in ((9.0, 9.5), (9.5, 10.0), (10.0, 10.5), (10.5, 11.0)):
        here = dwarfs & (v >= low) & (v < high)
        middle = np.array([(low + high) / 2])
        assumed = np.hypot(default_errors("B", middle + 0.85)[0], default_errors("V", middle)[0])
        assert robust(off[here]) == pytest.approx(np.hypot(own, assumed), rel=0.3)
