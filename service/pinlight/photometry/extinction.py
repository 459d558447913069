"""Interstellar extinction: the law at each band and the prior of A_V."""

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.photometry.bands import PHOTOMETRY

__all__ = ["extinction_prior", "relative_extinction"]

Floats = NDArray[np.float64]

# Disc: the cosecant form with a scale height, arXiv:2106.03081 eq. 1; constants of Sharov (1963)
# as commonly quoted (memory). Second route: they give 0.17 mag from the plane to the pole,
# against 0.15 mag in teaching notes, and their mean of 1.5 mag/kpc lies in the usual 1-2 mag/kpc.
_PLANE_MAG_PER_KPC = 1.5
_SCALE_HEIGHT_KPC = 0.114
# Reddening is negligible within about 70 pc (common practice in diameter papers).
_BUBBLE_KPC = 0.070


_LAW_ENDS_UM = 3.3


@lru_cache(maxsize=32)
def relative_extinction(name: str) -> float:
    """A(band)/A_V at the band's effective wavelength, R_V = 3.1.

    Notes
    -----
    Fitzpatrick, Massa, Gordon et al. (2019), ApJ 886, 108, as computed by the
    `dust_extinction` library, normalised to 1 in V. Beyond that law's end at 3.3 um the infrared
    branch of Cardelli, Clayton & Mathis (1989), ApJ 345, 245: (0.574 - 0.527 / R_V) x^1.61, x = 1 /
    wavelength; in W3 that leaves the silicates out, which matters little where A_V is small.
    """
    wavelength_um = PHOTOMETRY[name].wavelength_um
    if wavelength_um > _LAW_ENDS_UM:
        return float((0.574 - 0.527 / 3.1) * wavelength_um**-1.61)
    from astropy import units  # slow to import
    from dust_extinction.parameter_averages import F19

    in_band, in_v = F19(Rv=3.1)([wavelength_um, PHOTOMETRY["V"].wavelength_um] * units.um)
    return float(in_band / in_v)


def extinction_prior(parallax_mas: ArrayLike, galactic_latitude_deg: ArrayLike) -> tuple[Floats, Floats]:
    """What is expected of A_V before anything else is known. [mag]

    An exponential disc of dust outside a local bubble that holds none.

    Parameters
    ----------
    parallax_mas, galactic_latitude_deg : array, shape (N,)
        A parallax that is NaN or not positive puts the star beyond the dust.

    Returns
    -------
    av_mag, av_error_mag : array, shape (N,)
        The error is max(0.05, 0.5 A_V).
    """
    parallax = np.asarray(parallax_mas, float)
    with np.errstate(divide="ignore"):
        distance_kpc = np.where(parallax > 0, 1 / parallax, np.inf)
    sine = np.maximum(np.abs(np.sin(np.radians(galactic_latitude_deg))), 1e-4)
    per_column = _PLANE_MAG_PER_KPC * _SCALE_HEIGHT_KPC / sine
    outer, inner = (np.exp(-d * sine / _SCALE_HEIGHT_KPC) for d in (distance_kpc, _BUBBLE_KPC))
    av = np.where(distance_kpc > _BUBBLE_KPC, per_column * (inner - outer), 0.0)
    return av, np.maximum(0.05, 0.5 * av)
