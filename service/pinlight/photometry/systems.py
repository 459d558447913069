"""From the magnitudes that catalogues give to the systems that diameter relations were calibrated in."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["CATALOGUE_BANDS", "INPUT_BANDS", "SYSTEM_BANDS", "SystemMagnitudes", "to_systems"]

Floats = NDArray[np.float64]

CATALOGUE_BANDS = ("B", "V", "J", "H", "Ks")
# All that a prediction reads; the catalogue keeps the first five.
INPUT_BANDS = (
    *CATALOGUE_BANDS, "R", "I", "J_BB", "H_BB", "K_BB", "L", "W3", "W4", "BT", "VT", "G", "BP", "RP",
)  # fmt: skip
# B, V Johnson; R, I Cousins; J, H, Ks 2MASS; J_BB, H_BB, K_BB the homogenised Johnson-Glass system of
# Bessell & Brett (1988), PASP 100, 1134; L Johnson; W3, W4 WISE; BP, RP Gaia DR3.
SYSTEM_BANDS = (
    "B", "V", "J", "H", "Ks", "R", "I", "J_BB", "H_BB", "K_BB", "L", "W3", "W4", "BP", "RP",
)  # fmt: skip

# Bessell (2000), PASP 112, 961, table 2, mmag: BT - VT, V - VT, (B - V) - (BT - VT); every other row.
# B - G dwarfs and K - M giants.
_TYCHO = np.array(
    [
        (-0.25, 38, 31), (-0.15, 22, 11), (-0.05, 8, 2), (0.05, -5, -10), (0.15, -18, -20), (0.25, -29, -23),
        (0.35, -40, -25), (0.45, -50, -30), (0.55, -59, -45), (0.65, -68, -60), (0.75, -77, -76),
        (0.85, -85, -94), (0.95, -93, -113), (1.05, -102, -131), (1.15, -110, -154), (1.25, -119, -178),
        (1.35, -128, -199), (1.45, -138, -222), (1.55, -148, -245), (1.65, -160, -266), (1.75, -172, -288),
        (1.85, -185, -309), (2.00, -206, -342),
    ]
) / [1, 1000, 1000]  # fmt: skip
# ESA (1997), The Hipparcos and Tycho Catalogues, guide p. 57: errors below 0.015 mag in V, 0.05 in B - V.
_TYCHO_SCATTER_V, _TYCHO_SCATTER_BV = 0.015, 0.05

# Riello et al. (2021), A&A 649, A3, app. C: G - band as a polynomial of BP - RP, its range, its scatter.
# The scatters of V and R are published; B, I, J, H and Ks have none quoted: taken wide (0.1 mag in the
# infrared, where giants and dwarfs of one colour differ).
_GAIA: dict[str, tuple[tuple[float, ...], float, float, float]] = {
    "B": ((0.01448, -0.6874, -0.3604, 0.06718, -0.006061), -0.5, 4.0, 0.07),
    "V": ((-0.02704, 0.01424, -0.2156, 0.01426), -0.5, 5.0, 0.030),
    "R": ((-0.02275, 0.3961, -0.1243, -0.01396, 0.003775), 0.0, 4.0, 0.032),
    "I": ((0.01753, 0.76, -0.0991), -0.5, 4.5, 0.04),
    "J": ((0.01798, 1.389, -0.09338), -0.5, 2.5, 0.10),
    "H": ((-0.1048, 2.011, -0.1758), -0.5, 2.5, 0.10),
    "Ks": ((-0.0981, 2.089, -0.1579), -0.5, 2.5, 0.10),
}

# Carpenter (2001), AJ 121, 2851, in the 2003 update of the 2MASS Explanatory Supplement VI.4b:
# Ks = K - 0.039, J - Ks = 0.983 (J - K) - 0.018, J - H = 0.990 (J - H) - 0.049. The coefficients are
# from memory; second routes: no colour term against an independent K system (aanda 2002/33, aah3596,
# scatter 0.02 mag), and the Sun, whose diameter the V - K relation gives to 0.3 % with this offset and
# to 2 % without. The K colour term, 0.001, is dropped.
_K, _JK_SLOPE, _JK, _JH_SLOPE, _JH = 0.039, 0.983, 0.018, 0.990, 0.049
_INFRARED_SCATTER = 0.02


@dataclass(frozen=True)
class SystemMagnitudes:
    """Magnitudes of N stars in all S systems of `SYSTEM_BANDS`, and how they depend on the I inputs.

    values : shape (N, S), NaN where there is no way to the band
    by_input : shape (S, I) or (N, S, I), d value / d input magnitude
    by_scatter : shape (S, S), how many magnitudes of each transformation's own scatter (columns,
        independent of each other) lie in each band (rows)
    """

    values: Floats
    by_input: Floats
    by_scatter: Floats


def to_systems(bands: tuple[str, ...], magnitudes: Floats) -> SystemMagnitudes:
    """Magnitudes in every system, for stars that have the same bands.

    A band that is measured is taken as it is. Else B and V come from Tycho-2, then B, V, R, I, J, H
    and Ks from Gaia; 2MASS and Bessell & Brett come from each other. What is transformed brings its
    scatter along.

    Parameters
    ----------
    bands : tuple of str
        The I bands that all these stars have, of `INPUT_BANDS`.
    magnitudes : array, shape (N, I)
        None may be NaN.

    Returns
    -------
    systems : SystemMagnitudes
        NaN too where a colour lies outside a transformation's published range.

    Notes
    -----
    Sources stand beside the coefficients above.
    """
    count = len(magnitudes)
    at = {name: index for index, name in enumerate(bands)}
    row = {name: index for index, name in enumerate(SYSTEM_BANDS)}
    values = np.full((count, len(SYSTEM_BANDS)), np.nan)
    # Derivatives stay one matrix for all stars until a transformation depends on the star's colour.
    curved = ("BT" in at and "VT" in at and not {"B", "V"} <= at.keys()) or (
        {"G", "BP", "RP"} <= at.keys() and not {"B", "V", "R", "I", "J", "H", "Ks"} <= at.keys()
    )
    by_input = np.zeros((count if curved else 1, len(SYSTEM_BANDS), len(bands)))
    by_scatter = np.zeros((len(SYSTEM_BANDS), len(SYSTEM_BANDS)))

    def known(name: str) -> bool:
        return bool(by_input[:, row[name]].any()) if count else name in at

    for name in SYSTEM_BANDS:
        if name in at:
            values[:, row[name]] = magnitudes[:, at[name]]
            by_input[:, row[name], at[name]] = 1.0
    if curved and "BT" in at and "VT" in at:
        _from_tycho(at, row, magnitudes, values, by_input, by_scatter)
    if curved and {"G", "BP", "RP"} <= at.keys():
        _from_gaia(at, row, magnitudes, values, by_input, by_scatter)

    def combine(name: str, parts: dict[str, float], offset: float, scatter: float) -> None:
        """`name` as a sum of other bands."""
        target = row[name]
        values[:, target] = offset + sum(factor * values[:, row[part]] for part, factor in parts.items())
        by_input[:, target] = sum(factor * by_input[:, row[part]] for part, factor in parts.items())
        by_scatter[target] = sum(factor * by_scatter[row[part]] for part, factor in parts.items())
        by_scatter[target, target] = scatter

    if known("Ks") and not known("K_BB"):
        combine("K_BB", {"Ks": 1.0}, _K, _INFRARED_SCATTER)
    if known("J") and known("Ks") and not known("J_BB"):
        # J_BB = K_BB + (J - Ks + 0.018) / 0.983
        slope = 1 / _JK_SLOPE
        combine("J_BB", {"J": slope, "Ks": 1 - slope}, _K + _JK * slope, _INFRARED_SCATTER)
    if known("J_BB") and known("J") and known("H") and not known("H_BB"):
        # H_BB = J_BB - (J - H + 0.049) / 0.990, J_BB without its own scatter
        slope, within = 1 / _JH_SLOPE, 1 / _JK_SLOPE
        if known("Ks"):
            parts = {"J": within - slope, "Ks": 1 - within, "H": slope}
            combine("H_BB", parts, _K + _JK * within - _JH * slope, _INFRARED_SCATTER)
    if "K_BB" in at and not known("Ks"):
        combine("Ks", {"K_BB": 1.0}, -_K, _INFRARED_SCATTER)
    if "J_BB" in at and "K_BB" in at and not known("J"):
        parts = {"K_BB": 1 - _JK_SLOPE, "J_BB": _JK_SLOPE}
        combine("J", parts, -_K - _JK, _INFRARED_SCATTER)
    if {"J_BB", "H_BB", "K_BB"} <= at.keys() and not known("H"):
        parts = {"K_BB": 1 - _JK_SLOPE, "J_BB": _JK_SLOPE - _JH_SLOPE, "H_BB": _JH_SLOPE}
        combine("H", parts, -_K - _JK + _JH, _INFRARED_SCATTER)
    return SystemMagnitudes(values, by_input if curved else by_input[0], by_scatter)


def _from_tycho(
    at: dict[str, int], row: dict[str, int], magnitudes: Floats,
    values: Floats, by_input: Floats, by_scatter: Floats,
) -> None:  # fmt: skip
    """B and V from BT and VT where they are not measured."""
    bt, vt = at["BT"], at["VT"]
    colour = magnitudes[:, bt] - magnitudes[:, vt]
    inside = (colour >= _TYCHO[0, 0]) & (colour <= _TYCHO[-1, 0])
    v_minus_vt, excess = (np.interp(colour, _TYCHO[:, 0], _TYCHO[:, i]) for i in (1, 2))
    step = np.clip(np.searchsorted(_TYCHO[:, 0], colour, side="right") - 1, 0, len(_TYCHO) - 2)
    run = _TYCHO[step + 1, 0] - _TYCHO[step, 0]
    v_slope, bv_slope = ((_TYCHO[step + 1, i] - _TYCHO[step, i]) / run for i in (1, 2))
    v_value = magnitudes[:, vt] + v_minus_vt
    for name, value, slope, scatter in (
        ("V", v_value, v_slope, _TYCHO_SCATTER_V),
        ("B", v_value + colour + excess, v_slope + 1 + bv_slope, _TYCHO_SCATTER_BV),
    ):
        if name in at:
            continue
        values[:, row[name]] = np.where(inside, value, np.nan)
        by_input[:, row[name], vt] = 1 - slope
        by_input[:, row[name], bt] = slope
        by_scatter[row[name], row[name]] = scatter


def _from_gaia(
    at: dict[str, int], row: dict[str, int], magnitudes: Floats,
    values: Floats, by_input: Floats, by_scatter: Floats,
) -> None:  # fmt: skip
    """Everything from B to Ks that nothing better gives, from G and BP - RP."""
    g, bp, rp = at["G"], at["BP"], at["RP"]
    colour = magnitudes[:, bp] - magnitudes[:, rp]
    for name, (coefficients, low, high, scatter) in _GAIA.items():
        if by_input[:, row[name]].any() or (name in ("J", "H", "Ks") and {f"{name[0]}_BB"} <= at.keys()):
            continue
        inside = (colour >= low) & (colour <= high)
        polynomial = np.polynomial.polynomial
        values[:, row[name]] = np.where(
            inside, magnitudes[:, g] - polynomial.polyval(colour, coefficients), np.nan
        )
        slope = polynomial.polyval(colour, polynomial.polyder(coefficients))
        by_input[:, row[name], g] = 1.0
        by_input[:, row[name], bp] = -slope
        by_input[:, row[name], rp] = slope
        by_scatter[row[name], row[name]] = scatter
