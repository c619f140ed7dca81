"""Settled pulses: levels and edges of many channels fitted together, all samples at once.

Each edge is fitted with the plateaus on its two sides: level before, swing, and the shape of one pole behind a Gaussian front end
(`one_pole`), on bins that keep what the samples have to say. Levels that the edges of a channel share are then joined by their
information, and every edge is put on the joint levels, which is the least-squares fit of all of them together. Noise is taken from the
plateaus; where it is not white, the bins are whitened and fitted again. A channel whose edges leave more than noise, or whose pulses do
not settle, is left to `plateaus` and `crossings`, which assume less.

References: IEEE Std 181-2011 for levels and instants; Aitken (1935) for least squares under correlated noise.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform import one_pole, two_poles
from darkedge.analysis.waveform.binned import FINE, BinnedEdges, CutEdges, bin_edges, cut_edges
from darkedge.analysis.waveform.edges import TEN_NINETY, BoolArray, IntArray, Transitions
from darkedge.analysis.waveform.first_look import FirstLook
from darkedge.analysis.waveform.least_squares import WhiteFits, fit_white_rows
from darkedge.analysis.waveform.levels import StateLevels
from darkedge.analysis.waveform.noise import ENOUGH_INDEPENDENT, Noise, pooled, rest_noise, u_of_codes, u_quantised_V
from darkedge.analysis.waveform.one_pole import (
    LN_S,
    LN_TAU,
    NARROWEST,
    PLACE,
    START,
    SWING,
    WIDEST,
    bounded,
)
from darkedge.analysis.waveform.shapes import first_guess
from darkedge.analysis.waveform.whitening import whitener, whitening_matrix

MEAN_FROM = 3
"""Samples in a bin across the edge from which the bin is taken as a mean, not as points."""

MOST_REST = 4096
"""Samples at rest that are looked at for the noise of a channel."""

LUMPS = np.array([-1.3, -0.75, -0.45, -0.2, 0.0, 0.2, 0.45, 0.8, 1.3, 2.0, 3.5, 7.0, 20.0])
"""Bounds, in edge times from the 50 % point, of the parts in which what a fit leaves is lumped."""

LEAST_WEIGHT = 0.02
"""Akaike weight, over that of the best, below which a member of the family is no rival."""

DYING = 4.0
"""Standard deviations by which noise may be larger after an edge than later on."""

PATCHY = 16.0
"""Power of one stretch at rest over that of another from which slow noise is called ringing or a tail."""

NEAR = 0.1
"""Change of a logarithm up to which the slope at the fit leads to the joint levels."""

MISFIT = 3.5
"""Standard deviations of chi-squared beyond which edges are not of the family, or their plateaus not level."""

NOISE_KNOWN_TO = 1.05
"""Chi-squared is taken for this much smaller: the variance of the noise is itself known to a few per cent only."""

FINEST_RATIO = 1e-4
"""Share of the amplitude below which no misfit is looked for: what the bins may blunt."""

BETWEEN = 0.7
"""What the course of an edge between its samples leaves open, in edge times over the cube of the number of samples on the edge: between
two family members that agree on the samples."""

BESIDE = 6
"""Samples on either side of the 50 % point among which straight lines are drawn."""

FEWEST_TO_FIT, ENOUGH_TO_FIT = 2, 4
"""Samples between 10 and 90 %: below the first a straight line between two is all there is; from the second the fit stands."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SettledEdges:
    """The edges of one channel on their joint levels.

    `families` are the members that an edge may be of, each with its Akaike weight; instants are their weighted means. Units are `unit_s`
    (n,) since `origin_s` (n,). `straight` holds, for edges with few samples, progress at some samples about the 50 % point.
    """

    rising: BoolArray
    families: tuple[FamilyMember, ...]
    origin_s: FloatArray
    unit_s: FloatArray
    n_samples: IntArray
    straight: StraightLines

    def transitions(self, fractions: tuple[float, ...]) -> Transitions:
        """Instants at the reference levels `fractions` (progress, rising), with what is known of them."""
        n, k = self.rising.size, len(fractions)
        x, covariance, pull = self._averaged(np.tile(np.asarray(fractions), (n, 1)))
        unit = self.unit_s
        covariance = covariance * (unit**2)[:, None, None]
        pull = pull * unit[:, None, None]
        samples = np.maximum(self.n_samples, 1)
        bend = np.repeat((BETWEEN * unit / samples**3)[:, None], k, axis=1)
        time = self.origin_s[:, None] + unit[:, None] * x
        found = Transitions(
            fractions=fractions, rising=self.rising, time_s=time, covariance_s2=covariance, bend_s=bend, pull_s_per_V=pull,
            n_samples=self.n_samples, by_shape=np.ones(n, dtype=np.bool_),
        )  # fmt: skip
        return self.straight.instead(found) if self.straight.rows.size else found

    def select(self, rows: slice) -> SettledEdges:
        """Some neighbouring edges."""
        return SettledEdges(
            rising=self.rising[rows], families=tuple(member.select(rows) for member in self.families),
            origin_s=self.origin_s[rows], unit_s=self.unit_s[rows], n_samples=self.n_samples[rows],
            straight=self.straight.select(rows),
        )  # fmt: skip

    def _averaged(self, shares: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Instants, covariance and pull as means over the family members; that members differ adds to the covariance.

        Buckland, Burnham and Augustin, Biometrics 53, 603 (1997).
        """
        n, k = shares.shape
        x, covariance, pull = np.zeros((n, k)), np.zeros((n, k, k)), np.zeros((n, k, 2))
        square = np.zeros((n, k, k))
        for member in self.families:
            rows = np.flatnonzero(member.weight > 0)
            if rows.size == 0:
                continue
            weight = member.weight[rows]
            at, gradient = member.shape.instants(
                member.parameters[rows], shares[rows], np.log(shares[rows] / (1 - shares[rows])) / 4.4
            )
            x[rows] += weight[:, None] * at
            covariance[rows] += weight[:, None, None] * (
                gradient @ member.covariance[rows] @ gradient.transpose(0, 2, 1)
            )
            pull[rows] += weight[:, None, None] * (gradient @ member.by_levels[rows])
            square[rows] += weight[:, None, None] * (at[:, :, None] * at[:, None, :])
        return x, covariance + np.where(self._mixed[:, None, None], square - x[:, :, None] * x[:, None, :], 0.0), pull

    @property
    def _mixed(self) -> BoolArray:
        return np.asarray(np.max([member.weight for member in self.families], axis=0) < 1.0)


class Shape(Protocol):
    """What a member of the family can do; `one_pole` and `two_poles` are such."""

    def by_points(self, x: FloatArray, blur: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Values and derivatives of bins of few samples."""

    def by_means(self, bounds: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Values and derivatives of bins that hold means."""

    def instants(self, parameters: FloatArray, shares: FloatArray, first: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Where edges pass shares of their way, and the gradients of that."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FamilyMember:
    """One member of the family fitted to some edges.

    `parameters` (n, 5); `covariance` (n, 3, 3) of place, ln tau and ln s with the levels known; `by_levels` (n, 3, 2) what an error of low
    and high level, in volts, does to them; `weight` (n,), 0 where it is no rival.
    """

    parameters: FloatArray
    covariance: FloatArray
    by_levels: FloatArray
    weight: FloatArray
    shape: Shape = one_pole

    def select(self, rows: slice) -> FamilyMember:
        """Some of the edges."""
        return FamilyMember(
            shape=self.shape,
            parameters=self.parameters[rows], covariance=self.covariance[rows], by_levels=self.by_levels[rows],
            weight=self.weight[rows],
        )  # fmt: skip


MEMBERS: tuple[tuple[Shape, tuple[int, ...]], ...] = (
    (one_pole, ()), (one_pole, (LN_S,)), (one_pole, (LN_TAU,)), (two_poles, ()),
)  # fmt: skip
"""One pole behind a Gaussian front end; one pole alone; a Gaussian edge alone; two poles: shape, and parameters held."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StraightLines:
    """Edges with few samples, `rows` of them: progress (n, m) at samples `step_s` apart from `start_s` on, noise and amplitude, all (n,)."""

    rows: IntArray
    progress: FloatArray
    start_s: FloatArray
    step_s: FloatArray
    sigma: FloatArray
    amplitude_V: FloatArray

    def select(self, rows: slice) -> StraightLines:
        """Those of some neighbouring edges, counted from the first of them."""
        some = (self.rows >= rows.start) & (self.rows < rows.stop)
        return StraightLines(
            rows=self.rows[some] - rows.start, progress=self.progress[some], start_s=self.start_s[some],
            step_s=self.step_s[some], sigma=self.sigma[some], amplitude_V=self.amplitude_V[some],
        )  # fmt: skip

    def instead(self, found: Transitions) -> Transitions:
        """Put straight lines between two samples wherever they are better known than the fit."""
        row = np.arange(self.rows.size)
        time, variance, pull = [], [], []
        rising = found.rising[self.rows]
        samples = np.maximum(found.n_samples[self.rows], 1)
        for fraction in found.fractions:
            excess = self.progress - fraction
            below = np.argmin(np.cumsum(np.clip(excess, -0.1, 0.1), axis=1), axis=1)
            below = np.minimum(below, excess.shape[1] - 2)
            a, b = excess[row, below], excess[row, below + 1]
            slope = np.maximum(b - a, 0.05)
            share = np.where(b > a, np.clip(-a / np.where(b > a, b - a, 1.0), 0.0, 1.0), 0.5)
            time.append(self.start_s + (below + share) * self.step_s)
            variance.append((self.sigma * self.step_s / slope) ** 2)
            per_volt = self.step_s / slope / self.amplitude_V
            to_high = np.where(rising, fraction, 1.0 - fraction)
            sign = np.where(rising, 1.0, -1.0)
            pull.append(np.stack((sign * (1 - to_high) * per_volt, sign * to_high * per_volt), axis=1))
        at, spread = np.maximum.accumulate(np.stack(time, axis=1), axis=1), np.stack(variance, axis=1)
        bend = (self.step_s / np.sqrt(12) / samples)[:, None] * np.ones_like(at)
        fitted = np.einsum("eii->ei", found.covariance_s2)[self.rows] + found.bend_s[self.rows] ** 2
        better = (samples < FEWEST_TO_FIT) | (np.mean(spread + bend**2, axis=1) < np.mean(fitted, axis=1))
        rows = self.rows[better]
        times, covariances = found.time_s.copy(), found.covariance_s2.copy()
        bends, pulls, by_shape = found.bend_s.copy(), found.pull_s_per_V.copy(), found.by_shape.copy()
        times[rows], bends[rows], by_shape[rows] = at[better], bend[better], False
        covariances[rows] = spread[better][:, :, None] * np.eye(len(found.fractions))
        pulls[rows] = np.stack(pull, axis=1)[better]
        return Transitions(
            fractions=found.fractions, rising=found.rising, time_s=times, covariance_s2=covariances, bend_s=bends,
            pull_s_per_V=pulls, n_samples=found.n_samples, by_shape=by_shape,
        )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SettledChannel:
    """What the joint fit found of one channel."""

    levels: StateLevels
    noise: Noise
    edges: SettledEdges
    transitions: Transitions


def fit_settled(
    looks: Sequence[FirstLook],
    fractions: tuple[float, ...] = TEN_NINETY,
    pools: Sequence[Hashable] | None = None,
) -> list[SettledChannel | None]:
    """Fit channels of even records together; `None` for one that does not settle or is not of the family.

    Channels with the same entry in `pools` (and the same time step) were taken alike, and share the correlation of their noise.
    """
    if not looks:
        return []
    cut = cut_edges(looks)
    fit_for = np.ones(len(looks), dtype=np.bool_)
    np.logical_and.at(fit_for, cut.channel, cut.settled)
    kept = [int(k) for k in np.flatnonzero(fit_for)]
    found: list[SettledChannel | None] = [None] * len(looks)
    if not kept:
        return found
    rows = np.flatnonzero(fit_for[cut.channel])
    renumbered = np.cumsum(fit_for) - 1
    job = _Job(
        looks=[looks[k] for k in kept],
        cut=cut.select(rows, channel=renumbered[cut.channel[rows]].astype(np.intp)),
        pools=[None if pools is None else pools[k] for k in kept],
    )
    for k, channel in zip(kept, job.channels(fractions), strict=True):
        found[k] = channel
    return found


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Parted:
    """A fit parted into levels and shapes.

    `low_high_V` (n, 2) and their `information` (n, 2, 2); `given` (n, 3, 3), the covariance of the shape once the levels are known, and
    `by_volts` (n, 3, 2), what a change of the levels does to it.
    """

    low_high_V: FloatArray
    information: FloatArray
    given: FloatArray
    by_volts: FloatArray


def _is_patchy(rest_V: Sequence[FloatArray]) -> bool:
    """Whether one stretch at rest is far noisier than another: noise that knows its neighbours and does so is none."""
    powers = [float(np.var(part)) for part in rest_V if part.size >= 64]
    return len(powers) > 1 and max(powers) > PATCHY * min(powers)


def _put(fits: WhiteFits, new: WhiteFits, rows: IntArray) -> WhiteFits:
    """Put newer fits in the place of some rows."""
    merged = {}
    for name in ("parameters", "residual", "derivative", "inverse", "good"):
        whole = getattr(fits, name).copy()
        whole[rows] = getattr(new, name)
        merged[name] = whole
    return WhiteFits(**merged)


def _dies_down(rest_V: Sequence[FloatArray], noise: Noise) -> bool:
    """Whether what is called noise is larger in the first halves of the stretches at rest than in the second: then it is ringing or a tail."""
    if noise.sigma_V <= 0:
        return False
    early = late = 0.0
    for part in rest_V:
        half = part.size // 2
        if half < 8:
            continue
        first, second = part[:half], part[half:]
        early += float(first @ first) - half * float(first.mean()) ** 2
        late += float(second @ second) - second.size * float(second.mean()) ** 2
    if noise.correlation.size > 1 and _is_patchy(rest_V):
        return True
    dof = max(noise.independent / 2, 1.0)
    return early > 0 and math.log(early / max(late, 1e-300)) > DYING * math.sqrt(4 / dof)


def _deviations(chi2: FloatArray, freedom: FloatArray) -> FloatArray:
    """By how many standard deviations of a normal distribution chi-squared is too large.

    E. B. Wilson and M. M. Hilferty, Proc. Natl. Acad. Sci. 17, 684 (1931).
    """
    spread = 2.0 / (9.0 * freedom)
    return np.asarray((np.cbrt(chi2 / freedom) - (1.0 - spread)) / np.sqrt(spread))


class _Job:
    """The joint fit of some channels, step by step."""

    def __init__(self, *, looks: Sequence[FirstLook], cut: CutEdges, pools: Sequence[Hashable]) -> None:
        self.looks, self.cut = looks, cut
        self.bins: BinnedEdges = bin_edges(cut)
        self.means = self.bins.fine_count >= MEAN_FROM
        self.bounds_x = self.bins.bounds
        self.fine_x, self.fine_blur = self.bins.x[:, FINE], self.bins.blur[:, FINE]
        self.root = np.sqrt(self.bins.count.astype(np.float64))
        self.entries = np.count_nonzero(self.bins.count, axis=1).astype(np.float64)
        self.bounds = np.searchsorted(cut.channel, np.arange(len(looks) + 1))
        self.n_samples = (np.floor(cut.quarter[:, 2]) - np.floor(cut.quarter[:, 0])).astype(np.intp)
        self.coloured = np.empty(0, dtype=np.intp)
        self.place = np.full(cut.channel.size, -1)
        self.matrix = np.empty((0, 0, 0))
        self.sigma_V, self.sigma, self.widening = np.empty(0), np.empty(0), np.empty(0)
        self.rests: list[list[FloatArray]] = [[] for _ in looks]
        self.rest_is_high: list[list[bool]] = [[] for _ in looks]
        self.pools = pools

    def channels(self, fractions: tuple[float, ...]) -> list[SettledChannel | None]:
        quarter = (self.cut.quarter - self.cut.quarter[:, 1:2]) / self.cut.unit[:, None]
        shape = first_guess(quarter)
        shape[:, PLACE] += np.exp(shape[:, LN_TAU])
        start = np.concatenate((shape, np.zeros((shape.shape[0], 1)), np.ones((shape.shape[0], 1))), axis=1)
        fits = self._fit_all(start)
        noises = [self._noise(k, fits.parameters) for k in range(len(self.looks))]
        self.dying = np.array([_dies_down(rest, noise) for rest, noise in zip(self.rests, noises, strict=True)])
        noises = self._pooled(noises)
        self._whiten(noises)
        if self.coloured.size:
            fits = _put(fits, self._fit(fits.parameters[self.coloured], self.coloured), self.coloured)
        return self._joined(self._rivals(fits), noises, fractions)

    def _pooled(self, noises: list[Noise]) -> list[Noise]:
        """Let channels that were taken alike share the correlation of their noise, where one of them shows any."""
        alike: dict[Hashable, list[int]] = {}
        for k, pool in enumerate(self.pools):
            if pool is not None and not self.dying[k]:
                alike.setdefault((pool, self.looks[k].record.dt_s), []).append(k)
        found = list(noises)
        for places in alike.values():
            if len(places) > 1 and any(noises[k].correlation.size > 1 for k in places):
                together = pooled([noises[k] for k in places], [self.rests[k] for k in places])
                for k, noise in zip(places, together, strict=True):
                    found[k] = noise
        return found

    def _fit_all(self, start: FloatArray) -> WhiteFits:
        """Fit every edge; the shape of one with hardly a sample on it is a Gaussian edge of some width, or of none."""
        sharp = np.flatnonzero(self.n_samples < FEWEST_TO_FIT)
        start[sharp, LN_TAU] = np.log(NARROWEST)
        every = np.arange(start.shape[0])
        if sharp.size == 0:
            return self._fit(start, every)
        soft = np.flatnonzero(self.n_samples >= FEWEST_TO_FIT)
        fits = [self._fit(start[sharp], sharp, held=(LN_TAU,))] + ([self._fit(start[soft], soft)] if soft.size else [])
        order = np.argsort(np.concatenate((sharp, soft)))
        return WhiteFits(**{
            name: np.concatenate([getattr(fit, name) for fit in fits])[order] for name in WhiteFits.__dataclass_fields__
        })  # fmt: skip

    def _whiten(self, noises: Sequence[Noise]) -> None:
        """Hold the noise of each channel: its size, and matrices that whiten the bins where it is not white."""
        codes = np.array([look.step_V for look in self.looks]) / np.sqrt(12)
        self.sigma_V = np.maximum(np.array([noise.sigma_V for noise in noises]), codes)
        self.widening = np.array([noise.widening for noise in noises])[self.cut.channel]
        self.sigma = np.maximum(self.sigma_V[self.cut.channel] / self.cut.amplitude_V, FINEST_RATIO / 10)
        running = {k: whitener(noise.correlation) for k, noise in enumerate(noises) if noise.correlation.size > 1}
        rows = np.flatnonzero(np.isin(self.cut.channel, list(running)))
        self.coloured, self.place = rows, np.full(self.cut.channel.size, -1)
        self.place[rows] = np.arange(rows.size)
        self.matrix = np.array([
            whitening_matrix(running[int(self.cut.channel[row])], self.bins.begin[row], self.bins.end[row]) for row in rows
        ])  # fmt: skip

    def _rivals(self, fits: WhiteFits) -> list[tuple[WhiteFits, FloatArray]]:
        """The whole family, its two simpler members, and two poles, each with its Akaike weight (n,).

        The members are in the order of `MEMBERS`. Two poles are tried only where neither one pole nor a Gaussian edge alone will do.
        """
        rows = np.flatnonzero(self.n_samples >= FEWEST_TO_FIT)
        found = [fits]
        width = np.exp(fits.parameters[:, LN_TAU : LN_S + 1])
        spread = np.hypot(width[:, 0], width[:, 1])
        for held, other in ((LN_S, LN_TAU), (LN_TAU, LN_S)):
            start = fits.parameters.copy()
            start[:, held] = np.log(NARROWEST)
            start[:, other] = np.log(np.clip(spread, NARROWEST, WIDEST))
            found.append(_put(fits, self._fit(bounded(start)[rows], rows, held=(held,)), rows))
        criterion = np.full((len(MEMBERS), self.n_samples.size), np.inf)
        for k, fit in enumerate(found):
            some = slice(None) if k == 0 else rows
            criterion[k, some] = self._criterion(fit, free=k == 0)[some]
        mixed = rows[np.min(criterion[1:3, rows], axis=0) > criterion[0, rows]]
        start = fits.parameters.copy()
        slower = np.clip(width[:, 0], 0.75 * spread, 0.995 * spread)
        start[:, LN_TAU], start[:, LN_S] = np.log(slower), np.log(np.sqrt(spread**2 - slower**2))
        found.append(fits)
        if mixed.size:
            found[-1] = _put(fits, self._fit(bounded(start)[mixed], mixed, shape=two_poles), mixed)
            criterion[3, mixed] = self._criterion(found[-1], free=True)[mixed]
        least = np.min(criterion, axis=0)
        weight = np.exp(-0.5 * np.minimum(criterion - np.where(np.isfinite(least), least, 0.0), 1e3))
        weight = np.where(weight < LEAST_WEIGHT, 0.0, weight)
        weight[0, ~np.any(weight > 0, axis=0)] = 1.0
        weight /= np.sum(weight, axis=0)
        return list(zip(found, weight, strict=True))

    def _criterion(self, fit: WhiteFits, *, free: bool) -> FloatArray:
        """Akaike's criterion of each edge, less what all members have in common; `free`: one parameter more than the simpler members."""
        return np.where(fit.good, np.sum(fit.residual**2, axis=1) / self.sigma**2 + 2 * free, np.inf)

    def _model(self, rows: IntArray, parameters: FloatArray, member: Shape = one_pole) -> tuple[FloatArray, FloatArray]:
        """Values and derivatives of the bins of some edges."""
        means = self.means[rows]
        if bool(np.all(means)):
            return member.by_means(self.bounds_x[rows], parameters)
        if not bool(np.any(means)):
            return self._of_points(rows, parameters, member)
        value = np.empty((rows.size, self.bins.y.shape[1]))
        derivative = np.empty((rows.size, 5, self.bins.y.shape[1]))
        value[means], derivative[means] = member.by_means(self.bounds_x[rows[means]], parameters[means])
        value[~means], derivative[~means] = self._of_points(rows[~means], parameters[~means], member)
        return value, derivative

    def _of_points(self, rows: IntArray, parameters: FloatArray, member: Shape) -> tuple[FloatArray, FloatArray]:
        """Values and derivatives of bins that hold a sample or two across the edge, and means before and after it."""
        bounds = self.bounds_x[rows]
        parts = (
            member.by_means(bounds[:, : FINE.start + 1], parameters),
            member.by_points(self.fine_x[rows], self.fine_blur[rows], parameters),
            member.by_means(bounds[:, FINE.stop :], parameters),
        )
        return np.concatenate([value for value, _ in parts], axis=1), np.concatenate([d for _, d in parts], axis=2)

    def _fit(
        self, start: FloatArray, rows: IntArray, *, held: tuple[int, ...] = (), shape: Shape = one_pole
    ) -> WhiteFits:
        """Fit some edges, their bins whitened as far as the noise is known; the parameters `held` stay."""

        def model(some: IntArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
            which = rows[some]
            value, derivative = self._model(which, parameters, shape)
            derivative[:, list(held)] = 0.0
            return self._whitened(which, self.bins.y[which] - value, derivative)

        fits = fit_white_rows(model, start, entries=self.entries[rows], bounded=bounded)
        fits.inverse[:, list(held), :] = 0.0
        fits.inverse[:, :, list(held)] = 0.0
        return fits

    def _whitened(self, rows: IntArray, residual: FloatArray, derivative: FloatArray) -> tuple[FloatArray, FloatArray]:
        root = self.root[rows]
        white_residual, white_derivative = root * residual, root[:, None, :] * derivative
        which = np.flatnonzero(self.place[rows] >= 0)
        if which.size:
            matrix = self.matrix[self.place[rows[which]]]
            white_residual[which] = (matrix @ residual[which][:, :, None])[:, :, 0]
            white_derivative[which] = (matrix @ derivative[which].transpose(0, 2, 1)).transpose(0, 2, 1)
        return white_residual, white_derivative

    def _noise(self, channel: int, parameters: FloatArray) -> Noise:
        """Noise of one channel from its plateaus, with the tails of the edges taken off."""
        look, (first, last) = self.looks[channel], self.bounds[channel : channel + 2].tolist()
        signal, cut = look.record.signal_V, self.cut
        rest: list[FloatArray] = []
        is_high: list[bool] = []
        left = MOST_REST
        for row in range(first, last):
            origin, tau, s, swing = self._course(row, parameters)
            if row == first:
                end = int(max(origin - 4 * s, 0.0))
                rest.append(signal[max(end - left, 0) : end] - look.levels.low_V)
                is_high.append(not cut.rising[row])
            begin = int(origin + 4 * s + 3 * tau) + 2
            end = min(int(cut.window[row, 1]) if row + 1 < last else signal.size, begin + left)
            if end - begin >= 4:
                part = signal[begin:end] - look.levels.low_V
                if tau > max(0.2, s / 3):
                    part += swing * np.exp((origin - np.arange(begin, end)) / tau + 0.5 * (s / tau) ** 2)
                rest.append(part)
                is_high.append(bool(cut.rising[row]))
            left -= rest[-1].size
            if left < 64:
                break
        self.rests[channel], self.rest_is_high[channel] = rest, is_high
        return rest_noise(rest, fallback_V=look.hiss_V)

    def _course(self, row: int, parameters: FloatArray) -> tuple[float, float, float, float]:
        """Begin, time constant and front end of one edge in samples of its record, and its signed swing in volts."""
        place, ln_tau, ln_s, _, swing = parameters[row].tolist()
        unit = float(self.cut.unit[row])
        tau = math.exp(ln_tau) * unit
        sign = 1.0 if self.cut.rising[row] else -1.0
        return (
            float(self.cut.quarter[row, 1]) + place * unit - tau, tau, math.exp(ln_s) * unit,
            sign * swing * float(self.cut.amplitude_V[row]),
        )  # fmt: skip

    def _joined(
        self, rivals: Sequence[tuple[WhiteFits, FloatArray]], noises: Sequence[Noise], fractions: tuple[float, ...]
    ) -> list[SettledChannel | None]:
        """Join the levels of each channel, put its edges on them, and hold what is left against the noise."""
        cut, n = self.cut, len(self.looks)
        weights = np.stack([weight for _, weight in rivals])
        best = np.argmax(weights, axis=0)
        parted = [self._parted(fit) for fit, _ in rivals]
        row = np.arange(best.size)
        low_high = np.stack([p.low_high_V for p in parted])[best, row]
        information = np.stack([p.information for p in parted])[best, row]
        total, pulled = np.zeros((n, 2, 2)), np.zeros((n, 2))
        np.add.at(total, cut.channel, information)
        np.add.at(pulled, cut.channel, (information @ low_high[:, :, None])[:, :, 0])
        covariance = np.linalg.inv(total)
        joint = (covariance @ pulled[:, :, None])[:, :, 0]
        away = joint[cut.channel] - low_high
        disagree = np.bincount(cut.channel, np.einsum("ei,eij,ej->e", away, information, away), n)
        freedom = 2.0 * np.diff(self.bounds) - 2
        agrees = (freedom < 1) | (_deviations(disagree / NOISE_KNOWN_TO, np.maximum(freedom, 1.0)) <= MISFIT)
        residual = np.stack([fit.residual for fit, _ in rivals])[best, row]
        good = np.ones(n, dtype=np.bool_)
        np.logical_and.at(good, cut.channel, np.stack([fit.good for fit, _ in rivals])[best, row])
        good &= agrees & self._fits_well(residual) & ~self.dying
        slow = np.array([n.correlation.size > 1 and n.independent < ENOUGH_INDEPENDENT for n in noises])
        codes = np.array([look.step_V for look in self.looks])
        swing = joint[:, 1] - joint[:, 0]
        # Noise as slow as the plateaus are long may as well be a tail.
        good &= ~slow & (swing > np.maximum(5.0 * np.array([n.sigma_V for n in noises]), 2.0 * codes))
        members = tuple(
            self._on_levels(p, fit, joint[cut.channel], weight, *member)
            for p, (fit, weight), member in zip(parted, rivals, MEMBERS, strict=True)
        )
        edges = self._edges(joint, members)
        transitions = edges.transitions(fractions)
        found: list[SettledChannel | None] = []
        for k, noise in enumerate(noises):
            if not good[k]:
                found.append(None)
                continue
            u_code = self._u_codes(k, noise)
            u = np.sqrt(np.diagonal(covariance[k]) + np.square(u_code))
            levels = StateLevels(
                low_V=float(joint[k, 0]), high_V=float(joint[k, 1]), u_low_V=float(u[0]), u_high_V=float(u[1])
            )
            rows = slice(int(self.bounds[k]), int(self.bounds[k + 1]))
            found.append(
                SettledChannel(
                    levels=levels, noise=noise, edges=edges.select(rows), transitions=transitions.select(rows)
                )
            )
        return found

    def _on_levels(
        self,
        parted: _Parted,
        fits: WhiteFits,
        low_high_V: FloatArray,
        weight: FloatArray,
        shape: Shape,
        held: tuple[int, ...],
    ) -> FamilyMember:
        """Put every edge on given levels (n, 2): along the slope where they are near, by another fit where they are not."""
        moved = fits.parameters.copy()
        moved[:, :START] += (parted.by_volts @ (low_high_V - parted.low_high_V)[:, :, None])[:, :, 0]
        given, by_volts = parted.given, parted.by_volts
        far = np.max(np.abs(moved[:, LN_TAU : LN_S + 1] - fits.parameters[:, LN_TAU : LN_S + 1]), axis=1) > NEAR
        rows = np.flatnonzero(far & (weight > 0) & (self.n_samples >= FEWEST_TO_FIT))
        if rows.size:
            ends, per_volt = self._in_progress(low_high_V, rows)
            start = fits.parameters[rows].copy()
            start[:, START], start[:, SWING] = ends[:, 0], ends[:, 1] - ends[:, 0]
            again = self._fit(bounded(start), rows, held=(*held, START, SWING), shape=shape)
            _, derivative = self._model(rows, again.parameters, shape)
            _, derivative = self._whitened(rows, np.zeros((rows.size, derivative.shape[2])), derivative)
            of_ends = np.stack((derivative[:, START] - derivative[:, SWING], derivative[:, SWING]), axis=1)
            inverse = again.inverse[:, :START, :START]
            gain = -inverse @ (derivative[:, :START] @ of_ends.transpose(0, 2, 1))
            moved[rows] = again.parameters
            given, by_volts = given.copy(), by_volts.copy()
            given[rows] = inverse * ((self.widening * self.sigma)[rows] ** 2)[:, None, None]
            by_volts[rows] = gain @ per_volt
        return FamilyMember(parameters=bounded(moved), covariance=given, by_levels=by_volts, weight=weight, shape=shape)

    def _in_progress(self, low_high_V: FloatArray, rows: IntArray) -> tuple[FloatArray, FloatArray]:
        """Levels before and after some edges as progress (n, 2), and what a volt of low and high level is in it (n, 2, 2)."""
        cut = self.cut
        low, amplitude, rising = cut.low_V[rows], cut.amplitude_V[rows], cut.rising[rows]
        upward = (low_high_V[rows] - low[:, None]) / amplitude[:, None]
        ends = np.where(rising[:, None], upward, 1.0 - upward[:, ::-1])
        swap = np.where(rising[:, None, None], np.eye(2), -np.eye(2)[::-1])
        return ends, swap / amplitude[:, None, None]

    def _u_codes(self, channel: int, noise: Noise) -> tuple[float, float]:
        """What codes leave open of low and high level."""
        look = self.looks[channel]
        if look.step_V <= 0 or noise.sigma_V > look.step_V:
            both = u_quantised_V(noise.sigma_V, look.step_V)
            return both, both
        rest, high = self.rests[channel], self.rest_is_high[channel]
        origin = float(look.record.signal_V[0]) - look.levels.low_V
        found = []
        for state in (False, True):
            parts = [part for part, is_high in zip(rest, high, strict=True) if is_high == state]
            values = np.concatenate(parts) if parts else np.empty(0)
            found.append(u_of_codes(values, origin, noise.sigma_V, look.step_V))
        return found[0], found[1]

    def _parted(self, fits: WhiteFits) -> _Parted:
        """What a fit says of the levels of each edge, and of its shape once the levels are known."""
        covariance = fits.inverse * ((self.widening * self.sigma) ** 2)[:, None, None]
        to_ends = np.array([[1.0, 0.0], [1.0, 1.0]])  # level before the edge, level after it
        ends = fits.parameters[:, START : SWING + 1] @ to_ends.T
        information = np.linalg.inv(to_ends @ covariance[:, START:, START:] @ to_ends.T + 1e-18 * np.eye(2))
        with_shape = covariance[:, :START, START:] @ to_ends.T
        gain = with_shape @ information
        low_high, information_V, per_volt = self._in_volts(ends, information)
        return _Parted(
            low_high_V=low_high, information=information_V, by_volts=gain @ per_volt,
            given=covariance[:, :START, :START] - gain @ with_shape.transpose(0, 2, 1),
        )  # fmt: skip

    def _in_volts(self, ends: FloatArray, information: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Low and high level of each edge (n, 2), their information (n, 2, 2), and progress per volt of both (n, 2, 2)."""
        cut = self.cut
        amplitude, low = cut.amplitude_V, cut.low_V
        sign = np.where(cut.rising, 1.0, -1.0)
        base = np.where(cut.rising, low, low + amplitude)
        volts = base[:, None] + (sign * amplitude)[:, None] * ends
        swap = np.where(cut.rising[:, None, None], np.eye(2), np.eye(2)[::-1])  # from before-and-after to low-and-high
        per_volt = swap * (sign / amplitude)[:, None, None]
        low_high = np.where(cut.rising[:, None], volts, volts[:, ::-1])
        return low_high, per_volt.transpose(0, 2, 1) @ information @ per_volt, per_volt

    def _fits_well(self, residual: FloatArray) -> BoolArray:
        """Whether what the fits leave is no more than noise: lumped over the edges of each direction, and bin by bin."""
        cut, bins, sigma = self.cut, self.bins, self.sigma
        n = len(self.looks)
        group = 2 * cut.channel + cut.rising
        chi2 = np.bincount(group, np.sum(residual**2, axis=1) / sigma**2, 2 * n)
        freedom = np.maximum(np.bincount(group, self.entries - 5, 2 * n), 1.0)
        coloured = self.place >= 0
        fine = _deviations(chi2 / NOISE_KNOWN_TO, freedom) <= MISFIT
        lump = np.searchsorted(LUMPS, bins.x)
        place = group[:, None] * (LUMPS.size + 1) + lump
        raw = residual * self.root
        weight = np.where(coloured[:, None], 0.0, bins.count.astype(np.float64))
        sums = np.bincount(place.ravel(), (raw * (weight > 0)).ravel(), 2 * n * (LUMPS.size + 1))
        counts = np.bincount(place.ravel(), weight.ravel(), 2 * n * (LUMPS.size + 1))
        each = np.bincount(group, sigma**2, 2 * n) / np.maximum(np.bincount(group, minlength=2 * n), 1)
        filled = counts > 0
        variance = np.repeat(each, LUMPS.size + 1) / np.maximum(counts, 1) + FINEST_RATIO**2
        lumps = np.where(filled, (sums / np.maximum(counts, 1)) ** 2 / np.maximum(variance, 1e-300), 0.0)
        lumped = lumps.reshape(2 * n, -1).sum(axis=1)
        dof = np.maximum(filled.reshape(2 * n, -1).sum(axis=1) - 4.0, 1.0)
        coarse = _deviations(lumped / NOISE_KNOWN_TO, dof) <= MISFIT
        both = fine & coarse
        return np.asarray(both[0::2] & both[1::2])

    def _edges(self, joint: FloatArray, families: tuple[FamilyMember, ...]) -> SettledEdges:
        """All edges on the joint levels of their channels."""
        cut = self.cut
        step = np.array([look.record.dt_s for look in self.looks])[cut.channel]
        start = np.array([look.record.t0_s for look in self.looks])[cut.channel]
        few = np.flatnonzero((self.n_samples < ENOUGH_TO_FIT) & (cut.length >= 2 * BESIDE))
        first = np.clip(np.floor(cut.quarter[few, 1]).astype(np.intp) - BESIDE + 1, 0, cut.length[few] - 2 * BESIDE)
        places = (cut.base[few] + first)[:, None] + np.arange(2 * BESIDE + 1)
        volts = np.diff(cut.sums[places], axis=1) + cut.offset_V[few][:, None]
        low, swing = joint[cut.channel[few], 0], joint[cut.channel[few], 1] - joint[cut.channel[few], 0]
        upward = (volts - low[:, None]) / swing[:, None]
        straight = StraightLines(
            rows=few, progress=np.where(cut.rising[few][:, None], upward, 1.0 - upward),
            start_s=start[few] + step[few] * first, step_s=step[few], sigma=self.sigma_V[cut.channel[few]] / swing,
            amplitude_V=swing,
        )  # fmt: skip
        return SettledEdges(
            rising=cut.rising, families=families, origin_s=start + step * cut.quarter[:, 1], unit_s=step * cut.unit,
            n_samples=self.n_samples, straight=straight,
        )  # fmt: skip
