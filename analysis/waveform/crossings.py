"""Crossings: when each edge passes the reference levels, as well as the noise allows, and how well that is.

A shape is fitted to each edge (`shapes`), and what it leaves is looked at. Where that is no more than noise, the
shape's own crossings stand. Else a local polynomial through the residuals about each crossing is added to the shape, so
that the result is that of the trace whatever the edge looks like; the shape then only takes away the curvature
and the corner that a polynomial alone would blur (Hjort and Glad, Annals of Statistics 23, 882, 1995).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import toeplitz

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.binning import cut_rows, group_means
from darkedge.analysis.waveform.edges import (
    TEN_NINETY,
    BoolArray,
    Changes,
    IntArray,
    Transitions,
    onsets,
    rough_crossings,
)
from darkedge.analysis.waveform.levels import StateLevels
from darkedge.analysis.waveform.noise import Noise
from darkedge.analysis.waveform.shapes import EdgeShapes, fit_shapes

ENOUGH_TO_FIT = 4
"""Samples between 10 and 90 % from which a shape of three parameters is worth more than a straight line."""

BINS = 128
"""Most samples an edge is fitted on; more are meaned in groups, each far shorter than the edge."""

BEFORE, AFTER = 0.8, 1.2
"""How far the fit reaches before 10 % and after 90 %, in edge times: 3 sigma of a Gaussian, 5 tau of one pole."""

REACHES = (0.05, 0.1, 0.2, 0.35)
"""Half widths of the windows of the local polynomial, in edge times."""

LEAST_IN_WINDOW = 5
"""Entries that a local quadratic needs to have any say over the straight line between two."""

FARTHEST_MOVE = 0.6
"""How far a crossing may end from where it was roughly found, in edge times; farther, the fit has gone astray."""

LEAST_VARIANCE_RATIO = 0.05
"""Variance of a crossing over that under white noise of the same size, below which no correlation is believed."""

PERHAPS_MISFIT, SURELY_MISFIT = 2.0, 5.0
"""Standard deviations of chi-squared beyond which a shape is doubted, and beyond which it is no longer an answer."""

AGREEMENT, AGREEMENT_IN_DOUBT = 2.0, 3.0
"""Standard deviations within which windows agree: where the shape surely misfits, and where it may after all be right."""

CHECK_BINS = 10
"""Parts into which residuals are lumped to see whether a shape fits."""

CUT_SHORT_RATIO = 4.5
"""Times its 50 to 90 % time after the 50 % point, eight time constants: an edge that ends sooner has its asymptote
fitted too."""


def locate_crossings(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    noise: Noise,
    fractions: tuple[float, ...] = TEN_NINETY,
) -> Transitions:
    """Instants at which each edge passes the reference levels, with their uncertainty.

    Edges with fewer than four samples are interpolated in a straight line between the two samples that straddle
    a level.

    Parameters
    ----------
    time_s, signal_V : arrays, shape (n,), seconds and volts
    fractions : tuple
        Reference levels as progress, rising, between 0 and 1.

    References
    ----------
    IEEE Std 181-2011, reference level instants.
    """
    rough = rough_crossings(time_s, signal_V, levels=levels, changes=changes)
    straight = _straight_lines(
        time_s, signal_V, levels=levels, changes=changes, noise=noise, fractions=fractions, rough_s=rough
    )
    enough = (straight.n_samples >= ENOUGH_TO_FIT) & np.all(np.diff(rough, axis=1) > 0, axis=1)
    if not bool(np.any(enough)):
        return straight
    pieces = _cut_out(time_s, signal_V, levels=levels, changes=changes, rough_s=rough, which=np.flatnonzero(enough))
    return _located(pieces, straight, levels=levels, noise=noise)


def _straight_lines(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    noise: Noise,
    fractions: tuple[float, ...],
    rough_s: FloatArray,
) -> Transitions:
    """Crossings interpolated between two samples, for edges too fast for more."""
    crossings = rough_s
    if fractions != TEN_NINETY:
        crossings = rough_crossings(time_s, signal_V, levels=levels, changes=changes, fractions=fractions)
    after = np.clip(np.searchsorted(time_s, crossings), 1, time_s.size - 1)
    step_s = time_s[after] - time_s[after - 1]
    slope = (signal_V[after] - signal_V[after - 1]) / step_s
    least = 0.05 * levels.amplitude_V / step_s
    sign = np.where(changes.rising, 1.0, -1.0)[:, None]
    slope = np.where(slope * sign > least, slope, sign * least)
    n_samples = np.searchsorted(time_s, rough_s[:, 2]) - np.searchsorted(time_s, rough_s[:, 0])
    # Between two samples the true edge may bend: anywhere in the step if it is all there is, less with more samples.
    bend = step_s / np.sqrt(12) / np.maximum(n_samples, 1)[:, None]
    variance = (noise.sigma_V / slope) ** 2
    to_high = np.where(changes.rising[:, None], fractions, 1.0 - np.asarray(fractions))
    return Transitions(
        fractions=fractions, rising=changes.rising, time_s=crossings,
        covariance_s2=variance[:, :, None] * np.eye(len(fractions)), bend_s=bend,
        pull_s_per_V=np.stack(((1.0 - to_high) / slope, to_high / slope), axis=2),
        n_samples=np.asarray(n_samples, dtype=np.intp), by_shape=np.zeros(changes.index.size, dtype=np.bool_),
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Pieces:
    """Edges cut out of a record, one row each, in their own units.

    x is time since `origin_s` in `unit_s`, the edge's own 10 to 90 % time. An edge that bends later than it starts is
    `mirrored`: time and progress run backwards, so that its sharp end comes first like that of one pole. `x`,
    `progress` and `weight` have shape (n, m), padded with weight 0; `group` (n,) is how many samples each entry is
    the mean of.
    """

    which: IntArray
    rising: BoolArray
    mirrored: BoolArray
    cut_short: BoolArray
    origin_s: FloatArray
    unit_s: FloatArray
    quarter: FloatArray
    x: FloatArray
    progress: FloatArray
    weight: FloatArray
    group: IntArray


def _cut_out(
    time_s: FloatArray,
    signal_V: FloatArray,
    *,
    levels: StateLevels,
    changes: Changes,
    rough_s: FloatArray,
    which: IntArray,
) -> _Pieces:
    start_s, stop_s, cut_short = _reach(time_s, rough_s)
    rough, rising = rough_s[which], changes.rising[which]
    first = np.searchsorted(time_s, start_s[which])
    length = np.searchsorted(time_s, stop_s[which], side="right") - first
    begin, end, inside, group = cut_rows(first, length, most=BINS)
    upward = (group_means(signal_V, begin, end) - levels.low_V) / levels.amplitude_V
    origin, unit = rough[:, 1], rough[:, 2] - rough[:, 0]
    x = (group_means(time_s, begin, end) - origin[:, None]) / unit[:, None]
    progress = np.where(rising[:, None], upward, 1.0 - upward)
    quarter = (rough - origin[:, None]) / unit[:, None]
    short = cut_short[which]
    mirrored = (quarter[:, 2] < -0.9 * quarter[:, 0]) & ~short
    flip = mirrored[:, None]
    return _Pieces(
        which=which, rising=rising, mirrored=mirrored, cut_short=short, origin_s=origin, unit_s=unit,
        quarter=np.where(flip, -quarter[:, ::-1], quarter), x=np.where(flip, -x, x),
        progress=np.where(flip, 1.0 - progress, progress), weight=inside.astype(np.float64),
        group=group,
    )  # fmt: skip


def _reach(time_s: FloatArray, rough_s: FloatArray) -> tuple[FloatArray, FloatArray, BoolArray]:
    """From when to when each edge is fitted, clear of its neighbours, and whether it is cut short by the next."""
    unit = rough_s[:, 2] - rough_s[:, 0]
    onset = onsets(rough_s)
    late = rough_s[:, 2] - rough_s[:, 1]
    before = rough_s[:, 0] - BEFORE * unit
    # The tail of the edge before must have died down: four times its 50 to 90 % time, 6.4 time constants.
    settled = np.concatenate(([-np.inf], (rough_s[:, 1] + 4 * late)[:-1]))
    start = np.minimum(np.maximum(before, settled), onset)
    start = np.maximum(start, np.concatenate(([time_s[0]], rough_s[:-1, 2])))
    next_onset = np.concatenate((onset[1:], [time_s[-1]]))
    # About the last level something must be seen on both sides, even where the next edge may already begin.
    next_early = np.concatenate((rough_s[1:, 0], [time_s[-1]]))
    least = np.minimum(rough_s[:, 2] + REACHES[-1] * unit, 0.5 * (rough_s[:, 2] + next_early))
    stop = np.maximum(np.minimum(rough_s[:, 2] + AFTER * unit, next_onset), least)
    return start, stop, next_onset - rough_s[:, 1] < CUT_SHORT_RATIO * late


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Fine:
    """Crossings in x, shape (n, k), and what is known of them.

    `gain` (n, k, m): how far an error of each entry's progress moves them; `doubt` (n, k): bias that may be left;
    `corrected` and `good` (n,): whether the shape was corrected, and whether its fit ended well.
    """

    x: FloatArray
    gain: FloatArray
    doubt: FloatArray
    corrected: BoolArray
    good: BoolArray


def _located(pieces: _Pieces, straight: Transitions, *, levels: StateLevels, noise: Noise) -> Transitions:
    """Fit, check, correct; put the result in place of the straight lines wherever the fit ended well."""
    sigma = noise.sigma_V / levels.amplitude_V
    u_level = max(levels.u_low_V, levels.u_high_V) / levels.amplitude_V
    shapes = fit_shapes(pieces.x, pieces.progress, pieces.weight, quarter=pieces.quarter, cut_short=pieces.cut_short)
    fractions = np.asarray(straight.fractions)
    wanted = np.where(pieces.mirrored[:, None], 1.0 - fractions, fractions)
    x, gain = shapes.crossings(wanted)
    doubt = np.zeros_like(x)
    corrected = np.zeros(pieces.which.size, dtype=np.bool_)
    for rising in (True, False):
        group = np.flatnonzero(pieces.rising == rising)
        misfit = _misfit(pieces, shapes, group, sigma=sigma, u_level=u_level, noise=noise) if group.size else 0.0
        if misfit > PERHAPS_MISFIT:
            reaches = (*REACHES, np.inf) if misfit < SURELY_MISFIT else REACHES
            x[group], gain[group], doubt[group] = _corrected(
                pieces, shapes, group, wanted, x, reaches=reaches, sigma=sigma, noise=noise
            )
            corrected[group] = True
    fine = _Fine(x=x, gain=gain, doubt=doubt, corrected=corrected, good=shapes.good)
    return _put_back(pieces, straight, fine, levels=levels, noise=noise)


def _misfit(
    pieces: _Pieces, shapes: EdgeShapes, group: IntArray, *, sigma: float, u_level: float, noise: Noise
) -> float:
    """How far the residuals of some edges, lumped into a few parts of the edge, are beyond noise.

    Chi-squared of the lumped means about zero, less its expectation, in its standard deviations.
    """
    x, residual = pieces.x[group], shapes.residual[group]
    samples = pieces.weight[group] * pieces.group[group][:, None]
    start, stop = -0.3 - BEFORE, 0.7 + AFTER  # where an edge's own foot and tail lie, whichever way it bends
    samples = samples * ((x > start) & (x < stop))
    part = np.clip((x - start) * (CHECK_BINS / (stop - start)), 0, CHECK_BINS - 1).astype(np.intp)
    count = np.bincount(part.ravel(), samples.ravel(), minlength=CHECK_BINS)
    sums = np.bincount(part.ravel(), (samples * residual).ravel(), minlength=CHECK_BINS)
    used = count > 0
    count, sums = count[used], sums[used]
    per_edge = max(int(np.mean(count) / group.size), 1)
    variance = sigma**2 * noise.inflation(per_edge) / count + u_level**2
    chi2 = float(np.sum((sums / count) ** 2 / np.maximum(variance, 1e-30)))
    dof = max(count.size - 3, 1)
    return (chi2 - dof) / float(np.sqrt(2 * dof))


def _corrected(
    pieces: _Pieces,
    shapes: EdgeShapes,
    group: IntArray,
    wanted: FloatArray,
    x: FloatArray,
    *,
    reaches: tuple[float, ...],
    sigma: float,
    noise: Noise,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Crossings of shape plus local polynomial of its residuals for some edges: x, gain and doubt of `_Fine`."""
    part = shapes.select(group)
    entries, weight, wanted, x = pieces.x[group], pieces.weight[group], wanted[group], x[group]
    reach, doubt = _choose_reach(entries, weight, part.residual, x, reaches, sigma, noise, pieces.group[group])

    def sum_at(place: FloatArray) -> tuple[FloatArray, FloatArray]:
        local = _smoother(entries, weight, place, reach)
        return part.value(place) + np.einsum("ekm,em->ek", local, part.residual), local

    for _ in range(4):
        slope = np.maximum((sum_at(x + 0.05)[0] - sum_at(x - 0.05)[0]) / 0.1, 0.02)
        value, local = sum_at(x)
        x = x + np.clip((wanted - value) / slope, -0.1, 0.1)
    through_shape = np.einsum("epk,epm->ekm", part.gradient(x), part.solver)
    through_residual = local - np.einsum("ekm,epm,epj->ekj", local, part.jacobian, part.solver)
    return x, -(through_shape + through_residual) / slope[:, :, None], doubt / slope


def _choose_reach(
    entries: FloatArray,
    weight: FloatArray,
    residual: FloatArray,
    x: FloatArray,
    reaches: tuple[float, ...],
    sigma: float,
    noise: Noise,
    group: IntArray,
) -> tuple[FloatArray, FloatArray]:
    """Widest window for each level whose correction agrees with those of all narrower ones, within their noise.

    Corrections are meaned over the edges, which share a shape. After Lepski (1991) and Goldenshluger and Nemirovski
    (1997). Returns half widths, shape (k,), where 0 is the straight line between neighbours and infinity no correction
    at all; and, in progress, by how much more than noise the chosen correction differs from the next narrower one's,
    which is bias that may be left.
    """
    agreement = AGREEMENT_IN_DOUBT if np.inf in reaches else AGREEMENT
    chosen, doubt = np.zeros(x.shape[1]), np.zeros(x.shape[1])
    kept: list[tuple[FloatArray, FloatArray]] = []
    open_ = np.ones(x.shape[1], dtype=np.bool_)
    for reach in (0.0, *reaches):
        inside = np.sum((np.abs(entries[:, None, :] - x[:, :, None]) <= reach) * weight[:, None, :], axis=2)
        usable = open_ & (np.median(inside, axis=0) >= LEAST_IN_WINDOW) if reach else open_.copy()
        if not bool(np.any(usable)):
            continue
        local = _smoother(entries, weight, x, np.full(x.shape[1], reach))
        offset = np.mean(np.einsum("ekm,em->ek", local, residual), axis=0)
        spread = np.sqrt(np.mean(_variance(local, noise, group), axis=0) / x.shape[0]) * sigma
        for earlier, its_spread in kept:
            agrees = np.abs(offset - earlier) <= agreement * its_spread
            open_ &= agrees | ~usable
            usable &= agrees
        if kept:
            excess = (offset - kept[-1][0]) ** 2 - (kept[-1][1] ** 2 - spread**2)
            doubt = np.where(usable, np.sqrt(np.maximum(excess, 0.0)), doubt)
        chosen = np.where(usable, reach, chosen)
        kept.append((offset, spread))
    return chosen, doubt


def _smoother(entries: FloatArray, weight: FloatArray, x: FloatArray, reach: FloatArray) -> FloatArray:
    """Weights of the entries in a local quadratic about each x, evaluated there; shape (n, k, m).

    A window that holds too few entries gives the straight line between the two entries that straddle x; a window
    without end gives nothing, so that the shape stands.
    """
    distance = entries[:, None, :] - x[:, :, None]
    corrects = np.isfinite(reach)
    reach = np.where(corrects, reach, 1.0)
    inside = (np.abs(distance) <= reach[None, :, None]) * weight[:, None, :]
    scaled = distance / np.maximum(reach, 1e-9)[None, :, None] * inside
    design = np.stack((inside, scaled, scaled * scaled), axis=2)
    enough = np.sum(inside, axis=2) >= LEAST_IN_WINDOW
    normal = design @ design.transpose(0, 1, 3, 2)
    normal = np.where(enough[:, :, None, None], normal, np.eye(3))
    first = np.linalg.solve(normal + 1e-9 * np.eye(3), np.array([1.0, 0.0, 0.0])[:, None])[..., 0]
    weights = np.asarray(np.einsum("ekp,ekpm->ekm", first, design))
    if not bool(np.all(enough)):
        weights = np.where(enough[:, :, None], weights, _straddle(distance, weight))
    return weights * corrects[None, :, None]


def _straddle(distance: FloatArray, weight: FloatArray) -> FloatArray:
    present = weight[:, None, :] > 0
    below = np.where(present & (distance <= 0), distance, -np.inf)
    above = np.where(present & (distance > 0), distance, np.inf)
    left, right = np.argmax(below, axis=2), np.argmin(above, axis=2)
    near = np.take_along_axis(below, left[:, :, None], 2)[:, :, 0]
    far = np.take_along_axis(above, right[:, :, None], 2)[:, :, 0]
    both = np.isfinite(near) & np.isfinite(far)
    span = np.where(both, far - near, 1.0)
    share = np.where(both, -np.where(both, near, 0.0) / span, np.where(np.isfinite(near), 0.0, 1.0))
    weights = np.zeros_like(distance)
    np.put_along_axis(weights, left[:, :, None], (1.0 - share)[:, :, None], 2)
    old = np.take_along_axis(weights, right[:, :, None], 2)[:, :, 0]
    np.put_along_axis(weights, right[:, :, None], (old + share)[:, :, None], 2)
    return weights


def _variance(gain: FloatArray, noise: Noise, group: IntArray) -> FloatArray:
    """Variance of sums of entries with the given gains, in units of one sample's variance; shape (n, k)."""
    return np.asarray(np.einsum("ekk->ek", _covariance(gain, noise, group)))


def _covariance(gain: FloatArray, noise: Noise, group: IntArray) -> FloatArray:
    """Covariance of sums of entries with the given gains (n, k, m), in units of one sample's variance; (n, k, k)."""
    white = np.asarray((gain @ gain.transpose(0, 2, 1)) / group[:, None, None])
    if noise.correlation.size == 1:
        return white
    result = np.empty((gain.shape[0], gain.shape[1], gain.shape[1]))
    for size in np.unique(group):
        rows = group == size
        between = toeplitz(_correlation_of_means(noise.correlation, int(size), gain.shape[2]))
        result[rows] = gain[rows] @ between @ gain[rows].transpose(0, 2, 1)
    # An estimated correlation, cut off where it drowns, may promise less than any noise can keep.
    result += np.maximum(LEAST_VARIANCE_RATIO * white - result, 0.0) * np.eye(gain.shape[1])
    return result


def _correlation_of_means(correlation: FloatArray, size: int, n: int) -> FloatArray:
    """Covariance of means of `size` samples at distances of 0 to n - 1 means, in units of one sample's variance."""
    lags = np.zeros(size * (n + 1))
    known = min(correlation.size, lags.size)
    lags[:known] = correlation[:known]
    offsets = np.arange(1 - size, size)
    overlap = (size - np.abs(offsets)) / size**2
    places = np.abs(size * np.arange(n)[:, None] + offsets)
    return np.asarray(lags[places] @ overlap)


def _put_back(
    pieces: _Pieces,
    straight: Transitions,
    fine: _Fine,
    *,
    levels: StateLevels,
    noise: Noise,
) -> Transitions:
    """Turn crossings in x into instants, with covariance and pull by the levels, where the fit went well."""
    unit, x = pieces.unit_s, fine.x
    sense = np.where(pieces.mirrored, -1.0, 1.0)
    time = pieces.origin_s[:, None] + (unit * sense)[:, None] * x
    away = np.max(np.abs(time - straight.time_s[pieces.which]), axis=1)
    kept = fine.good & (away < FARTHEST_MOVE * unit) & np.all(np.diff(time, axis=1) > 0, axis=1)
    rows = pieces.which[kept]
    scale = (unit * noise.sigma_V / levels.amplitude_V) ** 2
    covariance = _covariance(fine.gain, noise, pieces.group) * scale[:, None, None]
    n_samples = straight.n_samples[pieces.which]
    between = unit / np.sqrt(12) / np.maximum(n_samples, 1) ** 2
    bend = np.hypot(unit[:, None] * fine.doubt, between[:, None])
    pull = unit[:, None, None] * (fine.gain @ _progress_by_levels(pieces)) / levels.amplitude_V
    times, covariances, pulls = straight.time_s.copy(), straight.covariance_s2.copy(), straight.pull_s_per_V.copy()
    times[rows], covariances[rows], pulls[rows] = time[kept], covariance[kept], pull[kept]
    by_shape, bends = straight.by_shape.copy(), straight.bend_s.copy()
    by_shape[rows], bends[rows] = ~fine.corrected[kept], bend[kept]
    return replace(
        straight, time_s=times, covariance_s2=covariances, bend_s=bends, pull_s_per_V=pulls, by_shape=by_shape
    )  # fmt: skip


def _progress_by_levels(pieces: _Pieces) -> FloatArray:
    """Derivative of each entry's progress by the low and the high level, times the amplitude; shape (n, m, 2).

    From progress = (v - low) / (high - low) going up and (high - v) / (high - low) going down. Mirrored
    edges hold one minus the progress on a reversed axis: both signs turn, and the shift in time stays.
    """
    progress = np.where(pieces.mirrored[:, None], 1.0 - pieces.progress, pieces.progress)
    up = np.stack((progress - 1.0, -progress), axis=2)
    down = np.stack((progress, 1.0 - progress), axis=2)
    return np.where(pieces.rising[:, None, None], up, down)
