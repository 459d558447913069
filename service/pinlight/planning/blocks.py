"""Blocks: calibrators and target in turn, in the order that costs the least error for the time."""

from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from pinlight.ranking.sets import kriging_variance
from pinlight.sky.positions import separation_deg

__all__ = ["Sequence", "StarErrors", "best_sequences", "look_variances", "worth_most"]

Floats = NDArray[np.float64]

_MOST_TARGET_LOOKS = 3


@dataclass(frozen=True)
class StarErrors:
    """What a block needs to know of K calibrators; errors relative, as variances.

    ra_deg, dec_deg : shape (K,)
    star_variance : shape (K,), the part that is the same in every look at one star: its own diameter
        error, companion, shape and brightness
    look_variance : shape (K,), the part that is new in every look: photon noise
    shared : shape (K, K), covariance of the diameters' shared part
    """

    ra_deg: Floats
    dec_deg: Floats
    star_variance: Floats
    look_variance: Floats
    shared: Floats


@dataclass(frozen=True)
class Sequence:
    """Looks in order; each takes a slew and an integration.

    calibrators : which of the K calibrators each calibrator look is at; target looks stand between
        them, one fewer
    error : root mean kriging variance at the target's looks
    mean_error : of the mean of the target's looks
    minutes : how long it takes
    """

    calibrators: tuple[int, ...]
    error: float
    mean_error: float
    minutes: float

    @property
    def target_looks(self) -> int:
        return len(self.calibrators) - 1


def look_variances(
    stars: StarErrors,
    assignments: NDArray[np.int64],
    target: tuple[float, float],
    drift: tuple[float, float, float],
    look_min: float,
) -> tuple[Floats, Floats]:
    """Kriging variance at the target's looks of many sequences of one length.

    Parameters
    ----------
    stars : StarErrors
    assignments : array of int, shape (A, L)
        The calibrator of each of L calibrator looks; a target look stands between every two.
    target : (ra_deg, dec_deg)
    drift : (spread, time_min, angle_deg)
    look_min : float
        From one look's middle to the next one's.

    Returns
    -------
    each, of_mean : array, shape (A,)
        The mean of the variances at the target's looks, and the variance of the looks' mean: looks share
        calibrators, and with them errors.
    """
    spread, time_min, angle_deg = drift
    looks = assignments.shape[1]
    calibrator_at = 2 * look_min * np.arange(looks)
    target_at = look_min * (2 * np.arange(looks - 1) + 1)
    ra, dec = np.append(stars.ra_deg, target[0]), np.append(stars.dec_deg, target[1])
    nearness = np.exp(-separation_deg(ra[:, None], dec[:, None], ra[None, :], dec[None, :]) / angle_deg)
    one, other = assignments[:, :, None], assignments[:, None, :]
    lag = np.exp(-np.abs(calibrator_at[:, None] - calibrator_at[None, :]) / time_min)
    covariance = spread**2 * nearness[one, other] * lag + stars.shared[one, other]
    covariance += np.where(one == other, stars.star_variance[one], 0.0)
    covariance += np.eye(looks) * stars.look_variance[one]
    to_target = (
        spread**2
        * nearness[assignments, -1][:, None, :]
        * np.exp(-np.abs(target_at[:, None] - calibrator_at[None, :]) / time_min)
    )
    shape = (len(assignments), looks - 1, looks, looks)
    variance, weights = kriging_variance(np.broadcast_to(covariance[:, None], shape), to_target, spread**2)
    seen = weights @ covariance @ weights.swapaxes(1, 2)
    across = weights @ to_target.swapaxes(1, 2)
    between = spread**2 * np.exp(-np.abs(target_at[:, None] - target_at[None, :]) / time_min)
    of_mean = (seen - across - across.swapaxes(1, 2) + between).mean(axis=(1, 2))
    return variance.mean(axis=1), np.maximum(of_mean, 0.0)


def best_sequences(
    stars: StarErrors, target: tuple[float, float], drift: tuple[float, float, float], look_min: float
) -> list[Sequence]:
    """For one, two and three looks at the target the sequence of least mean kriging variance.

    Parameters
    ----------
    stars : StarErrors
        Calibrators to choose from, in any order and number; four or fewer keep the search short.
    target, drift, look_min
        As `look_variances`.
    """
    count = len(stars.ra_deg)
    sequences = []
    for target_looks in range(1, _MOST_TARGET_LOOKS + 1):
        assignments = np.array(list(product(range(count), repeat=target_looks + 1)), dtype=np.int64)
        each, of_mean = look_variances(stars, assignments, target, drift, look_min)
        best = int(each.argmin())
        sequences.append(
            Sequence(
                tuple(int(star) for star in assignments[best]),
                float(np.sqrt(each[best])),
                float(np.sqrt(of_mean[best])),
                (2 * target_looks + 1) * look_min,
            )
        )
    return sequences


def worth_most(sequences: list[Sequence]) -> Sequence:
    """The sequence that tells most of the target for its time.

    That is the least product of the time and the variance of the target looks' mean: more looks pay
    where the field's drift rules, not where the calibrators' own errors do.
    """
    return min(sequences, key=lambda sequence: sequence.mean_error**2 * sequence.minutes)
