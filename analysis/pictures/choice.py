"""Speed against signal: which bias and load do what is wanted."""

from __future__ import annotations

from matplotlib.figure import Figure

from darkedge.analysis.decide.results import Choice, OperatingPoint
from darkedge.analysis.pictures.style import FAINT, INK, OUTPUT, WARN, engineering, look, new_figure
from darkedge.analysis.quantities import format_quantity


def plot_choice(choice: Choice) -> Figure:
    """Shortest pulse against signal for all candidates, the feasible ones filled, the best (or the nearest miss) named."""
    with look():
        figure = new_figure(4.0)
        axis = figure.subplots()
        biases = sorted({p.bias_V for p in choice.candidates})
        for bias in biases:
            here = sorted((p for p in choice.candidates if p.bias_V == bias), key=lambda p: p.load_ohm)
            axis.plot([_signal(p) for p in here], [_shortest(p) for p in here], color=FAINT, linewidth=0.7, zorder=1)
            _label(axis, here[-1], format_quantity(bias, "V"))
            for feasible in (True, False):
                some = [p for p in here if (not p.misses) == feasible]
                axis.plot(
                    [_signal(p) for p in some],
                    [_shortest(p) for p in some],
                    "o" if feasible else "x",
                    color=OUTPUT if feasible else FAINT,
                    zorder=2,
                )
        axis.axhline(choice.wish.pulse_width_s, color=INK, linewidth=1.0, linestyle=(0, (5, 3)))
        axis.annotate(
            f"pulse to pass: {format_quantity(choice.wish.pulse_width_s, 's')}",
            (0.01, choice.wish.pulse_width_s), xycoords=("axes fraction", "data"), xytext=(0, 4),
            textcoords="offset points", fontsize=8.5,
        )  # fmt: skip
        shown = choice.best or choice.nearest
        if shown is not None:
            axis.plot(
                _signal(shown), _shortest(shown), "o", markersize=13, markerfacecolor="none", color=WARN, zorder=3
            )
            word = "best" if choice.best is not None else "nearest miss"
            axis.annotate(
                f"{word}: {format_quantity(shown.bias_V, 'V')}, {format_quantity(shown.load_ohm, 'Ω')}",
                (_signal(shown), _shortest(shown)), xytext=(10, -34), textcoords="offset points", ha="left", fontweight="bold",
                bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.85}, arrowprops={"arrowstyle": "-", "color": WARN},
            )  # fmt: skip
        engineering(axis, "x", "V", log=True)
        engineering(axis, "y", "s", log=True)
        axis.set_xlabel("signal (filled: every wish met, cross: not)")
        axis.set_ylabel("shortest pulse that passes")
        axis.set_title(f"{choice.device or 'unnamed device'}: speed against signal")
        return figure


def _label(axis: object, point: OperatingPoint, text: str) -> None:
    axis.annotate(  # type: ignore[attr-defined]
        text, (_signal(point), _shortest(point)), xytext=(5, 0), textcoords="offset points", fontsize=8, va="center"
    )


def _signal(point: OperatingPoint) -> float:
    return float("nan") if point.signal_V is None or point.signal_V.value is None else point.signal_V.value


def _shortest(point: OperatingPoint) -> float:
    return float("nan") if point.shortest_pulse_s.value is None else point.shortest_pulse_s.value
