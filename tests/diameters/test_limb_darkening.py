import numpy as np
import pytest

from pinlight.diameters.limb_darkening import (
    LIMB_DARKENING_BANDS,
    coefficients,
    coefficients_at,
    uniform_disk_ratio,
)


@pytest.mark.parametrize(
    ("u", "published"),
    [
        # (1 - u/3)^1/2 (1 - 7u/15)^-1/2, Hanbury Brown et al. (1974), evaluated to the digits shown.
        (0.0, 1.0),
        (0.1, 1.00697),
        (0.3, 1.02299),
        (0.5, 1.04257),
        (0.8, 1.08176),
        (1.0, 1.11803),
    ],
)
def test_limb_darkened_over_uniform_diameter(u, published):
    assert 1 / uniform_disk_ratio(u) == pytest.approx(published, abs=5e-6)


@pytest.mark.parametrize(
    ("teff", "logg", "band", "u"),
    [
        # Claret & Bloemen (2011), A&A 529, A75: nodes of the printed grid, ATLAS and, below 3500 K, PHOENIX.
        (5750, 4.5, "K", 0.2649),
        (5750, 4.5, "V", 0.6564),
        (10000, 4.5, "B", 0.5440),
        (4500, 2.0, "H", 0.3874),
        (30000, 4.5, "K", 0.1083),
        (3400, 4.5, "K", 0.2618),
    ],
)
def test_nodes_of_the_table_come_back(teff, logg, band, u):
    got = coefficients(np.array([float(teff)]), np.array([logg]))[0, LIMB_DARKENING_BANDS.index(band)]
    assert got == pytest.approx(u, abs=1e-9)


def test_between_nodes_it_is_linear():
    low, middle, high = coefficients(np.array([5500.0, 5625.0, 5750.0]), np.full(3, 4.5))
    np.testing.assert_allclose(middle, (low + high) / 2, atol=1e-12)


def test_off_the_grid_it_holds_and_without_a_star_it_is_nan():
    hot, hotter = coefficients(np.array([50_000.0, 90_000.0]), np.array([5.0, 5.0]))
    np.testing.assert_array_equal(hot, hotter)
    assert np.isnan(coefficients(np.array([np.nan]), np.array([4.0]))).all()
    low_gravity = coefficients(np.array([20_000.0]), np.array([0.0]))
    assert ((low_gravity > 0) & (low_gravity < 1)).all()


@pytest.mark.parametrize(
    ("teff", "logg", "um", "ratio"),
    [
        # Published pairs of limb-darkened and uniform diameters. HD 128620 in K, Kervella et al.
        # (2003), A&A 404, 1087: 8.511 / 8.314; HD 29139 in K, Richichi & Roccatagliata (2005), A&A
        # 433, 305: 20.58 / 19.96; HD 48915 at 443 nm, Hanbury Brown et al. (1974): 5.89 / 5.60.
        (5790.0, 4.3, 2.18, 8.511 / 8.314),
        (3900.0, 1.2, 2.18, 20.58 / 19.96),
        (9850.0, 4.3, 0.443, 5.89 / 5.60),
    ],
)
def test_published_pairs_of_diameters(teff, logg, um, ratio):
    u = coefficients(np.array([teff]), np.array([logg]))
    ours = 1 / uniform_disk_ratio(coefficients_at(um, u))[0]
    # Full profiles over a broad band against a linear law: up to 0.6 %.
    assert ours == pytest.approx(ratio, abs=0.006)


def test_wavelengths_between_and_beyond_the_bands():
    u = coefficients(np.array([5000.0]), np.array([3.0]))
    # Effective wavelengths of the bands: Bessell (1990), PASP 102, 1181; Bessell & Brett (1988), PASP 100, 1134.
    published = {"U": 0.366, "B": 0.438, "V": 0.545, "R": 0.641, "I": 0.798, "J": 1.22, "H": 1.63, "K": 2.19}
    for index, name in enumerate(LIMB_DARKENING_BANDS):
        assert coefficients_at(published[name], u)[0] == pytest.approx(u[0, index], abs=1e-12)
    assert coefficients_at(2.19, u)[0] == u[0, -1]
    assert coefficients_at(10.0, u)[0] == u[0, -1]
    assert u[0, 5] > coefficients_at(1.4, u)[0] > u[0, 6]
