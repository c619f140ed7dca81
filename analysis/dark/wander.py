"""How well the mean of a still trace is known when its noise is not white."""

from __future__ import annotations

import math

import numpy as np
from scipy import fft

from darkedge.analysis.captures import FloatArray

_SLOWEST = 32
_STEPS = 60
_ALLAN = np.array([1.0, 2 * math.log(2), math.pi**2 / 3])
"""Allan variance at the length of the trace, in units of each shape's coefficient over the number of samples."""


def u_of_mean(signal_V: FloatArray) -> float:
    """Standard uncertainty of the mean of a trace with white, flicker (1/f) and random-walk noise.

    The slowest components of the trace (cosine transform) are described as a + b/k + c/k^2, none negative, by maximum
    likelihood; what this noise does to a mean over the whole length is its Allan variance at that length: for white noise
    that is the variance of the mean, and slower noise is not averaged away on paper.

    Parameters
    ----------
    signal_V : array, shape (n,), n >= 2
        Evenly spaced; mains ripple removed.

    Returns
    -------
    float
        Zero where the trace does not move at all.

    Notes
    -----
    With a one-sided spectrum h f^-p the component k (half periods in the trace of length T = n dt) has the mean
    square h (2T/k)^p / (2 dt), and the Allan variances are h/(2T), 2 ln 2 h and (2 pi^2/3) T h for p = 0, 1, 2: in units of
    that mean square at k = 1 over n, the factors 1, 2 ln 2 and pi^2/3.

    References
    ----------
    D. W. Allan, Proc. IEEE 54 (1966) 221; W. J. Riley, NIST SP 1065, conversion of spectra to Allan variances. P. Whittle, J. R. Stat. Soc. B 15 (1953)
    125: the likelihood. C. Fevotte and J. Idier, Neural Computation 23 (2011) 2421: steps that never leave the positive side.
    """
    power = np.square(fft.dct(signal_V - signal_V.mean(), norm="ortho")[1 : _SLOWEST + 1])
    level = float(power.mean())
    if level <= 0.0:
        return 0.0
    return math.sqrt(level * float(_ALLAN @ _likeliest(power / level)) / signal_V.size)


def _likeliest(power: FloatArray) -> FloatArray:
    """Coefficients of 1, 1/k and 1/k^2, shape (3,), for powers of mean one."""
    k = np.arange(1, power.size + 1)
    shapes = np.column_stack([np.ones_like(power), 1.0 / k, 1.0 / k**2])
    found = np.full(3, 1.0 / 3.0)
    for _ in range(_STEPS):
        described = shapes @ found
        found = found * np.sqrt((shapes.T @ (power / described**2)) / (shapes.T @ (1.0 / described)))
    return np.asarray(found, dtype=np.float64)
