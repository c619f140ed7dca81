"""One channel measured: its levels, its noise and its edges."""

from __future__ import annotations

from collections.abc import Hashable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import FloatArray, Record, TimedRecord
from darkedge.analysis.waveform.crossings import locate_crossings
from darkedge.analysis.waveform.edges import (
    TEN_NINETY,
    Changes,
    Transitions,
    rough_crossings,
)
from darkedge.analysis.waveform.first_look import FirstLook, look_at
from darkedge.analysis.waveform.levels import StateLevels, running_mean
from darkedge.analysis.waveform.noise import Noise
from darkedge.analysis.waveform.plateaus import Plateau, Refined, refine_levels
from darkedge.analysis.waveform.settled import SettledChannel, SettledEdges, fit_settled

LEAST_SIGNAL_TO_NOISE = 5.0
"""Amplitude over noise below which no pulse is claimed."""

LEAST_CODES = 2.0
"""Amplitude in codes of the digitiser below which no pulse is claimed."""

CUT_RATIO = 0.12
"""Share of an edge that may lie outside the record and the edge still be timed: a little over the 10 % before its first level."""

ENDS = 4
"""Samples whose mean says how far an edge has got."""

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
    settled: SettledEdges | None = None

    def located(self, record: Record, fractions: tuple[float, ...]) -> Transitions:
        """Its edges at other reference levels; `record` is what it was measured from."""
        if self.settled is not None:
            return self.settled.transitions(fractions)
        return locate_crossings(
            record.time_s, record.signal_V, levels=self.levels, changes=self.changes,
            noise=with_codes(self.noise, self.step_V), fractions=fractions,
        )  # fmt: skip


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
    return measure_channels([record], fractions=fractions, volts_per_code=[volts_per_code])[0]


def measure_channels(
    records: Sequence[Record],
    *,
    fractions: tuple[float, ...] = TEN_NINETY,
    volts_per_code: Sequence[float | None],
    pools: Sequence[Hashable] | None = None,
) -> list[Channel | None]:
    """Measure several channels, which is quicker than one by one; see `measure_channel`.

    Channels whose pulses settle and whose edges are of the common family are fitted together (`settled`); what does not settle, is uneven,
    or leaves more than noise is measured by itself. Channels with the same entry in `pools` were taken alike.
    """
    looks = [look_at(record, volts_per_code=step) for record, step in zip(records, volts_per_code, strict=True)]
    even = [k for k, look in enumerate(looks) if look is not None and look.is_even]
    of_even = None if pools is None else [pools[k] for k in even]
    found: list[Channel | None] = [None] * len(records)
    settled = dict(
        zip(even, fit_settled([look for k in even if (look := looks[k]) is not None], fractions, of_even), strict=True)
    )
    for k, look in enumerate(looks):
        if look is not None:
            fit = settled.get(k)
            found[k] = _one_by_one(look, fractions) if fit is None else _of_settled(look, fit)
    return found


def _of_settled(look: FirstLook, fit: SettledChannel) -> Channel:
    """A channel as the joint fit found it; what the fit passed has neither droop nor ringing beyond its noise."""
    levels, sigma = fit.levels, fit.noise.sigma_V
    low, high = (
        Plateau(level_V=level, u_level_V=u, settled=True, sigma_V=sigma)
        for level, u in ((levels.low_V, levels.u_low_V), (levels.high_V, levels.u_high_V))
    )
    return Channel(
        levels=levels, noise=fit.noise, transitions=fit.transitions, changes=look.changes, low=low,
        high=high, step_V=look.step_V, hiss_V=look.hiss_V, start_s=look.record.t0_s, end_s=_end_s(look.record),
        settled=fit.edges,
    )  # fmt: skip


def _end_s(record: Record) -> float:
    if isinstance(record, TimedRecord):
        return float(record.time_s[-1])
    return record.t0_s + record.dt_s * (record.signal_V.size - 1)


def _one_by_one(look: FirstLook, fractions: tuple[float, ...]) -> Channel | None:
    """Measure a channel that assumes less: levels from plateaus, edges by shape and local polynomials."""
    signal, time = look.record.signal_V, look.record.time_s
    refined = _refined(time, signal, look.levels, look.changes, look.hiss_V, look.step_V)
    if refined is None or _is_drift(refined, look.changes):
        return None
    changes = _whole(signal, refined, look.changes)
    if changes.index.size == 0:
        return None
    transitions = locate_crossings(
        time, signal, levels=refined.levels, changes=changes, noise=with_codes(refined.noise, look.step_V),
        fractions=fractions,
    )  # fmt: skip
    return Channel(
        levels=refined.levels, noise=refined.noise, transitions=transitions, changes=changes, low=refined.low,
        high=refined.high, step_V=look.step_V, hiss_V=look.hiss_V, start_s=float(time[0]), end_s=float(time[-1]),
    )  # fmt: skip


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


def _whole(signal_V: FloatArray, refined: Refined, changes: Changes) -> Changes:
    """The changes that the record shows whole: it may begin after an edge has begun, and end before one has ended."""
    levels = refined.levels
    allowed = CUT_RATIO + 3 * refined.noise.sigma_V / levels.amplitude_V / ENDS**0.5
    head = running_mean(signal_V[: int(changes.index[0]) + 1], ENDS) - levels.low_V
    tail = running_mean(signal_V[int(changes.index[-1]) :], ENDS) - levels.low_V
    amplitude = levels.amplitude_V
    begun = float(np.min(head)) / amplitude if changes.rising[0] else 1.0 - float(np.max(head)) / amplitude
    unended = 1.0 - float(np.max(tail)) / amplitude if changes.rising[-1] else float(np.min(tail)) / amplitude
    whole = np.ones(changes.index.size, dtype=np.bool_)
    whole[0] &= begun <= allowed
    whole[-1] &= unended <= allowed
    return changes if bool(np.all(whole)) else changes.select(whole)


def _unlike(found: Noise, assumed: Noise) -> bool:
    return (
        found.correlation.size != assumed.correlation.size or abs(found.sigma_V - assumed.sigma_V) > 0.2 * found.sigma_V
    )


def _is_drift(refined: Refined, changes: Changes) -> bool:
    """A lone edge out of a state that never was at rest is a drift or a decay, not an edge between two states."""
    before = refined.low if changes.rising[0] else refined.high
    return changes.index.size == 1 and not before.settled


def with_codes(noise: Noise, step_V: float) -> Noise:
    """Noise of a sample on an edge: never less than the rounding to codes, step / sqrt(12), and wider where it is hardly known."""
    return replace(noise, sigma_V=max(noise.sigma_V * noise.widening, step_V / float(np.sqrt(12))))
