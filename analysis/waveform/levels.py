"""State levels: the low and the high that a two-level waveform goes between."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.captures import FloatArray

BINS = 256
FLAT_RATIO = 1e-9
"""Range over magnitude below which a record is flat: what is left is the rounding of the numbers."""

PLATEAU_SHARE = 0.25
"""Share of a half's samples near its mode that makes the mode a state; a ramp or a decaying tail has less."""

INNER_SHARE, INNER_PLATEAU_SHARE = 0.3, 0.5
"""Part of a half next to the middle, and the share that a mode there needs beside a true state in the other half."""


@dataclass(frozen=True, slots=True, kw_only=True)
class StateLevels:
    """Levels of the two states in volts, with standard uncertainties. `low_V` < `high_V`."""

    low_V: float
    high_V: float
    u_low_V: float = 0.0
    u_high_V: float = 0.0

    @property
    def amplitude_V(self) -> float:
        """High state minus low state."""
        return self.high_V - self.low_V

    @property
    def u_amplitude_V(self) -> float:
        """Standard uncertainty of the amplitude; the two levels rest on different samples."""
        return float(np.hypot(self.u_low_V, self.u_high_V))


def histogram_levels(signal_V: FloatArray, *, smooth: int = 1) -> StateLevels | None:
    """State levels by the histogram method; `None` where the record is flat.

    The range from minimum to maximum is split at its middle; the level of each state is the mode of
    its half, refined to the mean of the samples about it. Where a half has no mode worth the name (a pulse too short
    to settle), its level is the extreme.

    Parameters
    ----------
    signal_V : array, shape (n,), volts
    smooth : int
        Length of the running mean taken first, in samples, so that noise does not widen the range.

    References
    ----------
    IEEE Std 181-2011, state levels by histogram (mode).
    """
    values = running_mean(signal_V, smooth)
    bottom, top = float(np.min(values)), float(np.max(values))
    if top - bottom <= FLAT_RATIO * max(abs(top), abs(bottom)):
        return None
    place = ((values - bottom) * (BINS / (top - bottom))).astype(np.intp)
    counts = np.bincount(place, minlength=BINS + 1)
    counts[BINS - 1] += counts[BINS]  # the very top belongs to the last bin
    counts = counts[:BINS]
    lower, upper = _mode(counts[: BINS // 2][::-1]), _mode(counts[BINS // 2 :])
    # A decaying tail is dense next to the middle: beside a true state a mode there must hold half of its own half.
    low_is_state = lower.holds(PLATEAU_SHARE if lower.outer or not upper.outer else INNER_PLATEAU_SHARE)
    high_is_state = upper.holds(PLATEAU_SHARE if upper.outer or not lower.outer else INNER_PLATEAU_SHARE)
    width = (top - bottom) / BINS
    sums = np.asarray(np.bincount(place, values - bottom, minlength=BINS + 1), dtype=np.float64)
    low = bottom + _mean_about(sums, counts, BINS // 2 - 1 - lower.place, width) if low_is_state else bottom
    high = bottom + _mean_about(sums, counts, BINS // 2 + upper.place, width) if high_is_state else top
    return StateLevels(low_V=low, high_V=high) if high > low else None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Mode:
    """Mode of one half of a histogram: its bin, counted from the middle outwards, and the share of the half near it."""

    place: int
    share: float

    @property
    def outer(self) -> bool:
        """Whether it is a state for sure: away from the middle, with enough samples."""
        return self.place >= BINS // 2 * INNER_SHARE and self.share >= PLATEAU_SHARE

    def holds(self, share: float) -> bool:
        return self.share >= share


def _mode(counts: NDArray[np.intp]) -> _Mode:
    # Three bins wide: a level on the border of two bins is one level.
    place = int(np.argmax(np.convolve(counts, np.ones(3), mode="same")))
    reach = BINS // 20
    near = int(np.sum(counts[max(place - reach, 0) : place + reach + 1]))
    return _Mode(place=place, share=near / max(int(np.sum(counts)), 1))


def _mean_about(sums: FloatArray, counts: NDArray[np.intp], place: int, width: float) -> float:
    """Mean above the bottom of the samples in the five bins about a mode."""
    near = slice(max(place - 2, 0), place + 3)
    count = int(np.sum(counts[near]))
    return float(np.sum(sums[near])) / count if count else (place + 0.5) * width


def running_mean(signal_V: FloatArray, length: int) -> FloatArray:
    """Running mean of `length` samples, centred, same shape; the ends average what there is."""
    if length <= 1:
        return signal_V
    sums = np.concatenate(([0.0], np.cumsum(signal_V - signal_V[0])))
    centres = np.arange(signal_V.size)
    start = np.maximum(centres - length // 2, 0)
    stop = np.minimum(centres - length // 2 + length, signal_V.size)
    return np.asarray((sums[stop] - sums[start]) / (stop - start) + signal_V[0])
