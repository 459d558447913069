"""The error budget: the relative error that each calibrator puts into the target's V^2."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.limb_darkening import coefficients_at
from pinlight.errors import InputError
from pinlight.fringes.companions import companion_error, suspected_companion_error
from pinlight.fringes.noise import snr_of_v2
from pinlight.fringes.visibility import channel_average
from pinlight.ranking.columns import StarColumns, flag_bits
from pinlight.ranking.setup import Setup

__all__ = [
    "JUDGES",
    "SECOND_LOBE_V2",
    "TERMS",
    "Budget",
    "drift_error",
    "error_budget",
    "fixed_terms",
    "known_companion_terms",
    "lowest_v2",
    "shared_covariance",
]

Floats = NDArray[np.float64]

TERMS = ("diameter", "photon", "drift", "brightness", "companion", "shape")
JUDGES = ("rms", "worst")
# No V^2 of a disc, limb-darkened or not, exceeds this past its first null.
SECOND_LOBE_V2 = 0.0175

_COMPONENT = flag_bits("component")


@dataclass(frozen=True)
class Budget:
    """Terms of N stars, summarised over baselines and channels; all relative, not percent.

    terms : term -> shape (N,), or None where it cannot be computed
    total : shape (N,), the root sum of squares of the terms
    v2_min, v2_max : shape (N,), over baselines and channels
    limb_darkening : shape (N,), u at the setup's wavelength
    slopes : shape (N, samples), d ln V^2 / d ln theta on every baseline and channel
    """

    terms: dict[str, Floats | None]
    total: Floats
    v2_min: Floats
    v2_max: Floats
    limb_darkening: Floats
    slopes: Floats

    @classmethod
    def joined(cls, parts: list["Budget"]) -> "Budget":
        """Several budgets of the same setup as one."""

        def column(name: str) -> Floats:
            return np.concatenate([getattr(part, name) for part in parts])

        terms: dict[str, Floats | None] = {}
        for name in TERMS:
            values = [term for part in parts if (term := part.terms[name]) is not None]
            terms[name] = np.concatenate(values) if values else None
        return cls(terms, *(column(name) for name in ("total", "v2_min", "v2_max", "limb_darkening", "slopes")))

    def only(self, which: NDArray[np.int64]) -> "Budget":
        """The same of some of the stars."""
        return Budget(
            {name: None if term is None else term[which] for name, term in self.terms.items()},
            self.total[which],
            self.v2_min[which],
            self.v2_max[which],
            self.limb_darkening[which],
            self.slopes[which],
        )


def shared_covariance(stars: StarColumns, rows: NDArray[np.int64], slopes: Floats, judge: str) -> Floats:
    """Covariance of the error that the shared part of the diameters puts into stars' V^2, shape (N, N).

    Stars that used a relation in common share it, by the mean product of their `slopes`, shape (N, S), over
    baselines and channels, or at each star's steepest one when judging by the worst.
    """
    shared = stars.shared_error_mas[rows].astype(float) / stars.diameter_mas[rows]
    scaled = slopes * shared[:, None]
    # Not by BLAS: its threads cost more than so small a product.
    product = np.einsum("ik,jk->ij", scaled, scaled) / scaled.shape[1]
    if judge == "worst":
        steepest = scaled.min(axis=1)
        product = steepest[:, None] * steepest[None, :]
    common = (stars.relations_used[rows][:, None] & stars.relations_used[rows][None, :]) != 0
    return np.where(common, product, 0.0)


def drift_error(
    spread: float, time_min: float, angle_deg: float, interval_min: float, separation_deg: Floats
) -> Floats:
    """Relative error from the drift of the transfer function between two looks, shape of `separation_deg`.

    sqrt(2) s sqrt(1 - exp(-dt / tau - psi / psi0)), the structure function of a field with an
    exponential covariance.
    """
    return np.sqrt(2) * spread * np.sqrt(-np.expm1(-interval_min / time_min - separation_deg / angle_deg))


def known_companion_terms(stars: StarColumns, rows: NDArray[np.int64], setup: Setup) -> Floats:
    """The error of each star's known companions inside the field, shape of `rows`."""
    variance = np.zeros(len(rows))
    first = np.searchsorted(stars.companion_rows, rows, side="left")
    last = np.searchsorted(stars.companion_rows, rows, side="right")
    deltas = stars.companion_deltas_mag["V" if setup.band in ("B", "V") else "Ks"]
    for index in np.flatnonzero(last > first):
        known = slice(first[index], last[index])
        inside = stars.companion_separations_arcsec[known] <= setup.field_arcsec
        delta = np.where(
            np.isfinite(deltas[known]), deltas[known], stars.companion_deltas_mag["V"][known]
        ).astype(float)
        variance[index] = np.sum(companion_error(10 ** (-0.4 * delta[inside])) ** 2)
    return np.sqrt(variance)


def fixed_terms(
    stars: StarColumns,
    rows: NDArray[np.int64],
    separations_deg: Floats,
    setup: Setup,
    target_magnitude: float | None,
) -> dict[str, Floats | None]:
    """The terms that are the same on all baselines and channels: drift, brightness, companion.

    Parameters
    ----------
    stars : StarColumns
    rows, separations_deg : array, shape (N,)
        Rows with a magnitude in the setup's band, and their distance from the target.
    setup : Setup
    target_magnitude : float or None
        In the setup's band; None leaves the brightness term out.

    Returns
    -------
    terms : term -> array, shape (N,), or None where it cannot be computed
        The companion term is that of known and suspected companions together.
    """
    # A listed component whose neighbour the catalogue knows is no longer a mere suspicion.
    suspected = ((stars.flags[rows] & np.uint64(_COMPONENT)) != 0) & ~np.isin(rows, stars.companion_rows)
    companion = np.hypot(known_companion_terms(stars, rows, setup), suspected * suspected_companion_error())
    terms: dict[str, Floats | None] = {"drift": None, "brightness": None, "companion": companion}
    drift = setup.drift
    if drift is not None and setup.look_interval_min is not None:
        terms["drift"] = drift_error(
            drift.spread, drift.time_min, drift.angle_deg, setup.look_interval_min, separations_deg
        )
        if target_magnitude is not None:
            magnitude = stars.magnitudes[setup.band][rows].astype(float)
            terms["brightness"] = drift.brightness_per_mag * np.abs(magnitude - target_magnitude)
    return terms


def lowest_v2(stars: StarColumns, rows: NDArray[np.int64], setup: Setup, longest_m: Floats) -> Floats:
    """V^2 on each star's longest baseline in the channel of the shortest wavelength, shape of `rows`.

    The least of all of the star's in the first lobe, and below `SECOND_LOBE_V2` past it.
    """
    u = coefficients_at(setup.wavelength_um, stars.limb_darkening[rows])
    theta = stars.diameter_mas[rows].astype(float)
    v2, _ = channel_average(theta, u, longest_m[:, None], setup.nodes_um[:1], setup.weights)
    return v2[:, 0, 0]


def error_budget(
    stars: StarColumns,
    rows: NDArray[np.int64],
    setup: Setup,
    fixed: dict[str, Floats | None],
    judge: str,
    baselines_m: Floats,
) -> Budget:
    """The budget of the stars in `rows`.

    Parameters
    ----------
    stars : StarColumns
    rows : array, shape (N,)
        Rows with a diameter and a magnitude in the setup's band.
    setup : Setup
    fixed : term -> array, shape (N,)
        Of `fixed_terms`.
    judge : str
        ``rms`` over baselines and channels, or ``worst``.
    baselines_m : array, shape (N, B)
        Projected baselines of each star.

    Raises
    ------
    InputError
        If `judge` is unknown.
    """
    if judge not in JUDGES:
        raise InputError(f"judge is {judge!r}; it may be {' or '.join(JUDGES)}")
    theta = stars.diameter_mas[rows].astype(float)
    u = coefficients_at(setup.wavelength_um, stars.limb_darkening[rows])
    averaged = channel_average(theta, u, baselines_m, setup.nodes_um, setup.weights)
    count, samples = len(rows), baselines_m.shape[1] * len(setup.nodes_um)
    v2, slope = (part.reshape(count, samples) for part in averaged)
    relative = np.hypot(stars.own_error_mas[rows], stars.shared_error_mas[rows]).astype(float) / theta
    squares = {
        name: np.broadcast_to(term[:, None] ** 2, v2.shape) for name, term in fixed.items() if term is not None
    }
    squares["diameter"] = (slope * relative[:, None]) ** 2
    squares["shape"] = (slope * (stars.oblateness[rows].astype(float) / (2 * np.sqrt(2)))[:, None]) ** 2
    if setup.mode is not None:
        magnitude = stars.magnitudes[setup.band][rows].astype(float)
        counts = setup.mode.counts_per_frame_at_mag0 / setup.mode.channels * 10 ** (-0.4 * magnitude)
        frames = setup.mode.integration_s / (setup.mode.frame_ms / 1000)
        snr = snr_of_v2(counts[:, None], v2, setup.mode.system_v2, setup.mode.read_variance, frames)
        with np.errstate(divide="ignore"):
            squares["photon"] = 1 / snr**2
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
        v2_min=v2.min(axis=1),
        v2_max=v2.max(axis=1),
        limb_darkening=u,
        slopes=slope,
    )
