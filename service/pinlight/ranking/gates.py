"""Gates: what excludes a star outright, and why."""

import numpy as np
from numpy.typing import NDArray

from pinlight.ranking.budget import known_companion_terms
from pinlight.ranking.columns import StarColumns, flag_bits
from pinlight.ranking.setup import Setup, Thresholds
from pinlight.ranking.target import Target

__all__ = ["COMPANION_LIMIT", "REASONS", "REMARKS", "close_gates"]

# Each reason and what it means, in the order of the gates; a star is counted at the first it fails.
REASONS = {
    "is_target": "it is the target itself",
    "target_companion": "within 60 arcsec of the target",
    "too_far": "farther from the target than the limit",
    "never_up": "never rises above the array's altitude limit",
    "no_diameter": "no published relation applies to its type and colours",
    "no_magnitude": "no magnitude in the mode's band",
    "too_faint": "fainter than the limit",
    "too_bright": "brighter than the limit",
    "barred": "barred by a member of the team",
    "close_binary": "a spectroscopic, eclipsing or interacting binary, or a composite spectrum",
    "companion": "an entry of several stars, or a bright companion in the field",
    "variable": "a variable or unstable star of a kind that is not constant enough",
    "discordant": "its colours disagree about its diameter",
    "not_up": "not observable while the target is",
    "out_of_reach": "the delay lines cannot reach it and the target with one coarse setting",
    "resolved": "its squared visibility falls below the floor",
}

# The flags that a reader of a ranking wants to see beside a star that passed the gates.
REMARKS = ("component", "variable", "fast_rotator", "peculiar")

_SAME_STAR_DEG = 2 / 3600
_COMPANION_OF_TARGET_DEG = 60 / 3600
# A known companion in the field that costs more than this excludes the star; a fainter one is a term.
COMPANION_LIMIT = 0.05

_CLOSE_BINARY = flag_bits(
    "spectroscopic_binary eclipsing_binary ellipsoidal active_binary cataclysmic xray_binary composite_spectrum"
)
_DOUBLE = flag_bits("double")
# Left in, with their flag shown: variables of kinds whose amplitude is mostly a few hundredths of a
# magnitude (delta Sct, gamma Dor, beta Cep, alpha2 CVn, BY Dra, rotating; common practice, no source),
# and those whose kind the source does not tell.
_UNSTEADY = flag_bits(
    "pulsating semiregular long_period mira cepheid rr_lyrae rv_tauri sx_phoenicis flare orion_variable "
    "irregular r_crb be_star emission_line pre_main_sequence t_tauri carbon_star s_star wolf_rayet"
)
_DISCORDANT = flag_bits("discordant")


def close_gates(
    stars: StarColumns,
    rows: NDArray[np.int64],
    separations_deg: NDArray[np.float64],
    target: Target,
    setup: Setup,
    limits: Thresholds,
    barred: frozenset[int],
) -> tuple[NDArray[np.int64], NDArray[np.float64], dict[str, NDArray[np.int64]]]:
    """Which stars of a cone pass every gate but that of V^2.

    Parameters
    ----------
    stars, rows, separations_deg
        The cone around the target.
    target, setup, limits
    barred : frozenset of int
        Ids of stars with that standing.

    Returns
    -------
    rows, separations_deg : array, shape (N,)
        Those that pass.
    excluded : dict
        Reason -> rows of the cone that fail there.
    """
    excluded: dict[str, NDArray[np.int64]] = {}

    def close(reason: str, failing: NDArray[np.bool_]) -> None:
        nonlocal rows, separations_deg
        if failing.any():
            excluded[reason] = rows[failing]
            rows, separations_deg = rows[~failing], separations_deg[~failing]

    same = separations_deg <= _SAME_STAR_DEG
    if target.star_id is not None:
        same = stars.ids[rows] == target.star_id
    close("is_target", same)
    close("target_companion", separations_deg <= _COMPANION_OF_TARGET_DEG)
    if setup.dec_range_deg is not None:
        lowest, highest = setup.dec_range_deg
        dec = stars.dec_deg[rows]
        close("never_up", (dec < lowest) | (dec > highest))
    close("no_diameter", ~np.isfinite(stars.diameter_mas[rows]))
    close("no_magnitude", ~np.isfinite(stars.magnitudes[setup.band][rows]))
    if limits.magnitude_max is not None:
        close("too_faint", stars.magnitudes[setup.band][rows] > limits.magnitude_max)
    if limits.magnitude_min is not None:
        close("too_bright", stars.magnitudes[setup.band][rows] < limits.magnitude_min)
    if barred:
        close("barred", np.isin(stars.ids[rows], list(barred)))
    close("close_binary", _has(stars, rows, _CLOSE_BINARY))
    known = known_companion_terms(stars, rows, setup)
    close("companion", _has(stars, rows, _DOUBLE) | (known > COMPANION_LIMIT))
    close("variable", _has(stars, rows, _UNSTEADY))
    close("discordant", _has(stars, rows, _DISCORDANT))
    return rows, separations_deg, excluded


def _has(stars: StarColumns, rows: NDArray[np.int64], bits: int) -> NDArray[np.bool_]:
    return (stars.flags[rows] & np.uint64(bits)) != 0
