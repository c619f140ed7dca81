"""The junction fit: data, model and residuals, and C(V)."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.junction.fit import capacitance_of
from darkedge.analysis.junction.results import EdgePoint, JunctionFit
from darkedge.analysis.pictures.style import (
    BAR,
    DASHED,
    DOTTED,
    FAINT,
    INK,
    MARKERS,
    NOTE_PT,
    OUTPUT,
    SECOND,
    SERIES,
    SOFT,
    label_axis,
    look,
    new_figure,
    shown_name,
)
from darkedge.analysis.quantities import format_quantity

FIT_HEIGHT_IN = 3.3


def plot_edges(fit: JunctionFit, title: str) -> Figure:
    """Edge times against bias at each load, with what the model says, and the residuals below; bars are 95 %."""
    with look():
        figure = new_figure(FIT_HEIGHT_IN)
        axes, below = figure.subplots(2, 1, sharex=True, height_ratios=(3, 1.3))
        loads = sorted({e.load_ohm for e in fit.edges})
        for load, quantity in dict.fromkeys((e.load_ohm, e.quantity) for e in fit.edges):
            here = [e for e in fit.edges if (e.load_ohm, e.quantity) == (load, quantity)]
            place = loads.index(load)
            _draw_edges(axes, below, sorted(here, key=lambda e: e.bias_V), place, rising=quantity == "rise_time_s")
        below.axhline(0, color=INK, linewidth=0.7)
        axes.margins(y=0.15)
        label_axis(axes, "y", "10–90 % time", "s", log=True)
        label_axis(below, "x", "reverse bias", "V", log=True)
        label_axis(below, "y", "residual (%)", "", ticks=4)
        axes.set_title(shown_name(title, most=64))
        figure.legend(handles=[*_load_lines(loads), *_edge_lines()], loc="outside lower center", ncols=4)
        return figure


def plot_capacitance(fit: JunctionFit, title: str) -> Figure:
    """Junction and stray capacitance together at each bias measured, with the curve and the stray part."""
    with look():
        figure = new_figure(FIT_HEIGHT_IN)
        axes = figure.subplots()
        bias = np.array([p.bias_V for p in fit.capacitance])
        total = np.array([p.c_F for p in fit.capacitance])
        bars = BAR * np.array([p.u_c_F for p in fit.capacitance])
        fine = np.geomspace(bias.min(), bias.max(), 200)
        name = f"model: {fit.model.replace('_', ' ')}"
        axes.plot(fine, capacitance_of(fit, fine), color=INK, linewidth=1.0, label=name)
        axes.errorbar(bias, total, yerr=bars, fmt="o", color=OUTPUT, label="junction and stray, 95 %")
        axes.set_ylim(0, 1.12 * float(np.max(total + bars)))
        _draw_stray(axes, fit)
        _draw_depletion(axes, fit)
        label_axis(axes, "x", "reverse bias", "V", log=True)
        label_axis(axes, "y", "capacitance", "F", ticks=6)
        axes.set_title(shown_name(title, most=64))
        figure.legend(loc="outside lower center", ncols=2)
        return figure


def _draw_edges(axes: Axes, below: Axes, edges: list[EdgePoint], place: int, *, rising: bool) -> None:
    bias, measured, model, u = (
        np.array([getattr(e, field) for e in edges]) for field in ("bias_V", "measured_s", "model_s", "u_s")
    )
    colour, marker = SERIES[place % len(SERIES)], MARKERS[place % len(MARKERS)]
    face = colour if rising else "white"
    looks: dict[str, Any] = {"fmt": marker, "color": colour, "markerfacecolor": face}
    axes.errorbar(bias, measured, yerr=BAR * u, **looks)
    axes.plot(bias, model, color=colour, linewidth=0.9, linestyle="-" if rising else DASHED)
    residual: FloatArray = 100 * (measured / model - 1)
    aside = 1.0 + (0.018 if rising else -0.018) + 0.008 * place  # side by side, so that bars do not hide each other
    below.errorbar(bias * aside, residual, yerr=100 * BAR * u / model, markersize=3.0, elinewidth=0.8, **looks)


def _load_lines(loads: list[float]) -> list[Line2D]:
    return [
        Line2D(
            [], [], color=SERIES[i % len(SERIES)], marker=MARKERS[i % len(MARKERS)], label=format_quantity(load, "Ω")
        )
        for i, load in enumerate(loads)
    ]


def _edge_lines() -> list[Line2D]:
    return [
        Line2D([], [], color=SOFT, marker="o", label="rise"),
        Line2D([], [], color=SOFT, marker="o", markerfacecolor="white", linestyle=DASHED, label="fall"),
    ]


def _draw_stray(axes: Axes, fit: JunctionFit) -> None:
    stray = fit.parameters.get("c_stray_F")
    if stray is not None and stray.value is not None:
        axes.axhline(stray.value, color=FAINT, linewidth=1.0, linestyle=DASHED)
        axes.annotate(
            f"stray {format_quantity(stray.value, 'F', u=stray.u)}", (0.02, stray.value), xycoords=("axes fraction", "data"),
            xytext=(0, -3), textcoords="offset points", va="top", fontsize=NOTE_PT,
        )  # fmt: skip


def _draw_depletion(axes: Axes, fit: JunctionFit) -> None:
    full = fit.parameters.get("full_depletion_V")
    if full is not None and full.value is not None:
        axes.axvline(full.value, color=SECOND, linestyle=DOTTED, linewidth=1.1)
        axes.annotate(
            f"fully depleted\nfrom {format_quantity(full.value, 'V', u=full.u)}", (full.value, 0.97),
            xycoords=("data", "axes fraction"), xytext=(-4, 0), textcoords="offset points", ha="right", va="top",
            fontsize=NOTE_PT, bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.8, "pad": 0.5},
        )  # fmt: skip
