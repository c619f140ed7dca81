"""Plateaus: the parts between edges, from which the state levels and the noise are refined."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.edges import Changes, onsets
from darkedge.analysis.waveform.levels import StateLevels
from darkedge.analysis.waveform.noise import Noise, flat_noise, u_quantised_V
from darkedge.analysis.waveform.peaks import local_peak, mean_peak

SETTLED_RATIO = 2.75
"""Time from 50 % to the end of a pulse, over that from 50 % to 90 %, of a one-pole pulse of five time constants."""

START_RATIO = 1.5
"""A plateau is used from this many times the 50 to 90 % time after the 50 % point: 3.1 time constants, 1.9 sigma."""

SHORT_RATIO, SINKING_RATIO = 5.0, 0.02
"""A plateau shorter than this many 50 to 90 % times that sinks by this share of the amplitude is the top of a peak."""

HEAD_RATIO = 0.3
"""Length of the part before the first edge, in 10 to 90 % times of that edge, from which it counts as at rest."""

BINS = 256
LEAST_ENTRIES = 8
"""Entries from which an exponential is fitted to a plateau rather than a mean."""

LEFT_OUT = (0.0, 0.25, 0.5, 0.75)
"""Shares of a plateau left out at its start, one after the other, to see whether its level stays."""

AGREEMENT = 3.0
"""Levels from parts of a plateau agree within this many of the standard uncertainties of the shorter part."""

_TAIL_FACTORS = 2.0 ** np.arange(-1.5, 4.1, 0.5)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Plateau:
    """One state as its plateaus show it.

    `level_V` is where the signal has got to at the end of a plateau; `settled` whether a plateau is long enough for
    five time constants; `sigma_V` the noise of this state alone; `sag_ratio` how far the state sinks back towards the other one over the later two
    thirds of a plateau, as a share of the amplitude, and `u_sag_ratio` its uncertainty.
    """

    level_V: float
    u_level_V: float
    settled: bool
    sigma_V: float = 0.0
    sag_ratio: float = 0.0
    u_sag_ratio: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Refined:
    """Levels and noise of a channel, and the plateaus they come from."""

    levels: StateLevels
    noise: Noise
    low: Plateau
    high: Plateau


@dataclass(frozen=True, slots=True, kw_only=True)
class _Span:
    """One plateau: samples start to stop, and the edge before it.

    `middle_s` is that edge's 50 % point, the start of the record at its head; `late_s` its time from 50 % to 90 %.
    """

    start: int
    stop: int
    high: bool
    middle_s: float
    late_s: float
    after_edge: bool
    before_edge: bool
    next_middle_s: float
    next_edge_s: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Draft:
    """A plateau whose uncertainties still wait for the noise.

    `factor` is the variance of the level in units of one sample's, `neighbours` how many samples stand together; `sinks_V`
    is by how much the level from all of the plateau lies farther out than the one taken; `doubt_V` adds to the uncertainty.
    """

    level_V: float
    factor: float
    neighbours: int
    residuals_V: tuple[FloatArray, ...]
    settled: bool
    sag_V: float = 0.0
    sag_factor: float = 0.0
    sinks_V: float = 0.0
    doubt_V: float = 0.0

    def finished(self, noise: Noise, amplitude_V: float, u_code_V: float) -> Plateau:
        inflation = noise.inflation(max(self.neighbours, 1))
        u = noise.sigma_V * float(np.sqrt(self.factor * inflation))
        u_sag = noise.sigma_V * float(np.sqrt(self.sag_factor * inflation))
        return Plateau(
            level_V=self.level_V, u_level_V=float(np.sqrt(u**2 + u_code_V**2 + self.doubt_V**2)), settled=self.settled,
            sigma_V=_sigma(self.residuals_V), sag_ratio=self.sag_V / amplitude_V, u_sag_ratio=u_sag / amplitude_V,
        )  # fmt: skip


def _sigma(residuals_V: tuple[FloatArray, ...]) -> float:
    n = sum(part.size for part in residuals_V)
    return float(np.sqrt(sum(float(np.sum(part**2)) for part in residuals_V) / n)) if n else 0.0


def refine_levels(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    crossings_s: FloatArray,
    noise: Noise,
    step_V: float,
) -> Refined:
    """Refine both levels and the noise from the plateaus between the edges.

    The level of a state is what its plateaus settle to: the exponential tail of the edge before is fitted along with
    it, so that the whole plateau counts. It joins the part before the first edge where the two agree; where they do
    not, the one that went farther is the level. A state in which no plateau settles has the level of its peak.

    Parameters
    ----------
    crossings_s : array, shape (edges, 3)
        Instants at 10, 50 and 90 % progress, good to a sample.
    noise : Noise
        As known so far.
    step_V : float
        Voltage of one code of the digitiser, 0 where unknown.
    """
    spans = _spans(time_s, changes, crossings_s)
    at_rest = {
        state: _at_rest(time_s, signal_V, [s for s in spans if s.high == state], high=state, noise=noise, levels=levels)
        for state in (False, True)
    }
    low, high = (
        at_rest[state]
        or _peaked(time_s, signal_V, crossings_s, spans, at_rest[not state], high=state, noise=noise, levels=levels)
        for state in (False, True)
    )
    noise = flat_noise([*low.residuals_V, *high.residuals_V], fallback_V=noise.sigma_V)
    amplitude = high.level_V - low.level_V
    u_code = u_quantised_V(noise.sigma_V, step_V)
    scale = max(abs(amplitude), 1e-300)
    low_plateau, high_plateau = (draft.finished(noise, scale, u_code) for draft in (low, high))
    refined = StateLevels(
        low_V=low.level_V, high_V=high.level_V, u_low_V=low_plateau.u_level_V, u_high_V=high_plateau.u_level_V
    )
    return Refined(levels=refined, noise=noise, low=low_plateau, high=high_plateau)


def _spans(time_s: FloatArray, changes: Changes, crossings_s: FloatArray) -> list[_Span]:
    middle, late = crossings_s[:, 1], crossings_s[:, 2] - crossings_s[:, 1]
    starts = np.concatenate(([0], np.searchsorted(time_s, middle + START_RATIO * late)))
    stops = np.concatenate((np.searchsorted(time_s, onsets(crossings_s)), [time_s.size]))
    middles = np.concatenate(([time_s[0]], middle, [time_s[-1]]))
    lates = np.concatenate((late[:1], late))  # before the first edge, what there is of a tail is taken to be alike
    highs = np.concatenate(([not changes.rising[0]], changes.rising))
    edges = np.concatenate((crossings_s[:, 2] - crossings_s[:, 0], [0.0]))
    count = highs.size
    return [
        _Span(
            start=int(starts[k]), stop=int(stops[k]), high=bool(highs[k]), middle_s=float(middles[k]),
            late_s=float(lates[k]), after_edge=k > 0, before_edge=k < count - 1, next_middle_s=float(middles[k + 1]),
            next_edge_s=float(edges[k]),
        )
        for k in range(count)
    ]  # fmt: skip


def _at_rest(
    time_s: FloatArray, signal_V: FloatArray, spans: list[_Span], *, high: bool, noise: Noise, levels: StateLevels
) -> _Draft | None:
    """Level of a state from plateaus that settle; `None` where none does and pulses end before they might."""
    after = [s for s in spans if s.after_edge]
    heads = [s for s in spans if not s.after_edge and _is_head(time_s, s)]
    settled = [s for s in after if _settles(time_s, s)]
    if settled:
        tail = _tail_fit(time_s, signal_V, settled, high=high, noise=noise)
        if tail.sinks_V > SINKING_RATIO * levels.amplitude_V and _is_short(time_s, settled):
            return None  # past its peak already: no plateau, but the top of a pulse measured against too low a level
        if not heads:
            return tail
        head = _tail_fit(time_s, signal_V, heads[:1], high=high, noise=noise)
        return _join(tail, head, high=high, noise=noise, amplitude_V=levels.amplitude_V)
    if heads and not any(s.before_edge for s in after):
        return _tail_fit(time_s, signal_V, heads[:1], high=high, noise=noise)
    return None


def _is_head(time_s: FloatArray, span: _Span) -> bool:
    """Whether the part before the first edge is long enough, against that edge's own time, to be called at rest."""
    enough = span.stop - span.start >= 2
    return enough and bool(time_s[span.stop - 1] - time_s[span.start] >= HEAD_RATIO * span.next_edge_s)


def _settles(time_s: FloatArray, span: _Span) -> bool:
    enough = span.stop - span.start >= 2
    return enough and bool(time_s[span.stop - 1] - span.middle_s >= SETTLED_RATIO * span.late_s)


def _is_short(time_s: FloatArray, spans: list[_Span]) -> bool:
    lasting = np.array([time_s[s.stop - 1] - s.middle_s for s in spans])
    return float(np.median(lasting)) < SHORT_RATIO * float(np.median([s.late_s for s in spans]))


def _tail_fit(time_s: FloatArray, signal_V: FloatArray, spans: list[_Span], *, high: bool, noise: Noise) -> _Draft:
    """Level at the end of plateaus, with the exponential tail of the edge before them.

    Of fits that leave out the first part of the plateau, more and more of it, the one that leaves out least and agrees
    with all that leave out more is taken, so that ringing or a second tail does not reach the level (Lepski 1991).
    """
    offset = float(signal_V[spans[-1].stop - 1])
    x = np.concatenate([time_s[s.start : s.stop] - s.middle_s for s in spans])
    y = np.concatenate([signal_V[s.start : s.stop] for s in spans]) - offset
    begin, end = float(np.min(x)), float(np.mean([time_s[s.stop - 1] - s.middle_s for s in spans]))
    length = max(end - begin, 1e-300)
    bx, by, weight = _binned(x - begin, y)
    each = x.size // len(spans)
    own = float(np.median([s.late_s for s in spans])) / np.log(5)  # time constant, were the edge one pole
    tails = own * _TAIL_FACTORS
    tails = tails[tails >= 2 * length / max(min(bx.size, each), 1)]
    fits = _tail_fits(bx, by, weight, tails, length, own)
    fit = _earliest_that_agrees(fits, noise, each)
    sag, sag_factor = _sag(bx, by, weight, length)
    residuals = tuple(_residuals(time_s, signal_V, s, s.middle_s + begin, fit, offset) for s in spans)
    return _Draft(
        level_V=fit.level + offset, factor=fit.factor, neighbours=each, residuals_V=residuals, settled=True,
        sag_V=-sag if high else sag, sag_factor=sag_factor,
        sinks_V=(fits[0].level - fit.level) * (1 if high else -1),
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class _Tail:
    """A constant and an exponential fitted to a plateau from `start` on.

    `level` is their sum at the end of the plateau, `factor` its variance in units of one sample's. Without an
    exponential `height` is 0.
    """

    start: float
    constant: float
    height: float
    tail: float
    level: float
    factor: float


def _residuals(
    time_s: FloatArray, signal_V: FloatArray, span: _Span, begin_s: float, fit: _Tail, offset: float
) -> FloatArray:
    x = time_s[span.start : span.stop] - begin_s
    used = x >= fit.start
    course = fit.constant + fit.height * np.exp(-np.maximum(x[used], 0.0) / fit.tail)
    return np.asarray(signal_V[span.start : span.stop][used] - offset - course)


def _earliest_that_agrees(fits: list[_Tail], noise: Noise, neighbours: int) -> _Tail:
    allowed_V = AGREEMENT * noise.sigma_V * noise.inflation(max(neighbours, 1)) ** 0.5
    for k, fit in enumerate(fits):
        if all(abs(fit.level - other.level) <= allowed_V * other.factor**0.5 for other in fits[k + 1 :]):
            return fit
    return fits[-1]


def _tail_fits(
    x: FloatArray, y: FloatArray, weight: FloatArray, tails: FloatArray, length: float, own: float
) -> list[_Tail]:
    """Fits of constant and exponential that leave out more and more of the start, as far as enough is left.

    Linear least squares for each of a row of time constants, of which the one that explains most is kept.
    """
    kept = weight * (x >= np.asarray(LEFT_OUT)[:, None] * length)
    entries = np.count_nonzero(kept, axis=1)
    shape = np.exp(-x / tails[:, None])
    s0, y0 = kept.sum(axis=1), kept @ y
    s1, s2, y1 = kept @ shape.T, kept @ (shape * shape).T, (kept * y) @ shape.T
    fits = []
    for k, left_out in enumerate(LEFT_OUT):
        # Longer tails pass for a slope; but the edge's own must be among them however short the plateau is.
        usable = tails <= max((1 - left_out) * length / 2, 1.2 * own)
        if k and entries[k] < LEAST_ENTRIES:
            break
        fits.append(
            _best_tail(
                s0[k], s1[k, usable], s2[k, usable], y0[k], y1[k, usable], tails[usable], left_out * length, length
            )
            if entries[k] >= LEAST_ENTRIES and bool(np.any(usable))
            else _Tail(
                start=left_out * length,
                constant=y0[k] / s0[k],
                height=0.0,
                tail=1.0,
                level=y0[k] / s0[k],
                factor=1 / s0[k],
            )
        )
    return fits


def _best_tail(
    s0: float, s1: FloatArray, s2: FloatArray, y0: float, y1: FloatArray, tails: FloatArray, start: float, length: float
) -> _Tail:
    determinant = np.maximum(s0 * s2 - s1 * s1, 1e-12 * s0 * s2)
    constant, height = (s2 * y0 - s1 * y1) / determinant, (s0 * y1 - s1 * y0) / determinant
    best = int(np.argmax(constant * y0 + height * y1))
    last = float(np.exp(-length / tails[best]))
    factor = (s2[best] - 2 * s1[best] * last + s0 * last**2) / determinant[best]
    return _Tail(
        start=start, constant=float(constant[best]), height=float(height[best]), tail=float(tails[best]),
        level=float(constant[best] + height[best] * last), factor=float(factor),
    )  # fmt: skip


def _sag(x: FloatArray, y: FloatArray, weight: FloatArray, length: float) -> tuple[float, float]:
    """How far a straight line through the later two thirds rises over the plateau, and its variance factor."""
    later = x > length / 3
    if int(np.sum(later)) < 4:
        return 0.0, 0.0
    x, y, weight = x[later], y[later], weight[later]
    centred = x - float(np.average(x, weights=weight))
    spread = float(np.sum(weight * centred**2))
    if spread <= 0:
        return 0.0, 0.0
    return float(np.sum(weight * centred * y)) / spread * length, length**2 / spread


def _binned(x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Means of x and y in equal bins of x, and how many samples each holds; few samples stay as they are."""
    if x.size <= 2 * BINS:
        return x, y, np.ones_like(x)
    low, high = float(np.min(x)), float(np.max(x))
    place = np.minimum(((x - low) * (BINS / (high - low))).astype(np.intp), BINS - 1)
    count = np.bincount(place, minlength=BINS).astype(np.float64)
    keep = count > 0
    mean_x = np.bincount(place, x, minlength=BINS)[keep] / count[keep]
    mean_y = np.bincount(place, y, minlength=BINS)[keep] / count[keep]
    return mean_x, mean_y, count[keep]


def _join(tail: _Draft, head: _Draft, *, high: bool, noise: Noise, amplitude_V: float) -> _Draft:
    """Join the level after edges with that before the first one.

    Where they differ by more than their noise, one of them has not settled: the one nearer to the other state, which
    is left out.
    """
    residuals = (*head.residuals_V, *tail.residuals_V)
    inflation = noise.inflation(max(tail.neighbours, head.neighbours, 1))
    u = noise.sigma_V * float(np.sqrt((tail.factor + head.factor) * inflation))
    if abs(tail.level_V - head.level_V) > max(4 * u, 1e-3 * amplitude_V):
        outer = max if high else min
        return replace(outer(tail, head, key=lambda d: d.level_V), residuals_V=residuals)
    a, b = 1 / tail.factor, 1 / head.factor
    return replace(
        tail, level_V=(a * tail.level_V + b * head.level_V) / (a + b), factor=1 / (a + b),
        neighbours=max(tail.neighbours, head.neighbours), residuals_V=residuals,
    )  # fmt: skip


def _peaked(
    time_s: FloatArray,
    signal_V: FloatArray,
    crossings_s: FloatArray,
    spans: list[_Span],
    rest: _Draft | None,
    *,
    high: bool,
    noise: Noise,
    levels: StateLevels,
) -> _Draft:
    """Level of pulses that never settle: the extreme that each reaches, meaned over the pulses."""
    sign = 1.0 if high else -1.0
    base = rest.level_V if rest else (levels.low_V if high else levels.high_V)
    height = sign * (signal_V - base)
    ends = np.array(
        [k for k, s in enumerate(spans) if s.high == high and s.after_edge and s.before_edge], dtype=np.intp
    )
    if ends.size:
        peak = mean_peak(
            time_s, height, rises_s=crossings_s[ends - 1], falls_s=crossings_s[ends], noise=noise,
            amplitude=levels.amplitude_V, from_rest=rest is not None,
        )  # fmt: skip
    else:
        part = _open_stretch(time_s, spans, high=high)
        peak = local_peak(time_s[part], height[part], noise=noise.sigma_V, amplitude=levels.amplitude_V)
    neighbours = int(np.median([s.stop - s.start for s in spans if s.high == high]))
    return _Draft(
        level_V=base + sign * peak.value, factor=peak.factor, neighbours=max(neighbours, 1), residuals_V=(),
        settled=False, doubt_V=peak.doubt,
    )  # fmt: skip


def _open_stretch(time_s: FloatArray, spans: list[_Span], *, high: bool) -> slice:
    """Samples of the longest stretch in a state that an end of the record cuts off, from its edge's 50 % point on."""
    longest = max((s for s in spans if s.high == high), key=lambda s: s.next_middle_s - s.middle_s)
    first = min(int(np.searchsorted(time_s, longest.middle_s)), time_s.size - 1)
    return slice(first, max(int(np.searchsorted(time_s, longest.next_middle_s, side="right")), first + 1))
