"""The error budget: the relative error that each calibrator puts into the target's V^2."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.limb_darkening import coefficients_at
from pinlight.errors import InputError
from pinlight.fringes.companions import companion_error
from pinlight.fringes.noise import snr_of_v2
from pinlight.fringes.visibility import channel_average
from pinlight.ranking.columns import StarColumns
from pinlight.ranking.setup import Setup

__all__ = ["JUDGES", "TERMS", "Budget", "companion_terms", "drift_error", "error_budget"]

Floats = NDArray[np.float64]

TERMS = ("diameter", "photon", "drift", "brightness", "companion", "shape")
JUDGES = ("rms", "worst")


@dataclass(frozen=True)
class Budget:
    """Terms of N stars, summarised over baselines and channels; all relative, not percent.

    terms : term -> shape (N,), or None where it cannot be computed
    total : shape (N,), the root sum of squares of the terms
    v2_min, v2_max : shape (N,), over baselines and channels
    uniform_disk_limb_darkening : shape (N,), u at the setup's wavelength
    """

    terms: dict[str, Floats | None]
    total: Floats
    v2_min: Floats
    v2_max: Floats
    limb_darkening: Floats


def drift_error(
    spread: float, time_min: float, angle_deg: float, interval_min: float, separation_deg: Floats
) -> Floats:
    """Relative error from the drift of the transfer function between two looks, shape of `separation_deg`.

    sqrt(2) s sqrt(1 - exp(-dt / tau - psi / psi0)), the structure function of a field with an
    exponential covariance.
    """
    return np.sqrt(2) * spread * np.sqrt(-np.expm1(-interval_min / time_min - separation_deg / angle_deg))


def companion_terms(stars: StarColumns, rows: NDArray[np.int64], band: str, field_arcsec: float) -> Floats:
    """The error of each star's known companions inside the field, shape of `rows`."""
    variance = np.zeros(len(rows))
    first = np.searchsorted(stars.companion_rows, rows, side="left")
    last = np.searchsorted(stars.companion_rows, rows, side="right")
    deltas = stars.companion_deltas_mag["V" if band in ("B", "V") else "Ks"]
    for index in np.flatnonzero(last > first):
        known = slice(first[index], last[index])
        inside = stars.companion_separations_arcsec[known] <= field_arcsec
        delta = np.where(
            np.isfinite(deltas[known]), deltas[known], stars.companion_deltas_mag["V"][known]
        ).astype(float)
        variance[index] = np.sum(companion_error(10 ** (-0.4 * delta[inside])) ** 2)
    return np.sqrt(variance)


def error_budget(
    stars: StarColumns,
    rows: NDArray[np.int64],
    separations_deg: Floats,
    setup: Setup,
    target_magnitude: float | None,
    companion: Floats,
    judge: str,
) -> Budget:
    """The budget of the stars in `rows`.

    Parameters
    ----------
    stars : StarColumns
    rows : array, shape (N,)
        Rows with a diameter and a magnitude in the setup's band.
    separations_deg : array, shape (N,)
        From the target.
    setup : Setup
    target_magnitude : float or None
        In the setup's band; None leaves the brightness term out.
    companion : array, shape (N,)
        The companion term, known and suspected companions together.
    judge : str
        ``rms`` over baselines and channels, or ``worst``.

    Raises
    ------
    InputError
        If `judge` is unknown.
    """
    if judge not in JUDGES:
        raise InputError(f"judge is {judge!r}; it may be {' or '.join(JUDGES)}")
    theta = stars.diameter_mas[rows].astype(float)
    u = coefficients_at(setup.wavelength_um, stars.limb_darkening[rows])
    v2, slope = channel_average(theta, u, setup.baselines_m, setup.nodes_um, setup.weights)
    relative = np.hypot(stars.own_error_mas[rows], stars.shared_error_mas[rows]).astype(float) / theta
    magnitude = stars.magnitudes[setup.band][rows].astype(float)

    def everywhere(values: Floats) -> Floats:
        return np.broadcast_to(values[:, None, None], v2.shape)

    steepness = np.abs(slope)
    by_sample: dict[str, Floats | None] = dict.fromkeys(TERMS)
    by_sample["diameter"] = steepness * relative[:, None, None]
    by_sample["shape"] = steepness * (stars.oblateness[rows].astype(float) / (2 * np.sqrt(2)))[:, None, None]
    by_sample["companion"] = everywhere(companion)
    if setup.mode is not None:
        counts = setup.mode.counts_per_frame_at_mag0 / setup.mode.channels * 10 ** (-0.4 * magnitude)
        frames = setup.mode.integration_s / (setup.mode.frame_ms / 1000)
        snr = snr_of_v2(everywhere(counts), v2, setup.mode.system_v2, setup.mode.read_variance, frames)
        with np.errstate(divide="ignore"):
            by_sample["photon"] = 1 / snr
    if setup.drift is not None and setup.look_interval_min is not None:
        drift = setup.drift
        by_sample["drift"] = everywhere(
            drift_error(drift.spread, drift.time_min, drift.angle_deg, setup.look_interval_min, separations_deg)
        )
        if target_magnitude is not None:
            by_sample["brightness"] = everywhere(
                drift.brightness_per_mag * np.abs(magnitude - target_magnitude)
            )
    count, samples = len(rows), v2.shape[1] * v2.shape[2]
    flat = v2.reshape(count, samples)
    squares = {name: (term**2).reshape(count, samples) for name, term in by_sample.items() if term is not None}
    total = np.sum(list(squares.values()), axis=0)
    if judge == "rms":

        def summarise(square: Floats) -> Floats:
            return np.sqrt(square.mean(axis=1))

    else:
        worst = total.argmax(axis=1)[:, None]

        def summarise(square: Floats) -> Floats:
            return np.sqrt(np.take_along_axis(square, worst, axis=1)[:, 0])

    return Budget(
        terms={name: summarise(squares[name]) if name in squares else None for name in TERMS},
        total=summarise(total),
        v2_min=flat.min(axis=1),
        v2_max=flat.max(axis=1),
        limb_darkening=u,
    )
