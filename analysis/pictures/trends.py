"""How edge times, pulses and dark current follow bias, load and width."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.figure import Figure

from darkedge.analysis.captures import FloatArray, Kind
from darkedge.analysis.dark.model import predict_dark_current
from darkedge.analysis.dark.results import DarkFit
from darkedge.analysis.junction.results import PulseWidthPoint, ShortestPulse
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.style import (
    BAR,
    DASHED,
    DOTTED,
    DRIVE,
    FAINT,
    INK,
    MARKERS,
    NOTE_PT,
    OUTPUT,
    SERIES,
    label_axis,
    look,
    new_figure,
    shown_name,
)
from darkedge.analysis.pictures.words import QUANTITY_WORDS
from darkedge.analysis.quantities import format_quantity

_SPOILED = frozenset({"refused", "no_pulse", "clipped", "never_settles"})
_AGAINST = {"bias_V": ("bias", "V"), "emitter_current_A": ("emitter current", "A")}
_LINES = ("-", DASHED, DOTTED, (0, (6, 1, 1, 1)))


def plot_times(rows: Sequence[Measurement], condition: str, quantities: Sequence[str], title: str) -> Figure | None:
    """Times against `bias_V` or `emitter_current_A`, one colour for each load, with bars of 95 %.

    Captures whose times are not those of a settled pulse are left out. `None` where the condition takes fewer
    than two values.
    """
    used = [m for m in rows if m.conditions.kind in (None, Kind.PULSE) and not _SPOILED & set(m.flags)]
    points = [
        (_at(m, condition), m.conditions.load_ohm, q, m.quantities[q])
        for m in used
        for q in quantities
        if q in m.quantities
    ]
    points = [p for p in points if p[0] is not None and p[0] > 0 and p[3].value is not None and p[3].value > 0]
    if len({p[0] for p in points}) < 2:
        return None
    with look():
        figure = new_figure(3.0)
        axes = figure.subplots()
        loads = list(dict.fromkeys(p[1] for p in points))
        for load, quantity in dict.fromkeys((p[1], p[2]) for p in points):
            here = sorted(
                (p[0] or 0.0, p[3].value or 0.0, p[3].u or 0.0) for p in points if (p[1], p[2]) == (load, quantity)
            )
            place, kind = loads.index(load), list(quantities).index(quantity)
            colour = SERIES[(place if len(loads) > 1 else kind) % len(SERIES)]
            at, value, u = np.array(here).T
            axes.errorbar(
                at, value, yerr=np.minimum(BAR * u, 0.9 * value), color=colour, marker=MARKERS[kind % len(MARKERS)],
                markerfacecolor=colour if kind % 2 == 0 else "white", linestyle=_LINES[kind % len(_LINES)],
                label=f"{QUANTITY_WORDS[quantity]}, {format_quantity(load, 'Ω')}",
            )  # fmt: skip
        label_axis(axes, "x", *_AGAINST[condition], log=True)
        label_axis(axes, "y", "time", "s", log=True)
        axes.set_title(shown_name(title, most=64))
        figure.legend(loc="outside lower center", ncols=2)
        return figure


def plot_pulse_widths(points: Sequence[PulseWidthPoint], shortest: Sequence[ShortestPulse], title: str) -> Figure:
    """What comes out of pulses of different widths: amplitude and width kept, and the shortest pulse that comes through."""
    with look():
        figure = new_figure(3.3)
        above, below = figure.subplots(2, 1, sharex=True)
        groups = list(dict.fromkeys((p.bias_V, p.load_ohm) for p in points))
        for place, key in enumerate(groups):
            here = sorted((p for p in points if (p.bias_V, p.load_ohm) == key), key=lambda p: p.width_in_s)
            looks = {"color": SERIES[place % len(SERIES)], "marker": MARKERS[place % len(MARKERS)]}
            widths = [p.width_in_s for p in here]
            name = f"{format_quantity(key[0], 'V')}, {format_quantity(key[1], 'Ω')}"
            above.plot(widths, [p.amplitude_ratio for p in here], label=name, **looks)
            below.plot(widths, [p.width_ratio for p in here], **looks)
        for axes in (above, below):
            axes.axhline(1.0, color=FAINT, linewidth=0.8)
            axes.margins(y=0.16)
            for pulse in shortest:
                if pulse.shortest_pulse_s.value is not None:
                    axes.axvline(pulse.shortest_pulse_s.value, color=INK, linewidth=0.9, linestyle=DOTTED)
        for row, pulse in enumerate(p for p in shortest if p.shortest_pulse_s.value is not None):
            estimate = pulse.shortest_pulse_s
            above.annotate(
                f"shortest {format_quantity(estimate.value, 's', u=estimate.u)}", (estimate.value or 0.0, 0.05 + 0.13 * row),
                xycoords=("data", "axes fraction"), xytext=(4, 0), textcoords="offset points", fontsize=NOTE_PT,
            )  # fmt: skip
        label_axis(below, "x", "input pulse width", "s", log=True)
        label_axis(above, "y", "amplitude / settled", "", ticks=5)
        label_axis(below, "y", "width out / in", "", ticks=5)
        above.set_title(shown_name(title, most=64))
        figure.legend(loc="outside lower center", ncols=2)
        return figure


def plot_dark_current(fit: DarkFit, title: str) -> Figure:
    """Dark current against bias with 95 % bars, bounds as arrows, and below the residuals where there is a model."""
    valued = [p for p in fit.points if p.current_A.value is not None and p.current_A.u is not None]
    bounds = [(p.bias_V, p.current_A.hi95) for p in fit.points if p.current_A.value is None and p.current_A.hi95]
    bias = np.array([p.bias_V for p in valued])
    current = np.array([p.current_A.value for p in valued], dtype=np.float64)
    bars = BAR * np.array([p.current_A.u for p in valued], dtype=np.float64)
    with look():
        figure = new_figure(3.3 if fit.model else 2.7)
        if fit.model and bias.size:
            axes, below = figure.subplots(2, 1, sharex=True, height_ratios=(3, 1.3))
        else:
            axes, below = figure.subplots(), None
        log = bool(np.all(current > 0))
        if bias.size:
            low = np.minimum(bars, 0.9 * current) if log else bars
            axes.errorbar(bias, current, yerr=[low, bars], fmt="o", color=OUTPUT, label="measured, 95 %")
        for place, (at, bound) in enumerate(bounds):
            axes.plot(at, bound, "_", color=DRIVE, markersize=8)
            axes.plot(
                at, bound, "v", color=DRIVE, markerfacecolor="white", label=None if place else "upper bound, 95 %"
            )
        if below is not None:
            fine = np.linspace(bias.min(), bias.max(), 200)
            axes.plot(
                fine, _model(fit, fine), color=INK, linewidth=1.0, label=f"model: {fit.model.replace('+', ' + ')}"
            )
            at_points = _model(fit, bias)
            below.axhline(0, color=INK, linewidth=0.7)
            below.errorbar(bias, 100 * (current / at_points - 1), yerr=100 * bars / at_points, fmt="o", color=OUTPUT)
            label_axis(below, "y", "residual (%)", "", ticks=4)
        axes.margins(y=0.15)
        label_axis(axes, "y", "dark current", "A", log=log)
        label_axis(below if below is not None else axes, "x", "bias across the junction", "V", ticks=7)
        axes.set_title(shown_name(title, most=64))
        figure.legend(loc="outside lower center", ncols=1)
        return figure


def _model(fit: DarkFit, bias_V: FloatArray) -> FloatArray:
    found = (predict_dark_current(fit, float(b)) for b in bias_V)
    return np.array([np.nan if e is None or e.value is None else e.value for e in found])


def _at(m: Measurement, condition: str) -> float | None:
    value = getattr(m.conditions, condition)
    return None if value is None else float(value)
