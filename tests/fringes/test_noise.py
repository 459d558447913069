import numpy as np
import pytest

from pinlight.faces.setups import known_arrays
from pinlight.fringes.noise import counts_per_frame_at_mag0, snr_of_v2
from pinlight.photometry.bands import BANDS


def simulated_snr(mean_counts, v, read_variance, frames, random):
    """Fringe power of frames of photons whose phases follow a fringe, its bias taken off."""
    counts = random.poisson(mean_counts, frames)
    photons = counts.sum()
    # Rejection sampling: three times as many candidates as are needed, since the fringe keeps half or more.
    candidates = random.uniform(0, 2 * np.pi, 3 * photons)
    phases = candidates[random.uniform(0, 1 + v, candidates.size) < 1 + v * np.cos(candidates)][:photons]
    assert phases.size == photons
    ends = np.concatenate([[0], np.cumsum(counts)])
    summed = np.concatenate([[0], np.cumsum(np.exp(1j * phases))])
    noise = np.sqrt(read_variance / 2) * (random.normal(size=frames) + 1j * random.normal(size=frames))
    field = np.diff(summed[ends]) + noise
    power = np.abs(field) ** 2 - counts - read_variance
    return power.mean() / power.std()


@pytest.mark.parametrize(
    ("counts", "v", "read_variance"),
    [(10, 0.5, 0), (50, 0.3, 0), (200, 0.5, 0), (40, 0.6, 30), (100, 0.4, 200)],
)
def test_photon_and_read_noise_agree_with_a_monte_carlo(counts, v, read_variance):
    random = np.random.default_rng(11)
    simulated = simulated_snr(counts, v, read_variance, 20_000, random)
    # The formula is that of Gaussian noise, right to order 1/N; the sampled spread to about 2 %.
    assert snr_of_v2(counts, v**2, 1.0, read_variance, 1) == pytest.approx(simulated, rel=0.05)


@pytest.mark.parametrize(
    ("counts", "v", "sigma_v2"), [(10, 0.5, 0.600), (50, 0.3, 0.1442), (200, 0.5, 0.1020), (1000, 0.1, 0.0098)]
)
def test_the_photon_limit_is_that_of_tango_and_twiss(counts, v, sigma_v2):
    # Tango & Twiss (1980), Prog. Opt. 17, 239: sigma(V^2) = (4 / N) sqrt(1 + N V^2 / 2).
    # Values worked out from that form, and met by its own simulation, to three or four digits.
    assert v**2 / snr_of_v2(counts, v**2, 1.0, 0.0, 1) == pytest.approx(sigma_v2, rel=6e-3)


def test_noise_falls_with_the_root_of_the_frames():
    one, many = (snr_of_v2(100.0, 0.5, 0.6, 4.0, frames) for frames in (1, 2500))
    assert many == pytest.approx(50 * one)


def test_no_light_gives_no_signal():
    assert snr_of_v2(0.0, 1.0, 1.0, 0.0, 100) == 0


def test_a_hundredfold_is_five_magnitudes_and_an_aperture_tenfold_moves_the_limit_by_five():
    # Common practice, no source: light a hundredfold is five magnitudes, so a tenfold aperture
    # moves a limit at 6th magnitude to about 11th.
    small, large = (counts_per_frame_at_mag0("V", aperture, 0.1, 0.01, 2.0) for aperture in (0.1, 1.0))
    assert small * 10 ** (-0.4 * 6) == pytest.approx(large * 10 ** (-0.4 * 11))


def test_counts_agree_with_the_usual_photon_flux_of_vega():
    # Common practice, no source: a magnitude 0 star sends about 1000 photons/s/cm^2/A in V.
    per_s_cm2_angstrom = counts_per_frame_at_mag0("V", 1.0, 1e-4, 1.0, 1000.0) / (2 * np.pi * 50**2)
    assert per_s_cm2_angstrom == pytest.approx(1000, rel=0.03)


def test_frames_of_the_shipped_modes_hold_the_air_still():
    # Common practice, no source: the air holds still for about a millisecond in the visible, and
    # longer in the infrared as wavelength^1.2; cameras reach a few times that.
    for array in known_arrays().values():
        for mode in array.mode:
            still_ms = (mode.wavelength_um / BANDS["V"].wavelength_um) ** 1.2
            assert still_ms / 3 < mode.frame_ms < 3 * still_ms, (array.name, mode.name)


def test_counts_of_the_shipped_modes_are_those_of_their_telescopes():
    arrays = known_arrays()
    for key, name, band, aperture, bandwidth, throughput in (
        ("north", "red", "V", 1.2, 0.16, 0.005),
        ("north", "H", "H", 1.2, 0.28, 0.01),
        ("north", "K", "Ks", 1.2, 0.34, 0.01),
        ("south", "H", "H", 1.8, 0.28, 0.01),
        ("south", "K", "Ks", 1.8, 0.34, 0.01),
    ):
        mode = arrays[key].choose_mode(name)
        expected = counts_per_frame_at_mag0(band, aperture, bandwidth, throughput, mode.frame_ms)
        assert mode.counts_per_frame_at_mag0 == pytest.approx(expected, rel=0.005)
