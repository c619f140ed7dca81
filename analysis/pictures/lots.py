"""A lot against one limit: every device, its uncertainty, and the limit."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.figure import Figure

from darkedge.analysis.decide.results import DeviceVerdict, LimitVerdict, Verdict
from darkedge.analysis.pictures.style import DRIVE, INK, OUTPUT, WARN, engineering, look, new_figure
from darkedge.analysis.quantities import unit_of

_LOOKS = {Verdict.PASS: ("o", OUTPUT), Verdict.FAIL: ("X", WARN), Verdict.UNDECIDED: ("D", DRIVE)}


def plot_limit(devices: Sequence[DeviceVerdict], place: int, title: str) -> Figure:
    """Draw the limit at `place` for all devices: the estimate with its 95 % bar, a bound as an arrow, the limit as a line."""
    with look():
        figure = new_figure(2.6 if len(devices) <= 40 else 3.2, width_in=8.0)
        axis = figure.subplots()
        drawn: set[Verdict] = set()
        for position, device in enumerate(devices):
            held = device.limits[place]
            _draw(axis, position, held, None if held.verdict in drawn else held.verdict.value)
            drawn.add(held.verdict)
        limit = devices[0].limits[place].limit
        for bound, word in ((limit.upper, "upper limit"), (limit.lower, "lower limit")):
            if bound is not None:
                axis.axhline(bound, color=INK, linewidth=1.1, linestyle=(0, (5, 3)))
                axis.annotate(
                    word,
                    (0.0, bound),
                    xycoords=("axes fraction", "data"),
                    xytext=(4, 4),
                    textcoords="offset points",
                    fontsize=8,
                )
        engineering(axis, "y", unit_of(limit.quantity).symbol)
        step = max(1, len(devices) // 24)
        axis.set_xticks(range(0, len(devices), step))
        axis.set_xticklabels([_name(d) for d in devices[::step]], rotation=90 if len(devices) > 10 else 0, fontsize=8)
        axis.set_xlim(-0.6, len(devices) - 0.4)
        axis.margins(y=0.2)
        axis.set_title(title)
        axis.set_xlabel("device")
        axis.legend(loc="best", ncols=3)
        return figure


def _draw(axis: object, position: int, held: LimitVerdict, label: str | None) -> None:
    marker, colour = _LOOKS[held.verdict]
    estimate = held.estimate
    if estimate is None:
        return
    style = {"fmt": marker, "color": colour, "capsize": 2, "label": label}
    if estimate.value is not None and estimate.u is not None:
        axis.errorbar(position, estimate.value, yerr=1.96 * estimate.u, **style)  # type: ignore[attr-defined]
    elif estimate.hi95 is not None:
        axis.errorbar(position, estimate.hi95, yerr=0.2 * abs(estimate.hi95), uplims=True, **style)  # type: ignore[attr-defined]


def _name(device: DeviceVerdict) -> str:
    name = device.device or "unnamed"
    return f"{name}/{device.element}" if device.element not in (None, 1) else name
