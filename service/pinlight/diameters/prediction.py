"""Predicted diameters: every relation that applies, combined with full covariance."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.atmosphere import (
    effective_temperature_k,
    spectral_code_from_colour,
    surface_gravity,
)
from pinlight.diameters.limb_darkening import coefficients
from pinlight.diameters.relations import RelationSet
from pinlight.diameters.spectral import luminosity_groups, parse_spectral_type
from pinlight.photometry.extinction import extinction_prior, relative_extinction
from pinlight.photometry.systems import CATALOGUE_BANDS, SYSTEM_BANDS, catalogue_to_systems

__all__ = ["Diameters", "StarPhotometry", "predict_diameters"]

Floats = NDArray[np.float64]

DISCORDANT_BELOW = 0.01
_LN10 = np.log(10.0)
_CHUNK = 10_000


@dataclass(frozen=True)
class StarPhotometry:
    """What a prediction needs of N stars.

    magnitudes, errors : shape (N, 5), columns follow `CATALOGUE_BANDS`, NaN where missing
    shared_errors : shape (N, 5), by how much each may be wrong together with other stars' magnitudes
        of its kind, as where an instrument saturates; None for not at all
    spectral_types : N texts, '' where unknown
    parallax_mas, galactic_latitude_deg : shape (N,)
    av_mag, av_error_mag : shape (N,) or None for the prior of the dust model
    """

    magnitudes: Floats
    errors: Floats
    spectral_types: list[str]
    parallax_mas: Floats
    galactic_latitude_deg: Floats
    shared_errors: Floats | None = None
    av_mag: Floats | None = None
    av_error_mag: Floats | None = None


@dataclass(frozen=True)
class Diameters:
    """Predicted limb-darkened diameters of N stars by R relations.

    Arrays of shape (N,) unless said. `limb_darkened_mas` is NaN where no relation applies.
    `own_error_mas` is the star's own part of the error; `shared_error_mas` is common to all
    stars that used the same relations. `log_thetas`, `weights` and `pulls` have shape (N, R)
    and are NaN where a relation does not apply; a pull is a relation's distance from the other
    relations, in sigma. `culprit` is the index of the relation that disagrees most, or -1
    unless the star is discordant.
    """

    relation_set: RelationSet
    limb_darkened_mas: Floats
    own_error_mas: Floats
    shared_error_mas: Floats
    chi_squared: Floats
    degrees_of_freedom: NDArray[np.int64]
    probability: Floats
    discordant: NDArray[np.bool_]
    culprit: NDArray[np.int64]
    log_thetas: Floats
    weights: Floats
    pulls: Floats
    av_mag: Floats
    av_error_mag: Floats
    luminosity_group: NDArray[np.str_]
    spectral_code: Floats
    teff_k: Floats
    logg: Floats
    limb_darkening: Floats

    @property
    def error_mas(self) -> Floats:
        """The total error, own and shared."""
        return np.hypot(self.own_error_mas, self.shared_error_mas)

    def relations_used(self, row: int) -> list[str]:
        """The names of the relations behind one star's diameter."""
        return [self.relation_set.names[i] for i in np.flatnonzero(np.isfinite(self.weights[row]))]


def predict_diameters(stars: StarPhotometry, relation_set: RelationSet) -> Diameters:
    """Generalised least-squares mean of all relations that apply to each star.

    A relation applies where its bands exist and the star's dereddened colour, luminosity group
    and spectral code lie in its published ranges.

    Raises
    ------
    ValueError
        If the arrays' shapes do not fit each other.

    Notes
    -----
    With y_r = log theta of relation r and C the covariance of the y_r from the magnitudes'
    errors (relations that share a band share its error), the A_V prior, each relation's scatter
    and the systematic of its sample: mean (1' C^-1 y) / (1' C^-1 1), variance 1 / (1' C^-1 1)
    (Aitken 1936, Proc. R. Soc. Edinb. 55, 42). Where chi^2 / (n - 1) > 1 the error grows by its
    square root (Birge 1932, Phys. Rev. 40, 207), all of it in the star's own part; where the
    probability of chi^2 is below 0.01 the star is discordant.
    """
    count = len(stars.spectral_types)
    if stars.magnitudes.shape != (count, len(CATALOGUE_BANDS)) or stars.errors.shape != stars.magnitudes.shape:
        raise ValueError(f"magnitudes and errors must have shape ({count}, {len(CATALOGUE_BANDS)})")
    v, ks = (stars.magnitudes[:, CATALOGUE_BANDS.index(name)] for name in ("V", "Ks"))
    av, av_error = extinction_prior(stars.parallax_mas, stars.galactic_latitude_deg)
    if stars.av_mag is not None:
        given = np.isfinite(stars.av_mag)
        av = np.where(given, stars.av_mag, av)
        fallback = np.maximum(0.05, 0.5 * av)
        error = fallback if stars.av_error_mag is None else stars.av_error_mag
        av_error = np.where(given, np.where(np.isfinite(error), error, fallback), av_error)
    types = [parse_spectral_type(text) for text in stars.spectral_types]
    v_ks = (v - ks) - av * (1 - relative_extinction("Ks"))
    group = luminosity_groups(types, v_ks, v - av, stars.parallax_mas)
    code = np.array([spectral.code for spectral in types], dtype=float)
    normal = group != ""
    known_code = np.where(np.isnan(code) & normal, spectral_code_from_colour(v_ks), code)
    teff = np.where(normal, effective_temperature_k(code, group, v_ks), np.nan)
    logg = surface_gravity(known_code, group)
    parts = [
        _combine(stars, relation_set, av, av_error, group, known_code, slice(start, start + _CHUNK))
        for start in range(0, count, _CHUNK)
    ]
    columns = {key: np.concatenate([part[key] for part in parts]) for key in parts[0]} if parts else {}
    return Diameters(
        relation_set=relation_set,
        **columns,
        av_mag=av,
        av_error_mag=av_error,
        luminosity_group=group,
        spectral_code=known_code,
        teff_k=teff,
        logg=logg,
        limb_darkening=coefficients(teff, logg),
    )


def _combine(
    stars: StarPhotometry,
    relation_set: RelationSet,
    av: Floats,
    av_error: Floats,
    group: NDArray[np.str_],
    code: Floats,
    rows: slice,
) -> dict[str, NDArray[Any]]:
    """The combination for one chunk of rows."""
    from scipy.special import chdtrc

    y, gradient, applies = _each_relation(stars, relation_set, av[rows], group[rows], code[rows], rows)
    system = catalogue_to_systems()
    relations = relation_set.relations
    by_catalogue = gradient @ system.matrix  # (N, R, C): d log theta / d catalogue magnitude
    errors = np.where(np.isfinite(stars.errors[rows]), stars.errors[rows], 0.0)
    extinction = np.array([relative_extinction(name) for name in SYSTEM_BANDS])
    by_av = -(gradient @ extinction)
    scatter = np.array([relation.scatter_percent for relation in relations]) / 100 / _LN10
    samples = sorted({relation.sample for relation in relations})
    shared = np.zeros((len(relations), len(samples)))
    for index, relation in enumerate(relations):
        shared[index, samples.index(relation.sample)] = relation.shared_percent / 100 / _LN10
    scaled = by_catalogue * errors[:, None, :]
    transformed = gradient * system.scatter
    own = scaled @ scaled.transpose(0, 2, 1) + transformed @ transformed.transpose(0, 2, 1)
    own += (by_av[:, :, None] * by_av[:, None, :]) * (av_error[rows] ** 2)[:, None, None]
    own += np.diag(scatter**2)
    common = np.broadcast_to(shared @ shared.T, own.shape)
    if stars.shared_errors is not None:
        together = by_catalogue * np.where(errors > 0, stars.shared_errors[rows], 0.0)[:, None, :]
        common = common + together @ together.transpose(0, 2, 1)
    both = applies[:, :, None] & applies[:, None, :]
    covariance = np.where(both, own + common, np.eye(len(relations)))
    inverse = np.linalg.inv(covariance)
    ones = applies.astype(float)
    summed = np.einsum("nij,nj->ni", inverse, ones) * ones
    information = summed.sum(axis=1)
    n_relations = applies.sum(axis=1)
    some = n_relations > 0
    safe = np.where(some, information, 1.0)
    weights = summed / safe[:, None]
    y0 = np.where(applies, y, 0.0)
    mean = (weights * y0).sum(axis=1)
    residual = np.where(applies, y - mean[:, None], 0.0)
    projected = np.einsum("nij,nj->ni", inverse, residual)
    chi_squared = (residual * projected).sum(axis=1)
    # Leaving relation i out lowers chi^2 by q_i^2 / P_ii, P = C^-1 - C^-1 1 1' C^-1 / (1' C^-1 1).
    spread = np.einsum("nii->ni", inverse) - summed**2 / safe[:, None]
    with np.errstate(invalid="ignore", divide="ignore"):
        pulls = np.where(applies & (spread > 1e-9), projected / np.sqrt(spread), np.nan)
    freedom = np.maximum(n_relations - 1, 0)
    probability = np.where(freedom > 0, chdtrc(np.maximum(freedom, 1), chi_squared), 1.0)
    variance = 1 / safe
    shared_variance = np.einsum("ni,nij,nj->n", weights, common, weights)
    scale = np.where(freedom > 0, np.maximum(1.0, chi_squared / np.maximum(freedom, 1)), 1.0)
    own_variance = np.maximum(variance * scale - shared_variance, 0.0)
    theta = np.where(some, 10.0**mean, np.nan)
    discordant = some & (probability < DISCORDANT_BELOW)
    worst = np.argmax(np.where(np.isfinite(pulls), np.abs(pulls), -1.0), axis=1)
    return {
        "limb_darkened_mas": theta,
        "own_error_mas": theta * _LN10 * np.sqrt(own_variance),
        "shared_error_mas": theta * _LN10 * np.sqrt(shared_variance),
        "chi_squared": np.where(some, chi_squared, np.nan),
        "degrees_of_freedom": freedom.astype(np.int64),
        "probability": np.where(some, probability, np.nan),
        "discordant": discordant,
        "culprit": np.where(discordant, worst, -1).astype(np.int64),
        "log_thetas": y,
        "weights": np.where(applies, weights, np.nan),
        "pulls": pulls,
    }


def _each_relation(
    stars: StarPhotometry,
    relation_set: RelationSet,
    av: Floats,
    group: NDArray[np.str_],
    code: Floats,
    rows: slice,
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Every relation on its own: log theta (N, R), its gradient by system magnitudes (N, R, S), use (N, R)."""
    system = catalogue_to_systems()
    magnitudes = stars.magnitudes[rows]
    known = np.isfinite(magnitudes) & np.isfinite(stars.errors[rows])
    needed = system.matrix != 0
    available = (known[:, None, :] | ~needed).all(axis=2)
    observed = np.where(known, magnitudes, 0.0) @ system.matrix.T + system.offset
    extinction = np.array([relative_extinction(name) for name in SYSTEM_BANDS])
    intrinsic = np.where(available, observed - av[:, None] * extinction, np.nan)
    count, relations = len(magnitudes), relation_set.relations
    y = np.full((count, len(relations)), np.nan)
    gradient = np.zeros((count, len(relations), len(SYSTEM_BANDS)))
    for index, relation in enumerate(relations):
        zero, bluer, redder = (
            SYSTEM_BANDS.index(name) for name in (relation.zero_band, relation.bluer, relation.redder)
        )
        colour = intrinsic[:, bluer] - intrinsic[:, redder]
        with np.errstate(invalid="ignore"):
            latest = np.select(
                [group == name for name in relation.luminosity], list(relation.luminosity.values()), -np.inf
            )
            applies = (
                (code <= latest)
                & (code >= relation.spectral_min)
                & (code <= relation.spectral_max)
                & (colour >= relation.colour_min)
                & (colour <= relation.colour_max)
                & np.isfinite(intrinsic[:, zero])
            )
        y[applies, index] = relation.log_diameter(intrinsic[applies, zero], colour[applies])
        slope = relation.slope(colour[applies])
        gradient[applies, index, zero] -= 0.2
        gradient[applies, index, bluer] += slope
        gradient[applies, index, redder] -= slope
    return y, gradient, np.isfinite(y)
