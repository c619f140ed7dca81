"""How edge times, pulses and dark current follow bias, load and width."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.figure import Figure

from darkedge.analysis.dark.model import predict_dark_current
from darkedge.analysis.dark.results import DarkFit
from darkedge.analysis.junction.results import PulseWidthPoint, ShortestPulse
from darkedge.analysis.pictures.style import DRIVE, FAINT, INK, MARKERS, OUTPUT, SERIES, engineering, look, new_figure
from darkedge.analysis.quantities import format_quantity


def plot_pulse_widths(points: Sequence[PulseWidthPoint], shortest: Sequence[ShortestPulse], title: str) -> Figure:
    """What comes out of pulses of different widths: amplitude and width kept, and the shortest pulse that comes through."""
    with look():
        figure = new_figure(3.2)
        axis = figure.subplots()
        groups = list(dict.fromkeys((p.bias_V, p.load_ohm) for p in points))
        for place, key in enumerate(groups):
            here = sorted((p for p in points if (p.bias_V, p.load_ohm) == key), key=lambda p: p.width_in_s)
            colour, marker = SERIES[place % len(SERIES)], MARKERS[place % len(MARKERS)]
            name = f"{format_quantity(key[0], 'V')}, {format_quantity(key[1], 'Ω')}"
            widths = [p.width_in_s for p in here]
            axis.plot(
                widths, [p.amplitude_ratio for p in here], marker=marker, color=colour, label=f"amplitude kept, {name}"
            )
            axis.plot(
                widths, [p.width_ratio for p in here], marker=marker, color=colour, linestyle=(0, (4, 2)),
                markerfacecolor="white", label=f"width kept, {name}",
            )  # fmt: skip
        for pulse in shortest:
            value = pulse.shortest_pulse_s.value
            if value is not None:
                axis.axvline(value, color=INK, linewidth=0.9, linestyle=":")
                axis.annotate(
                    f"shortest pulse {format_quantity(value, 's', u=pulse.shortest_pulse_s.u)}",
                    (value, 0.04), xycoords=("data", "axes fraction"), xytext=(4, 0), textcoords="offset points", fontsize=8.5,
                )  # fmt: skip
        axis.axhline(1.0, color=FAINT, linewidth=0.8)
        engineering(axis, "x", "s", log=True)
        axis.set_xlabel("input pulse width")
        axis.set_ylabel("output over input, or over settled")
        axis.set_title(title)
        axis.legend(loc="upper right")
        return figure


def plot_dark_current(fit: DarkFit, title: str) -> Figure:
    """Dark current against bias with 95 % bars, bounds as arrows, and the model where there is one."""
    with look():
        figure = new_figure(3.4 if fit.model else 2.8)
        if fit.model:
            axis, below = figure.subplots(2, 1, sharex=True, height_ratios=(3, 1))
        else:
            axis, below = figure.subplots(), None
        valued = [p for p in fit.points if p.current_A.value is not None and p.current_A.u is not None]
        bias = np.array([p.bias_V for p in valued])
        current = np.array([p.current_A.value for p in valued], dtype=np.float64)
        bars = 1.96 * np.array([p.current_A.u for p in valued], dtype=np.float64)
        axis.errorbar(bias, current, yerr=bars, fmt="o", color=OUTPUT, capsize=2, label="measured, 95 %")
        for point in fit.points:
            if point.current_A.value is None and point.current_A.hi95 is not None:
                axis.errorbar(
                    point.bias_V,
                    point.current_A.hi95,
                    yerr=0.25 * point.current_A.hi95,
                    uplims=True,
                    fmt="_",
                    color=DRIVE,
                )
        if below is not None and bias.size:
            fine = np.linspace(bias.min(), bias.max(), 200)
            drawn = [predict_dark_current(fit, float(b)) for b in fine]
            axis.plot(
                fine, [d.value if d else np.nan for d in drawn], color=INK, linewidth=1.0, label=f"model: {fit.model}"
            )
            at = np.array([_value(predict_dark_current(fit, float(b))) for b in bias])
            below.axhline(0, color=FAINT, linewidth=0.8)
            below.errorbar(bias, 100 * (current / at - 1), yerr=100 * bars / at, fmt="o", color=OUTPUT, capsize=2)
            below.set_ylabel("residual, %")
            axis.legend(loc="upper left")
        engineering(axis, "y", "A")
        last = below if below is not None else axis
        engineering(last, "x", "V")
        last.set_xlabel("reverse bias across the junction")
        axis.set_ylabel("dark current")
        axis.set_title(title)
        return figure


def _value(estimate: object) -> float:
    value = getattr(estimate, "value", None)
    return float("nan") if value is None else float(value)
