"""One channel measured: its levels, its noise and its edges."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import FloatArray, Record
from darkedge.analysis.waveform.crossings import locate_crossings
from darkedge.analysis.waveform.edges import (
    TEN_NINETY,
    Changes,
    Transitions,
    find_changes,
    rough_crossings,
    smoothing_length,
)
from darkedge.analysis.waveform.levels import StateLevels, histogram_levels
from darkedge.analysis.waveform.noise import Noise, code_step_V, difference_sigma
from darkedge.analysis.waveform.plateaus import Plateau, Refined, refine_levels

LEAST_SIGNAL_TO_NOISE = 5.0
"""Amplitude over noise below which no pulse is claimed."""

LEAST_WIDTH = 3
"""Samples that pulses, and the gaps between them, last at least in the median; what is shorter is noise or a glitch."""

LEAST_CODES = 2.0
"""Amplitude in codes of the digitiser below which no pulse is claimed."""

LEVEL_SHIFT_RATIO = 2e-3
"""A change of a level by more than this share of the amplitude moves the plateaus enough to look at them again."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Channel:
    """What one channel shows.

    `step_V` is the voltage of one code, 0 where none is seen; `hiss_V` the noise that changes from sample to
    sample, which ringing does not enter.
    """

    levels: StateLevels
    noise: Noise
    transitions: Transitions
    changes: Changes
    low: Plateau
    high: Plateau
    step_V: float
    hiss_V: float
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
        Reference levels as progress, rising; the first and the last bound the edge's time, the middle one the delays.
    volts_per_code : float, optional
        Voltage of one code of the digitiser.

    References
    ----------
    IEEE Std 181-2011: state levels, reference level instants, transition durations.
    """
    signal, time = record.signal_V, record.time_s
    step = code_step_V(signal, volts_per_code)
    noise_V = difference_sigma(signal)
    first = _first_look(signal, noise_V)
    if first is None:
        return None
    levels, changes = first
    refined = _refined(time, signal, levels, changes, noise_V, step)
    if refined is None or _is_drift(refined, changes):
        return None
    transitions = locate_crossings(
        time,
        signal,
        levels=refined.levels,
        changes=changes,
        noise=with_codes(refined.noise, step),
        fractions=fractions,
    )
    return Channel(
        levels=refined.levels, noise=refined.noise, transitions=transitions, changes=changes, low=refined.low,
        high=refined.high, step_V=step, hiss_V=noise_V, start_s=float(time[0]), end_s=float(time[-1]),
    )  # fmt: skip


def _first_look(signal_V: FloatArray, noise_V: float) -> tuple[StateLevels, Changes] | None:
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


def _refined(
    time_s: FloatArray, signal_V: FloatArray, levels: StateLevels, changes: Changes, noise_V: float, step_V: float
) -> Refined | None:
    """Refine levels and noise until they stay; `None` where the amplitude does not stand out.

    Once more at least where the noise turns out otherwise than its differences said: how much of a plateau belongs to
    its level can only be told against the noise.
    """
    noise = Noise(sigma_V=noise_V, correlation=np.ones(1), n_flat=0)
    for again in (True, True, False):
        crossings = rough_crossings(time_s, signal_V, levels=levels, changes=changes)
        refined = refine_levels(
            time_s, signal_V, levels=levels, changes=changes, crossings_s=crossings, noise=noise, step_V=step_V
        )
        new, unlike, noise = refined.levels, _unlike(refined.noise, noise), refined.noise
        if new.amplitude_V <= max(LEAST_SIGNAL_TO_NOISE * noise.sigma_V, LEAST_CODES * step_V):
            return None
        moved = max(abs(new.low_V - levels.low_V), abs(new.high_V - levels.high_V))
        levels = new
        if not again or not (unlike or moved > LEVEL_SHIFT_RATIO * new.amplitude_V):
            break
    return refined


def _unlike(found: Noise, assumed: Noise) -> bool:
    return (
        found.correlation.size != assumed.correlation.size or abs(found.sigma_V - assumed.sigma_V) > 0.2 * found.sigma_V
    )


def _is_drift(refined: Refined, changes: Changes) -> bool:
    """A lone edge out of a state that never was at rest is a drift or a decay, not an edge between two states."""
    before = refined.low if changes.rising[0] else refined.high
    return changes.index.size == 1 and not before.settled


def with_codes(noise: Noise, step_V: float) -> Noise:
    """Noise of a sample on an edge, which is never less than the rounding to codes, step / sqrt(12)."""
    return replace(noise, sigma_V=max(noise.sigma_V, step_V / float(np.sqrt(12))))
