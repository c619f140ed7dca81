"""Which volts and which stretch of time to show next, from what was just seen. Arrays in, settings out; no instrument."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from darkedge.instruments.dialect import FloatArray
from darkedge.instruments.oscilloscope import Window

ROOM = 1.25
"""Range over swing: the signal fills four fifths of it."""
LEAST_RANGE_V = 1e-3
WIDER = 4.0
TOO_WIDE = 0.6
ENOUGH_ON_EDGE = 30
"""Samples on a 10-90 % edge below which the edge gets a capture of its own."""
STANDS_OUT = 8.0
SETTLED_SHARE = 0.02
_END_SHARE = 0.004


@dataclass(frozen=True, slots=True, kw_only=True)
class Stretch:
    """A stretch of time around the trigger."""

    start_s: float
    span_s: float

    @property
    def end_s(self) -> float:
        """Its end."""
        return self.start_s + self.span_s


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenEdge:
    """One edge as roughly seen: where 10 % and 90 % of the swing are crossed."""

    start_s: float
    end_s: float

    @property
    def duration_s(self) -> float:
        """From the one to the other."""
        return self.end_s - self.start_s


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """What a whole pulse looks like: its edges, `None` where one does not stand out, and whether it is back at the end."""

    on: SeenEdge | None
    off: SeenEdge | None
    settled: bool


def window_for(low_V: float, high_V: float) -> Window:
    """The window that shows a signal between two levels with some room."""
    return Window(range_V=max(ROOM * (high_V - low_V), LEAST_RANGE_V), offset_V=(low_V + high_V) / 2)


def clipped(signal: FloatArray, window: Window) -> bool:
    """Whether a signal stands at an end of its window for more than a stray sample."""
    room = _END_SHARE * 1.5 * window.range_V
    at_end = (signal >= window.high_V - room) | (signal <= window.low_V + room)
    return int(np.count_nonzero(at_end)) >= 2


def better_window(signal: FloatArray, window: Window) -> Window | None:
    """The window to ask for next; `None` where this one is good."""
    low, high = float(signal.min()), float(signal.max())
    if clipped(signal, window):
        upper = high >= window.high_V - _END_SHARE * 1.5 * window.range_V
        lower = low <= window.low_V + _END_SHARE * 1.5 * window.range_V
        shift = (0.5 if upper else 0.0) - (0.5 if lower else 0.0)
        return Window(range_V=WIDER * window.range_V, offset_V=window.offset_V + shift * window.range_V)
    wanted = window_for(low, high)
    return wanted if wanted.range_V < TOO_WIDE * window.range_V else None


def whole_pulse(width_s: float, period_s: float) -> Stretch:
    """The first stretch to look at: the pulse, a little before it, and as much again behind it."""
    return Stretch(start_s=-0.2 * width_s, span_s=min(2.4 * width_s, 0.98 * period_s))


def longer(stretch: Stretch, period_s: float) -> Stretch | None:
    """Twice as long, at most one period; `None` where it is that already."""
    most = 0.98 * period_s
    if stretch.span_s >= 0.99 * most:
        return None
    return Stretch(start_s=stretch.start_s, span_s=min(2 * stretch.span_s, most))


def look(time_s: FloatArray, signal: FloatArray, width_s: float) -> Seen:
    """Find the two edges of the answer to one pulse of light, roughly.

    Parameters
    ----------
    time_s, signal : ndarray
        Shape (n,), seconds from the start of the drive pulse, volts.
    width_s : float
        Of the drive pulse.
    """
    before, lit = signal[time_s < 0], signal[(time_s > 0.8 * width_s) & (time_s <= width_s)]
    if before.size < 3 or lit.size < 3:
        return Seen(on=None, off=None, settled=True)
    base, noise = float(np.median(before)), float(np.std(before))
    after = signal[time_s > width_s]
    # A device that answers late is at its furthest behind the pulse.
    furthest = float(np.median(lit))
    if after.size and abs(_extreme(after, base) - base) > 1.2 * abs(furthest - base):
        furthest = _extreme(after, base)
    swing = furthest - base
    if abs(swing) < STANDS_OUT * max(noise, 1e-12):
        return Seen(on=None, off=None, settled=True)
    progress = (signal - base) / swing
    peak = width_s if after.size == 0 else max(width_s, float(time_s[int(np.argmax(_smooth(progress)))]))
    late = float(np.median(after[-max(after.size // 20, 3) :])) if after.size >= 3 else base
    return Seen(
        on=_edge(time_s, progress, 0.0, peak, rising=True),
        off=_edge(time_s, progress, width_s, float(time_s[-1]), rising=False),
        settled=abs(late - base) <= SETTLED_SHARE * abs(swing) + 3 * noise,
    )


def edge_stretch(edge: SeenEdge, *, drive_s: float, earliest_s: float, latest_s: float) -> Stretch:
    """A stretch that holds one edge with its two flat parts, and the drive edge it answers."""
    time = edge.duration_s
    start = max(min(edge.start_s - 2 * time, drive_s - time), earliest_s)
    end = min(edge.end_s + 4 * time, latest_s)
    return Stretch(start_s=start, span_s=max(end - start, time))


def samples_on(edge: SeenEdge | None, step_s: float) -> float:
    """Samples on an edge; infinitely many where there is none to look closer at."""
    return np.inf if edge is None else edge.duration_s / step_s


def _extreme(signal: FloatArray, base: float) -> float:
    low, high = float(signal.min()), float(signal.max())
    return high if high - base > base - low else low


def _smooth(signal: FloatArray) -> FloatArray:
    width = max(signal.size // 200, 1)
    smoothed: FloatArray = np.convolve(signal, np.ones(width) / width, mode="same")
    return smoothed


def _edge(time_s: FloatArray, progress: FloatArray, after_s: float, until_s: float, *, rising: bool) -> SeenEdge | None:
    inside = (time_s >= after_s) & (time_s <= until_s)
    time, course = time_s[inside], progress[inside] if rising else 1.0 - progress[inside]
    low, high = np.flatnonzero(course >= 0.1), np.flatnonzero(course >= 0.9)
    if high.size == 0 or low.size == 0:
        return None
    step = float(time_s[1] - time_s[0])
    start, end = float(time[low[0]]), float(time[high[0]])
    return SeenEdge(start_s=start, end_s=max(end, start + step))
