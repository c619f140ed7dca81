"""Plateaus: the parts between edges, from which the state levels and the noise are refined."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.edges import Changes
from darkedge.analysis.waveform.levels import StateLevels, running_mean
from darkedge.analysis.waveform.noise import Noise, flat_noise, u_quantised_V

SETTLED_RATIO = 2.75
"""Time from 50 % to the end of a pulse, over that from 50 % to 90 %, of a one-pole pulse of five time constants."""

DROOP_RATIO = 0.01
_TAIL_FACTORS = 2.0 ** np.arange(-1.5, 4.1, 0.5)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Plateau:
    """One state as its plateaus show it.

    `level_V` is where the signal has got to at the end of a plateau; `residuals_V` what is left of each plateau
    once the level and the tail of the edge before it are taken off; `settled` whether a plateau is long enough for
    five time constants; `slope_ratio` how far the state moves over a plateau, as a share of the amplitude, and
    `u_slope_ratio` its uncertainty.
    """

    level_V: float
    u_level_V: float
    residuals_V: tuple[FloatArray, ...]
    settled: bool
    slope_ratio: float = 0.0
    u_slope_ratio: float = 0.0


def refine_levels(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    crossings_s: FloatArray,
    noise_V: float,
    step_V: float,
) -> tuple[StateLevels, Noise, Plateau, Plateau]:
    """Refine both levels and the noise from the plateaus between the edges.

    Parameters
    ----------
    crossings_s : array, shape (edges, 3)
        Instants at 10, 50 and 90 % progress, good to a sample.
    noise_V, step_V : float
        Noise and code step as known so far.

    Returns
    -------
    levels, noise, low plateau, high plateau
    """
    spans = _spans(time_s, changes, crossings_s)
    amplitude = levels.amplitude_V
    rough = Noise(sigma_V=noise_V, correlation=np.ones(1), n_flat=0)
    low, high_ = (
        _plateau(time_s, signal_V, spans, high=high, amplitude_V=amplitude, noise=rough) for high in (False, True)
    )
    noise = flat_noise([*low.residuals_V, *high_.residuals_V], fallback_V=noise_V)
    low, high_ = (
        _plateau(time_s, signal_V, spans, high=high, amplitude_V=amplitude, noise=noise) for high in (False, True)
    )
    u_code = u_quantised_V(noise.sigma_V, step_V)
    refined = StateLevels(
        low_V=low.level_V, high_V=high_.level_V,
        u_low_V=float(np.hypot(low.u_level_V, u_code)), u_high_V=float(np.hypot(high_.u_level_V, u_code)),
    )  # fmt: skip
    return refined, noise, low, high_


@dataclass(frozen=True, slots=True, kw_only=True)
class _Span:
    """One plateau: samples start to stop, its state, and the edge before it (`None` at the head of the record)."""

    start: int
    stop: int
    high: bool
    middle_s: float | None
    tail_s: float
    complete: bool


def _spans(time_s: FloatArray, changes: Changes, crossings_s: FloatArray) -> list[_Span]:
    n = time_s.size
    count = changes.index.size
    spans = []
    for k in range(count + 1):
        high = bool(changes.rising[k - 1]) if k else not bool(changes.rising[0])
        stop = n if k == count else int(np.searchsorted(time_s, _onset(crossings_s[k])))
        if k == 0:
            spans.append(_Span(start=0, stop=stop, high=high, middle_s=None, tail_s=0.0, complete=k < count))
            continue
        middle, late = float(crossings_s[k - 1, 1]), float(crossings_s[k - 1, 2])
        start = int(np.searchsorted(time_s, middle + 1.5 * (late - middle)))
        spans.append(
            _Span(start=start, stop=stop, high=high, middle_s=middle, tail_s=late - middle, complete=k < count)
        )
    return spans


def _onset(crossings_s: FloatArray) -> float:
    """Instant at which an edge surely has not begun yet: a corner close before 10 %, or the foot of an S."""
    early, middle, late = (float(c) for c in crossings_s)
    first, second = middle - early, late - middle
    skew = second / first if first > 0 else 1.0
    return early - first * float(np.interp(skew, (1.0, 2.74), (1.7, 0.25)))


def _plateau(
    time_s: FloatArray, signal_V: FloatArray, spans: list[_Span], *, high: bool, amplitude_V: float, noise: Noise
) -> Plateau:
    after = [s for s in spans if s.high == high and s.middle_s is not None]
    heads = [s for s in spans if s.high == high and s.middle_s is None and s.stop - s.start >= 2]
    settled_after = [s for s in after if _settles(time_s, s)]
    if settled_after:
        tail = _tail_fit(time_s, signal_V, settled_after, noise)
        if heads:
            return _join(tail, _head_fit(signal_V, heads[0], noise), amplitude_V)
        return tail
    if heads and (not after or not all(s.complete for s in after)):
        return _head_fit(signal_V, heads[0], noise)
    return _peak(time_s, signal_V, after, high=high, amplitude_V=amplitude_V, noise=noise)


def _settles(time_s: FloatArray, span: _Span) -> bool:
    if span.stop - span.start < 2 or span.middle_s is None:
        return False
    return bool(time_s[span.stop - 1] - span.middle_s >= SETTLED_RATIO * span.tail_s)


def _tail_fit(time_s: FloatArray, signal_V: FloatArray, spans: list[_Span], noise: Noise) -> Plateau:
    """Level at the end of plateaus, the exponential tail of the edge before them fitted along with it."""
    x = np.concatenate([time_s[s.start : s.stop] - (s.middle_s or 0.0) for s in spans])
    y = np.concatenate([signal_V[s.start : s.stop] for s in spans])
    offset = float(y[-1])
    y = y - offset
    end = float(np.mean([time_s[s.stop - 1] - (s.middle_s or 0.0) for s in spans]))
    begin = float(np.min(x))
    rough_tail = max(float(np.median([s.tail_s for s in spans])) / np.log(5), 1e-6 * end)
    bx, by, weight = _binned(x, y)
    shortest = 2 * (end - begin) / max(min(bx.size, x.size // len(spans)), 1)  # what the samples can still show
    tails = rough_tail * _TAIL_FACTORS
    tails = tails[(tails <= (end - begin) / 2) & (tails >= shortest)]
    best = None
    for tail in tails:
        shape = np.exp(-(bx - begin) / tail)
        s0, s1, s2 = float(np.sum(weight)), float(np.sum(weight * shape)), float(np.sum(weight * shape**2))
        y0, y1 = float(np.sum(weight * by)), float(np.sum(weight * shape * by))
        determinant = s0 * s2 - s1 * s1
        if determinant <= 1e-9 * s0 * s2:
            continue
        c0, c1 = (s2 * y0 - s1 * y1) / determinant, (s0 * y1 - s1 * y0) / determinant
        rss = float(np.sum(weight * (by - c0 - c1 * shape) ** 2))
        last = float(np.exp(-(end - begin) / tail))
        variance = (s2 - 2 * s1 * last + s0 * last**2) / determinant
        if best is None or rss < best[0]:
            best = (rss, c0, c1, tail, last, variance)
    n = x.size
    if best is None:
        level, u = float(np.mean(y)), noise.u_mean_V(n)
        residuals = tuple(signal_V[s.start : s.stop] - level - offset for s in spans)
        return Plateau(level_V=level + offset, u_level_V=u, residuals_V=residuals, settled=True)
    _, c0, c1, tail, last, variance = best
    u = noise.sigma_V * float(np.sqrt(variance * noise.inflation(n // len(spans))))
    residuals = tuple(
        signal_V[s.start : s.stop] - offset - c0
        - c1 * np.exp(-(time_s[s.start : s.stop] - (s.middle_s or 0.0) - begin) / tail)
        for s in spans
    )  # fmt: skip
    return Plateau(level_V=c0 + c1 * last + offset, u_level_V=u, residuals_V=residuals, settled=True)


def _binned(x: FloatArray, y: FloatArray, bins: int = 512) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Means of x and y in equal bins of x, and how many samples each holds; few samples stay as they are."""
    if x.size <= 2 * bins:
        return x, y, np.ones_like(x)
    low, high = float(np.min(x)), float(np.max(x))
    place = np.minimum(((x - low) * (bins / (high - low))).astype(np.intp), bins - 1)
    count = np.bincount(place, minlength=bins).astype(np.float64)
    keep = count > 0
    mean_x = np.bincount(place, x, minlength=bins)[keep] / count[keep]
    mean_y = np.bincount(place, y, minlength=bins)[keep] / count[keep]
    return mean_x, mean_y, count[keep]


def _head_fit(signal_V: FloatArray, span: _Span, noise: Noise) -> Plateau:
    """Level of the part before the first edge: its mean."""
    part = signal_V[span.start : span.stop]
    return Plateau(
        level_V=float(np.mean(part)), u_level_V=noise.u_mean_V(part.size), residuals_V=(part - np.mean(part),),
        settled=True,
    )  # fmt: skip


def _join(tail: Plateau, head: Plateau, amplitude_V: float) -> Plateau:
    """Join the level after edges with that before the first one; where they differ, the part at rest counts."""
    u = float(np.hypot(tail.u_level_V, head.u_level_V))
    if abs(tail.level_V - head.level_V) > max(4 * u, 1e-3 * amplitude_V):
        return Plateau(
            level_V=head.level_V, u_level_V=head.u_level_V, residuals_V=(*head.residuals_V, *tail.residuals_V),
            settled=True,
        )  # fmt: skip
    a, b = (1 / max(p.u_level_V, 1e-12 * amplitude_V) ** 2 for p in (tail, head))
    return Plateau(
        level_V=(a * tail.level_V + b * head.level_V) / (a + b), u_level_V=float((a + b) ** -0.5),
        residuals_V=(*head.residuals_V, *tail.residuals_V), settled=True,
    )  # fmt: skip


def _peak(
    time_s: FloatArray, signal_V: FloatArray, spans: list[_Span], *, high: bool, amplitude_V: float, noise: Noise
) -> Plateau:
    """Level of pulses that never settle: the extreme that each reaches, averaged over the pulses."""
    sign = 1.0 if high else -1.0
    peaks = []
    length = 1
    for span in spans:
        middle = int(np.searchsorted(time_s, span.middle_s or time_s[0]))
        stop = max(span.stop, middle + 1)
        reach = stop - middle
        length = int(np.clip(np.ceil((noise.sigma_V / (0.005 * amplitude_V)) ** 2), 1, max(reach // 8, 1)))
        part = running_mean(sign * signal_V[max(middle - length, 0) : min(stop + reach, signal_V.size)], length)
        peaks.append(sign * float(np.max(part)))
    if not peaks:
        peaks = [float(np.max(sign * signal_V)) * sign]
    u = noise.u_mean_V(length) / np.sqrt(len(peaks))
    return Plateau(level_V=float(np.mean(peaks)), u_level_V=float(u), residuals_V=(), settled=False)
