"""Sky cells: HEALPix pixels in nested order, so that a cone is a few runs of rows."""

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.sky.positions import unit_vectors

__all__ = ["CELL_COUNT", "CELL_ORDER", "CELL_RADIUS_DEG", "cell_centres", "cells_of"]

CELL_ORDER = 5
CELL_COUNT = 12 * 4**CELL_ORDER
# No point of a cell of order 5 is farther than 1.91 deg from its centre; a test measures it.
CELL_RADIUS_DEG = 1.95


def _healpix() -> Any:
    from astropy_healpix import HEALPix  # slow to import; only making an edition needs it

    return HEALPix(nside=2**CELL_ORDER, order="nested")


def cells_of(ra_deg: ArrayLike, dec_deg: ArrayLike) -> NDArray[np.int64]:
    """The cell of each position, 0 to `CELL_COUNT` - 1, shape (N,)."""
    from astropy import units

    cells = _healpix().lonlat_to_healpix(np.asarray(ra_deg) * units.deg, np.asarray(dec_deg) * units.deg)
    return np.asarray(cells, dtype=np.int64)


def cell_centres() -> NDArray[np.float64]:
    """Unit vectors of all cells' centres, shape (`CELL_COUNT`, 3)."""
    lon, lat = _healpix().healpix_to_lonlat(np.arange(CELL_COUNT))
    return unit_vectors(lon.deg, lat.deg)
