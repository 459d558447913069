"""Generalised least squares for many stars at once: those that use the same relations go together."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pinlight.diameters.relations import Relation
from pinlight.photometry.systems import SYSTEM_BANDS

__all__ = ["Combination", "RelationArrays", "combine"]

Floats = NDArray[np.float64]
Places = NDArray[np.int64]

_LN10 = np.log(10.0)
_BATCH = 1024  # stars at a time, so that what is worked on stays in the processor's cache


@dataclass(frozen=True)
class RelationArrays:
    """What a combination needs of R relations, by column.

    zero, bluer, redder : shape (R,), places in `SYSTEM_BANDS`
    random, systematic : shape (R, R), covariance of log10 theta by the relations' own scatter (what a
        star shows in all relations of one sample is common to them) and by the samples' systematics
    """

    zero: Places
    bluer: Places
    redder: Places
    random: Floats
    systematic: Floats

    @classmethod
    def of(cls, relations: tuple[Relation, ...]) -> "RelationArrays":
        """The arrays of these relations."""
        scatter, common, shared = (
            np.array([getattr(relation, f"{key}_percent") for relation in relations]) / 100 / _LN10
            for key in ("scatter", "common", "shared")
        )
        samples = np.array([relation.sample for relation in relations])
        same = samples[:, None] == samples
        zero, bluer, redder = (
            np.array([SYSTEM_BANDS.index(getattr(relation, key)) for relation in relations], dtype=np.int64)
            for key in ("zero_band", "bluer", "redder")
        )
        random = np.diag(scatter**2 - common**2) + np.where(same, np.outer(common, common), 0.0)
        return cls(zero, bluer, redder, random, np.where(same, np.outer(shared, shared), 0.0))


@dataclass(frozen=True)
class Combination:
    """The means of N stars over R relations, in log10 of the diameter.

    mean, variance, shared_variance, chi_squared : shape (N,), 0 for a star without a relation
    weights, pulls : shape (N, R), NaN where a relation does not apply
    """

    mean: Floats
    variance: Floats
    shared_variance: Floats
    chi_squared: Floats
    weights: NDArray[np.float32]
    pulls: NDArray[np.float32]

    @classmethod
    def empty(cls, stars: int, relations: int) -> "Combination":
        """Nothing combined yet."""
        mean, variance, shared_variance, chi_squared = (np.zeros(stars) for _ in range(4))
        weights, pulls = (np.full((stars, relations), np.nan, dtype=np.float32) for _ in range(2))
        return cls(mean, variance, shared_variance, chi_squared, weights, pulls)


def combine(
    result: Combination,
    rows: Places,
    chosen: Places,
    relations: RelationArrays,
    y: Floats,
    slope: Floats,
    by_input: Floats,
    by_scatter: Floats,
    errors: Floats,
    linked_errors: NDArray[Any] | None,
    shared_errors: NDArray[Any] | None,
    extinction: Floats,
    av_error: Floats,
) -> None:
    """Fill in M rows of a result: stars that all use the n relations `chosen` and have the same bands.

    Parameters
    ----------
    y, slope : array, shape (M, n)
        log theta of each relation, and its derivative by the colour.
    by_input : array, shape (S, I) or (M, S, I)
        d system magnitude / d input magnitude.
    by_scatter : array, shape (S, S)
        The transformations' scatter in each system band, magnitudes.
    errors, linked_errors, shared_errors : array, shape (M, I)
        Of the input magnitudes: each star's own, the part of it that its bands have together, and
        what is common to all stars alike.
    extinction : array, shape (I,)
        A(band) / A_V of the inputs.
    av_error : array, shape (M,)

    Notes
    -----
    log theta = f(zero magnitude, colour), so an error e of the system magnitudes moves it by
    -0.2 e_zero + slope (e_bluer - e_redder). Leaving relation i out lowers chi^2 by q_i^2 / P_ii with
    q = C^-1 (y - mean) and P = C^-1 - C^-1 1 1' C^-1 / (1' C^-1 1); its pull is q_i / sqrt(P_ii).
    """
    zero, bluer, redder = (place[chosen] for place in (relations.zero, relations.bluer, relations.redder))
    square = np.ix_(chosen, chosen)
    fixed, systematic = relations.random[square] + relations.systematic[square], relations.systematic[square]
    # Only what can move these relations: inputs and transformations that reach their bands.
    bands = np.concatenate([zero, bluer, redder])
    reach = np.abs(by_input[..., bands, :])
    inputs = np.flatnonzero(reach.reshape(-1, reach.shape[-1]).any(axis=0))
    scattered = np.flatnonzero(by_scatter[bands].any(axis=0))

    for start in range(0, len(rows), _BATCH):
        part = slice(start, start + _BATCH)
        s = slope[part, :, None]

        def effect(response: Floats, s: Floats = s) -> Floats:
            """d log theta, shape (m, n, P), of P nuisances; `response` has shape (S, P) or (m, S, P)."""
            at_zero, by_colour = response[..., zero, :], response[..., bluer, :] - response[..., redder, :]
            return np.asarray(s * by_colour - 0.2 * at_zero)

        by_magnitude = effect(by_input[:, inputs] if by_input.ndim == 2 else by_input[part][:, :, inputs])
        alone, linked = errors[part][:, inputs], None
        if linked_errors is not None and (now := linked_errors[part][:, inputs]).any():
            linked = (by_magnitude * now[:, None]).sum(axis=2, keepdims=True)
            alone = np.sqrt(np.maximum(alone**2 - now**2, 0.0))
        own = np.concatenate(
            [
                by_magnitude * alone[:, None],
                *([] if linked is None else [linked]),
                effect(by_scatter[:, scattered]),
                (by_magnitude * extinction[inputs]).sum(axis=2, keepdims=True) * av_error[part, None, None],
            ],
            axis=2,
        )
        covariance = np.matmul(own, own.transpose(0, 2, 1))
        covariance += fixed
        together = None
        if shared_errors is not None and (now := shared_errors[part][:, inputs]).any():
            together = (by_magnitude * now[:, None]).sum(axis=2)
            covariance += together[:, :, None] * together[:, None, :]
        inverse = np.linalg.inv(covariance)
        summed = inverse.sum(axis=2)
        information = summed.sum(axis=1)
        weights = summed / information[:, None]
        values = y[part]
        mean = (weights * values).sum(axis=1)
        residual = values - mean[:, None]
        projected = np.matmul(inverse, residual[:, :, None])[:, :, 0]
        spread = np.einsum("mii->mi", inverse) - summed * weights
        with np.errstate(invalid="ignore", divide="ignore"):
            pulls = np.where(spread > 1e-9 * information[:, None], projected / np.sqrt(spread), np.nan)
        shared_variance = ((weights @ systematic) * weights).sum(axis=1)
        if together is not None:
            shared_variance += (together * weights).sum(axis=1) ** 2
        here = rows[part]
        result.mean[here] = mean
        result.variance[here] = 1 / information
        result.shared_variance[here] = shared_variance
        result.chi_squared[here] = np.maximum((residual * projected).sum(axis=1), 0.0)
        result.weights[here[:, None], chosen] = weights
        result.pulls[here[:, None], chosen] = pulls
