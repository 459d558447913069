import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import j0, jv

from pinlight.errors import InputError
from pinlight.fringes.visibility import (
    MAS,
    channel_average,
    channel_nodes,
    disk_argument,
    resolution_mas,
    sensitivity,
    visibility,
)

# Abramowitz & Stegun (1964): J1 at 1, 2 and 5 from Table 9.1, zeros of J1 from Table 9.5,
# the first root of tan x = x from Table 4.19.
PUBLISHED = [
    pytest.param(0.0, 0.0, 1.0, 1e-15, id="point source"),
    pytest.param(1.0, 0.0, 2 * 0.4400505857, 1e-9, id="table 9.1, x = 1"),
    pytest.param(2.0, 0.0, 0.5767248078, 1e-9, id="table 9.1, x = 2"),
    pytest.param(5.0, 0.0, 2 * -0.3275791376 / 5, 1e-9, id="table 9.1, x = 5"),
    # Table 9.5 has five decimals, which moves the visibility by up to 1e-6.
    pytest.param(3.83171, 0.0, 0.0, 2e-6, id="first null, table 9.5"),
    pytest.param(7.01559, 0.0, 0.0, 2e-6, id="second null, table 9.5"),
    pytest.param(4.49341, 1.0, 0.0, 2e-6, id="fully darkened, table 4.19"),
]


@pytest.mark.parametrize(("x", "u", "expected", "tolerance"), PUBLISHED)
def test_disk_visibility_matches_published_tables(x, u, expected, tolerance):
    assert visibility(x, u) == pytest.approx(expected, abs=tolerance)


@pytest.mark.parametrize("u", [0.0, 0.2, 0.5, 0.8, 1.0])
@pytest.mark.parametrize("x", [1e-4, 0.05, 0.1999, 0.2001, 1.0, 3.0, 4.2, 9.0])
def test_visibility_is_the_hankel_transform_of_the_disc(x, u):
    def brightness(r):
        return 1 - u * (1 - np.sqrt(1 - r * r))

    # With the angle r = sin t the root at the limb is smooth, and the quadrature exact to 1e-12.
    def part(kernel):
        return quad(
            lambda t: brightness(np.sin(t)) * kernel(np.sin(t)) * np.sin(t) * np.cos(t),
            0,
            np.pi / 2,
            epsabs=1e-13,
        )[0]

    expected = part(lambda r: j0(x * r)) / part(np.ones_like)
    assert visibility(x, u) == pytest.approx(expected, abs=1e-10)


def test_the_published_form_with_j_three_halves_is_the_same():
    # Hanbury Brown et al. (1974), MNRAS 167, 475, as written there.
    x, u = np.linspace(0.3, 12, 50), 0.37
    written = ((1 - u) * jv(1, x) / x + u * np.sqrt(np.pi / 2) * jv(1.5, x) / x**1.5) / ((1 - u) / 2 + u / 3)
    np.testing.assert_allclose(visibility(x, u), written, rtol=0, atol=1e-13)


@pytest.mark.parametrize("u", [0.0, 0.3, 0.7, 1.0])
@pytest.mark.parametrize("x", [0.02, 0.15, 0.19, 0.21, 0.7, 1.8, 3.3, 5.1])
def test_sensitivity_is_the_slope_of_ln_v2(x, u):
    step = 1e-6

    def ln_v2(factor):
        return np.log(visibility(x * factor, u) ** 2)

    slope = (ln_v2(1 + step) - ln_v2(1 - step)) / (2 * step)
    assert sensitivity(x, u) == pytest.approx(slope, rel=2e-6, abs=2e-8)


@pytest.mark.parametrize(
    ("theta_mas", "baseline_m", "wavelength_um", "v2", "slope"),
    [
        # Evaluated to the digits shown from the closed form -2 x J2/J1 with 1 mas = 4.848137e-9 rad.
        (0.5, 100, 2.20, 0.97042, -0.0602),
        (1.0, 100, 2.20, 0.88599, -0.2446),
        (2.0, 100, 2.20, 0.60645, -1.0457),
        (1.0, 60, 0.70, 0.64250, -0.9200),
        (0.3, 250, 0.65, 0.43632, -1.7913),
        (0.5, 330, 0.70, 0.00308, -32.2),
    ],
)
def test_worked_examples(theta_mas, baseline_m, wavelength_um, v2, slope):
    x = disk_argument(theta_mas, baseline_m, wavelength_um)
    assert visibility(x) ** 2 == pytest.approx(v2, abs=6e-6)
    assert sensitivity(x) == pytest.approx(slope, rel=1e-3)


def test_sensitivity_diverges_at_a_null_and_is_not_clipped():
    assert sensitivity(3.8317059702) < -1e8
    assert sensitivity(3.8317059703) > 1e8


def test_the_first_null_lies_at_1_22_wavelengths_over_the_diameter():
    baseline_m = 1.21967 * 2.2e-6 / MAS
    assert baseline_m == pytest.approx(553.5, abs=0.1)
    assert visibility(disk_argument(1.0, baseline_m, 2.2)) == pytest.approx(0, abs=1e-5)


def test_resolving_power_goes_as_wavelength_over_baseline():
    # Common practice, no source: a visible array of 437 m resolves about 0.1 mas.
    assert 0.08 < resolution_mas(437.0, 0.5) < 0.14
    assert resolution_mas(437.0, 1.0) == pytest.approx(2 * resolution_mas(437.0, 0.5))
    assert resolution_mas(874.0, 0.5) == pytest.approx(resolution_mas(437.0, 0.5) / 2)


def test_a_channel_is_the_mean_of_v2_over_its_wavelengths():
    nodes, weights = channel_nodes(1.65, 0.3, 2)
    v2, slope = channel_average([0.9], [0.25], np.array([180.0]), nodes, weights)
    for channel, (low, high) in enumerate(((1.5, 1.65), (1.65, 1.8))):
        mean = quad(lambda um: visibility(disk_argument(0.9, 180.0, um), 0.25) ** 2, low, high)[0] / 0.15
        assert v2[0, 0, channel] == pytest.approx(mean, rel=1e-6)

    def at(theta):
        return channel_average([theta], [0.25], np.array([180.0]), nodes, weights)[0]

    numeric = (np.log(at(0.9 * 1.00001)) - np.log(at(0.9 * 0.99999))) / 2e-5
    np.testing.assert_allclose(slope, numeric, rtol=1e-6)


def test_channels_tile_the_band():
    nodes, weights = channel_nodes(2.2, 0.4, 4)
    assert nodes.shape == (4, 3)
    assert weights.sum() == pytest.approx(1)
    assert (nodes * weights).sum(axis=1) == pytest.approx([2.05, 2.15, 2.25, 2.35])


def test_a_wavelength_of_zero_is_refused():
    with pytest.raises(InputError, match="wavelength_um is 0; it must be positive"):
        disk_argument(1.0, 100.0, 0.0)
