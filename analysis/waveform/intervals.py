"""Intervals between crossings, averaged over pulses, with what noise and levels do to them kept apart.

Noise differs from edge to edge and averages out; an error of a state level moves every crossing of its channel
alike and does not. Both are carried until the last step, where they are put together (JCGM 100:2008, 5.2).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.measurement import Estimate
from darkedge.analysis.waveform.edges import IntArray, Transitions
from darkedge.analysis.waveform.levels import StateLevels

OUTPUT, DRIVE = 0, 1
LEVEL_NAMES = ("output low level", "output high level", "drive low level", "drive high level")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Instants:
    """Crossings of one level, one for each pulse.

    `time_s` has shape (n,), as have `u_s`, the standard uncertainty from noise, and `bend_s`, that from sampling,
    which pulses sampled alike share; `pull` (n, 4) is the shift in seconds per volt of error of output low, output
    high, drive low and drive high level.
    """

    time_s: FloatArray
    u_s: FloatArray
    bend_s: FloatArray
    pull: FloatArray

    def since(self, other: Instants) -> Instants:
        """Intervals from `other` to these instants, pulse by pulse."""
        return Instants(
            time_s=self.time_s - other.time_s, u_s=np.hypot(self.u_s, other.u_s),
            bend_s=np.hypot(self.bend_s, other.bend_s), pull=self.pull - other.pull,
        )  # fmt: skip

    def mean(self) -> Interval:
        """Mean over the pulses; what scatters more than its noise gets the scatter's uncertainty."""
        n = self.time_s.size
        if n == 1:
            u = math.hypot(float(self.u_s[0]), float(self.bend_s[0]))
            return Interval(value_s=float(self.time_s[0]), u_noise_s=u, pull=self.pull[0])
        u = float(np.sqrt(np.sum(self.u_s**2))) / n
        if n >= 3:
            u = max(u, float(np.std(self.time_s, ddof=1)) / np.sqrt(n))
        u = float(np.sqrt(u**2 + np.mean(self.bend_s**2)))
        return Interval(value_s=float(np.mean(self.time_s)), u_noise_s=u, pull=np.mean(self.pull, axis=0))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Interval:
    """A mean interval: value, uncertainty from noise and sampling, and pull by the four levels (see `Instants`)."""

    value_s: float
    u_noise_s: float
    pull: FloatArray

    def short_of(self, whole_s: float) -> Interval:
        """What is left of `whole_s`, which is taken as known, once this interval is taken off."""
        return Interval(value_s=whole_s - self.value_s, u_noise_s=self.u_noise_s, pull=-self.pull)

    def minus(self, other: Interval) -> Interval:
        """Difference of two intervals; level errors that they share cancel as far as they pull alike."""
        return Interval(
            value_s=self.value_s - other.value_s,
            u_noise_s=float(np.hypot(self.u_noise_s, other.u_noise_s)),
            pull=self.pull - other.pull,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """Standard uncertainties of what all intervals of a capture share."""

    u_levels_V: tuple[float, float, float, float]
    u_timebase_ratio: float = 0.0
    keep_parts: bool = False

    def estimate(
        self, interval: Interval, *, u_more_s: float = 0.0, more: str = "channel skew", scale: float = 1.0
    ) -> Estimate:
        """Put an interval's uncertainties together; `scale` turns seconds into what is asked for, `more` says what `u_more_s` is."""
        levels = [pull * u for pull, u in zip(interval.pull.tolist(), self.u_levels_V, strict=True)]
        parts = (interval.u_noise_s, self.u_timebase_ratio * abs(interval.value_s), u_more_s, *levels)
        kept = None
        if self.keep_parts:
            names = ("noise and sampling", "time base", more, *LEVEL_NAMES)
            kept = {name: abs(part * scale) for name, part in zip(names, parts, strict=True)}
        return Estimate(value=interval.value_s * scale, u=math.hypot(*parts) * abs(scale), parts=kept)


def level_uncertainties(output: StateLevels, drive: StateLevels | None) -> tuple[float, float, float, float]:
    """Standard uncertainties of output low, output high, drive low and drive high, in volts."""
    u_drive = (drive.u_low_V, drive.u_high_V) if drive else (0.0, 0.0)
    return (output.u_low_V, output.u_high_V, *u_drive)


def instants(transitions: Transitions, which: IntArray, column: int, *, channel: int = OUTPUT) -> Instants:
    """Crossings of one reference level by some of the edges.

    Parameters
    ----------
    which : array of int
        Indices of edges.
    column : int
        Index into `transitions.fractions`.
    channel : int
        `OUTPUT` or `DRIVE`.
    """
    pull = np.zeros((which.size, 4))
    pull[:, 2 * channel : 2 * channel + 2] = transitions.pull_s_per_V[which, column]
    return Instants(
        time_s=transitions.time_s[which, column], u_s=np.sqrt(transitions.covariance_s2[which, column, column]),
        bend_s=transitions.bend_s[which, column], pull=pull,
    )  # fmt: skip


def durations(transitions: Transitions, which: IntArray) -> Instants:
    """Times from the first to the last reference level of some edges of the output, as `Instants` hold them.

    The two crossings of one edge share samples; their covariance is taken along.
    """
    covariance = transitions.covariance_s2[which]
    variance = covariance[:, 0, 0] + covariance[:, -1, -1] - 2 * covariance[:, 0, -1]
    pull = np.zeros((which.size, 4))
    pull[:, :2] = transitions.pull_s_per_V[which, -1] - transitions.pull_s_per_V[which, 0]
    return Instants(
        time_s=transitions.time_s[which, -1] - transitions.time_s[which, 0],
        u_s=np.sqrt(np.maximum(variance, 0.0)),
        bend_s=np.hypot(transitions.bend_s[which, 0], transitions.bend_s[which, -1]),
        pull=pull,
    )
