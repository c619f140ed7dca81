"""Peaks: how high a pulse gets that never settles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.binning import cut_rows, group_means
from darkedge.analysis.waveform.edges import onsets
from darkedge.analysis.waveform.least_squares import RowFits, fit_rows
from darkedge.analysis.waveform.levels import running_mean
from darkedge.analysis.waveform.noise import Noise
from darkedge.analysis.waveform.shapes import LIMITS, shape_and_derivatives

QUIET_RATIO = 5e-4
"""Noise over amplitude below which the largest sample is the peak: smoothing would cost more than it gives."""

REACH = 0.6
"""How far the local fit about a peak reaches, as a share of the way to the nearer 50 % point."""

BINS = 384
"""Most groups of samples a pulse is fitted on."""
AFTER = 1.2
"""How far the fit of a whole pulse reaches after the 90 % point of its end, in times of that edge."""

CHECK_BINS = 10
LEAST_WON, SURELY_WON = 2.0, 17.0
"""Standard deviations by which chi-squared must fall more than by chance for a front end to be believed, and from
which there is no doubt of it."""

MISFIT = 3.0
"""Standard deviations of chi-squared beyond which a pulse is not the shape's answer to a rectangle of light."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Peak:
    """Mean peak of some pulses; `factor` is its variance in units of one sample's, `doubt` what the method leaves open."""

    value: float
    factor: float
    doubt: float = 0.0


def mean_peak(
    time_s: FloatArray,
    height: FloatArray,
    *,
    rises_s: FloatArray,
    falls_s: FloatArray,
    noise: Noise,
    amplitude: float,
    from_rest: bool,
) -> Peak:
    """Height that pulses reach, meaned over them.

    Where the pulses start from rest, each is fitted whole: the answer of one pole behind a Gaussian front end to a
    rectangle of light, the same for its start and its end. Where that does not hold, or not from rest, the top alone is
    fitted (`local_peak`), and how far both are apart is in doubt.

    Parameters
    ----------
    time_s, height : arrays, shape (n,)
        The record, with the state at rest at zero and the peaks upwards.
    rises_s, falls_s : arrays, shape (k, 3)
        Instants at 10, 50 and 90 % of each pulse's start and end, roughly.
    """
    local = _local_peaks(time_s, height, rises_s, falls_s, noise, amplitude)
    if not from_rest or noise.sigma_V <= QUIET_RATIO * amplitude:
        return local
    rows = _cut_pulses(time_s, height, rises_s, falls_s, amplitude)
    rounded, sharp = _fit_pulses(rows, sharp=False), _fit_pulses(rows, sharp=True)
    if not bool(np.all(rounded.good & sharp.good)):
        return local
    # A front end that wins less than noise would is none: a width cannot come out negative, and would blunt every corner.
    fall = float(np.sum(rows.weight * (sharp.residual**2 - rounded.residual**2)))
    won = fall * (amplitude / noise.sigma_V) ** 2 / noise.inflation(rows.x.shape[1])
    won = (won - rows.group.size) / float(np.sqrt(2 * rows.group.size))  # one width for each pulse wins by chance alone
    fits, other = (sharp, rounded) if won < LEAST_WON else (rounded, sharp)
    tops, gain = _tops(fits, rows)
    value = float(np.mean(tops)) * amplitude
    if _misfit(fits, rows, noise, amplitude) > MISFIT:
        return Peak(value=local.value, factor=local.factor, doubt=abs(value - local.value))
    factor = float(np.sum(np.sum(gain**2, axis=1) / rows.group)) / tops.size**2
    apart = abs(float(np.mean(_tops(other, rows)[0])) * amplitude - value)
    return Peak(value=value, factor=factor, doubt=apart / 2 if won < SURELY_WON else 0.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rows:
    """Pulses as rows: x in units of their falling edge from their peak on, y over the amplitude.

    `group` (n,) is how many samples each entry is the mean of, `weight` (n, m) that number or 0 for padding, `start`
    (n, 5) the parameters to start from.
    """

    x: FloatArray
    y: FloatArray
    weight: FloatArray
    group: FloatArray
    start: FloatArray

    @property
    def blur(self) -> FloatArray:
        """Variance of the width of a group, by which its mean blunts a corner; shape (n,)."""
        if self.x.shape[1] < 2:
            return np.zeros_like(self.group)
        step = (self.x[:, 1] - self.x[:, 0]) / self.group
        return np.asarray(step**2 * (self.group**2 - 1) / 12)


def _cut_pulses(
    time_s: FloatArray, height: FloatArray, rises_s: FloatArray, falls_s: FloatArray, amplitude: float
) -> _Rows:
    unit = np.maximum(falls_s[:, 2] - falls_s[:, 0], (time_s[-1] - time_s[0]) / time_s.size)
    starts, ends = onsets(rises_s), onsets(falls_s)
    before = np.concatenate(([time_s[0]], falls_s[:-1, 2]))
    first = np.searchsorted(time_s, np.maximum(starts - 0.5 * unit, before))
    after = np.concatenate((starts[1:], [time_s[-1]]))
    last = np.searchsorted(time_s, np.minimum(falls_s[:, 2] + AFTER * unit, after), side="right")
    begin, end, inside, group = cut_rows(first, np.maximum(last - first, 1), most=BINS)
    x0 = (np.minimum(starts, rises_s[:, 0]) - ends) / unit
    tau = np.maximum((falls_s[:, 2] - falls_s[:, 1]) / np.log(5) / unit, 0.02)
    width = np.maximum(-x0, 0.02)
    start = np.stack((x0, np.log(width), np.log(tau), np.log(0.1 * tau), -1 / np.expm1(-width / tau)), axis=1)
    return _Rows(
        x=(group_means(time_s, begin, end) - ends[:, None]) / unit[:, None],
        y=group_means(height, begin, end) / amplitude, weight=np.where(inside, group[:, None], 0).astype(np.float64),
        group=group.astype(np.float64), start=start,
    )  # fmt: skip


def _fit_pulses(rows: _Rows, *, sharp: bool) -> RowFits:
    """Fit each pulse whole; `sharp`: without a front end, but for what the groups blunt."""
    start, free = rows.start.copy(), np.ones(rows.start.shape, dtype=np.bool_)
    if sharp:
        start[:, 3] = 0.5 * np.log(rows.blur + np.exp(2 * LIMITS[0]))
        free[:, 3] = False
    return fit_rows(_pulse, start, rows.x, rows.y, rows.weight, free=free, bounded=_bounded)


def _pulse(x: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """A (F(x - x0) - F(x - x0 - w)) and its derivatives by x0, ln w, ln tau, ln s and A."""
    x0, width, tau, s = (parameters[:, :1], *(np.exp(parameters[:, k : k + 1]) for k in (1, 2, 3)))
    height = parameters[:, 4:5]
    on, on_x0, on_tau, on_s = shape_and_derivatives(x, x0, tau, s)
    off, off_x0, off_tau, off_s = shape_and_derivatives(x, x0 + width, tau, s)
    by = (height * (on_x0 - off_x0), -height * width * off_x0, height * (on_tau - off_tau), height * (on_s - off_s))
    return height * (on - off), np.stack((*by, on - off), axis=1)


def _bounded(parameters: FloatArray) -> FloatArray:
    parameters[:, 1] = np.clip(parameters[:, 1], np.log(1e-3), np.log(50.0))
    parameters[:, 2:4] = np.clip(parameters[:, 2:4], *LIMITS)
    parameters[:, 4] = np.clip(parameters[:, 4], 0.1, 1e4)
    return parameters


def _tops(fits: RowFits, rows: _Rows) -> tuple[FloatArray, FloatArray]:
    """Largest value of each fitted pulse, and how far a change of each entry moves it.

    Means of groups are smoothed by their own width; that much is taken off the front end before the top is sought.
    """
    parameters = fits.parameters.copy()
    parameters[:, 3] = 0.5 * np.log(np.maximum(np.exp(2 * parameters[:, 3]) - rows.blur, np.exp(2 * LIMITS[0])))
    x0, width = parameters[:, :1], np.exp(parameters[:, 1:2])
    s = np.exp(parameters[:, 3:4])
    grid = x0 + width + np.linspace(-1.0, 4.0, 101) * s  # the top is at the end of the light, or later by the front end
    wide = np.concatenate((grid, x0 + width * np.linspace(0.2, 1.5, 60)), axis=1)
    value, jacobian = _pulse(wide, parameters)
    top = np.argmax(value, axis=1)
    row = np.arange(top.size)
    return value[row, top], np.asarray(np.einsum("ep,epm->em", jacobian[row, :, top], fits.solver))


def _misfit(fits: RowFits, rows: _Rows, noise: Noise, amplitude: float) -> float:
    """Chi-squared of lumped residuals, less its expectation, in its standard deviations."""
    x, weight = rows.x, rows.weight
    low, high = float(np.min(x)), float(np.max(x))
    part = np.clip((x - low) * (CHECK_BINS / max(high - low, 1e-300)), 0, CHECK_BINS - 1).astype(np.intp)
    count = np.bincount(part.ravel(), weight.ravel(), minlength=CHECK_BINS)
    sums = np.bincount(part.ravel(), (weight * fits.residual).ravel(), minlength=CHECK_BINS)
    used = count > 0
    per_pulse = max(int(np.mean(count[used]) / x.shape[0]), 1)
    variance = (noise.sigma_V / amplitude) ** 2 * noise.inflation(per_pulse) / count[used]
    chi2 = float(np.sum((sums[used] / count[used]) ** 2 / np.maximum(variance, 1e-30)))
    dof = max(int(np.sum(used)) - 5, 1)
    return (chi2 - dof) / float(np.sqrt(2 * dof))


def _local_peaks(
    time_s: FloatArray,
    height: FloatArray,
    rises_s: FloatArray,
    falls_s: FloatArray,
    noise: Noise,
    amplitude: float,
) -> Peak:
    found = []
    for rise_s, fall_s in zip(rises_s[:, 1], falls_s[:, 1], strict=True):
        first, last = (int(k) for k in np.searchsorted(time_s, (rise_s, fall_s)))
        part = slice(first, max(last, first + 2))
        found.append(local_peak(time_s[part], height[part], noise=noise.sigma_V, amplitude=amplitude))
    n = len(found)
    return Peak(
        value=sum(p.value for p in found) / n, factor=sum(p.factor for p in found) / n**2,
        doubt=sum(p.doubt for p in found) / n,
    )  # fmt: skip


def local_peak(time_s: FloatArray, signal: FloatArray, *, noise: float, amplitude: float) -> Peak:
    """Largest value that the top of a noisy pulse reaches.

    Two curves are fitted about the top: a cubic for a round peak, and two quadratics that meet at a corner, as a
    one-pole response makes when its pulse ends. The corner is kept where it leaves clearly less; how far both are
    apart is in doubt. The largest sample itself would be too high by several standard deviations of the noise.

    Parameters
    ----------
    time_s, signal : arrays, shape (n,)
        The pulse from its 50 % point up to its 50 % point down, the peak upwards.
    noise, amplitude : float
        Noise of one sample and height of the pulse, in the unit of `signal`.
    """
    if noise <= QUIET_RATIO * amplitude or signal.size < 12:
        return Peak(value=float(np.max(signal)), factor=1.0)
    length = int(np.clip((noise / (0.01 * amplitude)) ** 2, 1, signal.size // 6))
    top = int(np.argmax(running_mean(signal, length)))
    reach = max(int(REACH * max(min(top, signal.size - 1 - top), signal.size // 8)), 6)
    window = slice(max(top - reach, 0), min(top + reach + 1, signal.size))
    x = (time_s[window] - time_s[top]) / max(time_s[window.stop - 1] - time_s[window.start], 1e-300)
    y = signal[window]
    round_rss, *round_top = _top_of(np.stack((np.ones_like(x), x, x * x, x**3), axis=1), y)
    inner = np.linspace(x.size // 5, x.size - 1 - x.size // 5, min(x.size, 25)).astype(np.intp)
    corner_rss, *corner_top = min(_top_of(_corner(x, x[k]), y) for k in np.unique(inner))
    chosen = corner_top if corner_rss < round_rss - 12 * noise**2 else round_top
    return Peak(value=chosen[0], factor=chosen[1], doubt=abs(corner_top[0] - round_top[0]) / 2)


def _corner(x: FloatArray, place: float) -> FloatArray:
    left, right = np.minimum(x - place, 0.0), np.maximum(x - place, 0.0)
    return np.stack((np.ones_like(x), left, left * left, right, right * right), axis=1)


def _top_of(design: FloatArray, y: FloatArray) -> tuple[float, float, float]:
    """Residual sum of squares, largest value of the curve, and the variance factor there."""
    inverse = np.linalg.pinv(design.T @ design)
    curve = design @ (inverse @ (design.T @ y))
    top = int(np.argmax(curve))
    return float(np.sum((y - curve) ** 2)), float(curve[top]), float(design[top] @ inverse @ design[top])
