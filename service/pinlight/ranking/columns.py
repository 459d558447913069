"""What a ranking reads of an edition: one value a star, one array a quantity."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pinlight.sky.cells import CELL_RADIUS_DEG
from pinlight.sky.positions import separation_deg, unit_vectors

__all__ = ["FLAGS", "StarColumns", "flag_bits", "flag_words"]

# One bit a word, in this order for ever: editions are written with it.
FLAGS = (
    "double", "component", "spectroscopic_binary", "eclipsing_binary", "ellipsoidal", "active_binary",
    "cataclysmic", "xray_binary", "composite_spectrum", "variable", "delta_scuti", "gamma_doradus",
    "beta_cephei", "alpha2_cvn", "by_draconis", "rotating", "pulsating", "semiregular", "long_period",
    "mira", "cepheid", "rr_lyrae", "rv_tauri", "sx_phoenicis", "flare", "orion_variable", "irregular",
    "r_crb", "emission_line", "be_star", "fast_rotator", "peculiar", "pre_main_sequence", "t_tauri",
    "carbon_star", "s_star", "wolf_rayet", "evolved", "white_dwarf", "brown_dwarf", "low_mass",
    "horizontal_branch", "blue_straggler", "in_cluster", "in_association", "in_nebula",
    "high_proper_motion", "high_velocity", "discordant",
)  # fmt: skip


def flag_bits(words: str) -> int:
    """The bits of flag words separated by blanks."""
    return sum(1 << FLAGS.index(word) for word in words.split())


def flag_words(bits: int) -> list[str]:
    """The words of flag bits.

    >>> flag_words(flag_bits("double variable"))
    ['double', 'variable']
    """
    return [word for index, word in enumerate(FLAGS) if int(bits) >> index & 1]


@dataclass(frozen=True)
class StarColumns:
    """The columns of one edition, rows sorted by sky cell; all arrays may be memory maps.

    Shapes are (N,) unless said. Magnitudes and diameters are NaN where unknown.

    edition : the edition's name
    ids, names, spectral_types : star ids; names and types as UTF-8 bytes
    ra_deg, dec_deg : ICRS at epoch 2000
    pm_ra_mas_yr, pm_dec_mas_yr, parallax_mas, radial_velocity_km_s : NaN where unknown
    flags : bits of `FLAGS`
    magnitudes, magnitude_errors : band -> array
    diameter_mas, own_error_mas, shared_error_mas : limb-darkened diameter, and its error in two parts
    limb_darkening : shape (N, 8), columns follow `LIMB_DARKENING_BANDS`
    relations_used, relation_names : bits of the relations behind each diameter, and their names
    oblateness : assumed or measured 1 - R_pole / R_equator
    companion_rows, companion_separations_arcsec, companion_deltas_mag : shape (M,), (M,), band ->
        (M,): known companions, each with the row of its star, sorted by row
    cell_starts : shape (cells + 1,), first row of each cell
    cell_centres : shape (cells, 3), unit vectors
    """

    edition: str
    ids: NDArray[np.int64]
    names: NDArray[np.bytes_]
    spectral_types: NDArray[np.bytes_]
    ra_deg: NDArray[np.float64]
    dec_deg: NDArray[np.float64]
    pm_ra_mas_yr: NDArray[np.float32]
    pm_dec_mas_yr: NDArray[np.float32]
    parallax_mas: NDArray[np.float32]
    radial_velocity_km_s: NDArray[np.float32]
    flags: NDArray[np.uint64]
    magnitudes: dict[str, NDArray[np.float32]]
    magnitude_errors: dict[str, NDArray[np.float32]]
    diameter_mas: NDArray[np.float32]
    own_error_mas: NDArray[np.float32]
    shared_error_mas: NDArray[np.float32]
    limb_darkening: NDArray[np.float32]
    relations_used: NDArray[np.uint64]
    relation_names: tuple[str, ...]
    oblateness: NDArray[np.float32]
    companion_rows: NDArray[np.int64]
    companion_separations_arcsec: NDArray[np.float32]
    companion_deltas_mag: dict[str, NDArray[np.float32]]
    cell_starts: NDArray[np.int64]
    cell_centres: NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.ids)

    def motion(self, rows: NDArray[np.int64]) -> tuple[NDArray[np.float32], ...]:
        """Proper motion, parallax and radial velocity of some rows, as `move_to_epoch` takes them."""
        columns = (self.pm_ra_mas_yr, self.pm_dec_mas_yr, self.parallax_mas, self.radial_velocity_km_s)
        return tuple(column[rows] for column in columns)

    def cone(
        self, ra_deg: float, dec_deg: float, radius_deg: float
    ) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Rows within a radius of a place, and their separations. [deg]

        Only the cells that the circle can touch are read.
        """
        reach = np.cos(np.radians(min(radius_deg + CELL_RADIUS_DEG, 180.0)))
        cells = np.flatnonzero(self.cell_centres @ unit_vectors(ra_deg, dec_deg) >= reach)
        parts = [np.arange(self.cell_starts[cell], self.cell_starts[cell + 1]) for cell in cells]
        rows = np.concatenate(parts) if parts else np.empty(0, dtype=np.int64)
        apart = separation_deg(ra_deg, dec_deg, self.ra_deg[rows], self.dec_deg[rows])
        inside = apart <= radius_deg
        return rows[inside], apart[inside]
