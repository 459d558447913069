import numpy as np
import pytest

from pinlight.fringes.companions import companion_error, suspected_companion_error


@pytest.mark.parametrize("f", [0.001, 0.02, 0.3, 1.0])
def test_the_term_is_the_rms_of_v2_over_the_companions_phase(f):
    phase = np.linspace(0, 2 * np.pi, 20_001)[:-1]
    v2 = np.abs((1 + f * np.exp(1j * phase)) / (1 + f)) ** 2
    assert companion_error(f) == pytest.approx(v2.std(), rel=1e-9)


def test_it_does_not_matter_which_of_the_two_is_brighter():
    assert companion_error(4.0) == pytest.approx(companion_error(0.25))


def test_a_suspicion_costs_less_than_the_worst_companion_and_more_than_none():
    assert 0.005 < suspected_companion_error() < companion_error(1.0) / 10
