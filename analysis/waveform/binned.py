"""Many channels cut into their edges, and each edge with its plateaus into a few bins, all at once.

Only even records come here. Times are counted in samples of the edge's own record until the very end.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.edges import TEN_NINETY, BoolArray, IntArray, onsets
from darkedge.analysis.waveform.first_look import FirstLook

GROUPS = 64
"""Groups that a window about an edge is first looked at in."""

BEFORE_BINS, EDGE_BINS, AFTER_BINS = 5, 44, 13
FINE = slice(BEFORE_BINS, BEFORE_BINS + EDGE_BINS)
"""The bins across the edge."""

REACH_BEFORE, REACH_AFTER = 0.9, 1.4
"""How far the fine bins reach before 10 % and after 90 %, in edge times."""

SHARE_OF_NEXT = 0.3
"""Last part of a plateau, up to where the next edge may begin, that is taken with the next edge."""

NEAR_END, NEAR_END_IN_NOISE = 1e-3, 0.15
"""An edge has settled where what is left of it, were it one pole, is below this share of its swing or of the noise of a sample."""

LEAST_BASE_RATIO, LEAST_BASE = 0.5, 6
"""A record shows this much before its first edge: in edge times and in samples."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CutEdges:
    """Edges of several channels, one row each, in order.

    `channel` (n,) counts the channels; `rising` (n,); `quarter` (n, 3) rough places of 10, 50 and 90 % in samples; `settled` (n,)
    whether its plateaus on both sides are long enough. `sums` are the running sums of all channels one after the other, less `offset` (n,);
    `base` (n,) where those of the edge's channel begin, `length` (n,) its samples; `noise` (n,) that of a sample over the amplitude.
    """

    channel: IntArray
    rising: BoolArray
    quarter: FloatArray
    settled: BoolArray
    window: FloatArray
    low_V: FloatArray
    amplitude_V: FloatArray
    sums: FloatArray
    base: IntArray
    length: IntArray
    offset_V: FloatArray
    noise: FloatArray

    @property
    def unit(self) -> FloatArray:
        """Time from 10 to 90 % in samples, at least half a sample; shape (n,)."""
        return np.maximum(self.quarter[:, 2] - self.quarter[:, 0], 0.5)

    def select(self, rows: IntArray, *, channel: IntArray | None = None) -> CutEdges:
        """Return some of the edges, with their channels counted anew where `channel` (of the edges kept) says so."""
        return CutEdges(
            channel=self.channel[rows] if channel is None else channel, rising=self.rising[rows],
            quarter=self.quarter[rows], settled=self.settled[rows], window=self.window[rows], low_V=self.low_V[rows],
            amplitude_V=self.amplitude_V[rows], sums=self.sums, base=self.base[rows], length=self.length[rows],
            offset_V=self.offset_V[rows], noise=self.noise[rows],
        )  # fmt: skip

    def means(self, begin: IntArray, end: IntArray) -> FloatArray:
        """Mean progress of the samples begin to end of each edge's own record; shape of `begin` (n, m)."""
        place = self.base[:, None]
        count = np.maximum(end - begin, 1)
        volts = (self.sums[place + end] - self.sums[place + begin]) / count + self.offset_V[:, None]
        upward = (volts - self.low_V[:, None]) / self.amplitude_V[:, None]
        return np.asarray(np.where(self.rising[:, None], upward, 1.0 - upward))


def cut_edges(looks: Sequence[FirstLook]) -> CutEdges:
    """Find every edge of every channel, good to a sample or to the noise."""
    counts = [look.changes.index.size for look in looks]
    channel = np.repeat(np.arange(len(looks)), counts)
    lengths = np.array([look.record.signal_V.size for look in looks])
    begins = np.concatenate(([0], np.cumsum(lengths + 1)))
    sums = np.empty(int(begins[-1]))
    for look, begin in zip(looks, begins[:-1], strict=True):
        signal = look.record.signal_V
        sums[begin] = 0.0
        np.cumsum(signal - signal[0], out=sums[begin + 1 : begin + 1 + signal.size])
    at = np.concatenate([look.changes.index for look in looks])
    first, last = _ends(channel)
    before = np.where(first, 0, (np.concatenate(([0], at[:-1])) + at) // 2)
    after = np.where(last, lengths[channel], (np.concatenate((at[1:], [0])) + at) // 2)
    none = np.zeros(at.size)
    edges = CutEdges(
        channel=channel, rising=np.concatenate([look.changes.rising for look in looks]),
        quarter=np.stack((at, at, at), axis=1).astype(np.float64), settled=np.zeros(at.size, dtype=np.bool_),
        window=np.stack((none, none), axis=1),
        low_V=np.array([look.levels.low_V for look in looks])[channel],
        amplitude_V=np.array([look.levels.amplitude_V for look in looks])[channel],
        sums=sums, base=begins[channel], length=lengths[channel],
        offset_V=np.array([look.record.signal_V[0] for look in looks])[channel],
        noise=np.array([look.hiss_V / look.levels.amplitude_V for look in looks])[channel],
    )  # fmt: skip
    quarter = _rough_quarters(edges, at, before, after)
    return _with_windows(edges, quarter, first, last)


def _ends(channel: IntArray) -> tuple[BoolArray, BoolArray]:
    """Which edges are the first and which the last of their channels."""
    new = np.concatenate(([True], channel[1:] != channel[:-1]))
    return new, np.concatenate((new[1:], [True]))


def _rough_quarters(edges: CutEdges, at: IntArray, before: IntArray, after: IntArray) -> FloatArray:
    """Rough places of 10, 50 and 90 %: in windows that grow until the edge lies well inside, then in one that fits."""
    reach = np.full(at.size, 16)
    rows = np.arange(at.size)
    quarter = np.zeros((at.size, 3))
    for _ in range(12):
        low, high = np.maximum(at - reach, before)[rows], np.minimum(at + reach, after)[rows]
        quarter[rows], inside = _quarters(edges, rows, low, high)
        open_ = ~inside & ((low > before[rows]) | (high < after[rows]))
        rows = rows[open_]
        if rows.size == 0:
            break
        reach[rows] *= 3
    unit = np.maximum(quarter[:, 2] - quarter[:, 0], 1.0)
    low = np.maximum(np.floor(quarter[:, 0] - 1.2 * unit - 2).astype(np.intp), before)
    high = np.minimum(np.ceil(quarter[:, 2] + 1.2 * unit + 3).astype(np.intp), after)
    return _quarters(edges, np.arange(at.size), low, np.maximum(high, low + 2))[0]


def _quarters(edges: CutEdges, rows: IntArray, low: IntArray, high: IntArray) -> tuple[FloatArray, BoolArray]:
    """Rough places within windows, and whether progress ends at 0 and 1 in them.

    Each place parts the groups below a level from those above it so that the fewest lie on the wrong side: the minimum of the
    running sum of progress less level, bounded so that far samples count no more than near ones.
    """
    share = np.linspace(0.0, 1.0, GROUPS + 1)
    bounds = low[:, None] + np.round((high - low)[:, None] * share).astype(np.intp)
    begin, end = bounds[:, :-1], bounds[:, 1:]
    picked = edges if rows.size == edges.channel.size else edges.select(rows)
    progress = picked.means(begin, end)
    count = end - begin
    centre = np.asarray(0.5 * (begin + end - 1), dtype=np.float64)
    found = np.empty((rows.size, 3))
    for column, level in enumerate(TEN_NINETY):
        excess = np.clip(progress - level, -0.1, 0.1) * count
        running = np.cumsum(excess, axis=1)
        found[:, column] = _between(running, progress - level, centre, count)
    ends = max(GROUPS // 8, 1)
    head = np.sum(progress[:, :ends] * count[:, :ends], axis=1) / np.maximum(np.sum(count[:, :ends], axis=1), 1)
    tail = np.sum(progress[:, -ends:] * count[:, -ends:], axis=1) / np.maximum(np.sum(count[:, -ends:], axis=1), 1)
    return np.maximum.accumulate(found, axis=1), (head < 0.06) & (tail > 0.94)


def _between(running: FloatArray, excess: FloatArray, centre: FloatArray, count: IntArray) -> FloatArray:
    """Where the running sum is least, interpolated between the groups with samples on both sides of it."""
    row = np.arange(running.shape[0])
    last_below = np.argmin(running, axis=1)
    filled = count > 0
    ahead = np.where(filled & (np.arange(running.shape[1]) > last_below[:, None]), centre, np.inf)
    following = np.argmin(ahead, axis=1)
    none_ahead = ~np.isfinite(ahead[row, following])
    below, above = excess[row, last_below], excess[row, following]
    share = np.where(above > below, np.clip(-below / np.where(above > below, above - below, 1.0), 0.0, 1.0), 0.5)
    place = centre[row, last_below] + share * (centre[row, following] - centre[row, last_below])
    place = np.where(none_ahead, centre[row, last_below], place)
    return np.where(running[row, last_below] >= 0, centre[:, 0], place)


def _with_windows(edges: CutEdges, quarter: FloatArray, first: BoolArray, last: BoolArray) -> CutEdges:
    """Part the plateaus between neighbouring edges, and see which edges settle before the next."""
    onset = onsets(quarter)
    late = np.maximum(quarter[:, 2] - quarter[:, 1], 0.5)
    following = np.where(last, edges.length - 1.0, np.concatenate((onset[1:], [0.0])))
    split = following - SHARE_OF_NEXT * np.maximum(following - quarter[:, 1], 0.0)
    start = np.where(first, 0.0, np.concatenate(([0.0], split[:-1])))
    stop = np.where(last, edges.length.astype(np.float64), split)
    unit = np.maximum(quarter[:, 2] - quarter[:, 0], 0.5)
    rests = onset - start >= np.maximum(LEAST_BASE_RATIO * unit, np.where(first, LEAST_BASE, 2))
    left = np.maximum(NEAR_END, NEAR_END_IN_NOISE * edges.noise)
    ratio = np.log(0.5 / left) / np.log(5)  # one pole goes from 50 % to 90 % in ln 5 time constants
    settled = rests & (following - quarter[:, 1] >= np.maximum(ratio * late, LEAST_BASE))
    return CutEdges(
        channel=edges.channel, rising=edges.rising, quarter=quarter, settled=settled,
        window=np.stack((start, stop), axis=1), low_V=edges.low_V, amplitude_V=edges.amplitude_V, sums=edges.sums,
        base=edges.base, length=edges.length, offset_V=edges.offset_V, noise=edges.noise,
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BinnedEdges:
    """Edges as bins, shape (n, m).

    Samples `begin` to `end` of the record, `count` of them (0 where a bin is empty), their mean progress `y`, and their bounds `low` and
    `high` on the x axis, half a sample beyond the outer ones; x is time since the rough 50 % point in `unit` samples.
    """

    begin: IntArray
    end: IntArray
    count: IntArray
    y: FloatArray
    low: FloatArray
    high: FloatArray

    @property
    def bounds(self) -> FloatArray:
        """Bounds of the bins, which are neighbours; shape (n, m + 1)."""
        return np.concatenate((self.low[:, :1], self.high), axis=1)

    @property
    def x(self) -> FloatArray:
        """Mean place of the samples of each bin."""
        return 0.5 * (self.low + self.high)

    @property
    def blur(self) -> FloatArray:
        """Variance of the places of the samples of each bin."""
        size = np.maximum(self.count, 1)
        step = (self.high - self.low) / size
        return np.asarray(step**2 * (size.astype(np.float64) ** 2 - 1) / 12)

    @property
    def fine_count(self) -> FloatArray:
        """Samples in a bin across the edge; shape (n,)."""
        return np.asarray(np.max(self.count[:, FINE], axis=1), dtype=np.float64)


def bin_edges(edges: CutEdges) -> BinnedEdges:
    """Bin every edge with its plateaus: fine across the edge, wider and wider away from it."""
    unit, quarter = edges.unit, edges.quarter
    start, stop = edges.window[:, 0], edges.window[:, 1]
    fine_from = np.clip(quarter[:, 0] - REACH_BEFORE * unit - 1, start, stop)
    fine_to = np.clip(quarter[:, 2] + REACH_AFTER * unit + 1, fine_from, stop)
    growing = np.linspace(0.0, 1.0, AFTER_BINS + 1) ** 2
    places = np.concatenate(
        (
            start[:, None] + (fine_from - start)[:, None] * (1 - np.linspace(1.0, 0.0, BEFORE_BINS + 1)[:-1] ** 2),
            fine_from[:, None] + (fine_to - fine_from)[:, None] * np.linspace(0.0, 1.0, EDGE_BINS + 1),
            fine_to[:, None] + (stop - fine_to)[:, None] * growing[1:],
        ),
        axis=1,
    )
    bounds = np.ceil(places - 1e-9).astype(np.intp)
    begin, end = bounds[:, :-1], bounds[:, 1:]
    centre, scale = quarter[:, 1][:, None], unit[:, None]
    return BinnedEdges(
        begin=begin, end=end, count=end - begin, y=edges.means(begin, end),
        low=(begin - 0.5 - centre) / scale, high=(end - 0.5 - centre) / scale,
    )  # fmt: skip
