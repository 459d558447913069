import numpy as np
from astropy import units
from astropy_healpix import HEALPix

from pinlight.sky.cells import CELL_COUNT, CELL_ORDER, CELL_RADIUS_DEG, cell_centres, cells_of
from pinlight.sky.positions import unit_vectors

RANDOM = np.random.default_rng(3)
RA, DEC = RANDOM.uniform(0, 360, 20_000), np.degrees(np.arcsin(RANDOM.uniform(-1, 1, 20_000)))


def test_no_star_is_farther_from_its_cell_than_the_radius_says():
    centres = cell_centres()[cells_of(RA, DEC)]
    farthest = np.degrees(np.arccos((centres * unit_vectors(RA, DEC)).sum(axis=1).min()))
    assert 0.8 * CELL_RADIUS_DEG < farthest < CELL_RADIUS_DEG


def test_corners_of_all_cells_lie_within_the_radius():
    lon, lat = HEALPix(2**CELL_ORDER, "nested").boundaries_lonlat(np.arange(CELL_COUNT), 1)
    corners = unit_vectors(lon.to_value(units.deg), lat.to_value(units.deg))
    cosines = (corners * cell_centres()[:, None]).sum(axis=2)
    assert np.degrees(np.arccos(cosines.min())) < CELL_RADIUS_DEG
