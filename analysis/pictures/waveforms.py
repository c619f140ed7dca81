"""A capture as it was measured: its levels, the points where its edges cross them, and the times between."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import groupby

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from darkedge.analysis.captures import Capture, Edge, FloatArray, Kind, Record
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.style import (
    DASHED,
    DRIVE,
    FAINT,
    FULL_IN,
    GRID,
    INK,
    NOTE_PT,
    OUTPUT,
    SOFT,
    label_axis,
    look,
    new_figure,
    shown_name,
)
from darkedge.analysis.pictures.words import QUANTITY_WORDS, cell
from darkedge.analysis.quantities import format_quantity
from darkedge.analysis.waveform.marks import ChannelMarks, Crossing, Marks

MOST_POINTS = 1200
"""Points drawn of a channel; a longer one is drawn by the extremes of short stretches."""
MOST_EDGES_ENLARGED = 2
_SAMPLES_TO_DOT = 60
"""Fewer samples than this in an enlarged edge are shown as dots."""
_FAR_DELAY = 6.0
"""A drive edge that lies further from the output's than this many edge times is not drawn into the enlarged edge."""
_MARKERS = ((0.1, "v"), (0.5, "o"), (0.9, "^"))
_DURATIONS = {Edge.RISING: ("rise_time_s", "rise"), Edge.FALLING: ("fall_time_s", "fall")}
_DELAYS = {Edge.RISING: ("t_plh_s", "tPLH"), Edge.FALLING: ("t_phl_s", "tPHL")}


@dataclass(frozen=True, slots=True, kw_only=True)
class _Transition:
    """One edge of the output as marked, with the drive's 50 % point that it answers."""

    edge: Edge
    crossings: tuple[Crossing, ...]
    drive_s: float | None

    @property
    def middle(self) -> Crossing:
        return min(self.crossings, key=lambda c: abs(c.fraction - 0.5))

    @property
    def duration_s(self) -> float:
        return self.crossings[-1].time_s - self.crossings[0].time_s

    @property
    def drive_near(self) -> bool:
        """Whether the drive's edge is close enough to be drawn beside the output's."""
        if self.drive_s is None:
            return False
        return abs(self.middle.time_s - self.drive_s) <= _FAR_DELAY * max(self.duration_s, 1e-15)

    @property
    def window_s(self) -> tuple[float, float]:
        times = [c.time_s for c in self.crossings]
        if self.drive_near and self.drive_s is not None:
            times.append(self.drive_s)
        first, last = min(times), max(times)
        return first - 0.25 * (last - first), last + 0.45 * (last - first)


def plot_capture(
    capture: Capture, marks: Marks, *, element: int | None = None, measured: Measurement | None = None
) -> Figure:
    """Draw drive and output of one element, and its first two edges enlarged, with what was measured written beside them.

    Times and levels are those of `measured` (medians over the pulses, with their uncertainty) where it has them, else
    those of the marked edge itself. Long records are thinned to their outline, for drawing only.

    Parameters
    ----------
    element : int, optional
        Which output; the first one where not said.

    Raises
    ------
    KeyError
        The capture has no such element.
    """
    element = min(capture.outputs) if element is None else element
    output = capture.outputs[element]
    transitions = _transitions(marks)[:MOST_EDGES_ENLARGED]
    with look():
        figure = new_figure(2.95 if capture.drive is not None else 2.4, width_in=FULL_IN)
        figure.suptitle(
            _title(capture, element), x=0.008, ha="left", fontsize=8.5, fontweight="bold"
        )  # as wide as the figure, where a title above one panel would run into the next
        rows, ratios = (2, (1.0, 2.4)) if capture.drive is not None else (1, (1.0,))
        grid = figure.add_gridspec(
            rows, 1 + len(transitions), height_ratios=ratios, width_ratios=(1.75, *(1.0 for _ in transitions))
        )
        whole = figure.add_subplot(grid[-1, 0])
        _draw_whole(whole, output, marks.output, OUTPUT, "output")
        for transition in transitions:
            whole.axvspan(*_within(transition.window_s, output), color=GRID, alpha=0.55, linewidth=0, zorder=0)
        if capture.drive is not None:
            above = figure.add_subplot(grid[0, 0], sharex=whole)
            _draw_whole(above, capture.drive, marks.drive, DRIVE, "drive")
            above.tick_params(labelbottom=False)
        figure.axes[-1].set_title(
            "\n".join(_pulse_words(measured)), fontsize=NOTE_PT + 0.5, fontweight="normal"
        )  # the uppermost of the panels that show the whole
        label_axis(whole, "x", "time from the trigger", "s", ticks=6)
        for place, transition in enumerate(transitions, start=1):
            _draw_enlarged(figure.add_subplot(grid[:, place]), capture, output, marks, transition, measured)
        return figure


def plot_dark_trace(capture: Capture, *, element: int | None = None, measured: Measurement | None = None) -> Figure:
    """Draw a trace taken in the dark with its mean; the current that follows is written above it."""
    element = min(capture.outputs) if element is None else element
    output = capture.outputs[element]
    with look():
        figure = new_figure(1.9, width_in=FULL_IN)
        figure.suptitle(_title(capture, element), x=0.008, ha="left", fontsize=8.5, fontweight="bold")
        axes = figure.subplots()
        axes.plot(*thinned(output.time_s, output.signal_V), color=OUTPUT, linewidth=0.7)
        mean = float(output.signal_V.mean())
        axes.axhline(mean, color=INK, linewidth=0.9, linestyle=DASHED)
        words = [f"mean {format_quantity(mean, 'V')}"]
        current = None if measured is None else measured.quantities.get("dark_current_A")
        if current is not None:
            words.append(f"current, the offset traces taken off: {cell(current, 'dark_current_A')}")
        axes.set_title(" · ".join(words), fontsize=NOTE_PT + 0.5, fontweight="normal")
        axes.margins(x=0.0)
        label_axis(axes, "x", "time from the trigger", "s")
        label_axis(axes, "y", "output", "V", ticks=5)
        return figure


def thinned(time: FloatArray, signal: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Fewer points with the same outline: lowest and highest of each stretch, in their order.

    `time` and `signal` have shape (n,); at most about `MOST_POINTS` come back, the first and the last sample among them.
    """
    if time.size <= MOST_POINTS:
        return time, signal
    size = -(-time.size // (MOST_POINTS // 2))
    stretches = time.size // size
    kept = signal[: stretches * size].reshape(stretches, size)
    places = np.stack([kept.argmin(axis=1), kept.argmax(axis=1)], axis=1) + size * np.arange(stretches)[:, None]
    rest = stretches * size + np.array([f(signal[stretches * size :]) for f in (np.argmin, np.argmax)]) if (
        stretches * size < time.size
    ) else np.empty(0, dtype=np.intp)  # fmt: skip
    chosen = np.unique(np.concatenate([places.ravel(), rest, [0, time.size - 1]])).astype(np.intp)
    return time[chosen], signal[chosen]


def _transitions(marks: Marks) -> list[_Transition]:
    if marks.output is None:
        return []
    drive = [] if marks.drive is None else [c.time_s for c in marks.drive.crossings if abs(c.fraction - 0.5) < 1e-6]
    groups = [tuple(group) for _, group in groupby(marks.output.crossings, key=lambda c: c.edge)]
    return [
        _Transition(edge=group[0].edge, crossings=group, drive_s=_answered(group, drive))
        for group in groups
        if len(group) > 1
    ]


def _answered(crossings: Sequence[Crossing], drive: Sequence[float]) -> float | None:
    """The drive's 50 % point before that of the output; a skew may let it seem a little after."""
    middle = min(crossings, key=lambda c: abs(c.fraction - 0.5)).time_s
    slack = crossings[-1].time_s - crossings[0].time_s
    before = [t for t in drive if t <= middle + slack]
    return max(before) if before else None


def _draw_whole(axes: Axes, record: Record, marks: ChannelMarks | None, colour: str, name: str) -> None:
    axes.plot(*thinned(record.time_s, record.signal_V), color=colour, linewidth=0.9)
    axes.margins(x=0.0, y=0.2 if name == "output" else 0.14)
    if marks is None:
        axes.text(0.5, 0.5, "no pulse found", transform=axes.transAxes, ha="center", va="center", color=INK,
                  bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.8})  # fmt: skip
    else:
        _draw_levels(axes, marks, named=name == "output")
        _draw_points(axes, marks.crossings, size=3.2)
    label_axis(axes, "y", name, "V", ticks=5 if name == "output" else 3)


def _draw_levels(axes: Axes, marks: ChannelMarks, *, named: bool) -> None:
    for level, name, place in ((marks.low_V, "low", "top"), (marks.high_V, "high", "bottom")):
        axes.axhline(level, color=SOFT, linewidth=0.7, linestyle=DASHED, zorder=1.5)
        if named:
            axes.annotate(
                name, (1.0, level), xycoords=("axes fraction", "data"), xytext=(-2, -4 if place == "top" else 4),
                textcoords="offset points", ha="right", va=place, fontsize=NOTE_PT, color=INK,
            )  # fmt: skip


def _draw_points(axes: Axes, crossings: Sequence[Crossing], *, size: float) -> None:
    for fraction, marker in _MARKERS:
        points = [c for c in crossings if abs(c.fraction - fraction) < 1e-6]
        axes.plot(
            [c.time_s for c in points], [c.level_V for c in points], marker, color=INK, markersize=size,
            markerfacecolor="white", markeredgewidth=0.9, zorder=4,
        )  # fmt: skip


def _draw_enlarged(
    axes: Axes,
    capture: Capture,
    output: Record,
    marks: Marks,
    transition: _Transition,
    measured: Measurement | None,
) -> None:
    """One edge with its samples, its three points, and how long it takes from where to where."""
    assert marks.output is not None
    first, last = _within(transition.window_s, output)
    time, signal = _between(output, first, last)
    dotted = time.size <= _SAMPLES_TO_DOT
    axes.plot(
        *thinned(time, signal), color=OUTPUT, linewidth=1.0, marker="." if dotted else None, markersize=2.6, zorder=2
    )
    if capture.drive is not None and marks.drive is not None and transition.drive_near:
        _draw_drive_scaled(axes, capture.drive, marks.drive, marks.output, first, last)
    _draw_levels(axes, marks.output, named=False)
    _draw_points(axes, transition.crossings, size=4.2)
    amplitude = marks.output.high_V - marks.output.low_V
    for crossing in transition.crossings:
        _name_point(axes, crossing)
    axes.set_ylim(marks.output.low_V - 0.32 * amplitude, marks.output.high_V + 0.14 * amplitude)
    axes.set_xlim(first, last)
    _draw_times(axes, marks.output, transition)
    axes.set_title("\n".join(_time_words(transition, measured)), fontsize=NOTE_PT + 0.5, fontweight="normal")
    label_axis(axes, "x", "time", "s", ticks=4)
    axes.tick_params(axis="y", labelleft=False, length=0)


def _draw_drive_scaled(
    axes: Axes, drive: Record, marks: ChannelMarks, output: ChannelMarks, first: float, last: float
) -> None:
    """The drive between the output's levels, so that both cross 50 % at one height."""
    time, signal = _between(drive, first, last)
    span = (output.high_V - output.low_V) / (marks.high_V - marks.low_V)
    axes.plot(*thinned(time, output.low_V + (signal - marks.low_V) * span), color=DRIVE, linewidth=0.8, zorder=1.8)
    middle = 0.5 * (output.low_V + output.high_V)
    near = [c for c in marks.crossings if abs(c.fraction - 0.5) < 1e-6 and first <= c.time_s <= last]
    axes.plot([c.time_s for c in near], [middle] * len(near), "o", color=DRIVE, markersize=3.4,
              markerfacecolor="white", markeredgewidth=0.9, zorder=4)  # fmt: skip


def _name_point(axes: Axes, crossing: Crossing) -> None:
    """Right of a falling edge there is room above, of a rising one below."""
    rising = crossing.edge is Edge.RISING
    axes.annotate(
        f"{100 * crossing.fraction:.0f} %", (crossing.time_s, crossing.level_V), xytext=(5, -2 if rising else 2),
        textcoords="offset points", ha="left", va="top" if rising else "bottom", fontsize=NOTE_PT, color=INK, zorder=5,
        bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.75, "pad": 0.6},
    )  # fmt: skip


def _draw_times(axes: Axes, output: ChannelMarks, transition: _Transition) -> None:
    """The edge time as a bracket below the edge, the delay as an arrow along the 50 % level."""
    amplitude = output.high_V - output.low_V
    below = output.low_V - 0.17 * amplitude
    ends = transition.crossings[0], transition.crossings[-1]
    for crossing in ends:
        axes.vlines(crossing.time_s, below - 0.03 * amplitude, crossing.level_V, color=FAINT, linewidth=0.7, zorder=1)
    _arrow(axes, ends[0].time_s, ends[1].time_s, below, INK)
    axes.annotate(
        _DURATIONS[transition.edge][1], (0.5 * (ends[0].time_s + ends[1].time_s), below), xytext=(0, -2.5),
        textcoords="offset points", ha="center", va="top", fontsize=NOTE_PT,
    )  # fmt: skip
    if transition.drive_near and transition.drive_s is not None:
        middle = transition.middle
        _arrow(axes, transition.drive_s, middle.time_s, middle.level_V, DRIVE)


def _arrow(axes: Axes, start: float, end: float, height: float, colour: str) -> None:
    axes.annotate(
        "", (end, height), xytext=(start, height),
        arrowprops={"arrowstyle": "<|-|>,head_length=0.28,head_width=0.11", "color": colour, "linewidth": 0.8,
                    "shrinkA": 0, "shrinkB": 0},
        zorder=3,
    )  # fmt: skip


def _pulse_words(measured: Measurement | None) -> list[str]:
    """What was measured of the pulse as a whole, in two lines; nothing where nothing was."""
    if measured is None:
        return []
    found = []
    for quantity in ("amplitude_V", "output_low_V", "width_in_s", "width_out_s"):
        estimate = measured.quantities.get(quantity)
        if estimate is not None and estimate.value is not None:
            found.append(f"{QUANTITY_WORDS[quantity]} {cell(estimate, quantity)}")
    return [" · ".join(found[place : place + 2]) for place in range(0, len(found), 2)]


def _time_words(transition: _Transition, measured: Measurement | None) -> list[str]:
    """Edge time and delay as measured, else as the marks of this edge have them."""
    quantity, name = _DURATIONS[transition.edge]
    words = [f"{name} {_measured(measured, quantity, transition.duration_s)}"]
    if transition.drive_s is not None:
        quantity, name = _DELAYS[transition.edge]
        words.append(f"{name} {_measured(measured, quantity, transition.middle.time_s - transition.drive_s)}")
    return words


def _measured(measured: Measurement | None, quantity: str, marked: float) -> str:
    if measured is None:
        return format_quantity(marked, "s")
    estimate = measured.quantities.get(quantity)
    if estimate is None or estimate.value is None:
        return "not measured"
    return format_quantity(estimate.value, "s", u=estimate.u)


def _between(record: Record, first: float, last: float) -> tuple[FloatArray, FloatArray]:
    """The samples from `first` to `last`, and one more on either side."""
    time = record.time_s
    start, stop = np.searchsorted(time, [first, last])
    inside = slice(max(0, int(start) - 1), min(time.size, int(stop) + 1))
    return time[inside], record.signal_V[inside]


def _within(window: tuple[float, float], record: Record) -> tuple[float, float]:
    time = record.time_s
    return max(window[0], float(time[0])), min(window[1], float(time[-1]))


def _title(capture: Capture, element: int) -> str:
    known = capture.conditions
    parts = [shown_name(known.device or capture.name)]
    if len(capture.outputs) > 1:
        parts.append(f"element {element}")
    if known.kind in (Kind.DARK, Kind.OFFSET, Kind.REFERENCE):
        parts.append(f"{known.kind.value} trace")
    for value, unit, name in (
        (known.bias_V, "V", "bias"), (known.load_ohm, "Ω", "load"), (known.emitter_current_A, "A", "emitter"),
    ):  # fmt: skip
        if value is not None:
            parts.append(f"{name} {format_quantity(value, unit)}")
    if known.pulse_width_s is not None and known.kind in (None, Kind.PULSE):
        parts.append(f"pulse {format_quantity(known.pulse_width_s, 's')}")
    return ", ".join(parts)
