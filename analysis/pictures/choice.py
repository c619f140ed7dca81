"""Speed against signal: which bias and load do what is wanted."""

from __future__ import annotations

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from darkedge.analysis.decide.results import Choice, OperatingPoint
from darkedge.analysis.pictures.style import (
    DASHED,
    DOUBT,
    FAINT,
    FULL_IN,
    INK,
    NOTE_PT,
    OUTPUT,
    SOFT,
    label_axis,
    look,
    new_figure,
    shown_name,
)
from darkedge.analysis.quantities import format_quantity


def plot_choice(choice: Choice) -> Figure:
    """Shortest pulse against signal for all candidates, one line for each bias, the best (or the nearest miss) named."""
    shown = [p for p in choice.candidates if _place(p) is not None]
    with look():
        figure = new_figure(3.6, width_in=FULL_IN)
        axes = figure.subplots()
        for bias in sorted({p.bias_V for p in shown}):
            _draw_bias(axes, sorted((p for p in shown if p.bias_V == bias), key=lambda p: p.load_ohm))
        axes.axhline(choice.wish.pulse_width_s, color=INK, linewidth=1.0, linestyle=DASHED)
        axes.margins(x=0.08, y=0.08)
        label_axis(axes, "x", "signal", "V", log=bool(shown))
        label_axis(axes, "y", "shortest pulse that comes through", "s", log=bool(shown))
        axes.annotate(
            f"pulse to pass {format_quantity(choice.wish.pulse_width_s, 's')}", (0.0, choice.wish.pulse_width_s),
            xycoords=("axes fraction", "data"), xytext=(4, 3), textcoords="offset points", fontsize=NOTE_PT,
        )  # fmt: skip
        _name_outcome(axes, choice)
        axes.set_title(f"{shown_name(choice.device or 'unnamed device')}: speed against signal")
        figure.legend(handles=_shapes(), loc="outside lower right", ncols=2)
        return figure


def _draw_bias(axes: Axes, points: list[OperatingPoint]) -> None:
    places = [_place(p) for p in points]
    xs, ys = [p[0] for p in places if p], [p[1] for p in places if p]
    axes.plot(xs, ys, color=FAINT, linewidth=0.7, zorder=1)
    for point, x, y in zip(points, xs, ys, strict=True):
        met = not point.misses
        axes.plot(x, y, "o" if met else "x", color=OUTPUT if met else SOFT, markersize=4.5 if met else 3.6, zorder=2)
    axes.annotate(
        format_quantity(points[-1].bias_V, "V"), (xs[-1], ys[-1]), xytext=(5, 0), textcoords="offset points",
        fontsize=NOTE_PT, va="center", color=SOFT,
    )  # fmt: skip


def _name_outcome(axes: Axes, choice: Choice) -> None:
    """The pair to use with what it gives, in the corner that fast and small signals leave free."""
    point = choice.best or choice.nearest
    place = None if point is None else _place(point)
    if point is None or place is None:
        return
    axes.plot(*place, "o", markersize=11, markerfacecolor="none", markeredgewidth=1.4, color=DOUBT, zorder=3)
    word = "best" if choice.best is not None else "nearest miss"
    lines = [f"{word}: {format_quantity(point.bias_V, 'V')}, {format_quantity(point.load_ohm, 'Ω')}"]
    lines.append(f"signal {format_quantity(place[0], 'V')}, pulses from {format_quantity(place[1], 's')}")
    lines += list(point.misses[:2])
    axes.annotate(
        "\n".join(lines), place, xytext=(0.02, 0.97), textcoords="axes fraction", ha="left", va="top", fontsize=NOTE_PT,
        bbox={"facecolor": "white", "edgecolor": DOUBT, "linewidth": 0.8, "pad": 3.0}, zorder=5,
        arrowprops={"arrowstyle": "-", "color": DOUBT, "linewidth": 0.8, "shrinkB": 6},
    )  # fmt: skip


def _shapes() -> list[Line2D]:
    return [
        Line2D([], [], marker="o", color=OUTPUT, linestyle="none", label="every wish met"),
        Line2D([], [], marker="x", color=SOFT, linestyle="none", label="a wish not met"),
    ]


def _place(point: OperatingPoint) -> tuple[float, float] | None:
    """Signal and shortest pulse; `None` where either is not known."""
    signal = None if point.signal_V is None else point.signal_V.value
    shortest = point.shortest_pulse_s.value
    return None if not signal or not shortest else (signal, shortest)
