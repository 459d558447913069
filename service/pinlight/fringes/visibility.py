"""Squared visibilities of discs and how they answer to the diameter."""

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import j0, j1

from pinlight.errors import InputError

__all__ = [
    "MAS",
    "channel_average",
    "channel_nodes",
    "disk_argument",
    "resolution_mas",
    "sensitivity",
    "visibility",
    "visibility_and_sensitivity",
]

Floats = NDArray[np.float64]

MAS = np.pi / 180 / 3_600_000  # radians in a milliarcsecond, exact
_SERIES_BELOW = 0.2


def disk_argument(diameter_mas: ArrayLike, baseline_m: ArrayLike, wavelength_um: ArrayLike) -> Floats:
    """x = pi theta B / lambda, the argument of a disc's visibility; arguments broadcast.

    Raises
    ------
    InputError
        If a wavelength is not positive.
    """
    wavelength = np.asarray(wavelength_um, float)
    if np.any(~(wavelength > 0)):
        raise InputError(f"wavelength_um is {np.min(wavelength):g}; it must be positive")
    return np.pi * np.asarray(diameter_mas, float) * MAS * np.asarray(baseline_m, float) / (wavelength * 1e-6)


def resolution_mas(baseline_m: float, wavelength_um: float) -> float:
    """The angle lambda / 2B that a baseline just resolves. [mas]

    >>> round(resolution_mas(100.0, 2.2), 2)
    2.27
    """
    return float(wavelength_um * 1e-6 / (2 * baseline_m) / MAS)


def _bessel_parts(x: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """J1(x)/x, J2(x), j1(x)/x and j2(x), with series where the closed forms lose digits."""
    small = np.abs(x) < _SERIES_BELOW
    safe = np.where(small, 1.0, x)
    square = x * x
    bessel1 = j1(safe)
    first = bessel1 / safe
    sine, cosine = np.sin(safe), np.cos(safe)
    spherical = (sine / safe - cosine) / safe**2
    uniform = np.where(small, 0.5 - square / 16 + square**2 / 384 - square**3 / 18432, first)
    second = np.where(
        small,
        square / 8 * (1 - square / 12 + square**2 / 384 - square**3 / 23040),
        2 * first - j0(safe),
    )
    darkened = np.where(small, 1 / 3 - square / 30 + square**2 / 840 - square**3 / 45360, spherical)
    spherical_second = np.where(
        small,
        square / 15 * (1 - square / 14 + square**2 / 504 - square**3 / 33264),
        3 * spherical - sine / safe,
    )
    return uniform, second, darkened, spherical_second


def visibility_and_sensitivity(x: ArrayLike, u: ArrayLike = 0.0) -> tuple[Floats, Floats]:
    """Visibility V and the slope d ln|V|^2 / d ln theta of a linearly limb-darkened disc.

    Parameters
    ----------
    x : float or array
        pi theta B / lambda, theta the limb-darkened diameter (of `disk_argument`).
    u : float or array
        Linear coefficient; 0 is the uniform disc. Broadcasts with `x`.

    Returns
    -------
    visibility, sensitivity : array
        The visibility is real and signed. The sensitivity is at most 0 in the first lobe and
        infinite at a null; it is never clipped.

    Notes
    -----
    Hanbury Brown, Davis, Lake & Thompson (1974), MNRAS 167, 475:
    V = [(1-u) J1(x)/x + u sqrt(pi/2) J_3/2(x)/x^3/2] / [(1-u)/2 + u/3]; the second term is
    u j1(x)/x with the spherical Bessel function. From (J1/x)' = -J2/x and (j1/x)' = -j2/x the
    sensitivity is -2 [(1-u) J2 + u j2] / [(1-u) J1/x + u j1/x].
    """
    x = np.asarray(x, dtype=np.float64)
    u = np.asarray(u, dtype=np.float64)
    uniform, second, darkened, spherical_second = _bessel_parts(x)
    top = (1 - u) * uniform + u * darkened
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = -2 * ((1 - u) * second + u * spherical_second) / top
    return top / ((1 - u) / 2 + u / 3), slope


def visibility(x: ArrayLike, u: ArrayLike = 0.0) -> Floats:
    """Visibility of a linearly limb-darkened disc; see `visibility_and_sensitivity`.

    >>> round(float(visibility(1.0)), 6)
    0.880101
    """
    return visibility_and_sensitivity(x, u)[0]


def sensitivity(x: ArrayLike, u: ArrayLike = 0.0) -> Floats:
    """d ln V^2 / d ln theta of a linearly limb-darkened disc; see `visibility_and_sensitivity`.

    >>> round(float(sensitivity(0.6923)), 4)
    -0.2446
    """
    return visibility_and_sensitivity(x, u)[1]


def channel_nodes(wavelength_um: float, bandwidth_um: float, channels: int) -> tuple[Floats, Floats]:
    """Wavelengths and weights at which each channel's V^2 is averaged.

    The band is cut into `channels` equal parts; each is integrated at three Gauss-Legendre
    nodes with a flat spectrum inside the channel.

    Returns
    -------
    wavelengths_um : array, shape (channels, 3)
    weights : array, shape (3,)
        They add up to 1.
    """
    nodes, weights = np.polynomial.legendre.leggauss(3)
    width = bandwidth_um / channels
    centres = wavelength_um - bandwidth_um / 2 + width * (np.arange(channels) + 0.5)
    return centres[:, None] + nodes * width / 2, weights / 2


def channel_average(
    diameter_mas: ArrayLike, u: ArrayLike, baselines_m: NDArray[Any], nodes_um: Floats, weights: Floats
) -> tuple[Floats, Floats]:
    """V^2 averaged over each channel, and its sensitivity to the diameter.

    Parameters
    ----------
    diameter_mas, u : array, shape (N,)
    baselines_m : array, shape (B,), or (N, B) where they differ between stars
    nodes_um : array, shape (C, 3)
    weights : array, shape (3,)

    Returns
    -------
    v2, sensitivity : array, shape (N, B, C)
        The sensitivity is that of the average: the mean of V^2 g over the mean of V^2.
    """
    theta, u = np.asarray(diameter_mas, float), np.asarray(u, float)
    x = disk_argument(
        theta[:, None, None, None], np.asarray(baselines_m, float)[..., None, None], nodes_um[None, None]
    )
    vis, slope = visibility_and_sensitivity(x, u[:, None, None, None])
    v2 = vis**2
    mean = v2 @ weights
    # At a null V^2 g is 0 times infinity; its limit there is 0.
    change = np.where(v2 > 0, v2 * np.where(np.isfinite(slope), slope, 0.0), 0.0) @ weights
    with np.errstate(divide="ignore", invalid="ignore"):
        return mean, np.where(mean > 0, change / mean, -np.inf)
