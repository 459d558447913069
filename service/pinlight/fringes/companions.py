"""What an unmodelled companion does to a calibrator's squared visibility."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["SUSPECTED_PROBABILITY", "companion_error", "suspected_companion_error"]

# A star listed as a component of a double whose separation is not known: the chance that the other
# star falls into the field. Most listed pairs are separated by more than a second of arc
# (common practice, no source).
SUSPECTED_PROBABILITY = 0.1
_FAINTEST_MAG = 5.0


def companion_error(flux_ratio: ArrayLike) -> NDArray[np.float64]:
    """Relative error of V^2 from a companion in the field: the rms over its fringe phase.

    Notes
    -----
    For point sources of ratio f, V^2 = (1 + f^2 + 2 f cos phi) / (1 + f)^2; over a uniform phase
    the rms of the last term is sqrt(2) f / (1 + f)^2.

    >>> round(float(companion_error(0.01)), 5)
    0.01386
    """
    f = np.asarray(flux_ratio, float)
    return np.sqrt(2) * f / (1 + f) ** 2


def suspected_companion_error() -> float:
    """The error to expect of a companion of unknown place and brightness.

    The rms of `companion_error` over magnitude differences spread evenly from 0 to 5, times
    `SUSPECTED_PROBABILITY`.

    >>> round(suspected_companion_error(), 4)
    0.019
    """
    differences = np.linspace(0.0, _FAINTEST_MAG, 501)
    errors = companion_error(10 ** (-0.4 * differences))
    return SUSPECTED_PROBABILITY * float(np.sqrt(np.mean(errors**2)))
