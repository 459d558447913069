"""How far a rotating star is from round."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["oblateness_bound", "roche_oblateness"]

Floats = NDArray[np.float64]

_GM_SUN_KM3_S2 = 1.3271244e11  # IAU 2015 resolution B3
_R_SUN_KM = 695_700.0  # IAU 2015 resolution B3


def roche_oblateness(v_eq_km_s: ArrayLike, radius_sun: ArrayLike, mass_sun: ArrayLike) -> Floats:
    """1 - R_pole / R_equator of a star that rotates as a Roche figure.

    Parameters
    ----------
    v_eq_km_s, radius_sun, mass_sun : float or array, shape (N,)
        Equatorial speed, equatorial radius and mass.

    Returns
    -------
    oblateness : array, shape (N,)
        NaN above the critical 1/3.

    Notes
    -----
    R_eq / R_p = 1 + v^2 R_eq / (2 G M): the potential is the same at pole and equator.

    >>> round(float(roche_oblateness(120.0, 2.0, 2.0)), 3)
    0.036
    """
    v, radius, mass = (np.asarray(x, float) for x in (v_eq_km_s, radius_sun, mass_sun))
    excess = v**2 * radius * _R_SUN_KM / (2 * _GM_SUN_KM3_S2 * mass)
    return np.where(excess <= 0.5, excess / (1 + excess), np.nan)


def oblateness_bound(spectral_code: ArrayLike, fast: ArrayLike) -> Floats:
    """The oblateness to assume where no rotation speed is known, shape (N,).

    Earlier than F5 a star is taken to turn at 150 km/s with 2 solar radii and masses, one flagged
    as a fast rotator at 280 km/s; later types turn slowly and are taken as round (common
    practice, no source).
    """
    early = np.asarray(spectral_code, float) < 35
    ordinary, rapid = (float(roche_oblateness(v, 2.0, 2.0)) for v in (150.0, 280.0))
    bound = np.where(early, ordinary, 0.0)
    return np.where(np.asarray(fast, bool), rapid, bound)
