"""Sequences of looks against kriging written out and against trying everything."""

from itertools import product

import numpy as np
import pytest

from pinlight.planning.blocks import StarErrors, best_sequence, look_variances
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
    [variance] = look_variances(some, np.array([sequence]), TARGET, DRIFT, LOOK_MIN)
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


def test_the_best_sequence_is_worth_its_time_most():
    for seed in range(10):
        some = stars(np.random.default_rng(seed))
        chosen = best_sequence(some, TARGET, DRIFT, LOOK_MIN)
        worth = {}
        for target_looks in (1, 2, 3):
            for sequence in product(range(3), repeat=target_looks + 1):
                [variance] = look_variances(some, np.array([sequence]), TARGET, DRIFT, LOOK_MIN)
                worth[sequence] = variance * (2 * target_looks + 1) * LOOK_MIN
        assert chosen.error**2 * chosen.minutes == pytest.approx(min(worth.values()))
        assert chosen.minutes == (2 * chosen.target_looks + 1) * LOOK_MIN


def test_a_required_error_takes_the_shortest_sequence_that_reaches_it():
    some = stars(np.random.default_rng(1))
    shortest = best_sequence(some, TARGET, DRIFT, LOOK_MIN, required_error=0.5)
    assert shortest.target_looks == 1
    best = best_sequence(some, TARGET, DRIFT, LOOK_MIN, required_error=1e-6)
    assert best.error <= min(shortest.error, best_sequence(some, TARGET, DRIFT, LOOK_MIN).error) + 1e-12


def test_two_stars_beat_one_where_their_own_errors_rule():
    some = stars(np.random.default_rng(2), star_error=0.05, photon=1e-4, shared=0.0)
    sequence = best_sequence(some, TARGET, DRIFT, LOOK_MIN)
    assert len(set(sequence.calibrators)) > 1
