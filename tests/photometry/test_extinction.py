import numpy as np
import pytest

from pinlight.photometry.extinction import extinction_prior, relative_extinction


@pytest.mark.parametrize(
    ("band", "published"),
    [
        # Fitzpatrick et al. (2019), ApJ 886, 108, R_V = 3.1, at 0.44, 1.25, 1.65 and 2.2 um. Ours is
        # at the bands' effective wavelengths, which differ by up to 2 %, so the law by up to 4 %.
        ("B", 1.322),
        ("J", 0.283),
        ("H", 0.185),
        ("Ks", 0.114),
    ],
)
def test_the_law_agrees_with_published_ratios(band, published):
    assert relative_extinction(band) == pytest.approx(published, rel=0.04)


def test_v_is_the_unit_and_a_system_band_is_like_its_namesake():
    assert relative_extinction("V") == 1.0
    assert relative_extinction("K_BB") == relative_extinction("Ks")


def test_the_disc_without_its_bubble_gives_the_published_values():
    # a0 = 1.5 mag/kpc and h = 0.114 kpc at 200 and 500 pc, b = 30 deg, less the column of the bubble
    # (arXiv:2106.03081 eq. 1 evaluated by hand).
    def column(kpc, sine=0.5, a0=1.5, h=0.114):
        return a0 * h / sine * (1 - np.exp(-kpc * sine / h))

    av, _ = extinction_prior(np.array([5.0, 2.0]), np.array([30.0, 30.0]))
    np.testing.assert_allclose(av, [column(0.2) - column(0.07), column(0.5) - column(0.07)], rtol=1e-12)
    # The same form printed to three decimals elsewhere: 0.200 and 0.304 mag in full.
    assert column(0.2) == pytest.approx(0.200, abs=5e-4)
    assert column(0.5) == pytest.approx(0.304, abs=5e-4)


def test_inside_the_bubble_there_is_none_but_an_error():
    av, error = extinction_prior(np.array([20.0, 100.0]), np.array([0.0, 80.0]))
    assert list(av) == [0.0, 0.0]
    assert list(error) == [0.05, 0.05]


def test_in_the_plane_and_without_a_parallax_it_stays_finite():
    av, error = extinction_prior(np.array([1.0, np.nan, -3.0]), np.array([0.0, 45.0, 45.0]))
    assert np.isfinite(av).all()
    assert av[0] == pytest.approx(1.5 * (1.0 - 0.07), rel=1e-2)
    np.testing.assert_allclose(error, np.maximum(0.05, 0.5 * av))
