"""A lot against one limit: every device, its uncertainty, and the limit."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from darkedge.analysis.decide.results import DeviceVerdict, LimitVerdict, Verdict
from darkedge.analysis.pictures.style import (
    BAR,
    DASHED,
    FULL_IN,
    INK,
    NOTE_PT,
    VERDICT_LOOKS,
    label_axis,
    look,
    new_figure,
    shown_name,
)
from darkedge.analysis.pictures.words import QUANTITY_WORDS
from darkedge.analysis.quantities import format_quantity, unit_of

_MOST_NAMED = 24
"""Devices up to this number are all named below the axis; of more only those that do not pass, beside their points."""
_MOST_CALLED_OUT = 12
_WIDE_RATIO = 30.0
"""Values that differ by more than this are drawn on a logarithmic scale, so that good parts stay apart."""


def plot_limit(devices: Sequence[DeviceVerdict], place: int, title: str) -> Figure:
    """Draw the limit at `place` for all devices: the estimate with its 95 % bar, a bound as an arrow, the limit as a line.

    Devices stand in the order given; the shape of a point says its verdict, its colour says it again.
    """
    held = [device.limits[place] for device in devices]
    limit = held[0].limit
    with look():
        figure = new_figure(2.3, width_in=FULL_IN)
        axes = figure.subplots()
        for position, one in enumerate(held):
            _draw(axes, position, one)
        for bound, word in ((limit.upper, "upper"), (limit.lower, "lower")):
            if bound is not None:
                axes.axhline(bound, color=INK, linewidth=1.0, linestyle=DASHED)
                axes.annotate(
                    f"{word} limit {format_quantity(bound, unit_of(limit.quantity).symbol)}", (1.0, bound),
                    xycoords=("axes fraction", "data"), xytext=(-2, 3), textcoords="offset points", ha="right",
                    fontsize=NOTE_PT,
                )  # fmt: skip
        axes.set_xlim(-0.6, len(devices) - 0.4)
        axes.margins(y=0.18)
        _name_devices(axes, devices, place)
        label_axis(
            axes, "y", QUANTITY_WORDS.get(limit.quantity, limit.quantity), unit_of(limit.quantity).symbol,
            log=_is_wide(held),
        )  # fmt: skip
        axes.set_title(title)
        _explain_shapes(figure, held)
        return figure


def _draw(axes: Axes, position: int, held: LimitVerdict) -> None:
    marker, colour = VERDICT_LOOKS[held.verdict]
    estimate = held.estimate
    if estimate is None:
        return
    if estimate.value is not None and estimate.u is not None:
        axes.errorbar(position, estimate.value, yerr=BAR * estimate.u, fmt=marker, color=colour)
        return
    for bound, arrow in ((estimate.hi95, "v"), (estimate.lo95, "^")):
        if bound is not None:
            axes.plot(position, bound, "_", color=colour, markersize=8)
            axes.plot(position, bound, arrow, color=colour, markersize=4, markerfacecolor="white")


def _name_devices(axes: Axes, devices: Sequence[DeviceVerdict], place: int) -> None:
    if len(devices) <= _MOST_NAMED:
        axes.set_xticks(range(len(devices)))
        upright = len(devices) > 9 or max(len(_name(d)) for d in devices) > 9
        axes.set_xticklabels([_name(d) for d in devices], rotation=90 if upright else 0)
        axes.grid(visible=False, axis="x")
        return
    label_axis(axes, "x", "device, in the order measured", "", ticks=10)
    not_passed = [(i, d) for i, d in enumerate(devices) if d.limits[place].verdict is not Verdict.PASS]
    for position, device in not_passed[:_MOST_CALLED_OUT]:
        estimate = device.limits[place].estimate
        height = None if estimate is None else estimate.value if estimate.value is not None else estimate.hi95
        if height is not None:
            axes.annotate(
                _name(device), (position, height), xytext=(4, 3), textcoords="offset points", fontsize=NOTE_PT
            )


def _explain_shapes(figure: Figure, held: Sequence[LimitVerdict]) -> None:
    present = [verdict for verdict in Verdict if any(one.verdict is verdict for one in held)]
    lines = [
        Line2D([], [], marker=VERDICT_LOOKS[v][0], color=VERDICT_LOOKS[v][1], linestyle="none", label=v.value)
        for v in present
    ]
    if any(one.estimate is not None and one.estimate.value is None for one in held):
        lines.append(
            Line2D([], [], marker="v", color=INK, markerfacecolor="white", linestyle="none", label="bound, 95 %")
        )
    figure.legend(handles=lines, loc="outside upper right", ncols=4)


def _is_wide(held: Sequence[LimitVerdict]) -> bool:
    numbers = [
        n for one in held if one.estimate is not None for n in (one.estimate.value, one.estimate.hi95) if n is not None
    ]
    numbers += [n for n in (held[0].limit.lower, held[0].limit.upper) if n is not None]
    return min(numbers) > 0 and max(numbers) / min(numbers) > _WIDE_RATIO


def _name(device: DeviceVerdict) -> str:
    name = shown_name(device.device or "unnamed", most=18)
    return f"{name}/{device.element}" if device.element not in (None, 1) else name
