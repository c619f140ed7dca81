"""Edges: where a waveform leaves one state for the other, and when it crosses the reference levels.

Progress is the coordinate throughout: 0 in the state an edge leaves, 1 in the state it goes to, whichever way it
moves. The 10 % crossing of a falling edge is thus where it has gone a tenth of its way down.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.levels import StateLevels, running_mean
from darkedge.analysis.waveform.noise import Noise

TEN_NINETY = (0.1, 0.5, 0.9)
TWENTY_EIGHTY = (0.2, 0.5, 0.8)

HYSTERESIS = 0.2
"""Progress on either side of one half within which a signal keeps its old state."""

ENOUGH_ON_EDGE = 8
"""Samples between first and last crossing from which a local polynomial is worth more than a straight line."""

FEW_ON_EDGE = 5

IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Changes:
    """Changes of state: `index` of the first sample nearer to the new state, shape (n,); `rising`, shape (n,)."""

    index: IntArray
    rising: BoolArray

    def borders(self, n_samples: int) -> IntArray:
        """Sample indices that part neighbouring edges, shape (n + 1,): halfway between them, and the ends."""
        middles = (self.index[1:] + self.index[:-1]) // 2
        return np.concatenate(([0], middles, [n_samples])).astype(np.intp)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Transitions:
    """Edges with the instants at which they pass the reference levels.

    `fractions` are the reference levels as progress, shape (m,), rising; `time_s` (n, m) the instants; `u_time_s`
    (n, m) their standard uncertainty from noise and sampling alone; `slope_V_per_s` (n, m) the slope of
    the waveform there, by which an error of the levels moves the instants; `n_samples` (n,) counts samples
    between the first and the last level.
    """

    fractions: tuple[float, ...]
    rising: BoolArray
    time_s: FloatArray
    u_time_s: FloatArray
    slope_V_per_s: FloatArray
    n_samples: IntArray

    def select(self, which: BoolArray | IntArray) -> Transitions:
        """Return some of the edges."""
        return Transitions(
            fractions=self.fractions, rising=self.rising[which], time_s=self.time_s[which],
            u_time_s=self.u_time_s[which], slope_V_per_s=self.slope_V_per_s[which], n_samples=self.n_samples[which],
        )  # fmt: skip


def smoothing_length(noise_V: float, amplitude_V: float, n_samples: int) -> int:
    """Length of the running mean that brings the noise under a twentieth of the amplitude, in samples.

    A signal then needs five standard deviations to cross the hysteresis by noise alone.
    """
    if amplitude_V <= 0:
        return 1
    return int(np.clip(np.ceil((20 * noise_V / amplitude_V) ** 2), 1, max(n_samples // 64, 1)))


def find_changes(signal_V: FloatArray, levels: StateLevels, *, smooth: int = 1) -> Changes:
    """Find every change of state, with hysteresis so that noise on an edge makes no second one.

    Parameters
    ----------
    signal_V : array, shape (n,), volts
    levels : StateLevels
    smooth : int
        Length of the running mean taken first, in samples.
    """
    progress = (running_mean(signal_V, smooth) - levels.low_V) / levels.amplitude_V
    state = np.zeros(progress.size, dtype=np.int8)
    state[progress >= 0.5 + HYSTERESIS] = 1
    state[progress <= 0.5 - HYSTERESIS] = -1
    known = np.flatnonzero(state)
    turns = np.flatnonzero(np.diff(state[known]))
    left, right = known[turns], known[turns + 1]
    return Changes(index=np.asarray((left + right + 1) // 2, dtype=np.intp), rising=state[right] > 0)


def rough_crossings(
    time_s: FloatArray, signal_V: FloatArray, levels: StateLevels, changes: Changes, fractions: tuple[float, ...]
) -> FloatArray:
    """Instants at which each edge passes the levels, good to a sample or to the noise; shape (edges, levels).

    The instant parts the samples below a level from those above it so that the fewest lie on the wrong side: the
    minimum of the running sum of progress minus level, bounded so that far samples count no more than near ones.
    Noise moves it either way alike, where the first sample past a level would always be early. Between
    the two samples the crossing is interpolated, as in IEEE Std 181-2011, 5.3.
    """
    borders = changes.borders(signal_V.size)
    upward = (signal_V - levels.low_V) / levels.amplitude_V
    crossings = np.empty((changes.index.size, len(fractions)))
    for edge, rising in enumerate(changes.rising):
        part = slice(int(borders[edge]), int(borders[edge + 1]))
        progress = upward[part] if rising else 1.0 - upward[part]
        for column, fraction in enumerate(fractions):
            crossings[edge, column] = _part_samples(time_s[part], progress - fraction)
    return np.maximum.accumulate(crossings, axis=1)


def _part_samples(time_s: FloatArray, excess: FloatArray) -> float:
    sums = np.cumsum(np.clip(excess, -0.1, 0.1))
    last_below = int(np.argmin(sums))
    if last_below + 1 >= sums.size or sums[last_below] >= 0:
        return float(time_s[0] if sums[last_below] >= 0 else time_s[-1])
    below, above = excess[last_below], excess[last_below + 1]
    share = float(np.clip(-below / (above - below), 0.0, 1.0)) if above > below else 0.5
    return float(time_s[last_below] + share * (time_s[last_below + 1] - time_s[last_below]))


def locate_crossings(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    noise: Noise,
    fractions: tuple[float, ...] = TEN_NINETY,
) -> Transitions:
    """Instants at which each edge passes the reference levels, with their standard uncertainty.

    About each level a cubic in time is fitted by least squares to the samples in a window that is a fraction of the
    edge's own time, and solved for the level; the window follows the solution. Near the start of an edge the
    window reaches less far back, since a one-pole edge begins with a corner. Edges with
    fewer than eight samples are interpolated in a straight line between the two samples that straddle the level.

    Parameters
    ----------
    time_s, signal_V : arrays, shape (n,), seconds and volts
    fractions : tuple
        Reference levels as progress, rising, between 0 and 1.

    References
    ----------
    IEEE Std 181-2011, reference level instants; Fan and Gijbels, Local Polynomial Modelling, 1996.
    """
    crossings = rough_crossings(time_s, signal_V, levels, changes, fractions)
    upward = (signal_V - levels.low_V) / levels.amplitude_V
    sigma = noise.sigma_V / levels.amplitude_V
    n_edges = changes.index.size
    dt_s = float(np.median(np.diff(time_s)))
    first = np.searchsorted(time_s, crossings[:, 0])
    last = np.searchsorted(time_s, crossings[:, -1])
    n_samples = np.asarray(last - first, dtype=np.intp)
    duration = np.maximum(crossings[:, -1] - crossings[:, 0], 1e-3 * dt_s)
    u_time = np.empty_like(crossings)
    slope = np.empty_like(crossings)
    borders = changes.borders(signal_V.size)
    for edge in range(n_edges):
        sign = 1.0 if changes.rising[edge] else -1.0
        part = slice(int(borders[edge]), int(borders[edge + 1]))
        time, progress = time_s[part], upward[part] if sign > 0 else 1.0 - upward[part]
        for column, fraction in enumerate(fractions):
            found = None
            if n_samples[edge] >= ENOUGH_ON_EDGE:
                found = _solve_cubic(
                    time, progress, fraction, crossings[edge, column], float(duration[edge]), sigma, noise
                )
            if found is None:
                found = _straight_line(time, progress, fraction, crossings[edge, column], sigma)
            crossings[edge, column], u_time[edge, column], rate = found
            slope[edge, column] = sign * rate * levels.amplitude_V
    u_step = dt_s / np.sqrt(12) * np.minimum(1.0, (3.0 / np.maximum(n_samples, 1)) ** 2)
    return Transitions(
        fractions=fractions, rising=changes.rising, time_s=np.maximum.accumulate(crossings, axis=1),
        u_time_s=np.hypot(u_time, u_step[:, None]), slope_V_per_s=slope, n_samples=n_samples,
    )  # fmt: skip


def _window(fraction: float) -> tuple[float, float]:
    """How far the cubic reaches before and after a crossing, in units of the edge's own time."""
    before = float(np.interp(fraction, (0.1, 0.2, 0.5, 0.9), (0.15, 0.2, 0.3, 0.4)))
    after = float(np.interp(fraction, (0.1, 0.5, 0.9), (0.3, 0.5, 0.7)))
    return before, after


def _solve_cubic(
    time_s: FloatArray,
    progress: FloatArray,
    fraction: float,
    crossing_s: float,
    duration_s: float,
    sigma: float,
    noise: Noise,
) -> tuple[float, float, float] | None:
    before, after = _window(fraction)
    start = crossing_s
    for _ in range(4):
        a, b = np.searchsorted(time_s, (crossing_s - before * duration_s, crossing_s + after * duration_s))
        if b - a < 6:
            return None
        x = (time_s[a:b] - crossing_s) / duration_s
        design = np.stack((np.ones_like(x), x, x * x, x * x * x))
        gram = np.linalg.inv(design @ design.T)
        coefficients = gram @ (design @ (progress[a:b] - fraction))
        rate = float(coefficients[1])
        if not rate > 0:
            return None
        move = -float(coefficients[0]) / rate
        crossing_s += float(np.clip(move, -0.2, 0.2)) * duration_s
        if abs(move) < 1e-4:
            break
    if abs(crossing_s - start) > 0.5 * duration_s:
        return None
    variance = float(gram[0, 0]) * noise.inflation(int(b - a))
    return crossing_s, sigma * float(np.sqrt(variance)) / rate * duration_s, rate / duration_s


def _straight_line(
    time_s: FloatArray, progress: FloatArray, fraction: float, crossing_s: float, sigma: float
) -> tuple[float, float, float]:
    after = int(np.clip(np.searchsorted(time_s, crossing_s), 1, time_s.size - 1))
    step = float(time_s[after] - time_s[after - 1])
    rate = max(float(progress[after] - progress[after - 1]), 0.05) / step
    return crossing_s, sigma / rate, rate
