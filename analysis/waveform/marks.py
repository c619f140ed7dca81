"""What a picture of a capture points at: the levels, and where the edges cross them."""

from __future__ import annotations

from dataclasses import dataclass

from darkedge.analysis.captures import Capture, Edge
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.waveform.channel import Channel, measure_channel

MOST_EDGES = 4
"""Edges of the first two pulses; more only crowd a picture."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Crossing:
    """One crossing of a reference level. `fraction` is of the way from low to high, whichever way the edge goes."""

    time_s: float
    level_V: float
    fraction: float
    edge: Edge


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelMarks:
    """Levels of one channel and the crossings of its first two pulses, in time."""

    low_V: float
    high_V: float
    crossings: tuple[Crossing, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Marks:
    """Marks of the drive and of one output; `None` where there is no such channel or no pulse in it."""

    output: ChannelMarks | None
    drive: ChannelMarks | None = None


def mark_capture(capture: Capture, *, element: int | None = None, fixture: Fixture = UNKNOWN_FIXTURE) -> Marks:
    """Return what a picture of a capture points at.

    Times and voltages are those of the trace itself, so that marks lie on it: neither the skew nor the
    offset of the fixture is taken off.

    Parameters
    ----------
    element : int, optional
        Which output; the first one where not said.

    Raises
    ------
    KeyError
        The capture has no such element.
    """
    record = capture.outputs[min(capture.outputs) if element is None else element]
    drive = measure_channel(capture.drive) if capture.drive is not None else None
    return Marks(
        output=_marks(measure_channel(record, volts_per_code=capture.conditions.volts_per_code)), drive=_marks(drive)
    )


def _marks(channel: Channel | None) -> ChannelMarks | None:
    if channel is None:
        return None
    levels, edges = channel.levels, channel.transitions
    crossings = []
    for edge in range(min(edges.rising.size, MOST_EDGES)):
        rising = bool(edges.rising[edge])
        for column, progress in enumerate(edges.fractions):
            fraction = progress if rising else 1.0 - progress
            crossings.append(
                Crossing(
                    time_s=float(edges.time_s[edge, column]),
                    level_V=levels.low_V + fraction * levels.amplitude_V,
                    fraction=fraction,
                    edge=Edge.RISING if rising else Edge.FALLING,
                )
            )
    return ChannelMarks(low_V=levels.low_V, high_V=levels.high_V, crossings=tuple(crossings))
