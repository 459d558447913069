"""Linear limb darkening: coefficients, and limb-darkened to uniform-disc diameters."""

import csv
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.photometry.bands import BANDS

__all__ = [
    "LIMB_DARKENING_BANDS",
    "coefficients",
    "coefficients_at",
    "uniform_disk_by_band",
    "uniform_disk_ratio",
]

Floats = NDArray[np.float64]

LIMB_DARKENING_BANDS = ("U", "B", "V", "R", "I", "J", "H", "K")
# Bessell (1990), PASP 102, 1181 and Bessell & Brett (1988), PASP 100, 1134, rounded.
_WAVELENGTHS_UM = np.array([0.366, 0.438, 0.545, 0.641, 0.798, 1.22, 1.63, 2.19])
_LOGGS = np.arange(0.0, 5.01, 0.5)
# Below this the file has PHOENIX dwarfs only; above it ATLAS, which reaches low gravities.
_ATLAS_FROM_K = 3500.0


@lru_cache(maxsize=1)
def _grid() -> tuple[Floats, Floats]:
    """Temperatures, shape (T,), and u on a full grid, shape (bands, T, log g).

    Hot models exist only at high gravity; the missing corner takes the value of the nearest
    gravity at the same temperature.
    """
    nodes: dict[tuple[str, float], dict[float, float]] = {}
    with Path(__file__).with_name("limb_darkening.csv").open(encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            teff = float(row["teff_k"])
            if (row["model"] == "ATLAS") == (teff >= _ATLAS_FROM_K):
                nodes.setdefault((row["band"], teff), {})[float(row["logg"])] = float(row["u"])
    temperatures = np.array(sorted({teff for _, teff in nodes}))
    table = np.empty((len(LIMB_DARKENING_BANDS), temperatures.size, _LOGGS.size))
    for i, name in enumerate(LIMB_DARKENING_BANDS):
        for j, teff in enumerate(temperatures):
            known = sorted(nodes[name, teff].items())
            loggs, values = np.array(known).T
            table[i, j] = np.interp(_LOGGS, loggs, values)
    return temperatures, np.minimum(table, 1.0)


def coefficients(teff_k: Floats, logg: Floats) -> Floats:
    """The linear coefficient u of each band of `LIMB_DARKENING_BANDS`.

    Parameters
    ----------
    teff_k, logg : array, shape (N,)
        Values outside the grid (2000 to 50 000 K) are held at its edge; NaN gives NaN.

    Returns
    -------
    u : array, shape (N, 8)

    Notes
    -----
    Claret & Bloemen (2011), A&A 529, A75: I(mu)/I(1) = 1 - u (1 - mu), [Fe/H] = 0, 2 km/s,
    least squares. Linear in Teff and log g; u above 1 (below 2400 K) is held at 1.
    """
    temperatures, table = _grid()

    def locate(values: ArrayLike, nodes: Floats) -> tuple[NDArray[Any], Floats]:
        inside = np.clip(np.nan_to_num(np.asarray(values, float), nan=nodes[0]), nodes[0], nodes[-1])
        index = np.clip(np.searchsorted(nodes, inside, side="right") - 1, 0, nodes.size - 2)
        return index, (inside - nodes[index]) / (nodes[index + 1] - nodes[index])

    i, along_t = locate(teff_k, temperatures)
    j, along_g = locate(logg, _LOGGS)
    u = (
        table[:, i, j] * (1 - along_t) * (1 - along_g)
        + table[:, i + 1, j] * along_t * (1 - along_g)
        + table[:, i, j + 1] * (1 - along_t) * along_g
        + table[:, i + 1, j + 1] * along_t * along_g
    )
    return np.where(np.isnan(teff_k) | np.isnan(logg), np.nan, u).T


def coefficients_at(wavelength_um: float, u: NDArray[np.floating[Any]]) -> Floats:
    """u at one wavelength, linear between the bands, held at U and K beyond them.

    Parameters
    ----------
    wavelength_um : float
    u : array, shape (N, 8)
        Of `coefficients`.

    Returns
    -------
    u : array, shape (N,)
    """
    position = np.interp(wavelength_um, _WAVELENGTHS_UM, np.arange(_WAVELENGTHS_UM.size))
    below = min(int(position), _WAVELENGTHS_UM.size - 2)
    along = position - below
    return np.asarray(u[:, below] * (1 - along) + u[:, below + 1] * along, dtype=np.float64)


def uniform_disk_ratio(u: ArrayLike) -> Floats:
    """theta_UD / theta_LD, the small-argument limit: both discs have the same visibility there.

    Notes
    -----
    Hanbury Brown, Davis, Lake & Thompson (1974), MNRAS 167, 475.

    >>> round(float(uniform_disk_ratio(0.5)), 5)
    0.95917
    """
    u = np.asarray(u, dtype=np.float64)
    return np.sqrt((1 - 7 * u / 15) / (1 - u / 3))


def uniform_disk_by_band(limb_darkened_mas: float, u: NDArray[np.floating[Any]]) -> dict[str, float]:
    """The uniform-disc diameter of one star in each of the bands of a camera, `u` of shape (8,). [mas]"""
    return {
        name: round(
            float(limb_darkened_mas * uniform_disk_ratio(coefficients_at(the_band.wavelength_um, u[None])[0])),
            5,
        )
        for name, the_band in BANDS.items()
    }
