"""Noise that knows its neighbours, made white: covariance of bin means from the autocorrelation of samples."""

from __future__ import annotations

import numpy as np
from scipy.linalg import solve_triangular

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.edges import IntArray

LEAST_DENSITY = 0.01
"""Spectral density, over that of white noise of the same size, below which no noise is believed to lie."""


def whitener(correlation: FloatArray) -> FloatArray:
    """Twice-running sum of an autocorrelation, from which the covariance of any two bins follows; shape (lags,).

    With g(m) = m/2 rho_0 + sum over 0 < j < m of (m - j) rho_j for m >= 0, and g(-m) = g(m), the sum of rho over all pairs of samples of
    [a, b) and [c, d) is g(b - c) + g(a - d) - g(a - c) - g(b - d). The spectrum is kept from falling below a hundredth of that of
    white noise: an estimated correlation, cut off where it drowns, may promise less than any noise can keep.
    """
    n = 1 << int(4 * correlation.size).bit_length()
    even = np.zeros(n)
    even[: correlation.size] = correlation
    even[n - correlation.size + 1 :] = correlation[:0:-1]
    density = np.maximum(np.fft.rfft(even).real, LEAST_DENSITY)
    rho = np.fft.irfft(density, n)[: n // 2]
    rho = rho / rho[0]
    once = np.concatenate(([0.0], 0.5 * rho[0] + np.concatenate(([0.0], np.cumsum(rho[1:])))))
    return np.cumsum(once)


def whitening_matrix(running: FloatArray, begin: IntArray, end: IntArray) -> FloatArray:
    """Matrix that makes the means of the bins [begin, end) independent, each of the variance of one sample; shape (m, m).

    Empty bins give rows of zeros.
    """
    filled = end > begin
    a, b = begin[filled], end[filled]
    count = (b - a).astype(np.float64)
    pairs = (
        _at(running, b[:, None] - a[None, :]) + _at(running, a[:, None] - b[None, :])
        - _at(running, a[:, None] - a[None, :]) - _at(running, b[:, None] - b[None, :])
    )  # fmt: skip
    covariance = pairs / (count[:, None] * count[None, :])
    lower = _lower(covariance)
    inverse = solve_triangular(lower, np.eye(a.size), lower=True, check_finite=False)
    whole = np.zeros((begin.size, begin.size))
    whole[np.ix_(filled, filled)] = inverse
    return whole


def _lower(covariance: FloatArray) -> FloatArray:
    """Cholesky factor; where rounding of a lag that was cut off spoils it, with more and more white noise put in."""
    diagonal = np.diag_indices(covariance.shape[0])
    for share in (1e-9, 1e-3, 3e-2):
        raised = covariance.copy()
        raised[diagonal] *= 1 + share
        try:
            return np.asarray(np.linalg.cholesky(raised), dtype=np.float64)
        except np.linalg.LinAlgError:
            continue
    return np.asarray(np.diag(np.sqrt(covariance[diagonal])))


def _at(running: FloatArray, lag: IntArray) -> FloatArray:
    """The g of the module's formula at any lag; beyond the last one it goes on in a straight line."""
    lag = np.abs(lag)
    last = running.size - 1
    slope = running[last] - running[last - 1]
    return np.asarray(running[np.minimum(lag, last)] + np.maximum(lag - last, 0) * slope)
