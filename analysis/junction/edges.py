"""Edge times of a junction behind a load: the exact one-pole integrals, and a second stage in the chain.

With the light on, the output v climbs to its swing S: dv/dt = (S - v) / (R C(V_b - v)). Hence the time between two fractions of S is
R times the integral of C(V_b - S x) / (1 - x) dx; with the light off it is that of C(V_b - S x) / x dx. Substituting s = -ln(1 - x), or
s = -ln(x), leaves R times the integral of C over s, which Gauss and Legendre's nodes take to any precision wanted.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import cache

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from darkedge.analysis.captures import FloatArray

CapacitanceOf = Callable[[FloatArray], FloatArray]
"""Capacitance in farad of the voltage across the junction, any shape."""

LN9 = math.log(9.0)
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(16)


def on_edge_time(
    capacitance: CapacitanceOf,
    bias_V: FloatArray,
    swing_V: FloatArray,
    resistance_ohm: FloatArray,
    *,
    low: float = 0.1,
    high: float = 0.9,
) -> FloatArray:
    """Time of the edge with the light coming on, between two fractions of the swing.

    Parameters
    ----------
    capacitance : callable
        Junction and stray together.
    bias_V, swing_V, resistance_ohm : array, shape (n,)
        Bias across the junction before the edge, how far the output moves, R_eff.
    low, high : float
        0 <= low < high < 1; `low=0` gives the delay from the start of the light.

    Returns
    -------
    array, shape (n,)
        Seconds.
    """
    s = _between(-math.log1p(-low), -math.log1p(-high))
    return _integral(capacitance, bias_V, swing_V, resistance_ohm, s, -np.expm1(-s))


def off_edge_time(
    capacitance: CapacitanceOf,
    bias_V: FloatArray,
    swing_V: FloatArray,
    resistance_ohm: FloatArray,
    *,
    low: float = 0.1,
    high: float = 0.9,
) -> FloatArray:
    """Time of the edge with the light going off, from the `high` to the `low` fraction of the swing; shapes as for the on edge."""
    s = _between(-math.log(high), -math.log(low))
    return _integral(capacitance, bias_V, swing_V, resistance_ohm, s, np.exp(-s))


def _between(start: float, end: float) -> FloatArray:
    return np.asarray(start + (end - start) * (_NODES + 1) / 2, dtype=np.float64)


def _integral(
    capacitance: CapacitanceOf,
    bias_V: FloatArray,
    swing_V: FloatArray,
    resistance_ohm: FloatArray,
    s: FloatArray,
    fraction: FloatArray,
) -> FloatArray:
    span = (s[-1] - s[0]) / (_NODES[-1] - _NODES[0])
    voltage = bias_V[..., None] - swing_V[..., None] * fraction
    return np.asarray(resistance_ohm * span * (capacitance(voltage) @ _WEIGHTS), dtype=np.float64)


def two_pole_edge_time(one_s: FloatArray, other_s: FloatArray) -> FloatArray:
    """10-90 % time of two one-pole stages in a row, given the 10-90 % times of each alone.

    Exact for stages of constant capacitance, where the root of the sum of squares is up to 7.5 % short (two equal
    stages: 3.36 RC, not 3.11 RC); solved once over the ratio of the two and interpolated to 1e-6.

    Parameters
    ----------
    one_s, other_s : array, shape (n,)
        Not negative, not both zero.
    """
    longer, shorter = np.maximum(one_s, other_s), np.minimum(one_s, other_s)
    ratio = np.divide(shorter, longer, out=np.zeros_like(longer), where=longer > 0)
    return np.asarray(longer * _two_pole_factor()(ratio), dtype=np.float64)


@cache
def _two_pole_factor() -> CubicSpline:
    """10-90 % time of two stages over that of the longer, against their ratio."""
    ratios = (1 - np.cos(np.linspace(0, math.pi, 60))) / 2
    return CubicSpline(ratios, [_two_pole_time(float(r)) / LN9 for r in ratios])


def _two_pole_time(ratio: float) -> float:
    """10-90 % time of stages with time constants 1 and `ratio`."""

    def remains(time: float) -> float:
        if ratio < 1e-9:
            return math.exp(-time)
        if abs(1 - ratio) < 1e-6:
            return (1 + time) * math.exp(-time)
        return (math.exp(-time) - ratio * math.exp(-time / ratio)) / (1 - ratio)

    crossings = [brentq(lambda t, y=level: remains(t) - y, 0.0, 60.0, xtol=1e-13) for level in (0.9, 0.1)]
    return float(crossings[1] - crossings[0])


def two_pole_step(time_s: FloatArray, one_s: float, other_s: float) -> FloatArray:
    """Step response of two one-pole stages with time constants `one_s` and `other_s`, shape of `time_s`; 0 before 0."""
    late = np.maximum(time_s, 0.0)
    longer, shorter = max(one_s, other_s), min(one_s, other_s)
    if shorter < 1e-6 * longer:
        return np.asarray(-np.expm1(-late / longer), dtype=np.float64)
    if abs(longer / shorter - 1) < 1e-6:
        return np.asarray(1 - (1 + late / longer) * np.exp(-late / longer), dtype=np.float64)
    remains = (longer * np.exp(-late / longer) - shorter * np.exp(-late / shorter)) / (longer - shorter)
    return np.asarray(1 - remains, dtype=np.float64)
