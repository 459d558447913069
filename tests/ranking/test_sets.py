"""Calibrator sets against a Monte Carlo of the field and against exhaustive search."""

from itertools import combinations, product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pinlight.ranking.budget import error_budget, fixed_terms
from pinlight.ranking.rank import rank
from pinlight.ranking.sets import best_subsets, field_covariance, kriging_variance, subset_variances
from pinlight.ranking.setup import quick_setup, setup_of
from pinlight.ranking.target import Target
from pinlight.sky.positions import separation_deg
from tests.ranking.stars import columns

TARGET = Target(100.0, 21.0, magnitudes={"V": 6.0, "H": 4.0, "Ks": 3.9})


def looks(random, count):
    """Covariance of `count` looks with own and shared errors, and to a target look at the centre."""
    ra, dec = 150 + random.uniform(-8, 8, count), 20 + random.uniform(-8, 8, count)
    times = random.uniform(-40, 40, count)
    field = field_covariance(0.04, 45.0, 12.0, np.append(times, 0), np.append(ra, 150.0), np.append(dec, 20.0))
    shared = random.uniform(0.002, 0.01, count)
    errors = np.diag(random.uniform(0.004, 0.03, count) ** 2) + np.outer(shared, shared)
    return field, errors


@pytest.mark.parametrize("count", [1, 2, 3, 5])
def test_the_sets_variance_is_that_of_a_monte_carlo_of_the_field(count):
    random = np.random.default_rng(count)
    field, errors = looks(random, count)
    variance, weights = kriging_variance(field[:-1, :-1] + errors, field[:-1, -1], 0.04**2)
    assert weights.sum() == pytest.approx(1)
    draws = 100_000
    drawn = random.multivariate_normal(np.zeros(count + 1), field, draws)
    noise = random.multivariate_normal(np.zeros(count), errors, draws)
    mean = 0.7  # unknown to the estimate, which must not care
    estimate = (mean + drawn[:, :-1] + noise) @ weights
    miss = estimate - (mean + drawn[:, -1])
    # The sampled variance of 10^5 draws is good to sqrt(2/10^5) = 0.45 %; three sigma.
    assert miss.var() == pytest.approx(variance, rel=0.0135)
    assert abs(miss.mean()) < 3 * np.sqrt(variance / draws)


def test_no_other_weights_do_better():
    random = np.random.default_rng(9)
    field, errors = looks(random, 4)
    covariance, to_target = field[:-1, :-1] + errors, field[:-1, -1]
    variance, weights = kriging_variance(covariance, to_target, 0.04**2)
    for _ in range(200):
        step = random.normal(0, 0.2, 4)
        other = weights + step - step.mean()
        assert other @ covariance @ other - 2 * other @ to_target + 0.04**2 >= variance - 1e-15


@pytest.mark.parametrize("trial", range(10))
def test_the_best_subset_is_that_of_an_exhaustive_search(trial):
    random = np.random.default_rng(50 + trial)
    field, errors = looks(random, 8)
    covariance, to_target = field[:-1, :-1] + errors, field[:-1, -1]
    best = best_subsets(covariance, covariance, to_target, 0.04**2)
    assert [len(members) for members, _ in best] == [1, 2, 3, 4]
    for members, variance in best:
        everything = {
            subset: float(
                kriging_variance(covariance[np.ix_(subset, subset)], to_target[list(subset)], 0.04**2)[0]
            )
            for subset in combinations(range(8), len(members))
        }
        winner = min(everything, key=lambda subset: everything[subset])
        assert members == winner
        assert variance == pytest.approx(everything[winner], rel=1e-9)


@pytest.mark.parametrize("trial", range(10))
def test_members_of_a_set_have_a_moment_in_common(trial):
    random = np.random.default_rng(80 + trial)
    field, errors = looks(random, 8)
    covariance, to_target = field[:-1, :-1] + errors, field[:-1, -1]
    moments = random.random((8, 70)) < 0.12
    best = best_subsets(
        covariance,
        covariance,
        to_target,
        0.04**2,
        possible=lambda subsets: moments[subsets].all(axis=1).any(axis=1),
    )
    for size in (1, 2, 3, 4):
        possible = {
            subset: float(
                kriging_variance(covariance[np.ix_(subset, subset)], to_target[list(subset)], 0.04**2)[0]
            )
            for subset in combinations(range(8), size)
            if any(all(moments[member, time] for member in subset) for time in range(70))
        }
        if not possible:
            assert len(best) < size
            continue
        members, variance = best[size - 1]
        assert variance == pytest.approx(min(possible.values()), rel=1e-9)
        assert members in possible


@given(st.integers(0, 10_000), st.integers(1, 7))
@settings(max_examples=60, deadline=None)
def test_the_error_never_grows_when_a_calibrator_is_added(seed, count):
    random = np.random.default_rng(seed)
    field, errors = looks(random, count + 1)
    covariance, to_target = field[:-1, :-1] + errors, field[:-1, -1]
    fewer = kriging_variance(covariance[:count, :count], to_target[:count], 0.04**2)[0]
    more = kriging_variance(covariance, to_target, 0.04**2)[0]
    assert more <= fewer + 1e-15


def test_two_calibrators_that_share_all_of_their_error_are_worth_no_more_than_one_for_it():
    nothing = np.zeros(2)  # no drift at all: only the diameters count
    shared = np.full((2, 2), 0.01**2)
    one = subset_variances(shared[:1, :1], shared[:1, :1], nothing[:1], 0.0, np.array([[0]]))[0]
    both = subset_variances(shared + np.eye(2) * 1e-14, shared, nothing, 0.0, np.array([[0, 1]]))[0]
    assert both == pytest.approx(one, rel=1e-6)
    own = np.eye(2) * 0.01**2
    assert subset_variances(own, own, nothing, 0.0, np.array([[0, 1]]))[0] == pytest.approx(one / 2)


def test_looks_are_shared_out_between_the_two_sides_in_the_best_way():
    random = np.random.default_rng(13)
    ra, dec = 150 + random.uniform(-8, 8, 4), 20 + random.uniform(-8, 8, 4)
    errors = np.diag(random.uniform(0.01, 0.03, 4) ** 2)
    numbers = (0.04, 45.0, 12.0)
    ways = []
    for times in ([-1, -1, 1, 1], [-1, 1, -1, 1], [-1, 1, 1, -1]):
        when = np.append(10.0 * np.array(times), 0)
        field = field_covariance(*numbers, when, np.append(ra, 150.0), np.append(dec, 20.0))
        ways.append(kriging_variance(field[:-1, :-1] + errors, field[:-1, -1], 0.04**2)[0])
    still = field_covariance(*numbers, np.zeros(4), ra, dec)
    sides = [errors + still * np.exp(-lag / 45.0) for lag in (0.0, 20.0)]
    sides[1] = np.where(np.eye(4, dtype=bool), np.nan, sides[1])  # a look is never opposite to itself
    found = subset_variances(*sides, field[:-1, -1], 0.04**2, np.array([[0, 1, 2, 3]]))[0]
    assert found == pytest.approx(min(ways), rel=1e-9)


def quiet(dec, **more):
    return {"dec_deg": dec} | more


def test_a_set_of_one_costs_what_its_star_costs(north):
    setup = setup_of(north, None, "H")
    answer = rank(columns([quiet(20.0), quiet(19.0), quiet(23.0)]), TARGET, setup)
    best = answer.best_sets
    assert [len(one.star_ids) for one in best] == [1, 2, 3]
    assert best[0].star_ids == (answer.calibrators[0].star_id,)
    assert best[0].calibration_error == pytest.approx(answer.calibrators[0].calibration_error, rel=1e-9)
    errors = [one.calibration_error for one in best]
    assert errors == sorted(errors, reverse=True)


@pytest.mark.parametrize("judge", ["rms", "worst"])
def test_a_sets_error_by_the_bordered_system_written_out(north, judge):
    # Stars around the target, two before its look and two after, in the way that serves best.
    setup = setup_of(north, None, "H")
    target = Target(100.0, 20.0, magnitudes={"H": 4.5})
    stars = columns(
        [
            {"ra_deg": 100.0 + east, "dec_deg": 20.0 + up, "theta": theta, "own": 0.01, "shared": 0.02}
            for east, up, theta in ((2, 1, 0.5), (-3, 2, 0.7), (1, -4, 0.35), (5, 3, 0.6))
        ]
    )
    found = rank(stars, target, setup, judge=judge)
    assert [len(one.star_ids) for one in found.best_sets] == [1, 2, 3, 4]
    by_id = {c.star_id: c for c in found.calibrators}
    minutes, drift = setup.look_interval_min, setup.drift
    rows = np.arange(4)
    lengths = np.broadcast_to(setup.baselines_m, (4, len(setup.baselines)))
    fixed = fixed_terms(stars, rows, np.zeros(4), setup, 4.5)
    slopes = dict(zip(stars.ids, error_budget(stars, rows, setup, fixed, judge, lengths).slopes, strict=True))

    def shared(a, b):
        """Mean product of the sensitivities, or that where each is steepest, times the shared errors."""
        product = np.mean(slopes[a] * slopes[b]) if judge == "rms" else slopes[a].min() * slopes[b].min()
        return product * (0.02 / by_id[a].limb_darkened_mas) * (0.02 / by_id[b].limb_darkened_mas)

    def variance(ids, sides):
        size = len(ids)
        system = np.zeros((size + 1, size + 1))
        right = np.ones(size + 1)
        for i, a in enumerate(ids):
            for j, b in enumerate(ids):
                apart = separation_deg(by_id[a].ra_deg, by_id[a].dec_deg, by_id[b].ra_deg, by_id[b].dec_deg)
                lag = 0 if sides[i] == sides[j] else 2 * minutes
                system[i, j] = drift.spread**2 * np.exp(-lag / drift.time_min - apart / drift.angle_deg)
                if a == b:
                    terms = {k: v for k, v in by_id[a].budget.items() if k != "drift" and v is not None}
                    system[i, j] += sum(v**2 for v in terms.values())
                else:
                    system[i, j] += shared(a, b)
            away = separation_deg(by_id[a].ra_deg, by_id[a].dec_deg, 100.0, 20.0)
            right[i] = drift.spread**2 * np.exp(-minutes / drift.time_min - away / drift.angle_deg)
            system[i, size] = system[size, i] = 1
        return drift.spread**2 - np.linalg.solve(system, right) @ right

    for one in found.best_sets[1:]:
        size = len(one.star_ids)
        halves = [s for s in product((0, 1), repeat=size) if sum(s) in (size // 2, size - size // 2)]
        best = min(variance(one.star_ids, sides) for sides in halves)
        assert one.calibration_error == pytest.approx(np.sqrt(best), rel=1e-6)


def test_without_drift_sets_average_the_stars_own_errors_but_not_the_shared():
    stars = columns([quiet(20.0 + 0.1 * i, own=0.01, shared=0.0) for i in range(4)])
    answer = rank(stars, TARGET, quick_setup(150.0, 1.65))
    errors = [one.calibration_error for one in answer.best_sets]
    np.testing.assert_allclose(errors, errors[0] / np.sqrt([1, 2, 3, 4]), rtol=1e-6)
    shared = columns([quiet(20.0 + 0.1 * i, own=1e-6, shared=0.01) for i in range(4)])
    errors = [one.calibration_error for one in rank(shared, TARGET, quick_setup(150.0, 1.65)).best_sets]
    np.testing.assert_allclose(errors, errors[0], rtol=1e-4)


def test_a_named_set_is_evaluated_and_a_star_that_fails_is_named(north):
    setup = setup_of(north, None, "H")
    stars = columns([quiet(20.0), quiet(19.0), quiet(23.0), quiet(22.0, flags="double"), {"ra_deg": 300.0}])
    answer = rank(stars, TARGET, setup, with_ids=[1, 3], best=1)
    assert sorted(answer.named_set.star_ids) == [1, 3]
    pairs = {one.star_ids: one.calibration_error for one in answer.best_sets if len(one.star_ids) == 2}
    assert answer.named_set.calibration_error >= min(pairs.values()) - 1e-12
    single = rank(stars, TARGET, setup, with_ids=[2])
    expected = next(c for c in single.calibrators if c.star_id == 2).calibration_error
    assert single.named_set.calibration_error == pytest.approx(expected)
    for star_id, message in (
        (4, "which is left out: an entry of several stars"),
        (5, "which is left out: farther"),
        (99, "does not have"),
    ):
        with pytest.raises(ValueError, match=message):
            rank(stars, TARGET, setup, with_ids=[star_id])


def test_the_best_of_many_is_found_though_most_are_never_worked_out(north):
    # A thousand stars, ranked with the bound that saves work and by working out every one.
    random = np.random.default_rng(77)
    many = [
        {"ra_deg": float(ra), "dec_deg": float(dec), "theta": float(theta), "H": float(h), "own": float(theta * e)}
        for ra, dec, theta, h, e in zip(
            random.uniform(90, 110, 1000), random.uniform(11, 31, 1000), random.uniform(0.1, 0.9, 1000),
            random.uniform(2, 6.9, 1000), random.uniform(0.01, 0.3, 1000), strict=True,
        )
    ]  # fmt: skip
    stars, setup = columns(many), setup_of(north, None, "H")
    few, all_of_them = rank(stars, TARGET, setup, best=5), rank(stars, TARGET, setup, best=1000)
    assert [c.star_id for c in few.calibrators] == [c.star_id for c in all_of_them.calibrators[:5]]
    assert few.ranked == all_of_them.ranked == len(all_of_them.calibrators)
    assert few.best_sets == all_of_them.best_sets
