import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pinlight.photometry.systems import CATALOGUE_BANDS, INPUT_BANDS, SYSTEM_BANDS, to_systems


def convert(**magnitudes):
    found = to_systems(tuple(magnitudes), np.array([list(magnitudes.values())]))
    return dict(zip(SYSTEM_BANDS, found.values[0], strict=True))


def derivatives(**magnitudes):
    """d system / d input by the function's word and by finite differences, both (S, I)."""
    names, values = tuple(magnitudes), np.array([list(magnitudes.values())])
    said = to_systems(names, values).by_input
    step = 1e-6
    moved = [
        (to_systems(names, values + step * unit).values - to_systems(names, values - step * unit).values)[0]
        / (2 * step)
        for unit in np.eye(len(names))
    ]
    return said if said.ndim == 2 else said[0], np.array(moved).T


def test_measured_bands_pass_through():
    got = convert(B=6.1, V=5.4, J=4.2, H=3.9, Ks=3.8, R=5.0, I=4.7, W3=3.7, BP=5.6, RP=4.8)
    for name, value in {
        "B": 6.1,
        "V": 5.4,
        "J": 4.2,
        "H": 3.9,
        "Ks": 3.8,
        "R": 5.0,
        "I": 4.7,
        "W3": 3.7,
        "BP": 5.6,
    }.items():
        assert got[name] == value


def test_the_two_infrared_systems_differ_as_carpenter_says():
    # Carpenter (2001), AJ 121, 2851, 2003 update: forward relations from Bessell & Brett to 2MASS.
    got = convert(B=6.1, V=5.4, J=4.2, H=3.9, Ks=3.8)
    j_k, j_h = got["J_BB"] - got["K_BB"], got["J_BB"] - got["H_BB"]
    assert got["K_BB"] - 0.039 == pytest.approx(3.8)
    assert 0.983 * j_k - 0.018 == pytest.approx(4.2 - 3.8)
    assert 0.990 * j_h - 0.049 == pytest.approx(4.2 - 3.9)


def test_the_infrared_systems_agree_to_a_few_hundredths():
    # photometric practice: K of Johnson is Ks + 0.04; J and H differ by a few hundredths.
    got = convert(B=6.1, V=5.4, J=4.2, H=3.9, Ks=3.8)
    for ours, theirs in (("J_BB", 4.2), ("H_BB", 3.9), ("K_BB", 3.8)):
        assert abs(got[ours] - theirs) < 0.07


@given(ks=st.floats(-2, 12), h_k=st.floats(-0.1, 0.5), j_h=st.floats(-0.1, 1.0))
def test_there_and_back_between_the_infrared_systems(ks, h_k, j_h):
    there = convert(J=ks + h_k + j_h, H=ks + h_k, Ks=ks)
    back = convert(**{name: there[name] for name in ("J_BB", "H_BB", "K_BB")})
    assert [back[name] for name in ("J", "H", "Ks")] == pytest.approx([ks + h_k + j_h, ks + h_k, ks], abs=1e-9)


@pytest.mark.parametrize(
    ("bt", "vt", "v", "b_v"),
    [
        # Bessell (2000), PASP 112, 961, table 2: V - VT and (B - V) - (BT - VT), thousandths of a magnitude.
        (6.05, 6.0, 5.995, 0.04),
        (6.75, 6.0, 5.923, 0.674),
        (7.55, 6.0, 5.852, 1.305),
    ],
)
def test_tycho_gives_johnson_as_bessells_table_says(bt, vt, v, b_v):
    got = convert(BT=bt, VT=vt)
    assert got["V"] == pytest.approx(v, abs=1e-9)
    assert got["B"] - got["V"] == pytest.approx(b_v, abs=1e-9)


@pytest.mark.parametrize(
    ("bt_minus_vt", "v_minus_vt"), [(0.10, -0.012), (0.50, -0.054), (1.00, -0.098), (1.50, -0.143)]
)
def test_rows_of_bessells_table_that_ours_leaves_out_come_back(bt_minus_vt, v_minus_vt):
    # The same table: every other row is kept, the ones between interpolated.
    assert convert(BT=6 + bt_minus_vt, VT=6.0)["V"] == pytest.approx(6 + v_minus_vt, abs=1.5e-3)


def test_tycho_agrees_with_the_hipparcos_catalogues_own_formula():
    # ESA (1997), guide p. 57: V = VT - 0.090 (BT - VT), good to 0.015 mag for -0.2 < BT - VT < 1.8.
    for colour in np.linspace(-0.15, 1.6, 15):
        assert convert(BT=6 + colour, VT=6.0)["V"] == pytest.approx(6 - 0.090 * colour, abs=0.016)


def test_gaia_gives_the_suns_other_magnitudes():
    # The Sun at 10 pc in Gaia's bands: G = 4.67, BP - RP = 0.82 (Casagrande & VandenBerg 2018, MNRAS 479,
    # L102; memory); its other magnitudes from Willmer (2018), ApJS 236, 47.
    got = convert(G=4.67, BP=4.98, RP=4.16)
    for name, value, scatter in (
        ("V", 4.811, 0.03),
        ("R", 4.424, 0.032),
        ("I", 4.105, 0.04),
        ("B", 5.437, 0.07),
    ):
        assert got[name] == pytest.approx(value, abs=1.5 * scatter)
    # In the infrared the fit follows giants too, and is 0.1 mag bright for the Sun, as its scatter says.
    for name, value in (("J", 3.668), ("H", 3.324), ("Ks", 3.274)):
        assert got[name] == pytest.approx(value, abs=1.5 * 0.1)


def test_beyond_their_ranges_transformations_say_nothing():
    assert np.isnan(convert(BT=9.0, VT=6.0)["V"])
    assert np.isnan(convert(G=12.0, BP=14.0, RP=10.5)["Ks"])
    assert np.isfinite(convert(G=12.0, BP=14.0, RP=10.5)["V"])


def test_a_measured_band_is_never_overwritten():
    got = convert(V=5.0, Ks=3.5, BT=6.75, VT=6.0, G=5.5, BP=5.8, RP=5.0)
    assert (got["V"], got["Ks"]) == (5.0, 3.5)
    assert got["B"] == pytest.approx(convert(BT=6.75, VT=6.0)["B"])


@pytest.mark.parametrize(
    "magnitudes",
    [
        {"B": 6.1, "V": 5.4, "J": 4.2, "H": 3.9, "Ks": 3.8},
        {"BT": 6.72, "VT": 6.0, "Ks": 4.1},
        {"G": 5.4, "BP": 5.71, "RP": 4.93},
        {"V": 5.0, "J_BB": 4.0, "H_BB": 3.7, "K_BB": 3.6},
        {"V": 5.5, "G": 5.4, "BP": 5.71, "RP": 4.93, "K_BB": 3.9},
    ],
)
def test_errors_go_through_every_transformation_by_its_slope(magnitudes):
    said, numeric = derivatives(**magnitudes)
    np.testing.assert_allclose(said, np.nan_to_num(numeric), atol=1e-6)


def test_what_is_transformed_brings_its_scatter():
    direct = to_systems(("V", "Ks"), np.array([[5.0, 3.5]])).by_scatter
    at = SYSTEM_BANDS.index
    assert not direct[at("V")].any()
    assert not direct[at("Ks")].any()
    assert np.linalg.norm(direct[at("K_BB")]) == pytest.approx(0.02)
    gaia = to_systems(("G", "BP", "RP"), np.array([[5.4, 5.7, 4.9]])).by_scatter
    assert np.linalg.norm(gaia[at("V")]) == pytest.approx(0.030)
    assert np.linalg.norm(gaia[at("K_BB")]) == pytest.approx(np.hypot(0.10, 0.02))


def test_every_input_band_has_a_wavelength_and_a_default_error():
    from pinlight.photometry.bands import PHOTOMETRY, default_errors

    assert set(INPUT_BANDS) | set(SYSTEM_BANDS) == set(PHOTOMETRY)
    assert INPUT_BANDS[:5] == CATALOGUE_BANDS
    for name in INPUT_BANDS:
        assert 0 < default_errors(name, np.array([7.0]))[0] < 0.1
        assert 0.4 < PHOTOMETRY[name].wavelength_um < 25
