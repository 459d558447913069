"""Photon and read noise of a squared visibility, and how many photons there are."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.photometry.bands import BANDS

__all__ = ["counts_per_frame_at_mag0", "snr_of_v2"]

Floats = NDArray[np.float64]

_PLANCK_J_S = 6.62607015e-34  # exact, SI Brochure 9th ed.
_LIGHT_M_S = 299_792_458.0  # exact, SI Brochure 9th ed.


def snr_of_v2(
    counts: ArrayLike, v2: ArrayLike, system_v2: float, read_variance: float, frames: float
) -> Floats:
    """Signal to noise of V^2 measured over many coherent frames.

    Parameters
    ----------
    counts : array
        Detected photoelectrons of one frame, both beams together, in one channel.
    v2 : array
        The star's own squared visibility; broadcasts with `counts`.
    system_v2 : float
        The system's squared visibility, 0 to 1.
    read_variance : float
        Read and background variance of one frame in that channel, electrons squared.
    frames : float
        How many independent frames are averaged.

    Returns
    -------
    snr : array

    Notes
    -----
    sqrt(M) q / sqrt(1 + 2 q), q = N^2 T^2 V^2 / (4 (N + R)); without read noise the form of
    Tango & Twiss (1980), Progress in Optics 17, 239.
    """
    counts = np.asarray(counts, float)
    noise = counts + read_variance
    with np.errstate(invalid="ignore", divide="ignore"):
        q = np.where(noise > 0, counts**2 * system_v2 * np.asarray(v2, float) / (4 * noise), 0.0)
    return np.sqrt(frames) * q / np.sqrt(1 + 2 * q)


def counts_per_frame_at_mag0(
    band: str, aperture_m: float, bandwidth_um: float, throughput: float, frame_ms: float
) -> float:
    """Photoelectrons in one frame of one baseline from a star of magnitude 0, two telescopes together.

    `throughput` is the fraction of the photons above the atmosphere that is detected; the flux
    is that of Vega in the band (Willmer 2018, ApJS 236, 47), flat across the bandwidth.

    >>> round(counts_per_frame_at_mag0("Ks", 1.0, 0.3, 0.01, 10.0))
    223641
    """
    the_band = BANDS[band]
    photon_j = _PLANCK_J_S * _LIGHT_M_S / (the_band.wavelength_um * 1e-6)
    area_m2 = 2 * np.pi * (aperture_m / 2) ** 2
    power_w = the_band.vega_flux_w_m2_um * bandwidth_um * area_m2
    return float(power_w / photon_j * throughput * frame_ms / 1000)
