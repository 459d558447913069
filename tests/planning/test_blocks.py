"""Sequences of looks against kriging written out and against trying everything."""

from itertools import product

import numpy as np
import pytest

from pinlight.planning.blocks import StarErrors, best_sequences, look_variances, worth_most
from pinlight.ranking.sets import field_covariance, kriging_variance

TARGET, DRIFT, LOOK_MIN = (150.0, 20.0), (0.03, 45.0, 15.0), 10.0


def stars(random, count=3, star_error=0.01, photon=0.003, shared=0.004):
    return StarErrors(
        ra_deg=150 + random.uniform(-6, 6, count),
        dec_deg=20 + random.uniform(-6, 6, count),
        star_variance=random.uniform(0.5, 1.5, count) * star_error**2,
        look_variance=random.uniform(0.5, 1.5, count) * photon**2,
        shared=np.full((count, count), shared**2),
    )


@pytest.mark.parametrize("sequence", [(0, 0), (0, 1), (2, 0, 1), (1, 1, 2, 0)])
def test_a_sequences_variance_is_the_kriging_of_its_looks(sequence):
    some = stars(np.random.default_rng(4))
    [variance], _ = look_variances(some, np.array([sequence]), TARGET, DRIFT, LOOK_MIN)
    total = 0.0
    for target_look in range(len(sequence) - 1):
        times = np.array([2 * LOOK_MIN * i for i in range(len(sequence))] + [LOOK_MIN * (2 * target_look + 1)])
        ra, dec = (
            np.append(column[list(sequence)], place)
            for column, place in ((some.ra_deg, 150.0), (some.dec_deg, 20.0))
        )
        field = field_covariance(*DRIFT, times, ra, dec)
        errors = np.zeros((len(sequence), len(sequence)))
        for i, a in enumerate(sequence):
            for j, b in enumerate(sequence):
                errors[i, j] = (
                    some.shared[a, b]
                    + (some.star_variance[a] if a == b else 0)
                    + (some.look_variance[a] if i == j else 0)
                )
        total += kriging_variance(field[:-1, :-1] + errors, field[:-1, -1], DRIFT[0] ** 2)[0]
    assert variance == pytest.approx(total / (len(sequence) - 1))


def test_the_best_sequence_of_each_length_has_the_least_variance():
    for seed in range(6):
        some = stars(np.random.default_rng(seed))
        for target_looks, chosen in enumerate(best_sequences(some, TARGET, DRIFT, LOOK_MIN), start=1):
            assert chosen.target_looks == target_looks
            assert chosen.minutes == (2 * target_looks + 1) * LOOK_MIN
            every = [
                look_variances(some, np.array([sequence]), TARGET, DRIFT, LOOK_MIN)[0][0]
                for sequence in product(range(3), repeat=target_looks + 1)
            ]
            assert chosen.error**2 == pytest.approx(min(every))


@pytest.mark.parametrize("sequence", [(0, 1), (2, 0, 1), (1, 1, 2, 0)])
def test_the_error_of_the_looks_mean_agrees_with_a_monte_carlo_of_the_field(sequence):
    some = stars(np.random.default_rng(4))
    chosen = list(sequence)
    count = len(chosen)
    minutes = LOOK_MIN * np.arange(2 * count - 1)
    calibrator_looks, target_looks = slice(0, None, 2), slice(1, None, 2)
    ra, dec = np.full(2 * count - 1, TARGET[0]), np.full(2 * count - 1, TARGET[1])
    ra[calibrator_looks], dec[calibrator_looks] = some.ra_deg[chosen], some.dec_deg[chosen]
    field = field_covariance(*DRIFT, minutes, ra, dec)
    errors = some.shared[np.ix_(chosen, chosen)].copy()
    for i, a in enumerate(chosen):
        for j, b in enumerate(chosen):
            errors[i, j] += (a == b) * some.star_variance[a] + (i == j) * some.look_variance[a]
    seen = field[calibrator_looks, calibrator_looks] + errors
    weights = np.array(
        [
            kriging_variance(seen, field[look, calibrator_looks], DRIFT[0] ** 2)[1]
            for look in range(1, 2 * count - 1, 2)
        ]
    )
    random = np.random.default_rng(9)
    draws = 100_000
    truth = random.multivariate_normal(np.zeros(2 * count - 1), field, draws)
    data = truth[:, calibrator_looks] + random.multivariate_normal(np.zeros(count), errors, draws)
    wrong = (data @ weights.T - truth[:, target_looks]).mean(axis=1)
    each, of_mean = look_variances(some, np.array([sequence]), TARGET, DRIFT, LOOK_MIN)
    # The variance of a variance from n draws is 2/n of its square.
    assert of_mean[0] == pytest.approx(wrong.var(), rel=4 * np.sqrt(2 / draws))
    assert of_mean[0] <= each[0] + 1e-12


def test_drift_makes_long_blocks_pay_and_the_calibrators_own_errors_short_ones():
    drifting = stars(np.random.default_rng(2), star_error=1e-4, photon=1e-4, shared=1e-4)
    assert worth_most(best_sequences(drifting, TARGET, (0.03, 5.0, 60.0), LOOK_MIN)).target_looks > 1
    uncertain = stars(np.random.default_rng(2), star_error=0.05, photon=1e-4, shared=0.03)
    assert worth_most(best_sequences(uncertain, TARGET, (0.003, 45.0, 60.0), LOOK_MIN)).target_looks == 1


def test_two_stars_beat_one_where_their_own_errors_rule():
    some = stars(np.random.default_rng(2), star_error=0.05, photon=1e-4, shared=0.0)
    assert all(len(set(one.calibrators)) > 1 for one in best_sequences(some, TARGET, DRIFT, LOOK_MIN))
