"""The bands of the catalogue: effective wavelengths and default errors."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pinlight.errors import InputError

__all__ = ["BANDS", "Band", "band", "check_magnitude", "default_errors", "nearest_band", "saturation_errors"]


@dataclass(frozen=True)
class Band:
    """One band: its name, system, effective wavelength, Vega flux and default errors.

    `default_error_mag` is used where a source gives none; of `saturation`, pairs of a magnitude
    and an error in order of brightness, the first that a star is brighter than takes its place, and
    `saturated_shared_mag` is what all stars brighter than the last pair may be wrong by together.
    """

    name: str
    system: str
    wavelength_um: float
    vega_flux_w_m2_um: float
    default_error_mag: float
    saturation: tuple[tuple[float, float], ...] = ()
    saturated_shared_mag: float = 0.0


# Effective wavelengths and Vega fluxes: Willmer (2018), ApJS 236, 47.
# Default errors, ours: Johnson B and V of bright stars agree between compilations to 0.01-0.02
# mag; unsaturated 2MASS photometry of bright stars is good to about 0.03 mag. Saturation: the
# 2MASS All-Sky Explanatory Supplement, sec. 4.4d and 1.6b, puts it between magnitudes 4 and 5 and
# the accuracy beyond at 0.2-0.3 mag. The steps here are what the seed's own F, G and K stars show:
# the scatter of V - J, V - H, V - Ks about their run with B - V, in excess of fainter stars', and
# the shared part is by how much their medians lie off it, faint in all three bands.
BANDS = {
    b.name: b
    for b in (
        Band("B", "Johnson", 0.4390, 6.338e-8, 0.02),
        Band("V", "Johnson", 0.5476, 3.627e-8, 0.015),
        Band("R", "Cousins", 0.6492, 2.132e-8, 0.03),
        Band("I", "Cousins", 0.7993, 1.151e-8, 0.03),
        Band("J", "2MASS", 1.2321, 3.179e-9, 0.03, ((5.25, 0.17), (5.75, 0.06)), 0.10),
        Band("H", "2MASS", 1.6424, 1.160e-9, 0.03, ((4.75, 0.15), (5.25, 0.06)), 0.06),
        Band("Ks", "2MASS", 2.1558, 4.373e-10, 0.03, ((4.0, 0.15), (4.5, 0.06)), 0.06),
    )
}


def band(name: str) -> Band:
    """The band of that name, case as the trade writes it.

    Raises
    ------
    InputError
        If there is none.
    """
    if name not in BANDS:
        raise InputError(f"band is {name!r}; it may be one of {', '.join(BANDS)}")
    return BANDS[name]


def check_magnitude(name: str, value: float) -> float:
    """The same magnitude, or an error where it cannot be one (99 and NaN are common stand-ins).

    Raises
    ------
    InputError
        If `name` is no band or `value` not between -5 and 30.
    """
    band(name)
    if not -5 <= value <= 30:  # NaN fails too
        raise InputError(f"{name} is {value:g}; a magnitude lies between -5 and 30")
    return float(value)


def nearest_band(wavelength_um: float, names: tuple[str, ...]) -> str:
    """Of `names`, the band nearest in the logarithm of wavelength.

    >>> nearest_band(2.2, ("V", "J", "Ks"))
    'Ks'
    """
    return min(names, key=lambda name: abs(np.log(BANDS[name].wavelength_um / wavelength_um)))


def default_errors(name: str, magnitudes: NDArray[np.float64]) -> NDArray[np.float64]:
    """The error to use for magnitudes that come without one. [mag]

    Parameters
    ----------
    name : str
        The band.
    magnitudes : array, shape (N,)
        NaN stays NaN.

    Returns
    -------
    errors : array, shape (N,)
    """
    the_band = band(name)
    errors = np.full(np.shape(magnitudes), the_band.default_error_mag)
    for brighter_than, error in reversed(the_band.saturation):
        errors = np.where(magnitudes < brighter_than, error, errors)
    return np.where(np.isnan(magnitudes), np.nan, errors)


def saturation_errors(name: str, magnitudes: NDArray[np.float64]) -> NDArray[np.float64]:
    """By how much magnitudes may be wrong together because the instrument saturates; 0 else. [mag]"""
    the_band = band(name)
    if not the_band.saturation:
        return np.zeros(np.shape(magnitudes))
    with np.errstate(invalid="ignore"):
        return np.where(magnitudes < the_band.saturation[-1][0], the_band.saturated_shared_mag, 0.0)
