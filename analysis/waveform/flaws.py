"""Flaws that a trace shows by itself: clipping, peak detection, ringing, droop, tails, too few samples."""

from __future__ import annotations

import math

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.channel import Channel
from darkedge.analysis.waveform.edges import FEW_ON_EDGE, ONE_POLE_SKEW
from darkedge.analysis.waveform.noise import ENOUGH_FLAT_SAMPLES, difference_sigma
from darkedge.analysis.waveform.plateaus import Plateau

OVERSHOOT_RATIO = 0.05
"""Overshoot, as a share of the amplitude, that is called ringing (common practice, no source)."""

DROOP_RATIO = 0.01
"""Slope of a plateau from end to end, over the amplitude, that is called droop (common practice, no source)."""

TAIL_EXCESS = 1.15
"""Times the skewness of one pole from which an edge has a slow tail (common practice, no source)."""

LEAST_STUCK = 5
"""Samples at the very extreme of a record from which it may be clipped."""

LONG_FOR_PAIRS = 1024
"""Samples from which the beginning of a record is looked at for pairs first."""

QUIET_RATIO = 2e-4
"""Noise over amplitude below which a record is taken for computed, not captured."""


def trace_flags(signal_V: FloatArray, time_s: FloatArray, channel: Channel) -> set[str]:
    """Flags that one channel's trace shows by itself."""
    plain = channel.settled is not None  # what the joint fit passed has neither droop nor ringing nor a tail
    tests = {
        "clipped": is_clipped(signal_V, channel),
        "min_max_record": is_min_max(signal_V),
        "never_settles": not (channel.low.settled and channel.high.settled),
        "noise_unknown": not channel.noise.known,
        "droop": not plain and any(_droops(plateau) for plateau in (channel.low, channel.high)),
        "ringing": not plain and rings(signal_V, time_s, channel),
        "slow_tail": not plain and has_slow_tail(channel),
        "few_samples_on_edge": bool(np.any(channel.transitions.n_samples < FEW_ON_EDGE)),
    }
    return {code for code, true in tests.items() if true}


def is_clipped(signal_V: FloatArray, channel: Channel) -> bool:
    """Whether samples are stuck at the end of the range.

    A state is clipped where its samples repeat the very extreme of the record although the noise of the other state
    spreads over several codes: noise does not stop at a level by itself. A record without noise cannot tell.
    """
    tolerance = 1e-6 * channel.levels.amplitude_V
    top, bottom = float(np.max(signal_V)), float(np.min(signal_V))
    if (
        np.count_nonzero(signal_V >= top - tolerance) < LEAST_STUCK
        and np.count_nonzero(signal_V <= bottom + tolerance) < LEAST_STUCK
    ):
        return False
    middle = 0.5 * (channel.levels.low_V + channel.levels.high_V)
    high, low = signal_V[signal_V > middle], signal_V[signal_V <= middle]
    return _stuck(high, low, top, channel, channel.low.sigma_V) or _stuck(
        low, high, bottom, channel, channel.high.sigma_V
    )


def _stuck(part: FloatArray, other: FloatArray, extreme: float, channel: Channel, noise_V: float) -> bool:
    tolerance = 1e-6 * channel.levels.amplitude_V
    away = np.abs(part - extreme)
    stuck = int(np.count_nonzero(away <= tolerance))
    if other.size < ENOUGH_FLAT_SAMPLES or stuck < LEAST_STUCK:
        return False
    # Second differences tell noise from a tail that no fit describes; correlated noise makes them up to 4 times smaller.
    noise_V = min(noise_V, 4 * difference_sigma(np.diff(other)) / math.sqrt(3))
    if noise_V <= max(0.7 * channel.step_V, QUIET_RATIO * channel.levels.amplitude_V):
        return False
    nearby = int(np.sum(away <= max(2.5 * channel.step_V, 0.5 * noise_V))) - stuck
    return stuck > 2 * nearby


def is_min_max(signal_V: FloatArray) -> bool:
    """Whether the record holds pairs of minimum and maximum: one sample of each pair is always the lower one."""
    if signal_V.size > LONG_FOR_PAIRS and not is_min_max(signal_V[:LONG_FOR_PAIRS]):
        return False  # a record that is pairs is pairs from its beginning
    even = signal_V.size // 2 * 2
    for start in (0, 1):
        pairs = signal_V[start : start + (even - 2 * start)].reshape(-1, 2)
        steps = pairs[:, 1] - pairs[:, 0]
        moved = steps[steps != 0]
        if moved.size < 50 or moved.size < 0.5 * steps.size:
            continue
        up = float(np.mean(moved > 0))
        between = signal_V[start + 1 : -1 : 2][: pairs.shape[0] - 1]
        following = signal_V[start + 2 :: 2][: between.size]
        back = float(np.mean(following[: between.size] - between[: following.size] > 0))
        if (up > 0.97 and back < 0.2) or (up < 0.03 and back > 0.8):
            return True
    return False


def _droops(plateau: Plateau) -> bool:
    return plateau.sag_ratio > max(DROOP_RATIO, 5 * plateau.u_sag_ratio)


def rings(signal_V: FloatArray, time_s: FloatArray, channel: Channel) -> bool:
    """Whether an edge overshoots its state within three edge times (the post-transition region of IEEE Std 181)."""
    transitions, levels = channel.transitions, channel.levels
    borders = channel.changes.borders(signal_V.size)
    # Ringing itself passes for noise on a short plateau, so the noise from sample to sample bounds it.
    noise_V = min(channel.noise.sigma_V, 4 * channel.hiss_V)
    limit = max(OVERSHOOT_RATIO * levels.amplitude_V, 5.5 * noise_V)
    for edge, rising in enumerate(transitions.rising):
        late = transitions.time_s[edge, -1]
        until = late + 3 * (late - transitions.time_s[edge, 0])
        a, b = np.searchsorted(time_s, (late, until))
        part = signal_V[int(a) : min(int(b) + 1, int(borders[edge + 1]))]
        if part.size == 0:
            continue
        beyond = float(np.max(part)) - levels.high_V if rising else levels.low_V - float(np.min(part))
        if beyond > limit:
            return True
    return False


def has_slow_tail(channel: Channel) -> bool:
    """Whether an edge takes longer over its second part than one pole would, by more than the noise explains."""
    t = channel.transitions
    if len(t.fractions) != 3 or (t.fractions[0], t.fractions[2]) != (0.1, 0.9):
        return False
    first, second = t.time_s[:, 1] - t.time_s[:, 0], t.time_s[:, 2] - t.time_s[:, 1]
    wanted = ONE_POLE_SKEW * TAIL_EXCESS
    u = np.sqrt(t.u_time_s[:, 2] ** 2 + (wanted + 1) ** 2 * t.u_time_s[:, 1] ** 2 + wanted**2 * t.u_time_s[:, 0] ** 2)
    enough = t.n_samples >= 2 * FEW_ON_EDGE
    return bool(np.any(enough & (second - wanted * first > 3 * u)))
