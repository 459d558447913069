"""Rank the stars of an edition as calibrators of one target."""

from collections.abc import Mapping

import numpy as np

from pinlight.diameters.limb_darkening import uniform_disk_ratio
from pinlight.errors import InputError
from pinlight.ranking.budget import TERMS, error_budget
from pinlight.ranking.columns import StarColumns, flag_words
from pinlight.ranking.gates import close_gates
from pinlight.ranking.result import Calibrator, Ranking
from pinlight.ranking.setup import Setup, Thresholds
from pinlight.ranking.target import Target
from pinlight.version import __version__

__all__ = ["rank"]


def rank(
    stars: StarColumns,
    target: Target,
    setup: Setup,
    *,
    limits: Thresholds | None = None,
    judge: str = "rms",
    best: int = 20,
    standings: Mapping[int, str] | None = None,
) -> Ranking:
    """The stars that calibrate a target best, by the error that each would cost.

    Parameters
    ----------
    stars : StarColumns
        An edition.
    target : Target
    setup : Setup
        Of `setup_of` or `quick_setup`. Baselines count at full length, the hardest case for a
        calibrator's diameter.
    limits : Thresholds, optional
        In place of the setup's.
    judge : str
        Summarise over baselines and channels by ``rms`` or take the ``worst``.
    best : int
        How many to list.
    standings : mapping, optional
        Star id -> standing, laid over the edition.

    Returns
    -------
    Ranking
        An empty list of calibrators is an answer, not an error.

    Raises
    ------
    InputError
        If `judge` or `best` is impossible.
    """
    if not 1 <= best <= 1000:
        raise InputError(f"best is {best}; it must lie between 1 and 1000")
    limits = limits or setup.limits
    standings = standings or {}
    barred = frozenset(star_id for star_id, standing in standings.items() if standing == "barred")
    rows, separations = stars.cone(target.ra_deg, target.dec_deg, limits.separation_max_deg)
    too_far = len(stars) - len(rows)
    rows, separations, companion, excluded = close_gates(
        stars, rows, separations, target, setup, limits, barred
    )
    if too_far:
        excluded["too_far"] = too_far
    target_magnitude = target.magnitudes.get(setup.band)
    budget = error_budget(stars, rows, separations, setup, target_magnitude, companion, judge)
    resolved = budget.v2_min < limits.v2_min
    if resolved.any():
        excluded["resolved"] = int(resolved.sum())
    passing = np.flatnonzero(~resolved)
    order = passing[np.lexsort([stars.ids[rows[passing]], budget.total[passing]])]
    calibrators = []
    for place, index in enumerate(order[:best], start=1):
        row = int(rows[index])
        star_id = int(stars.ids[row])
        theta = float(stars.diameter_mas[row])
        used = int(stars.relations_used[row])
        calibrators.append(
            Calibrator(
                rank=place,
                star_id=star_id,
                name=stars.names[row].decode(),
                ra_deg=float(stars.ra_deg[row]),
                dec_deg=float(stars.dec_deg[row]),
                separation_deg=float(separations[index]),
                spectral_type=stars.spectral_types[row].decode(),
                magnitudes={
                    band: (float(values[row]), float(stars.magnitude_errors[band][row]))
                    for band, values in stars.magnitudes.items()
                    if np.isfinite(values[row])
                },
                limb_darkened_mas=theta,
                uniform_disk_mas=theta * float(uniform_disk_ratio(budget.limb_darkening[index])),
                own_error_mas=float(stars.own_error_mas[row]),
                shared_error_mas=float(stars.shared_error_mas[row]),
                relations=tuple(name for bit, name in enumerate(stars.relation_names) if used >> bit & 1),
                flags=tuple(flag_words(int(stars.flags[row]))),
                v2_min=float(budget.v2_min[index]),
                v2_max=float(budget.v2_max[index]),
                longest_baseline_m=float(setup.baselines_m.max()),
                budget={
                    name: None if (term := budget.terms[name]) is None else float(term[index]) for name in TERMS
                },
                calibration_error=float(budget.total[index]),
                standing=standings.get(star_id),
            )
        )
    return Ranking(
        edition=stars.edition,
        pinlight=__version__,
        target=target,
        setup=setup,
        limits=limits,
        judge=judge,
        best=best,
        calibrators=tuple(calibrators),
        stars=len(stars),
        ranked=len(order),
        excluded=dict(sorted(excluded.items(), key=lambda item: -item[1])),
        notes=tuple(_notes(setup, limits, target_magnitude)),
    )


def _notes(setup: Setup, limits: Thresholds, target_magnitude: float | None) -> list[str]:
    """What was left out or assumed."""
    notes = []
    if setup.mode is None:
        notes.append("No array given: photon, drift and brightness terms are left out.")
        if limits.magnitude_max is not None:
            notes.append(f"Stars fainter than {setup.band} = {limits.magnitude_max:g} are left out.")
    elif target_magnitude is None:
        notes.append(f"The target has no {setup.band} magnitude: the brightness term is left out.")
    notes.append("No time given: baselines count at full length and windows are not computed.")
    if setup.wavelength_um > 2.4:
        notes.append("Beyond the K band limb darkening is held at its K value.")
    return notes
