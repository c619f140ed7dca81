"""Peaks: how high a pulse gets that never settles."""

from __future__ import annotations

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.levels import running_mean

QUIET_RATIO = 5e-4
"""Noise over amplitude below which the largest sample is the peak: smoothing would cost more than it gives."""

REACH = 0.6
"""How far the fit about a peak reaches, as a share of the way to the nearer 50 % point."""


def peak_level(time_s: FloatArray, signal: FloatArray, *, noise: float, amplitude: float) -> tuple[float, float]:
    """Largest value that a noisy pulse reaches, and its variance in units of one sample's.

    Two curves are fitted about the top: a cubic for a round peak, and two quadratics that meet at a corner, as a
    one-pole response makes when its pulse ends. The corner is kept where it leaves clearly less. The
    largest sample itself would be too high by several standard deviations of the noise.

    Parameters
    ----------
    time_s, signal : arrays, shape (n,)
        The pulse from its 50 % point up to its 50 % point down, the peak upwards.
    noise, amplitude : float
        Noise of one sample and height of the pulse, in the unit of `signal`.

    References
    ----------
    Derivation: least squares, the corner sought over the samples in the middle of the window.
    """
    if noise <= QUIET_RATIO * amplitude or signal.size < 12:
        return float(np.max(signal)), 1.0
    length = int(np.clip((noise / (0.01 * amplitude)) ** 2, 1, signal.size // 6))
    top = int(np.argmax(running_mean(signal, length)))
    reach = max(int(REACH * max(min(top, signal.size - 1 - top), signal.size // 8)), 6)
    window = slice(max(top - reach, 0), min(top + reach + 1, signal.size))
    x = (time_s[window] - time_s[top]) / max(time_s[window.stop - 1] - time_s[window.start], 1e-300)
    y = signal[window]
    cubic = np.stack((np.ones_like(x), x, x * x, x**3), axis=1)
    best_rss, best_value, best_factor = _fit(cubic, y)
    inner = np.linspace(x.size // 5, x.size - 1 - x.size // 5, min(x.size, 25)).astype(np.intp)
    least = best_rss - 12 * noise**2
    for corner in np.unique(inner):
        left, right = np.minimum(x - x[corner], 0.0), np.maximum(x - x[corner], 0.0)
        design = np.stack((np.ones_like(x), left, left * left, right, right * right), axis=1)
        rss, value, factor = _fit(design, y)
        if rss < least:
            least, best_value, best_factor = rss, value, factor
    return best_value, best_factor


def _fit(design: FloatArray, y: FloatArray) -> tuple[float, float, float]:
    """Residual sum of squares, largest value of the curve, and the variance factor there."""
    inverse = np.linalg.pinv(design.T @ design)
    curve = design @ (inverse @ (design.T @ y))
    top = int(np.argmax(curve))
    return float(np.sum((y - curve) ** 2)), float(curve[top]), float(design[top] @ inverse @ design[top])
