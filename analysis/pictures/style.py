"""One look for all pictures: few colours that stay apart for every eye and in grey, axes with the prefixes people say."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import EngFormatter, LogLocator, NullFormatter

INK, FAINT, PAPER = "#1f2a30", "#9aa7ad", "#ffffff"
DRIVE, OUTPUT, SECOND, WARN = "#8a5a00", "#0b5d73", "#7b3f73", "#a32a1c"
SERIES = (OUTPUT, DRIVE, SECOND, "#4d6b2f", "#5b6770")
MARKERS = ("o", "s", "^", "D", "v")

_RC: dict[Any, Any] = {
    "font.family": "sans-serif",
    "font.size": 9.5,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlelocation": "left",
    "axes.titlesize": 10.5,
    "axes.titleweight": "bold",
    "axes.grid": True,
    "grid.color": "#dfe5e8",
    "grid.linewidth": 0.6,
    "xtick.color": INK,
    "ytick.color": INK,
    "text.color": INK,
    "legend.frameon": False,
    "legend.fontsize": 8.5,
    "lines.linewidth": 1.3,
    "lines.markersize": 4.5,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "svg.fonttype": "none",
}


@contextmanager
def look() -> Iterator[None]:
    """Draw in this look; the settings of whoever called are as before afterwards."""
    with mpl.rc_context(_RC):
        yield


def new_figure(height_in: float, *, width_in: float = 5.8) -> Figure:
    """A figure of its own, outside any global state."""
    return Figure(figsize=(width_in, height_in), layout="constrained")


def engineering(axis: Axes, which: str, unit: str, *, log: bool = False) -> None:
    """Label the numbers of one axis with SI prefixes; a log axis is labelled at 1, 2 and 5."""
    chosen = axis.xaxis if which == "x" else axis.yaxis
    if log:
        (axis.set_xscale if which == "x" else axis.set_yscale)("log")
        chosen.set_major_locator(LogLocator(base=10, subs=(1.0, 2.0, 5.0), numticks=12))
        chosen.set_minor_formatter(NullFormatter())
    chosen.set_major_formatter(EngFormatter(unit=unit, sep=" "))
