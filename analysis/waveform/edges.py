"""Edges: where a waveform leaves one state for the other, and roughly when it crosses the reference levels.

Progress is the coordinate throughout: 0 in the state an edge leaves, 1 in the state it goes to, whichever way it
moves. The 10 % crossing of a falling edge is thus where it has gone a tenth of its way down.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.levels import StateLevels, running_mean

TEN_NINETY = (0.1, 0.5, 0.9)
TWENTY_EIGHTY = (0.2, 0.5, 0.8)

HYSTERESIS = 0.2
"""Progress on either side of one half within which a signal keeps its old state."""

FEW_ON_EDGE = 5
"""Samples between first and last crossing below which an edge is called poorly sampled."""

ONE_POLE_SKEW = float(np.log(5) / np.log(1.8))
"""Time from 50 % to 90 % over that from 10 % to 50 % of a one-pole edge, 2.74; slower tails have more."""

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

    def select(self, which: BoolArray) -> Changes:
        """Return some of the changes."""
        return Changes(index=self.index[which], rising=self.rising[which])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Transitions:
    """Edges with the instants at which they pass the reference levels.

    `fractions` are the m reference levels as progress, rising; `time_s` (n, m) the instants; `covariance_s2` (n, m, m)
    their covariance from noise; `bend_s` (n, m) what the edge's unknown course between samples leaves open, which
    edges sampled alike share; `pull_s_per_V` (n, m, 2) how far an error of the low and of the
    high level moves them; `n_samples` (n,) counts samples between 10 and 90 %; `by_shape` (n,) says whether the
    fitted edge shape stands alone, without correction.
    """

    fractions: tuple[float, ...]
    rising: BoolArray
    time_s: FloatArray
    covariance_s2: FloatArray
    bend_s: FloatArray
    pull_s_per_V: FloatArray
    n_samples: IntArray
    by_shape: BoolArray

    def select(self, rows: slice) -> Transitions:
        """Some neighbouring edges."""
        return Transitions(
            fractions=self.fractions, rising=self.rising[rows], time_s=self.time_s[rows],
            covariance_s2=self.covariance_s2[rows], bend_s=self.bend_s[rows], pull_s_per_V=self.pull_s_per_V[rows],
            n_samples=self.n_samples[rows], by_shape=self.by_shape[rows],
        )  # fmt: skip

    @property
    def u_time_s(self) -> FloatArray:
        """Standard uncertainty of each instant from noise and sampling, the levels taken as known; shape (n, m)."""
        return np.asarray(np.sqrt(np.einsum("eii->ei", self.covariance_s2) + self.bend_s**2))


def find_changes(signal_V: FloatArray, levels: StateLevels, *, smooth: int = 1) -> Changes:
    """Find every change of state, with hysteresis so that noise on an edge makes no second one.

    Parameters
    ----------
    signal_V : array, shape (n,), volts
    levels : StateLevels
    smooth : int
        Length of the running mean taken first, in samples.
    """
    smoothed = running_mean(signal_V, smooth)
    high = smoothed >= levels.low_V + (0.5 + HYSTERESIS) * levels.amplitude_V
    low = smoothed <= levels.low_V + (0.5 - HYSTERESIS) * levels.amplitude_V
    state = high.view(np.int8) - low.view(np.int8)
    moved = np.flatnonzero(state[1:] != state[:-1])
    # Where the state moves, the sample before and the one after; of those in a state, where one follows the other.
    beside = np.unique(np.concatenate((moved, moved + 1)))
    known = beside[state[beside] != 0]
    turns = np.flatnonzero(np.diff(state[known]))
    left, right = known[turns], known[turns + 1]
    return Changes(index=np.asarray((left + right + 1) // 2, dtype=np.intp), rising=state[right] > 0)


def smoothing_length(noise_V: float, amplitude_V: float, n_samples: int) -> int:
    """Length of the running mean that brings the noise under a twentieth of the amplitude, in samples.

    A signal then needs four standard deviations to cross the hysteresis by noise alone, twice.
    """
    if amplitude_V <= 0:
        return 1
    return int(np.clip(np.ceil((20 * noise_V / amplitude_V) ** 2), 1, max(n_samples // 64, 1)))


def rough_crossings(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    fractions: tuple[float, ...] = TEN_NINETY,
) -> FloatArray:
    """Instants at which each edge passes the levels, good to a sample or to the noise; shape (edges, levels).

    The instant parts the samples below a level from those above it so that the fewest lie on the wrong side: the
    minimum of the running sum of progress minus level, bounded so that far samples count no more than near ones.
    Noise moves it either way alike, where the first sample past a level would always be early. Between
    the two samples the crossing is interpolated, as in IEEE Std 181-2011.
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
    if sums[last_below] >= 0:
        return float(time_s[0])
    if last_below + 1 >= sums.size:
        return float(time_s[-1])
    below, above = float(excess[last_below]), float(excess[last_below + 1])
    share = min(max(-below / (above - below), 0.0), 1.0) if above > below else 0.5
    return float(time_s[last_below] + share * (time_s[last_below + 1] - time_s[last_below]))


def onsets(crossings_s: FloatArray) -> FloatArray:
    """Instants at which edges surely have not begun yet, shape (n,), from their 10, 50 and 90 % crossings (n, 3).

    A one-pole edge leaves with a corner close before its 10 % point; a Gaussian one has a long foot. The skewness of
    the edge tells which: 0.25 (one pole), 1.7 (Gaussian) or 3 times (one pole run backwards) the time from 10 % to
    50 % before the 10 % point.
    """
    first, second = np.diff(crossings_s, axis=1).T
    skew = np.divide(second, first, out=np.ones_like(first), where=first > 0)
    return np.asarray(
        crossings_s[:, 0] - first * np.interp(skew, (1 / ONE_POLE_SKEW, 1.0, ONE_POLE_SKEW), (3.0, 1.7, 0.25))
    )
