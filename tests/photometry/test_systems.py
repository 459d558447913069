import numpy as np
import pytest

from pinlight.photometry.systems import CATALOGUE_BANDS, SYSTEM_BANDS, catalogue_to_systems


def convert(**magnitudes):
    system = catalogue_to_systems()
    observed = np.array([magnitudes[name] for name in CATALOGUE_BANDS])
    return dict(zip(SYSTEM_BANDS, system.matrix @ observed + system.offset, strict=True))


def test_catalogue_bands_pass_through():
    got = convert(B=6.1, V=5.4, J=4.2, H=3.9, Ks=3.8)
    assert [got[name] for name in CATALOGUE_BANDS] == [6.1, 5.4, 4.2, 3.9, 3.8]


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
