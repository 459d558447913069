"""From catalogue bands to the systems that diameter relations were calibrated in."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["CATALOGUE_BANDS", "SYSTEM_BANDS", "LinearSystem", "catalogue_to_systems"]

CATALOGUE_BANDS = ("B", "V", "J", "H", "Ks")
# J_BB, H_BB, K_BB: the homogenised Johnson-Glass system of Bessell & Brett (1988), PASP 100, 1134.
SYSTEM_BANDS = ("B", "V", "J", "H", "Ks", "J_BB", "H_BB", "K_BB")


@dataclass(frozen=True)
class LinearSystem:
    """m_system = matrix @ m_catalogue + offset, with a scatter that is each band's own.

    matrix : shape (S, C); offset, scatter : shape (S,). S follows `SYSTEM_BANDS`, C follows
    `CATALOGUE_BANDS`; magnitudes throughout.
    """

    matrix: NDArray[np.float64]
    offset: NDArray[np.float64]
    scatter: NDArray[np.float64]


def catalogue_to_systems() -> LinearSystem:
    """The linear map from catalogue magnitudes to every system band.

    Notes
    -----
    2MASS to Bessell & Brett: Carpenter (2001), AJ 121, 2851, in the 2003 update of the 2MASS
    Explanatory Supplement VI.4b: Ks = K - 0.039, J - Ks = 0.983 (J - K) - 0.018,
    J - H = 0.990 (J - H) - 0.049. The coefficients are from memory; the second route for K is
    the absence of a colour term against an independent K system (aanda 2002/33, aah3596), and
    the Sun, whose diameter the V - K relation gives to 0.3 % with this offset and to 2 %
    without. The K colour term, 0.001, is dropped. Scatter: 0.02 mag as in that comparison.
    """
    column = {name: index for index, name in enumerate(CATALOGUE_BANDS)}
    row = {name: index for index, name in enumerate(SYSTEM_BANDS)}
    matrix = np.zeros((len(SYSTEM_BANDS), len(CATALOGUE_BANDS)))
    offset = np.zeros(len(SYSTEM_BANDS))
    scatter = np.zeros(len(SYSTEM_BANDS))
    for name in CATALOGUE_BANDS:
        matrix[row[name], column[name]] = 1.0
    matrix[row["K_BB"], column["Ks"]] = 1.0
    offset[row["K_BB"]] = 0.039
    # J_BB = K_BB + (J - Ks + 0.018) / 0.983
    matrix[row["J_BB"]] = matrix[row["K_BB"]]
    matrix[row["J_BB"], column["J"]] += 1 / 0.983
    matrix[row["J_BB"], column["Ks"]] -= 1 / 0.983
    offset[row["J_BB"]] = offset[row["K_BB"]] + 0.018 / 0.983
    # H_BB = J_BB - (J - H + 0.049) / 0.990
    matrix[row["H_BB"]] = matrix[row["J_BB"]]
    matrix[row["H_BB"], column["J"]] -= 1 / 0.990
    matrix[row["H_BB"], column["H"]] += 1 / 0.990
    offset[row["H_BB"]] = offset[row["J_BB"]] - 0.049 / 0.990
    for name in ("J_BB", "H_BB", "K_BB"):
        scatter[row[name]] = 0.02
    return LinearSystem(matrix, offset, scatter)
