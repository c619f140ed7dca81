"""A first look at a channel: hiss, codes, levels by histogram, and where the state changes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray, Record, TimedRecord
from darkedge.analysis.waveform.edges import Changes, find_changes, smoothing_length
from darkedge.analysis.waveform.levels import StateLevels, histogram_levels
from darkedge.analysis.waveform.noise import code_of_steps, sigma_of_steps, steps_between

LEAST_WIDTH = 3
"""Samples that pulses, and the gaps between them, last at least in the median; what is shorter is noise or a glitch."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FirstLook:
    """What a record shows before anything is fitted.

    `step_V` of a code (0 where none is seen), `hiss_V`, the noise from sample to sample, `levels` good to a bin of the histogram, and the
    changes of state.
    """

    record: Record
    step_V: float
    hiss_V: float
    levels: StateLevels
    changes: Changes

    @property
    def is_even(self) -> bool:
        """Whether the samples lie evenly in time."""
        return not isinstance(self.record, TimedRecord)


def look_at(record: Record, *, volts_per_code: float | None = None) -> FirstLook | None:
    """Look at a record; `None` where no pulse shows."""
    signal = record.signal_V
    steps = steps_between(signal)
    lowest, highest = float(signal.min()), float(signal.max())
    hiss = sigma_of_steps(steps, lambda: highest - lowest)
    step = volts_per_code or code_of_steps(steps, lowest, highest)
    found = _levels_and_changes(signal, hiss)
    if found is None:
        return None
    levels, changes = found
    return FirstLook(record=record, step_V=step, hiss_V=hiss, levels=levels, changes=changes)


def _levels_and_changes(signal_V: FloatArray, noise_V: float) -> tuple[StateLevels, Changes] | None:
    """Levels by histogram and the changes of state between them, the record smoothed as far as its noise asks."""
    levels = histogram_levels(signal_V)
    if levels is None:
        return None
    smooth = smoothing_length(noise_V, levels.amplitude_V, signal_V.size)
    if smooth > 1:
        levels = histogram_levels(signal_V, smooth=smooth)
        if levels is None:
            return None
    changes = find_changes(signal_V, levels, smooth=smooth)
    return (levels, changes) if changes.index.size and not _is_flicker(changes) else None


def _is_flicker(changes: Changes) -> bool:
    lasting = np.diff(changes.index)
    states = (lasting[0::2], lasting[1::2])
    return any(state.size > 0 and float(np.median(state)) < LEAST_WIDTH for state in states)
