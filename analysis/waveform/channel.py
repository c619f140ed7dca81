"""One channel measured: its levels, its noise and its edges."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import Record
from darkedge.analysis.waveform.edges import (
    TEN_NINETY,
    Changes,
    Transitions,
    find_changes,
    locate_crossings,
    rough_crossings,
    smoothing_length,
)
from darkedge.analysis.waveform.levels import StateLevels, histogram_levels
from darkedge.analysis.waveform.noise import Noise, code_step_V, difference_sigma
from darkedge.analysis.waveform.plateaus import Plateau, refine_levels

LEAST_SIGNAL_TO_NOISE = 4.0
"""Amplitude over noise below which no pulse is claimed."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Channel:
    """What one channel shows. `step_V` is the voltage of one code, 0 where none is seen."""

    levels: StateLevels
    noise: Noise
    transitions: Transitions
    changes: Changes
    low: Plateau
    high: Plateau
    step_V: float
    start_s: float
    end_s: float


def measure_channel(
    record: Record, *, fractions: tuple[float, ...] = TEN_NINETY, volts_per_code: float | None = None
) -> Channel | None:
    """Measure levels, noise and edges of one channel; `None` where no pulse stands out.

    Parameters
    ----------
    record : Waveform or TimedRecord
    fractions : tuple
        Reference levels as progress, rising; the first and the last bound the edge's time.
    volts_per_code : float, optional
        Voltage of one code of the digitiser.
    """
    signal, time = record.signal_V, record.time_s
    noise_V = difference_sigma(signal)
    step = code_step_V(signal, volts_per_code)
    levels = histogram_levels(signal)
    if levels is None:
        return None
    smooth = smoothing_length(noise_V, levels.amplitude_V, signal.size)
    if smooth > 1:
        levels = histogram_levels(signal, smooth=smooth)
        if levels is None:
            return None
    changes = find_changes(signal, levels, smooth=smooth)
    if changes.index.size == 0:
        return None
    for _ in range(2):
        crossings = rough_crossings(time, signal, levels, changes, TEN_NINETY)
        levels, noise, low, high = refine_levels(
            time, signal, levels=levels, changes=changes, crossings_s=crossings, noise_V=noise_V, step_V=step
        )
        if levels.amplitude_V < max(LEAST_SIGNAL_TO_NOISE * max(noise.sigma_V, noise_V), 2 * step):
            return None
    transitions = locate_crossings(
        time, signal, levels=levels, changes=changes, noise=_with_codes(noise, step), fractions=fractions
    )
    return Channel(
        levels=levels, noise=noise, transitions=transitions, changes=changes, low=low, high=high, step_V=step,
        start_s=float(time[0]), end_s=float(time[-1]),
    )  # fmt: skip


def _with_codes(noise: Noise, step_V: float) -> Noise:
    """Noise of a sample on an edge, which is never less than the rounding to codes, step / sqrt(12)."""
    sigma = max(noise.sigma_V, step_V / float(np.sqrt(12)))
    return Noise(sigma_V=sigma, correlation=noise.correlation, n_flat=noise.n_flat)
