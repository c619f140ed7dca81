"""The shortest pulse that still comes through, from a sweep of pulse widths."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from darkedge.analysis.captures import Kind
from darkedge.analysis.junction.results import PulseWidthPoint, ShortestPulse
from darkedge.analysis.measurement import Estimate, Measurement

KEEP_AMPLITUDE_RATIO = 0.9
KEEP_WIDTH_RATIO = 0.1
_FEWEST_WIDTHS = 2


@dataclass(frozen=True, slots=True, kw_only=True)
class _Width:
    """One input width: what came out of it, and how surely."""

    width_s: float
    amplitude_V: float
    u_amplitude_V: float
    out_s: float | None
    u_out_s: float


def shortest_pulses(
    measurements: Sequence[Measurement],
    *,
    amplitude_ratio: float = KEEP_AMPLITUDE_RATIO,
    width_ratio: float = KEEP_WIDTH_RATIO,
) -> tuple[list[ShortestPulse], list[PulseWidthPoint]]:
    """Find, for each bias, load and emitter current, the shortest input pulse that keeps its amplitude and its width.

    The settled amplitude is that of the longest pulse, which must have settled. Between the widths measured, the
    amplitude and the width that come out are taken along straight lines of the logarithm of the width.

    Parameters
    ----------
    measurements : sequence of Measurement
        Rows of one device and element; pulse rows with a width, in or set, are used.
    amplitude_ratio : float
        Least part of the settled amplitude.
    width_ratio : float
        Largest relative change of the width.

    Returns
    -------
    list of ShortestPulse
        One for each combination with at least two widths. Where even the shortest pulse tried came through, its width is an upper bound;
        where only the longest did, its width is an upper bound too and the next shorter one a lower bound. The highest rate is 1 / (2 x shortest
        pulse): pulse and pause of equal length.
    list of PulseWidthPoint
        What each width gave.
    """
    shortest: list[ShortestPulse] = []
    points: list[PulseWidthPoint] = []
    for (bias, load, _), rows in _sweeps(measurements).items():
        settled = rows[-1].amplitude_V
        sweep = [
            PulseWidthPoint(
                bias_V=bias,
                load_ohm=load,
                width_in_s=row.width_s,
                width_ratio=math.nan if row.out_s is None else row.out_s / row.width_s,
                amplitude_ratio=row.amplitude_V / settled,
            )
            for row in rows
        ]
        points += [p for p in sweep if not math.isnan(p.width_ratio)]
        estimate = _shortest(rows, settled, amplitude_ratio, width_ratio)
        shortest.append(
            ShortestPulse(bias_V=bias, load_ohm=load, shortest_pulse_s=estimate, highest_rate_Hz=_rate(estimate))
        )
    return shortest, points


def _sweeps(
    measurements: Sequence[Measurement],
) -> dict[tuple[float | None, float | None, float | None], list[_Width]]:
    groups: dict[tuple[float | None, float | None, float | None], dict[float, _Width]] = {}
    settles: dict[tuple[float | None, float | None, float | None], dict[float, bool]] = {}
    for m in measurements:
        known = m.conditions
        if known.kind not in (Kind.PULSE, None) or known.driven_element not in (None, m.element):
            continue
        width = m.value("width_in_s") or known.pulse_width_s
        amplitude = m.quantities.get("amplitude_V")
        if known.bias_V is None or known.load_ohm is None:
            continue  # captures at unknown conditions are no sweep
        if not width or amplitude is None or not amplitude.value or "clipped" in m.flags:
            continue
        out = m.quantities.get("width_out_s")
        key = known.bias_V, known.load_ohm, known.emitter_current_A
        nominal = known.pulse_width_s or width
        before = groups.get(key, {}).get(nominal)
        if out is None and before is not None and before.out_s is not None:
            continue  # a closer look at one edge of a pulse that was seen whole
        groups.setdefault(key, {})[nominal] = _Width(
            width_s=width,
            amplitude_V=abs(amplitude.value),
            u_amplitude_V=amplitude.u or 0.0,
            out_s=None if out is None else out.value,
            u_out_s=0.0 if out is None or out.u is None else out.u,
        )
        settles.setdefault(key, {})[nominal] = "never_settles" not in m.flags
    return {
        key: [rows[w] for w in sorted(rows)]
        for key, rows in groups.items()
        if len(rows) >= _FEWEST_WIDTHS and settles[key][max(rows)]
    }


def _shortest(rows: Sequence[_Width], settled: float, amplitude_ratio: float, width_ratio: float) -> Estimate:
    """Walk from the longest pulse down to the first that fails."""
    margins = [_margins(row, settled, amplitude_ratio, width_ratio) for row in rows]
    passing = len(rows)
    while passing > 0 and min(margins[passing - 1]) >= 0:
        passing -= 1
    if passing == 0:
        return Estimate(hi95=rows[0].width_s)
    if passing == len(rows):
        return Estimate(lo95=rows[-1].width_s)
    short, long = rows[passing - 1], rows[passing]
    crossings = []
    for low, high in zip(margins[passing - 1], margins[passing], strict=True):
        if low >= 0:
            continue
        if not math.isfinite(low):  # no width came out of the shorter pulse: nothing to interpolate
            return Estimate(lo95=short.width_s, hi95=long.width_s)
        share = -low / (high - low)
        crossings.append(short.width_s * (long.width_s / short.width_s) ** share)
    value = max(crossings)
    return Estimate(value=value, u=_u_crossing(rows[passing - 1 : passing + 1], margins, passing, settled, value))


def _margins(row: _Width, settled: float, amplitude_ratio: float, width_ratio: float) -> tuple[float, float]:
    """By how much amplitude and width are kept: negative where they are not."""
    amplitude = row.amplitude_V / settled - amplitude_ratio
    width = -math.inf if row.out_s is None else width_ratio - abs(row.out_s / row.width_s - 1)
    return amplitude, width


def _u_crossing(
    pair: Sequence[_Width], margins: Sequence[tuple[float, float]], passing: int, settled: float, value: float
) -> float:
    """Uncertainty of the crossing: that of the ratios over their slope, and a share of the gap for the interpolation."""
    short, long = pair
    span = math.log(long.width_s / short.width_s)
    slopes = [(high - low) / span for low, high in zip(margins[passing - 1], margins[passing], strict=True) if low < 0]
    u_amplitude = max(p.u_amplitude_V for p in pair) * math.sqrt(2) / settled
    u_width = max(p.u_out_s / p.width_s for p in pair)
    u_ratio = max(u_amplitude, u_width) / min(slopes)
    # The curve between two widths is not a straight line; a tenth of their distance, taken as rectangular, stands for that.
    return value * math.hypot(u_ratio, 0.1 * span / math.sqrt(12))


def _rate(shortest: Estimate) -> Estimate:
    if shortest.value is not None and shortest.u is not None:
        rate = 0.5 / shortest.value
        return Estimate(value=rate, u=rate * shortest.u / shortest.value)
    return Estimate(
        lo95=None if shortest.hi95 is None else 0.5 / shortest.hi95,
        hi95=None if shortest.lo95 is None else 0.5 / shortest.lo95,
    )
