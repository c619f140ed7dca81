"""One pole behind a Gaussian front end, seen by samples or by the means of neighbouring samples.

A step at x0 through a Gaussian filter of width s and one pole of time constant tau is F(x) (formulas in `shapes`). A bin that
holds the mean of many samples shows the mean of F over it, which the running integral of F gives exactly:

    G(x) = s (z Phi(z) + phi(z)) - tau F(x),   dG/dx0 = -F,   dG/d ln s = s phi(z) - tau dF/d ln s,   dG/d ln tau = -tau (F + dF/d ln tau).

A bin of few samples shows F blunted by the variance of their places, (c^2 - 1) / 12 steps squared, which widens s.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.special import erfcx, ndtr

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.edges import IntArray

_ROOT_HALF = float(np.sqrt(0.5))
_ROOT_TWO_PI = float(np.sqrt(2 * np.pi))
_FARTHEST = 1e8

NARROWEST, WIDEST = 1e-3, 40.0
"""Bounds of tau and s in units in which an edge is about 1 wide."""

PLACE, LN_TAU, LN_S, START, SWING = range(5)
"""Places of the parameters: x0 + tau (the mean of the impulse response, which hardly moves with tau), ln tau, ln s, level before the edge,
and what the edge adds to it."""


def parts(
    x: FloatArray, x0: FloatArray, tau: FloatArray, s: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """F, E, phi(z) and s / tau of the module's formulas, broadcast over all arguments."""
    z = np.clip((x - x0) / s, -_FARTHEST, _FARTHEST)
    u = s / tau
    bell = np.exp(-0.5 * z * z)
    early = u > z
    scaled = 0.5 * bell * erfcx(np.where(early, u - z, 0.0) * _ROOT_HALF)
    plain = np.exp(np.minimum(0.5 * u * u - z * u, 0.0)) * ndtr(z - u)
    rest = np.where(early, scaled, plain)
    return ndtr(z) - rest, rest, bell / _ROOT_TWO_PI, u


def by_points(x: FloatArray, blur: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Values (n, m) and derivatives by the five parameters (n, 5, m) of bins of few samples."""
    x0, tau, s, start, swing = _unpacked(parameters)
    wide = np.sqrt(s * s + blur)
    value, rest, bell, u = parts(x, x0, tau, wide)
    by_tau = -rest * ((x - x0) / tau - u * u) - bell * u
    by_s = (bell * u - rest * u * u) * (s / wide) ** 2
    return start + swing * value, np.stack(
        (-swing * rest / tau, swing * (by_tau + rest), swing * by_s, np.ones_like(value), value), axis=1
    )


def by_means(bounds: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Values (n, m) and derivatives (n, 5, m) of neighbouring bins that hold means; `bounds` (n, m + 1) on the x axis.

    An empty bin, of no width, has the value 0.
    """
    x0, tau, s, start, swing = _unpacked(parameters)
    size = np.diff(bounds, axis=1)
    share = 1.0 / np.where(size > 0, size, np.inf)
    value, by_x0, by_tau, by_s = (np.diff(part, axis=1) * share for part in _running(bounds, x0, tau, s))
    filled = (size > 0).astype(np.float64)
    return start * filled + swing * value, np.stack(
        (swing * by_x0, swing * (by_tau - tau * by_x0), swing * by_s, filled, value), axis=1
    )


def _running(
    x: FloatArray, x0: FloatArray, tau: FloatArray, s: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """G and its derivatives by x0, ln tau and ln s."""
    value, rest, bell, u = parts(x, x0, tau, s)
    away = x - x0
    integral = away * (value + rest) + s * bell - tau * value  # Phi(z) = F + E
    by_tau = -tau * (value - rest * (away / tau - u * u) - bell * u)
    by_s = s * bell - tau * (bell * u - rest * u * u)
    return integral, -value, by_tau, by_s


def instants(parameters: FloatArray, shares: FloatArray, first: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Where each edge passes the shares of its way, and how far a change of place, ln tau and ln s moves that.

    Parameters
    ----------
    parameters : array, shape (n, 5)
    shares, first : arrays, shape (n, k)
        Shares between 0 and 1, and where to begin looking.

    Returns
    -------
    x : array, shape (n, k)
    gradient : array, shape (n, k, 3)
    """
    x0, tau, s, _, _ = _unpacked(parameters)

    def course(x: FloatArray, rows: IntArray) -> tuple[FloatArray, FloatArray]:
        value, rest, _, _ = parts(x, x0[rows], tau[rows], s[rows])
        return value, rest / tau[rows]

    low, high = np.tile(x0 - 9 * s, (1, shares.shape[1])), x0 + 9 * s + tau * (1 - np.log1p(-shares))
    x = seek(course, shares, first, low=low, high=high, scale=s + tau)
    _, rest, bell, u = parts(x, x0, tau, s)
    slope = np.maximum(rest / tau, 1e-12)
    by = (-rest / tau, -rest * ((x - x0) / tau - u * u - 1) - bell * u, bell * u - rest * u * u)
    return x, np.stack([-d / slope for d in by], axis=2)


def seek(
    course: Callable[[FloatArray, IntArray], tuple[FloatArray, FloatArray]],
    shares: FloatArray,
    first: FloatArray,
    *,
    low: FloatArray,
    high: FloatArray,
    scale: FloatArray,
) -> FloatArray:
    """Where rising curves pass their shares, shape (n, k), by Newton's method inside a bracket that shrinks.

    Parameters
    ----------
    course : callable
        Value and slope of the curves of some rows at x (rows, k).
    shares, first : arrays, shape (n, k)
        What is sought, and where to begin.
    low, high : arrays, shape (n, k)
        Where the curves are surely below and above.
    scale : array, shape (n, 1)
        Width of each curve.
    """
    x = np.clip(first, low, high)
    rows = np.arange(x.shape[0])
    for _ in range(60):  # a row that is found is left alone
        at, wanted = x[rows], shares[rows]
        value, slope = course(at, rows)
        below = value < wanted
        low[rows], high[rows] = np.where(below, at, low[rows]), np.where(below, high[rows], at)
        step = at + (wanted - value) / np.maximum(slope, 1e-300)
        x[rows] = np.where((step > low[rows]) & (step < high[rows]), step, 0.5 * (low[rows] + high[rows]))
        rows = rows[np.any(np.abs(x[rows] - at) > 1e-9 * scale[rows], axis=1)]
        if rows.size == 0:
            break
    return x


def bounded(parameters: FloatArray) -> FloatArray:
    """Keep the parameters where the formulas hold."""
    parameters[:, LN_TAU : LN_S + 1] = np.clip(parameters[:, LN_TAU : LN_S + 1], np.log(NARROWEST), np.log(WIDEST))
    parameters[:, SWING] = np.clip(parameters[:, SWING], 0.3, 3.0)
    return parameters


def _unpacked(parameters: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    place, ln_tau, ln_s, start, swing = (parameters[:, k : k + 1] for k in range(5))
    tau = np.exp(ln_tau)
    return place - tau, tau, np.exp(ln_s), start, swing
