"""One look for all pictures: few colours that stay apart for every eye and in grey, axes in the units people say.

Figures are drawn at the size at which they stand on a page, so that their type is as large as it says.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, Literal

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import AutoLocator, EngFormatter, FuncFormatter, LogLocator, MaxNLocator, NullFormatter

from darkedge.analysis.decide.results import Verdict

INK, SOFT, FAINT, GRID, PAPER = "#1c262b", "#55636a", "#a3afb5", "#e3e8ea", "#ffffff"
OUTPUT, DRIVE, SECOND, FAIL, DOUBT = "#0b4f66", "#b8640f", "#6f4a8e", "#9f2a1c", "#845600"
SERIES = (OUTPUT, DRIVE, SECOND, "#3d8b77", "#55636a")
"""Dark and lighter by turns, so that neighbours differ in grey; each goes with a marker of its own."""
MARKERS = ("o", "s", "^", "D", "v")
VERDICT_LOOKS = {Verdict.PASS: ("o", OUTPUT), Verdict.FAIL: ("X", FAIL), Verdict.UNDECIDED: ("D", DOUBT)}
DASHED, DOTTED = (0, (4, 2)), (0, (1, 2))

FULL_IN, HALF_IN = 7.3, 3.6
"""Widths of a figure across an A4 page with its margins, and of one of two side by side."""
NOTE_PT = 7.0
"""Type of what is written inside a picture."""
BAR = 1.96
"""Standard uncertainties in a bar of 95 %."""

_RC: dict[Any, Any] = {
    "font.family": "sans-serif",
    "font.size": 8.0,
    "text.parse_math": False,  # names come from outside: a dollar sign is a dollar sign
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.labelsize": 8.0,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlelocation": "left",
    "axes.titlesize": 8.5,
    "axes.titleweight": "bold",
    "axes.grid": True,
    "axes.axisbelow": True,
    "grid.color": GRID,
    "grid.linewidth": 0.6,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 7.5,
    "ytick.labelsize": 7.5,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "legend.frameon": False,
    "legend.fontsize": 7.5,
    "legend.handlelength": 1.6,
    "legend.labelspacing": 0.3,
    "lines.linewidth": 1.2,
    "lines.markersize": 4.0,
    "errorbar.capsize": 1.8,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "svg.fonttype": "none",
    "svg.hashsalt": "darkedge",  # the same figure gives the same file
}


@contextmanager
def look() -> Iterator[None]:
    """Draw in this look; the settings of whoever called are as before afterwards."""
    with mpl.rc_context(_RC):
        yield


def new_figure(height_in: float, *, width_in: float = HALF_IN) -> Figure:
    """A figure of its own, outside any global state."""
    return Figure(figsize=(width_in, height_in), layout="constrained")


def label_axis(
    axes: Axes, which: Literal["x", "y"], what: str, unit: str, *, log: bool = False, ticks: int | None = None
) -> None:
    """Label one axis, after everything is drawn in it.

    A linear axis is written in one prefix, which stands with the unit beside `what`; a logarithmic one carries prefix and unit
    at each number, since it may run from nanoseconds to microseconds. `ticks` is the most numbers on a linear axis.
    """
    axis = axes.xaxis if which == "x" else axes.yaxis
    write = axes.set_xlabel if which == "x" else axes.set_ylabel
    if log:
        (axes.set_xscale if which == "x" else axes.set_yscale)("log")
        low, high = sorted(axis.get_view_interval())
        axis.set_major_locator(_log_locator(low, high, few=which == "x"))
        axis.set_major_formatter(EngFormatter(unit=unit, sep=" "))
        axis.set_minor_formatter(NullFormatter())
        write(what)
        return
    prefix, scale = _prefix(max(abs(x) for x in axis.get_view_interval())) if unit else ("", 1.0)
    axis.set_major_locator(AutoLocator() if ticks is None else MaxNLocator(ticks, steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value / scale:.6g}".replace("-", "−")))
    write(f"{what} ({prefix}{unit})" if unit else what)


def _log_locator(low: float, high: float, *, few: bool) -> LogLocator | MaxNLocator:
    """Numbers at round places: 1, 2, 5 over a decade or two, decades alone beyond, even steps within less than one."""
    decades = math.log10(high / low) if 0 < low < high else 1.0
    if decades < 0.75:
        return MaxNLocator(4 if few else 5, steps=[1, 2, 5, 10])
    if decades <= (2.2 if few else 2.6):
        return LogLocator(base=10, subs=(1.0, 2.0, 5.0), numticks=20)
    return LogLocator(base=10, subs=(1.0,), numticks=12)


def _prefix(largest: float) -> tuple[str, float]:
    """The prefix in which the largest number on an axis reads from 1 to 1000, and its size."""
    if not (math.isfinite(largest) and largest > 0):
        return "", 1.0
    exponent = min(max(3 * math.floor(math.log10(largest * (1 + 1e-9)) / 3), -15), 9)
    return EngFormatter.ENG_PREFIXES[exponent].replace("\N{MICRO SIGN}", "µ"), 10.0**exponent


def shown_name(text: str, *, most: int = 48) -> str:
    """A name from outside as it may be written: one line, printable, no longer than there is room for."""
    clean = "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)
    return clean if len(clean) <= most else f"{clean[: most // 2 - 1]}…{clean[-(most // 2) :]}"
