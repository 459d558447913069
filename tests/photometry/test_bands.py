import numpy as np
import pytest

from pinlight.errors import InputError
from pinlight.photometry.bands import BANDS, band, check_magnitude, default_errors, nearest_band


def test_a_missing_error_is_never_zero_and_grows_where_2mass_saturates():
    # 2MASS Explanatory Supplement 1.6b: the 51 ms frames saturate between magnitudes 4 and 5; beyond,
    # its goal was 0.2-0.3 mag, and what was reached tests/photometry/test_saturation.py measures.
    for name, saturated, faint in (("J", 3.0, 7.0), ("H", 3.0, 7.0), ("Ks", 3.0, 7.0)):
        errors = default_errors(name, np.array([saturated, faint]))
        assert errors[0] >= 0.1
        assert 0.01 < errors[1] < 0.05
    assert all(the_band.default_error_mag > 0 for the_band in BANDS.values())


def test_a_missing_magnitude_has_no_error():
    assert np.isnan(default_errors("V", np.array([np.nan]))[0])


def test_a_wavelength_finds_its_band():
    names = ("B", "V", "J", "H", "Ks")
    assert [nearest_band(um, names) for um in (0.45, 0.7, 1.25, 1.65, 2.2, 10.0)] == [
        "B",
        "V",
        "J",
        "H",
        "Ks",
        "Ks",
    ]


def test_an_unknown_band_lists_the_known_ones():
    with pytest.raises(InputError, match="band is 'Q'; it may be one of B, V, R, I, J, H, Ks"):
        band("Q")


@pytest.mark.parametrize("value", [99.0, float("nan"), -9.99])
def test_a_stand_in_for_a_missing_magnitude_is_refused(value):
    with pytest.raises(InputError, match="a magnitude lies between -5 and 30"):
        check_magnitude("V", value)
