import numpy as np
import pytest

from pinlight.ranking.budget import drift_error


def test_drift_is_the_spread_of_the_difference_of_two_points_of_the_field():
    # A Gaussian field with covariance s^2 exp(-dt/tau) exp(-psi/psi0), drawn at two points.
    spread, tau, psi0, dt, psi = 0.04, 40.0, 15.0, 12.0, 4.0
    correlation = np.exp(-dt / tau) * np.exp(-psi / psi0)
    covariance = spread**2 * np.array([[1, correlation], [correlation, 1]])
    drawn = np.random.default_rng(2).multivariate_normal([0, 0], covariance, 200_000)
    assert drift_error(spread, tau, psi0, dt, np.array([psi]))[0] == pytest.approx(
        (drawn[:, 0] - drawn[:, 1]).std(), rel=0.01
    )


def test_drift_limits():
    far = drift_error(0.05, 40.0, 15.0, 1e9, np.array([0.0]))[0]
    assert far == pytest.approx(np.sqrt(2) * 0.05)
    assert drift_error(0.05, 40.0, 15.0, 0.0, np.array([0.0]))[0] == 0
    small = drift_error(0.05, 40.0, 15.0, 1e-6, np.array([0.0]))[0]
    assert small == pytest.approx(0.05 * np.sqrt(2 * 1e-6 / 40), rel=1e-6)
