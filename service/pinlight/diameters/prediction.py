"""Predicted diameters: every relation that applies, combined with full covariance."""

import os
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.atmosphere import (
    effective_temperature_k,
    expected_v_ks,
    gravity_from_radius,
    spectral_code_from_colour,
    surface_gravity,
)
from pinlight.diameters.combination import Combination, RelationArrays, combine
from pinlight.diameters.limb_darkening import coefficients
from pinlight.diameters.relations import Relation, RelationSet
from pinlight.diameters.spectral import (
    LUMINOSITY_GROUPS,
    luminosity_probabilities,
    parse_spectral_type,
)
from pinlight.photometry.bands import complete_photometry
from pinlight.photometry.extinction import extinction_prior, relative_extinction
from pinlight.photometry.systems import CATALOGUE_BANDS, INPUT_BANDS, SYSTEM_BANDS, SystemMagnitudes, to_systems

__all__ = ["SPECTRAL_TYPE", "Diameters", "StarPhotometry", "predict_diameters"]

Floats = NDArray[np.float64]
Places = NDArray[np.int64]

DISCORDANT_BELOW = 0.01
SPECTRAL_TYPE = -2  # as a culprit: the type contradicts the colours
_LN10 = np.log(10.0)
_CHUNK = 40_000
# Another luminosity group counts from this probability on.
_LEAST_PROBABILITY = 0.05
# Colours below which there is no star, with room for 0.3 mag of error: the hottest have B - V = -0.33,
# V - Ks = -1.0, J - Ks = -0.25 (Pecaut & Mamajek 2013, ApJS 208, 9; memory).
_BLUEST = {("B", "V"): -0.65, ("V", "Ks"): -1.3, ("V", "J"): -1.1, ("B", "Ks"): -1.6, ("J", "Ks"): -0.6}
# By how much V - Ks may differ from what the spectral type says: a subclass or two of misclassification,
# metallicity and dust; beyond it lies about 1 % of the seed's classed stars.
_TYPE_TOLERANCE_MAG, _TYPE_TOLERANCE_SUBCLASSES = 0.35, 4.0


@dataclass(frozen=True)
class StarPhotometry:
    """What a prediction needs of N stars.

    magnitudes, errors : shape (N, I), columns follow `bands`, NaN where missing; a magnitude
        without an error is not used
    linked_errors : shape (N, I), the part of `errors` (in squares) by which a star's magnitudes are
        wrong together, as where one image was saturated in several bands; None for none
    shared_errors : shape (N, I), by how much each may be wrong together with other stars' magnitudes
        of its kind, as where an instrument saturates; None for not at all
    spectral_types : N texts, '' where unknown
    parallax_mas, galactic_latitude_deg : shape (N,)
    av_mag, av_error_mag : shape (N,) or None for the prior of the dust model
    bands : of `photometry.systems.INPUT_BANDS`
    """

    magnitudes: Floats
    errors: Floats
    spectral_types: list[str]
    parallax_mas: Floats
    galactic_latitude_deg: Floats
    linked_errors: NDArray[Any] | None = None
    shared_errors: NDArray[Any] | None = None
    av_mag: Floats | None = None
    av_error_mag: Floats | None = None
    bands: tuple[str, ...] = CATALOGUE_BANDS

    @classmethod
    def of(
        cls,
        bands: tuple[str, ...],
        magnitudes: Floats,
        errors: Floats,
        spectral_types: list[str],
        parallax_mas: Floats,
        galactic_latitude_deg: Floats,
        av_mag: Floats | None = None,
        av_error_mag: Floats | None = None,
    ) -> "StarPhotometry":
        """From magnitudes as a catalogue gives them; see `photometry.bands.complete_photometry`."""
        whole = complete_photometry(bands, magnitudes, errors)
        return cls(
            whole.magnitudes, whole.errors, spectral_types, parallax_mas, galactic_latitude_deg,
            whole.linked_errors, whole.shared_errors, av_mag, av_error_mag, bands,
        )  # fmt: skip


@dataclass(frozen=True)
class Diameters:
    """Predicted limb-darkened diameters of N stars by R relations, those that their bands allow.

    Arrays of shape (N,) unless said. `limb_darkened_mas` is NaN where no relation applies; `reason`
    tells why. `own_error_mas` is the star's own part of the error; `shared_error_mas` is common to
    all stars that used the same relations. `log_thetas`, `weights` and `pulls` have shape (N, R)
    and are NaN where a relation does not apply; a pull is a relation's distance from the other
    relations, in sigma. `culprit` is the index of the relation that disagrees most, `SPECTRAL_TYPE`
    where the relations agree and the type contradicts the colours, -1 where the star is not discordant;
    `culprit_name` puts it in words. `group_probabilities` has shape (N, 4), columns of
    `LUMINOSITY_GROUPS`: 1 for a stated class. `bluest` is the number of the impossible colour, -1 for none.
    """

    relation_set: RelationSet
    limb_darkened_mas: Floats
    own_error_mas: Floats
    shared_error_mas: Floats
    chi_squared: Floats
    degrees_of_freedom: NDArray[np.int16]
    probability: Floats
    discordant: NDArray[np.bool_]
    culprit: NDArray[np.int16]
    log_thetas: NDArray[np.float32]
    weights: NDArray[np.float32]
    pulls: NDArray[np.float32]
    av_mag: Floats
    av_error_mag: Floats
    group_probabilities: NDArray[np.float32]
    spectral_code: Floats
    teff_k: Floats
    logg: Floats
    limb_darkening: NDArray[np.float32]
    bluest: NDArray[np.int8]

    @property
    def luminosity_group(self) -> NDArray[np.str_]:
        """Of `LUMINOSITY_GROUPS`, '' where no relation can apply."""
        names = np.array(LUMINOSITY_GROUPS, dtype="U10")[self.group_probabilities.argmax(axis=1)]
        return np.where(self.group_probabilities.any(axis=1), names, "")

    @property
    def error_mas(self) -> Floats:
        """The total error, own and shared."""
        return np.hypot(self.own_error_mas, self.shared_error_mas)

    def relations_used(self, row: int) -> list[str]:
        """The names of the relations behind one star's diameter."""
        return [self.relation_set.names[i] for i in np.flatnonzero(np.isfinite(self.weights[row]))]

    def culprit_name(self, row: int) -> str | None:
        """What disagrees most about a discordant star: a relation, or ``spectral type``."""
        index = int(self.culprit[row])
        if index == SPECTRAL_TYPE:
            return "spectral type"
        return self.relation_set.names[index] if index >= 0 else None

    def reason(self, row: int) -> str | None:
        """Why a star has no diameter, None where it has one."""
        if np.isfinite(self.limb_darkened_mas[row]):
            return None
        if self.bluest[row] >= 0:
            bluer, redder = list(_BLUEST)[self.bluest[row]]
            limit = _BLUEST[bluer, redder]
            return f"{bluer} - {redder} is below {limit:g}, and no star is so blue: are the two swapped?"
        kind = str(self.luminosity_group[row]) or "star of this type"
        return f"no published relation applies to a {kind} with these colours"


def predict_diameters(stars: StarPhotometry, relation_set: RelationSet) -> Diameters:
    """Generalised least-squares mean of all relations that apply to each star.

    A relation applies where its bands exist or can be had from others, and the star's dereddened
    colour, luminosity group and spectral code lie in its published ranges. Where the type names no
    luminosity class the most probable group is taken, and what the others would give widens the
    star's own error by their probability.

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
    probability of chi^2 is below 0.01, or the spectral type contradicts V - Ks, the star is
    discordant.
    """
    count = len(stars.spectral_types)
    wanted = (count, len(stars.bands))
    if stars.magnitudes.shape != wanted or stars.errors.shape != wanted:
        raise ValueError(f"magnitudes and errors must have shape {wanted}")
    if strange := [name for name in stars.bands if name not in INPUT_BANDS]:
        raise ValueError(f"band is {strange[0]!r}; it may be one of {', '.join(INPUT_BANDS)}")
    for name in ("V", "Ks"):
        relative_extinction(name)  # its library is loaded before threads ask for it
    relation_set = _reachable(relation_set, stars.bands)
    relations, arrays = relation_set.relations, RelationArrays.of(relation_set.relations)
    slices = [slice(start, start + _CHUNK) for start in range(0, max(count, 1), _CHUNK)]
    out: dict[str, NDArray[Any]] = {}

    def work(rows: slice) -> None:
        for name, part in _predict_chunk(stars, relations, arrays, rows).items():
            out[name][rows] = part

    first = _predict_chunk(stars, relations, arrays, slices[0])
    out.update({name: np.empty((count, *part.shape[1:]), dtype=part.dtype) for name, part in first.items()})
    for name, part in first.items():
        out[name][slices[0]] = part
    if len(slices) > 2:
        with ThreadPoolExecutor(min(2, os.cpu_count() or 1)) as pool:
            list(pool.map(work, slices[1:]))
    else:
        for rows in slices[1:]:
            work(rows)
    return Diameters(relation_set=relation_set, **out)


def _extinction(stars: StarPhotometry, rows: slice) -> tuple[Floats, Floats]:
    """A_V and its error: what is given with a star, else the prior; none without a parallax.

    The prior would put a star without one behind all the dust there is.
    """
    parallax = stars.parallax_mas[rows]
    near = np.where(np.isfinite(parallax), parallax, np.inf)
    av, av_error = extinction_prior(near, stars.galactic_latitude_deg[rows])
    if stars.av_mag is not None:
        given = np.isfinite(stars.av_mag[rows])
        av = np.where(given, stars.av_mag[rows], av)
        fallback = np.maximum(0.05, 0.5 * av)
        error = fallback if stars.av_error_mag is None else stars.av_error_mag[rows]
        av_error = np.where(given, np.where(np.isfinite(error), error, fallback), av_error)
    return av, av_error


def _by_pattern(
    stars: StarPhotometry, rows: slice, av: Floats, extinction: Floats
) -> Iterator[tuple[Places, list[int], SystemMagnitudes]]:
    """Stars with the same measured bands: places within the chunk, input columns, dereddened systems."""
    magnitudes = stars.magnitudes[rows]
    known = np.isfinite(magnitudes) & np.isfinite(stars.errors[rows])
    pattern = known @ (1 << np.arange(known.shape[1]))
    for bits in np.unique(pattern):
        at = np.flatnonzero(pattern == bits)
        columns = [i for i in range(known.shape[1]) if bits >> i & 1]
        intrinsic = magnitudes[at][:, columns] - av[at, None] * extinction[columns]
        yield at, columns, to_systems(tuple(stars.bands[i] for i in columns), intrinsic)


def _reachable(relation_set: RelationSet, bands: tuple[str, ...]) -> RelationSet:
    """The relations whose magnitudes can be had from these bands."""
    systems = to_systems(bands, np.zeros((1, len(bands))))
    there = {name for name, value in zip(SYSTEM_BANDS, systems.values[0], strict=True) if np.isfinite(value)}
    within = tuple(one for one in relation_set.relations if {one.bluer, one.redder} <= there)
    return replace(relation_set, relations=within)


def _predict_chunk(
    stars: StarPhotometry, relations: tuple[Relation, ...], arrays: RelationArrays, rows: slice
) -> dict[str, NDArray[Any]]:
    """The columns of `Diameters` for a chunk of rows."""
    from scipy.special import chdtrc

    av, av_error = _extinction(stars, rows)
    count = len(av)
    extinction = np.array([relative_extinction(name) for name in stars.bands])
    patterns = list(_by_pattern(stars, rows, av, extinction)) if count else []
    intrinsic = np.full((count, len(SYSTEM_BANDS)), np.nan)
    for at, _, systems in patterns:
        intrinsic[at] = systems.values
    column = {name: index for index, name in enumerate(SYSTEM_BANDS)}
    v_ks = intrinsic[:, column["V"]] - intrinsic[:, column["Ks"]]

    texts: dict[str, int] = {}
    numbers = [texts.setdefault(text, len(texts)) for text in stars.spectral_types[rows]]
    place = np.array(numbers, dtype=np.int64)
    types = [parse_spectral_type(text) for text in texts]

    def per_star(values: list[Any], kind: Any) -> NDArray[Any]:
        return np.array(values, dtype=kind)[place] if count else np.empty(0, dtype=kind)

    code = per_star([spectral.code for spectral in types], float)
    stated = per_star([spectral.group for spectral in types], "U10")
    normal = per_star([spectral.normal for spectral in types], bool)
    parallax = stars.parallax_mas[rows]
    probabilities = luminosity_probabilities(stated, v_ks, intrinsic[:, column["Ks"]], parallax)
    group = np.where(normal, np.array(LUMINOSITY_GROUPS)[probabilities.argmax(axis=1)], "").astype("U10")
    known_code = np.where(np.isnan(code) & normal, spectral_code_from_colour(v_ks), code)
    bluest = np.full(count, -1, dtype=np.int8)
    for index, ((bluer, redder), limit) in enumerate(_BLUEST.items()):
        if bluer in stars.bands and redder in stars.bands:
            blue, red = (stars.magnitudes[rows, stars.bands.index(name)] for name in (bluer, redder))
            with np.errstate(invalid="ignore"):
                bluest[(blue - red < limit) & (bluest < 0)] = index
    usable = normal & (bluest < 0)

    def combined(
        group: NDArray[np.str_], wanted: NDArray[np.bool_]
    ) -> tuple[Combination, Floats, NDArray[np.int64]]:
        each = _each_relation(relations, intrinsic, group, known_code, wanted)
        result = _combine_rows(stars, relations, arrays, rows, patterns, each, extinction, av_error)
        return result, each[0], each[2].sum(axis=1)

    found, log_thetas, n_relations = combined(group, usable)
    some = n_relations > 0
    freedom = np.maximum(n_relations - 1, 0)
    probability = np.where(freedom > 0, chdtrc(np.maximum(freedom, 1), found.chi_squared), 1.0)
    scale = np.where(freedom > 0, np.maximum(1.0, found.chi_squared / np.maximum(freedom, 1)), 1.0)
    own_variance = np.maximum(found.variance * scale - found.shared_variance, 0.0)
    # What the star would be in another group that its missing class leaves possible.
    for index, other in enumerate(LUMINOSITY_GROUPS):
        likely = some & (stated == "") & (group != other) & (probabilities[:, index] >= _LEAST_PROBABILITY)
        likely &= ~(np.isin(group, ("dwarf", "subgiant")) & (other in ("dwarf", "subgiant")))
        if likely.any():
            alternative, _, n_others = combined(np.full(count, other), likely)
            apart = np.where(n_others > 0, alternative.mean - found.mean, 0.0)
            own_variance += np.where(likely, probabilities[:, index] * apart**2, 0.0)
    theta = np.where(some, 10.0**found.mean, np.nan)

    teff = np.where(normal, effective_temperature_k(code, group, v_ks), np.nan)
    logg = surface_gravity(known_code, group)
    with np.errstate(invalid="ignore", divide="ignore"):
        logg = np.where(parallax > 0, gravity_from_radius(teff, theta / parallax, logg), logg)
    contradicts = some & _contradicts(code, group, v_ks)
    disagree = some & (probability < DISCORDANT_BELOW)
    # One column more, so that there is a worst where no relation is within reach at all.
    sizes = np.column_stack([np.nan_to_num(np.abs(found.pulls), nan=-1.0), np.full(count, -2.0)])
    worst = sizes.argmax(axis=1)
    return {
        "limb_darkened_mas": theta,
        "own_error_mas": theta * _LN10 * np.sqrt(own_variance),
        "shared_error_mas": theta * _LN10 * np.sqrt(found.shared_variance),
        "chi_squared": np.where(some, found.chi_squared, np.nan),
        "degrees_of_freedom": freedom.astype(np.int16),
        "probability": np.where(some, probability, np.nan),
        "discordant": disagree | contradicts,
        "culprit": np.select([disagree, contradicts], [worst, SPECTRAL_TYPE], -1).astype(np.int16),
        "log_thetas": log_thetas.astype(np.float32),
        "weights": found.weights,
        "pulls": found.pulls,
        "av_mag": av,
        "av_error_mag": av_error,
        "group_probabilities": np.where(normal[:, None], probabilities, 0.0).astype(np.float32),
        "spectral_code": known_code,
        "teff_k": teff,
        "logg": logg,
        "limb_darkening": coefficients(teff, logg).astype(np.float32),
        "bluest": bluest,
    }


def _contradicts(code: Floats, group: NDArray[np.str_], v_ks: Floats) -> NDArray[np.bool_]:
    """Whether V - Ks lies off what the spectral type says by more than any usual misclassification."""
    low, expected, high = (
        expected_v_ks(code + step, group)
        for step in (-_TYPE_TOLERANCE_SUBCLASSES, 0.0, _TYPE_TOLERANCE_SUBCLASSES)
    )
    with np.errstate(invalid="ignore"):
        below = v_ks < np.minimum(low, expected) - _TYPE_TOLERANCE_MAG
        above = v_ks > np.maximum(high, expected) + _TYPE_TOLERANCE_MAG
    return np.asarray(below | above, dtype=bool)


def _combine_rows(
    stars: StarPhotometry,
    relations: tuple[Relation, ...],
    arrays: RelationArrays,
    rows: slice,
    patterns: list[tuple[Places, list[int], SystemMagnitudes]],
    each: tuple[Floats, Floats, NDArray[np.bool_]],
    extinction: Floats,
    av_error: Floats,
) -> Combination:
    """The combination for the stars of a chunk: those with the same bands and relations at a time."""
    y, slope, applies = each
    result = Combination.empty(len(y), len(relations))
    weight = 1 << np.arange(applies.shape[1], dtype=np.uint64)
    for at, columns, systems in patterns:
        used = applies[at] @ weight
        order = np.argsort(used, kind="stable")
        # A change in what is used begins a group; those that use nothing come first, and have none.
        bounds = [*np.flatnonzero(np.diff(used[order], prepend=np.uint64(0))).tolist(), len(order)]
        for start, end in pairwise(bounds):
            here = order[start:end]
            members = at[here]
            chosen = np.flatnonzero(applies[members[0]])

            def inputs(values: NDArray[Any], members: Places = members, columns: list[int] = columns) -> Any:
                return values[rows][members][:, columns]

            combine(
                result,
                members,
                chosen,
                arrays,
                y[members][:, chosen],
                slope[members][:, chosen],
                systems.by_input if systems.by_input.ndim == 2 else systems.by_input[here],
                systems.by_scatter,
                inputs(stars.errors),
                None if stars.linked_errors is None else inputs(stars.linked_errors),
                None if stars.shared_errors is None else inputs(stars.shared_errors),
                extinction[columns],
                av_error[members],
            )
    return result


def _each_relation(
    relations: tuple[Relation, ...],
    intrinsic: Floats,
    group: NDArray[np.str_],
    code: Floats,
    wanted: NDArray[np.bool_],
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Every relation on its own: log theta, its slope with colour, and whether it applies; all (N, R)."""
    count = len(intrinsic)
    y = np.full((count, len(relations)), np.nan)
    slope = np.zeros((count, len(relations)))
    applies = np.zeros((count, len(relations)), dtype=bool)
    member = {name: wanted & (group == name) for name in LUMINOSITY_GROUPS}
    for index, relation in enumerate(relations):
        zero, bluer, redder = (
            SYSTEM_BANDS.index(name) for name in (relation.zero_band, relation.bluer, relation.redder)
        )
        in_class = np.zeros(count, dtype=bool)
        with np.errstate(invalid="ignore"):
            for name, latest in relation.luminosity.items():
                in_class |= member[name] & (code <= latest)
            in_class &= (code >= relation.spectral_min) & (code <= relation.spectral_max)
            at = np.flatnonzero(in_class)
            colour = intrinsic[at, bluer] - intrinsic[at, redder]
            inside = (colour >= relation.colour_min) & (colour <= relation.colour_max)
        at, colour = at[inside], colour[inside]
        applies[at, index] = True
        y[at, index] = relation.log_diameter(intrinsic[at, zero], colour)
        slope[at, index] = relation.slope(colour)
    return y, slope, applies
