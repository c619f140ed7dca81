"""A capture with its levels and the points where its edges cross them."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from darkedge.analysis.captures import Capture, FloatArray, Record
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.style import DRIVE, FAINT, INK, OUTPUT, engineering, look, new_figure
from darkedge.analysis.quantities import format_quantity
from darkedge.analysis.waveform.marks import ChannelMarks, Marks

MOST_POINTS = 1500
"""Points drawn of a channel; a longer one is drawn by the extremes of short stretches."""


def plot_capture(capture: Capture, marks: Marks, *, element: int, measured: Measurement | None = None) -> Figure:
    """Draw drive and output of one element with their 10, 50 and 90 % points.

    The picture shows what was measured, not more: `measured` supplies the times written beside the edges.
    """
    with look():
        figure = new_figure(3.6 if capture.drive is not None else 2.9)
        if capture.drive is not None:
            upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=(1, 2.2))
            _draw(upper, capture.drive, marks.drive, DRIVE, "drive")
            upper.tick_params(labelbottom=False)
            upper.set_title(_title(capture, element))
        else:
            lower = figure.subplots()
            lower.set_title(_title(capture, element))
        _draw(lower, capture.outputs[element], marks.output, OUTPUT, "output")
        engineering(lower, "x", "s")
        lower.set_xlabel("time from the trigger")
        if measured is not None:
            _write_times(lower, measured)
        return figure


def thinned(time: FloatArray, signal: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Fewer points with the same outline: lowest and highest of each stretch, in their order."""
    if time.size <= MOST_POINTS:
        return time, signal
    stretches = MOST_POINTS // 2
    size = time.size // stretches
    kept = signal[: stretches * size].reshape(stretches, size)
    places = np.sort(np.stack([kept.argmin(axis=1), kept.argmax(axis=1)]), axis=0).T
    flat = (places + size * np.arange(stretches)[:, None]).ravel()
    return time[flat], signal[flat]


def _draw(axis: Axes, record: Record, marks: ChannelMarks | None, colour: str, name: str) -> None:
    time, signal = thinned(record.time_s, record.signal_V)
    axis.plot(time, signal, color=colour, linewidth=1.0)
    engineering(axis, "y", "V")
    axis.set_ylabel(name)
    axis.margins(x=0.0, y=0.12)
    if marks is None:
        axis.text(0.5, 0.5, "no pulse found", transform=axis.transAxes, ha="center", color=INK)
        return
    for level in (marks.low_V, marks.high_V):
        axis.axhline(level, color=FAINT, linewidth=0.8, linestyle=(0, (4, 3)))
    for fraction, marker in ((0.1, "v"), (0.5, "o"), (0.9, "^")):
        points = [c for c in marks.crossings if abs(c.fraction - fraction) < 1e-6]
        axis.plot(
            [c.time_s for c in points],
            [c.level_V for c in points],
            marker,
            color=INK,
            markersize=5,
            markerfacecolor="white",
            label=f"{100 * fraction:.0f} %",
        )
    if name == "output":
        axis.legend(loc="upper right", ncols=3, title=None)


def _write_times(axis: Axes, measured: Measurement) -> None:
    words = []
    for quantity, name in (("rise_time_s", "rise"), ("fall_time_s", "fall"), ("t_plh_s", "tPLH"), ("t_phl_s", "tPHL")):
        estimate = measured.quantities.get(quantity)
        if estimate is not None and estimate.value is not None:
            words.append(f"{name} {format_quantity(estimate.value, 's', u=estimate.u)}")
    if words:
        axis.set_xlabel("time from the trigger\n" + "  ·  ".join(words), fontsize=8.5)


def _title(capture: Capture, element: int) -> str:
    known = capture.conditions
    parts = [known.device or capture.name]
    if len(capture.outputs) > 1:
        parts.append(f"element {element}")
    if known.bias_V is not None:
        parts.append(format_quantity(known.bias_V, "V"))
    if known.load_ohm is not None:
        parts.append(format_quantity(known.load_ohm, "Ω"))
    if known.pulse_width_s is not None:
        parts.append(f"pulse {format_quantity(known.pulse_width_s, 's')}")
    return ", ".join(parts)
