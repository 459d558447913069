"""Effective temperature and surface gravity, as far as limb darkening needs them."""

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "effective_temperature_k",
    "expected_v_ks",
    "gravity_from_radius",
    "spectral_code_from_colour",
    "surface_gravity",
]

Floats = NDArray[np.float64]

# Spectral code, Teff, V - Ks of dwarfs: Pecaut & Mamajek (2013), ApJS 208, 9 (memory, rounded).
# Second routes, in the tests: Casagrande et al. (2010) between V - Ks 0.78 and 3.15, and the
# temperatures of stars with measured diameters (von Braun et al. 2014, MNRAS 438, 2413).
_DWARF = np.array(
    [
        (5.0, 41400, -1.00), (10.0, 31400, -0.95), (13.0, 17000, -0.60), (15.0, 15700, -0.50),
        (18.0, 12500, -0.25), (20.0, 9700, 0.04), (25.0, 8080, 0.40), (30.0, 7220, 0.78),
        (35.0, 6550, 1.10), (38.0, 6180, 1.31), (40.0, 5930, 1.42), (42.0, 5770, 1.54),
        (45.0, 5660, 1.61), (48.0, 5480, 1.77), (50.0, 5270, 1.96), (52.0, 5040, 2.20),
        (55.0, 4440, 2.85), (57.0, 4050, 3.42), (60.0, 3850, 3.79), (62.0, 3560, 4.20),
        (63.0, 3430, 4.55), (64.0, 3210, 5.10), (65.0, 3060, 5.60), (66.0, 2810, 6.20),
    ]
)  # fmt: skip
# Giants: after Alonso, Arribas & Martinez-Roger (1999), A&AS 140, 261 (memory, rounded to 50 K). A
# temperature wrong by 150 K moves theta_UD by about 0.1 % in K and 0.3 % in V; a test measures it.
_GIANT = np.array(
    [(30.0, 7200), (40.0, 5600), (45.0, 5050), (48.0, 4900), (50.0, 4750), (52.0, 4500),
     (53.0, 4300), (55.0, 3950), (60.0, 3850), (62.0, 3700), (64.0, 3550), (66.0, 3300)]
)  # fmt: skip
# V - Ks of giants by type: Bessell & Brett (1988), PASP 100, 1134, table 3, less the 0.04 mag between
# their K and Ks (memory, rounded). Second route, in the tests: the medians of the seed's giants.
_GIANT_V_KS = np.array(
    [(30.0, 0.75), (40.0, 1.71), (44.0, 1.94), (48.0, 2.12), (50.0, 2.27), (51.0, 2.46), (52.0, 2.66),
     (53.0, 2.96), (54.0, 3.22), (55.0, 3.56), (60.0, 3.81), (61.0, 4.01), (62.0, 4.26), (63.0, 4.60),
     (64.0, 5.20), (65.0, 5.90), (66.0, 6.80)]
)  # fmt: skip
# log g along the main sequence and of giants (common practice, no source).
_DWARF_LOGG = np.array([(5.0, 4.0), (30.0, 4.2), (40.0, 4.4), (50.0, 4.55), (60.0, 4.7), (66.0, 5.0)])
_SUBGIANT_LOGG = np.array([(5.0, 3.9), (30.0, 3.9), (40.0, 3.9), (50.0, 3.6), (60.0, 3.0)])
_GIANT_LOGG = np.array(
    [(5.0, 3.6), (30.0, 3.3), (45.0, 2.8), (50.0, 2.5), (55.0, 1.7), (60.0, 1.4), (66.0, 0.7)]
)
_SUPERGIANT_LOGG = np.array([(5.0, 3.2), (20.0, 2.0), (40.0, 1.2), (60.0, 0.3)])


def spectral_code_from_colour(v_ks: Floats) -> Floats:
    """The dwarf's temperature code at a colour V - Ks, NaN where there is none, shape (N,)."""
    return np.where(np.isnan(v_ks), np.nan, np.interp(v_ks, _DWARF[:, 2], _DWARF[:, 0]))


def expected_v_ks(code: Floats, group: NDArray[np.str_]) -> Floats:
    """V - Ks that a spectral type leads one to expect, NaN for supergiants and unknown types. [mag]

    A subgiant later than G4 lies half way between dwarf and giant.
    """
    dwarf = np.interp(code, _DWARF[:, 0], _DWARF[:, 2])
    giant = np.where(code < 30, dwarf, np.interp(code, _GIANT_V_KS[:, 0], _GIANT_V_KS[:, 1]))
    subgiant = np.where(code > 44, 0.5 * (dwarf + giant), dwarf)
    of_group = {"dwarf": dwarf, "subgiant": subgiant, "giant": giant}
    colour = np.select([group == name for name in of_group], list(of_group.values()), np.nan)
    return np.where(np.isnan(code), np.nan, colour)


def effective_temperature_k(code: Floats, group: NDArray[np.str_], v_ks: Floats) -> Floats:
    """Effective temperature from the spectral code, else from V - Ks. [K]

    Parameters
    ----------
    code : array, shape (N,)
        Of `parse_spectral_type`; NaN where the type is unknown.
    group : array of str, shape (N,)
        Of `luminosity_groups`.
    v_ks : array, shape (N,)
        Dereddened colour; used where `code` is NaN.

    Returns
    -------
    teff_k : array, shape (N,)
        NaN where neither is known.

    Notes
    -----
    The colour relation of dwarfs is Casagrande et al. (2010), A&A 512, A54, table 4 (V - Ks, [Fe/H] =
    0; memory), 5040 / Teff = 0.5057 + 0.2600 X - 0.0146 X^2 for 0.78 <= X <= 3.15, which gives the
    Sun 5787 K; outside that range the dwarf table above. That of giants is Alonso et al. (1999),
    A&AS 140, 261, eq. 9 at [Fe/H] = 0 (memory), 0.3770 + 0.3660 X - 0.03170 X^2 with X = V - K for
    2.0 <= X <= 4.9; second routes, in the tests: the table of giants by type, and HD 29139.
    """
    by_type = np.where(
        group == "giant",
        np.interp(code, _GIANT[:, 0], _GIANT[:, 1]),
        np.interp(code, _DWARF[:, 0], _DWARF[:, 1]),
    )
    by_type = np.where((group == "giant") & (code < 30), np.interp(code, _DWARF[:, 0], _DWARF[:, 1]), by_type)
    by_colour = np.where(
        (v_ks >= 0.78) & (v_ks <= 3.15),
        5040 / (0.5057 + 0.2600 * v_ks - 0.0146 * v_ks**2),
        np.interp(v_ks, _DWARF[:, 2], _DWARF[:, 1]),
    )
    v_k = v_ks - 0.039  # Carpenter (2001), as in photometry/systems.py
    of_giants = 5040 / (0.3770 + 0.3660 * v_k - 0.03170 * v_k**2)
    by_colour = np.where((group == "giant") & (v_k >= 2.0) & (v_k <= 4.9), of_giants, by_colour)
    return np.where(np.isnan(code), by_colour, by_type)


def surface_gravity(code: Floats, group: NDArray[np.str_]) -> Floats:
    """log g [cm/s^2] typical of a temperature code and luminosity group, shape (N,)."""
    tables = {
        "dwarf": _DWARF_LOGG,
        "subgiant": _SUBGIANT_LOGG,
        "giant": _GIANT_LOGG,
        "supergiant": _SUPERGIANT_LOGG,
    }
    logg = np.full(np.shape(code), np.nan)
    for name, table in tables.items():
        logg = np.where(group == name, np.interp(code, table[:, 0], table[:, 1]), logg)
    return np.where(np.isnan(code), np.nan, logg)


def gravity_from_radius(teff_k: Floats, diameter_per_parallax: Floats, typical_logg: Floats) -> Floats:
    """log g [cm/s^2] from a star's radius, that is from its diameter and parallax.

    Parameters
    ----------
    teff_k : array, shape (N,)
    diameter_per_parallax : array, shape (N,)
        Both in mas. The radius in solar units is this over 9.30093e-3 (IAU 2015 resolution B3).
    typical_logg : array, shape (N,)
        What the type lets expect; where nothing is known, or the answer lies over 0.8 dex from it (a
        wrong parallax or type), it stays.

    Returns
    -------
    logg : array, shape (N,)

    Notes
    -----
    Torres, Andersen & Gimenez (2010), A&ARv 18, 67, table 4: log M as a polynomial of X = log Teff -
    4.1 and log g, [Fe/H] = 0 (memory), with g = G M / R^2 solved for log g by iteration. Second routes,
    in the tests: the Sun's mass and gravity, and red clump giants.
    """
    x = np.log10(teff_k) - 4.1
    radius = np.log10(diameter_per_parallax / 9.30093e-3)
    by_temperature = 1.5689 + x * (1.3787 + x * (0.4243 + x * 1.139))
    logg = typical_logg.copy()
    for _ in range(4):
        mass = by_temperature + logg * logg * (0.01969 * logg - 0.1425)
        logg = 0.5 * (logg + 4.438 + np.clip(mass, -1.2, 1.6) - 2 * radius)
    return np.where(np.abs(logg - typical_logg) < 0.8, logg, typical_logg)
