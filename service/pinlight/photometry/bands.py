"""The bands of the catalogue: effective wavelengths and default errors."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pinlight.errors import InputError

__all__ = [
    "BANDS",
    "PHOTOMETRY",
    "Band",
    "CompletePhotometry",
    "band",
    "check_magnitude",
    "complete_photometry",
    "default_errors",
    "nearest_band",
    "saturation_errors",
    "saturation_offsets",
]


@dataclass(frozen=True)
class Band:
    """One band: its name, system, effective wavelength, Vega flux and default errors.

    `default_error_mag` is used where a source gives none. `saturation` says what becomes of the
    survey's magnitudes of bright stars, in order of brightness: steps of a magnitude, the error of
    stars brighter than it, and by how much they come out too faint in the median; the first step
    that a star is brighter than holds. `saturated_shared_mag` is by how much that median may be
    wrong for all of them together, and `SATURATED_LINK` the part of a saturated error's variance
    that the star's other saturated bands have too. `faint` are steps of a magnitude and the error of
    stars fainter than it.
    """

    name: str
    system: str
    wavelength_um: float
    vega_flux_w_m2_um: float
    default_error_mag: float
    saturation: tuple[tuple[float, float, float], ...] = ()
    saturated_shared_mag: float = 0.0
    faint: tuple[tuple[float, float], ...] = ()


# The rank correlations between the seed's saturated J, H and Ks, in V - J, V - H and V - Ks at their
# B - V, are 0.6 to 0.8: they come from the same wings of one image.
SATURATED_LINK = 0.6

# Effective wavelengths and Vega fluxes: Willmer (2018), ApJS 236, 47.
# Default errors, ours. Johnson B and V of bright stars agree between compilations to 0.01-0.02 mag.
# Those of faint stars come from Tycho photometry, whose noise grows: in B as the scatter of B - V
# about V - Ks of the seed's dwarfs grows from V = 8 to 12, in V as Hog et al. (2000), A&A 355, L27
# tell (memory: 0.013 mag down to VT = 9, 0.10 for all). Unsaturated 2MASS: the diameters of the
# seed's dwarfs by V - H and V - Ks differ by 1.7 %, which is 0.02 mag a band; 0.02 is also what the
# survey quotes for such stars.
# Saturation: the 2MASS All-Sky Explanatory Supplement, sec. 4.4d and 1.6b, puts it between magnitudes
# 4 and 5 and the accuracy beyond at 0.2-0.3 mag, with no word of a bias. The steps here are what the
# seed's own F, G and K dwarfs and giants show, measured stars left out: scatter and median of V - J,
# V - H, V - Ks about the run of unsaturated stars with B - V. Second route in Ks: 181 stars within
# 30 pc with ground-based K, of which 2MASS is too faint by 0.10 mag at Ks 3.5 to 4.1, 0.05 at 4.1 to 4.5
# and 0.02 at brighter ones. Dwarfs, giants and the ground differ by up to 0.05 mag, whence the shared part.
BANDS = {
    b.name: b
    for b in (
        Band("B", "Johnson", 0.4390, 6.338e-8, 0.02,
             faint=((9.5, 0.035), (10.2, 0.06), (10.9, 0.09), (11.6, 0.13), (12.4, 0.20))),
        Band("V", "Johnson", 0.5476, 3.627e-8, 0.015,
             faint=((9.5, 0.03), (10.5, 0.06), (11.5, 0.09))),
        Band("R", "Cousins", 0.6492, 2.132e-8, 0.03),
        Band("I", "Cousins", 0.7993, 1.151e-8, 0.03),
        Band("J", "2MASS", 1.2321, 3.179e-9, 0.02,
             ((3.0, 0.10, 0.04), (4.0, 0.14, 0.065), (4.5, 0.16, 0.10), (5.0, 0.16, 0.12),
              (5.25, 0.10, 0.05), (5.75, 0.05, 0.01)), 0.04),
        Band("H", "2MASS", 1.6424, 1.160e-9, 0.02,
             ((3.0, 0.13, 0.01), (4.0, 0.13, 0.0), (4.75, 0.09, 0.08), (5.0, 0.06, 0.03),
              (5.25, 0.04, 0.01)), 0.04),
        Band("Ks", "2MASS", 2.1558, 4.373e-10, 0.02,
             ((3.5, 0.13, 0.03), (4.1, 0.10, 0.08), (4.5, 0.07, 0.04)), 0.04),
    )
}  # fmt: skip

_NONE = float("nan")
# Bands that predictions read besides. Wavelengths: BT, VT and WISE from Willmer (2018); Gaia from the
# law's own tables (extinction at one wavelength); L Bessell, Castelli & Plez (1998); W4 memory, where
# nothing depends on it. J_BB, H_BB, K_BB: the homogenised Johnson-Glass system of Bessell & Brett
# (1988), PASP 100, 1134; default error that of photoelectric JHK of bright stars (common practice).
PHOTOMETRY = BANDS | {
    b.name: b
    for b in (
        Band("J_BB", "Bessell & Brett", 1.2321, _NONE, 0.04),
        Band("H_BB", "Bessell & Brett", 1.6424, _NONE, 0.04),
        Band("K_BB", "Bessell & Brett", 2.1558, _NONE, 0.04),
        Band("L", "Johnson", 3.45, _NONE, 0.06),
        Band("W3", "WISE", 11.3086, 5.652e-13, 0.03),
        Band("W4", "WISE", 22.1, _NONE, 0.04),
        Band("BT", "Tycho-2", 0.4234, 6.710e-8, 0.02),
        Band("VT", "Tycho-2", 0.5291, 3.949e-8, 0.015),
        Band("G", "Gaia", 0.622, _NONE, 0.01, ((3.0, 0.3, 0.0),)),
        Band("BP", "Gaia", 0.511, _NONE, 0.01, ((3.5, 0.3, 0.0),)),
        Band("RP", "Gaia", 0.777, _NONE, 0.01, ((3.5, 0.3, 0.0),)),
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
    if name not in PHOTOMETRY:
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
    the_band = PHOTOMETRY[name]
    errors = _by_step(the_band, magnitudes, 1, the_band.default_error_mag)
    with np.errstate(invalid="ignore"):
        for fainter_than, error in the_band.faint:
            errors = np.where(magnitudes > fainter_than, error, errors)
    return np.where(np.isnan(magnitudes), np.nan, errors)


def saturation_offsets(name: str, magnitudes: NDArray[np.float64]) -> NDArray[np.float64]:
    """By how much the survey's magnitudes are too faint because its instrument saturates; 0 else. [mag]"""
    return _by_step(PHOTOMETRY[name], magnitudes, 2, 0.0)


def saturation_errors(name: str, magnitudes: NDArray[np.float64]) -> NDArray[np.float64]:
    """By how much magnitudes may be wrong together because the instrument saturates; 0 else. [mag]"""
    the_band = PHOTOMETRY[name]
    if not the_band.saturation:
        return np.zeros(np.shape(magnitudes))
    with np.errstate(invalid="ignore"):
        return np.where(magnitudes < the_band.saturation[-1][0], the_band.saturated_shared_mag, 0.0)


@dataclass(frozen=True)
class CompletePhotometry:
    """Magnitudes of N stars in I bands, and all that is known of their errors; every array has shape (N, I).

    `errors` is NaN where the magnitude is. `linked_errors` is the part of them (in squares) that a
    star's bands have together, `shared_errors` what all stars so marked have together besides.
    """

    magnitudes: NDArray[np.float64]
    errors: NDArray[np.float64]
    linked_errors: NDArray[np.float32]
    shared_errors: NDArray[np.float32]


def complete_photometry(
    bands: tuple[str, ...], magnitudes: NDArray[np.float64], errors: NDArray[np.float64]
) -> CompletePhotometry:
    """Fill in what a source does not say.

    A magnitude without an error is taken to be the survey's: it gets its band's default error, and
    where the instrument saturates the correction of its bias. An error that is given is believed, and
    says that the photometry needs no correction.

    Parameters
    ----------
    bands : tuple of str
        The I columns.
    magnitudes, errors : array, shape (N, I)
        NaN where missing.
    """
    whole = CompletePhotometry(
        magnitudes.copy(), errors.copy(), *(np.zeros(magnitudes.shape, dtype=np.float32) for _ in range(2))
    )
    for index, name in enumerate(bands):
        values, assume = magnitudes[:, index], ~np.isfinite(errors[:, index])
        assumed = default_errors(name, values)
        whole.errors[:, index] = np.where(assume, assumed, errors[:, index])
        if PHOTOMETRY[name].saturation:
            shared = saturation_errors(name, values)
            whole.magnitudes[:, index] -= np.where(assume, saturation_offsets(name, values), 0.0)
            whole.linked_errors[:, index] = np.where(assume & (shared > 0), assumed * SATURATED_LINK**0.5, 0.0)
            whole.shared_errors[:, index] = np.where(assume, shared, 0.0)
    return whole


def _by_step(
    the_band: Band, magnitudes: NDArray[np.float64], part: int, unsaturated: float
) -> NDArray[np.float64]:
    values = np.full(np.shape(magnitudes), unsaturated)
    with np.errstate(invalid="ignore"):
        for step in reversed(the_band.saturation):
            values = np.where(magnitudes < step[0], step[part], values)
    return values
