"""Two poles in a row, seen by samples or by the means of neighbouring samples: a device behind an emitter nearly as slow.

With time constants a and b, e_a = exp(-x / a) and N = a e_a - b e_b, the step that begins at x = 0 and its derivatives are

    F = 1 - N / (a - b),   dF/dx = (e_a - e_b) / (a - b),   dF/da = N / (a - b)^2 - e_a (1 + x / a) / (a - b),

and the same for b with the roles turned; its running integral is G = x - (a^2 (1 - e_a) - b^2 (1 - e_b)) / (a - b).
Parameters are those of `one_pole`, with ln b in the place of ln s and the mean a + b of the impulse response in that of x0 + tau.
"""

from __future__ import annotations

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.one_pole import seek

_LEAST_APART = 1e-3
"""Nearness of the two time constants at which they are taken as this much apart: the formulas divide by their difference."""


def by_points(x: FloatArray, blur: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Values (n, m) and derivatives (n, 5, m) of bins of few samples; `blur` is the variance of the places of their samples."""
    x0, a, b, start, swing = _unpacked(parameters)
    value, slope, by_a, by_b = _step(x - x0, a, b)
    value = value + 0.5 * blur * _curvature(x - x0, a, b)
    return start + swing * value, _stacked(value, -slope, by_a * a + a * slope, by_b * b + b * slope, swing)


def by_means(bounds: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Values (n, m) and derivatives (n, 5, m) of neighbouring bins that hold means; `bounds` (n, m + 1) on the x axis."""
    x0, a, b, start, swing = _unpacked(parameters)
    size = np.diff(bounds, axis=1)
    share = 1.0 / np.where(size > 0, size, np.inf)
    value, of_step, by_a, by_b = (np.diff(part, axis=1) * share for part in _running(bounds - x0, a, b))
    filled = (size > 0).astype(np.float64)
    found = _stacked(value, -of_step, a * (by_a + of_step), b * (by_b + of_step), swing)
    found[:, 3] = filled
    return start * filled + swing * value, found


def instants(parameters: FloatArray, shares: FloatArray, first: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Where each edge passes the shares of its way, and how far a change of place, ln a and ln b moves that; as `one_pole.instants`."""
    x0, a, b, _, _ = _unpacked(parameters)

    def course(x: FloatArray, rows: np.ndarray[tuple[int], np.dtype[np.intp]]) -> tuple[FloatArray, FloatArray]:
        return _step(x - x0[rows], a[rows], b[rows])[:2]

    reach = x0 + (a + b) * (3 - np.log1p(-shares))
    x = seek(course, shares, first, low=np.tile(x0, (1, shares.shape[1])), high=reach, scale=a + b)
    _, slope, by_a, by_b = _step(x - x0, a, b)
    steep = np.maximum(slope, 1e-12)
    by = (-slope, a * (by_a + slope), b * (by_b + slope))
    return x, np.stack([-d / steep for d in by], axis=2)


def _step(y: FloatArray, a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """F and its derivatives by x, a and b; y is time since the begin."""
    begun = y > 0
    t = np.where(begun, y, 0.0)
    e_a, e_b = np.exp(-t / a), np.exp(-t / b)
    apart = a - b
    n = a * e_a - b * e_b
    value = 1.0 - n / apart
    slope = (e_a - e_b) / apart
    by_a = n / apart**2 - e_a * (1 + t / a) / apart
    by_b = e_b * (1 + t / b) / apart - n / apart**2
    return tuple(np.where(begun, part, 0.0) for part in (value, slope, by_a, by_b))  # type: ignore[return-value]


def _curvature(y: FloatArray, a: FloatArray, b: FloatArray) -> FloatArray:
    t = np.maximum(y, 0.0)
    return np.where(y > 0, (np.exp(-t / b) / b - np.exp(-t / a) / a) / (a - b), 0.0)


def _running(y: FloatArray, a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """G, F, and the derivatives of G by a and b."""
    t = np.maximum(y, 0.0)
    e_a, e_b = np.exp(-t / a), np.exp(-t / b)
    apart = a - b
    h_a, h_b = a * a * (1 - e_a), b * b * (1 - e_b)
    h = h_a - h_b
    integral = t - h / apart
    value = 1.0 - (a * e_a - b * e_b) / apart
    d_a, d_b = 2 * a * (1 - e_a) - t * e_a, 2 * b * (1 - e_b) - t * e_b
    by_a = -d_a / apart + h / apart**2
    by_b = d_b / apart - h / apart**2
    return integral, np.where(y > 0, value, 0.0), by_a, by_b


def _stacked(value: FloatArray, *by: FloatArray) -> FloatArray:
    by_place, by_a, by_b, swing = by
    return np.stack((swing * by_place, swing * by_a, swing * by_b, np.ones_like(value), value), axis=1)


def _unpacked(parameters: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    place, ln_a, ln_b, start, swing = (parameters[:, k : k + 1] for k in range(5))
    a, b = np.exp(ln_a), np.exp(ln_b)
    near = np.abs(a - b) < _LEAST_APART * a
    b = np.where(near, a * (1 - _LEAST_APART), b)
    return place - a - b, a, b, start, swing
