"""The junction fit: data, model and residuals, and C(V)."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.junction.fit import capacitance_of
from darkedge.analysis.junction.results import EdgePoint, JunctionFit
from darkedge.analysis.pictures.style import FAINT, INK, MARKERS, OUTPUT, SERIES, engineering, look, new_figure
from darkedge.analysis.quantities import format_quantity


def plot_edges(fit: JunctionFit, title: str) -> Figure:
    """Edge times against bias at each load, with what the model says, and the residuals below."""
    with look():
        figure = new_figure(4.2)
        axis, below = figure.subplots(2, 1, sharex=True, height_ratios=(3, 1.2))
        groups = list(dict.fromkeys((e.load_ohm, e.quantity) for e in fit.edges))
        loads = sorted({load for load, _ in groups})
        for load, quantity in groups:
            here = sorted(
                (e for e in fit.edges if (e.load_ohm, e.quantity) == (load, quantity)), key=lambda e: e.bias_V
            )
            place = loads.index(load)
            rising = quantity == "rise_time_s"
            name = f"{'rise' if rising else 'fall'}, {format_quantity(load, 'Ω')}"
            _draw_edges(axis, below, here, SERIES[place % len(SERIES)], MARKERS[place % len(MARKERS)], rising, name)
        below.axhline(0, color=FAINT, linewidth=0.8)
        engineering(axis, "y", "s", log=True)
        engineering(below, "x", "V", log=True)
        below.set_xlabel("reverse bias")
        axis.set_ylabel("10-90 % time")
        below.set_ylabel("residual, %")
        axis.set_title(title)
        axis.legend(loc="upper right", ncols=2)
        return figure


def plot_capacitance(fit: JunctionFit, title: str) -> Figure:
    """Junction and stray capacitance together at each bias measured, with the curve between them."""
    with look():
        figure = new_figure(3.2)
        axis = figure.subplots()
        bias = np.array([p.bias_V for p in fit.capacitance])
        total = np.array([p.c_F for p in fit.capacitance])
        bars = 1.96 * np.array([p.u_c_F for p in fit.capacitance])
        fine = np.geomspace(bias.min(), bias.max(), 200)
        axis.plot(
            fine, capacitance_of(fit, fine), color=INK, linewidth=1.0, label=f"model: {fit.model.replace('_', ' ')}"
        )
        axis.errorbar(bias, total, yerr=bars, fmt="o", color=OUTPUT, capsize=2, label="at the biases measured, 95 %")
        full = fit.parameters.get("full_depletion_V")
        if full is not None and full.value is not None:
            axis.axvline(full.value, color=SERIES[2], linestyle=":", linewidth=1.0)
            axis.annotate(
                f"fully depleted from {format_quantity(full.value, 'V', u=full.u)} on", (full.value, 0.9),
                xycoords=("data", "axes fraction"), xytext=(5, 0), textcoords="offset points", fontsize=8.5,
            )  # fmt: skip
        engineering(axis, "x", "V", log=True)
        engineering(axis, "y", "F")
        axis.set_ylim(bottom=0)
        axis.set_xlabel("reverse bias")
        axis.set_ylabel("junction and stray")
        axis.set_title(title)
        axis.legend(loc="lower left")
        return figure


def _draw_edges(
    axis: Axes, below: Axes, edges: list[EdgePoint], colour: str, marker: str, rising: bool, name: str
) -> None:
    bias, measured, model, u = (
        np.array([getattr(e, field) for e in edges]) for field in ("bias_V", "measured_s", "model_s", "u_s")
    )
    face = colour if rising else "white"
    axis.errorbar(
        bias, measured, yerr=1.96 * u, fmt=marker, color=colour, markerfacecolor=face, capsize=2, label=name
    )  # fmt: skip
    axis.plot(bias, model, color=colour, linewidth=0.9, linestyle="-" if rising else (0, (4, 2)))
    residual: FloatArray = 100 * (measured / model - 1)
    below.errorbar(
        bias * (1.01 if rising else 0.99), residual, yerr=196 * u / model, fmt=marker, color=colour,
        markerfacecolor=face, capsize=2, markersize=3.5,
    )  # fmt: skip
