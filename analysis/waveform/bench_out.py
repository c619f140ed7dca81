"""The bench taken out of an edge: from what the scope shows to what the device does.

Emitter, scope and trigger jitter stand before and behind the device as stages in a row. The bench is described by its own 10 to 90 %
time and by how much of it falls before the 50 % point (0.27 for one pole, 0.5 for a Gaussian edge); the device as one pole, as a Gaussian
edge, or as something between. The step response of the whole row is composed, and the device's time is the one with which the row takes as
long as was seen. Root-sum-square would be right for Gaussian stages only: two equal poles take 3.36 time constants, not 3.11.

What the device's own shape is, the skewness of the edge seen tells as far as it can; the rest is spread over the shapes and adds to the
uncertainty. Where the edge seen is not clearly slower than the bench, only an upper bound is given.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.optimize import brentq

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.measurement import Estimate
from darkedge.analysis.waveform.one_pole import parts

RATIOS = (0.0, 0.35, 0.7, 1.4, math.inf)
"""Width of the front end over the time constant of the shapes that a stage may have."""

ONE_POLE_SHARE, GAUSSIAN_SHARE = math.log(1.8) / math.log(9), 0.5
"""Part of the 10 to 90 % time that lies before the 50 % point."""

SHARE_KNOWN_TO = 0.02
"""What a share is known to at best: a real stage is neither one pole nor Gaussian."""

RESOLVED = 2.0
"""Standard uncertainties by which the edge seen must be slower than the bench for more than an upper bound."""

ONE_SIDED_95 = 1.645

_TIMES = np.exp(np.linspace(math.log(0.02), math.log(100.0), 90))
"""Times of the device over that of the bench at which the row is composed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Stage:
    """One edge of the bench: its 10 to 90 % time, and the share of it before 50 %, `None` where nobody knows."""

    duration_s: float
    u_duration_s: float = 0.0
    share: float | None = None
    u_share: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """An edge as the scope shows it: 10 to 90 % time and the share of it before 50 %, with their uncertainties."""

    duration_s: float
    u_duration_s: float
    share: float
    u_share: float


def without_bench(seen: Seen, bench: Stage, *, low: float = 0.1, high: float = 0.9) -> Estimate:
    """Time of the device alone from one level to another.

    Parameters
    ----------
    seen : Seen
    bench : Stage
        Emitter and scope together for this edge.
    low, high : float
        Levels between which the device's time is wanted, as shares of its way.

    Returns
    -------
    Estimate
        A value with its uncertainty, never negative; or an upper bound alone where the edge is hardly slower than the bench.

    Notes
    -----
    The step response of a Gaussian stage of width s and two poles is (a F_a - b F_b) / (a - b), F_a and F_b being those of one pole
    behind that stage: partial fractions of 1 / ((1 + pa)(1 + pb)). The device's time follows from tables of the composed 10 to 90 % time,
    which grows with it.

    References
    ----------
    W. C. Elmore, J. Appl. Phys. 19, 55 (1948), for stages in a row; Buckland, Burnham and Augustin, Biometrics 53, 603 (1997), for
    the mean over shapes.
    """
    y = seen.duration_s / bench.duration_s
    u_y = math.hypot(seen.u_duration_s, y * bench.u_duration_s) / bench.duration_s
    rivals = [
        (weight * _likelihood(seen, table, y), table, _span(device, low, high))
        for weight, ratio in _bench_ratios(bench)
        for device, table in ((device, _row(ratio, device)) for device in RATIOS)
    ]
    total = sum(weight for weight, _, _ in rivals)
    kept = [(weight / total, table, span) for weight, table, span in rivals if weight > 1e-3 * total]
    if y - RESOLVED * u_y <= 1.0:
        highest = max(span * max(table.device(y + ONE_SIDED_95 * u_y), float(_TIMES[0])) for _, table, span in kept)
        return Estimate(hi95=bench.duration_s * highest)
    norm = sum(weight for weight, _, _ in kept)
    mean = sum(weight * span * table.device(y) for weight, table, span in kept) / norm
    u_parts = {
        "edge as seen": seen.u_duration_s / bench.duration_s,
        "time of the bench": y * bench.u_duration_s / bench.duration_s,
    }
    parts = {
        name: math.sqrt(sum(weight * (span * table.reach(y, u)) ** 2 for weight, table, span in kept) / norm)
        for name, u in u_parts.items()
    }
    parts["shapes of device and bench"] = math.sqrt(
        sum(weight * (span * table.device(y) - mean) ** 2 for weight, table, span in kept) / norm
    )
    return Estimate(
        value=bench.duration_s * mean,
        u=bench.duration_s * math.hypot(*parts.values()),
        parts={name: bench.duration_s * part for name, part in parts.items()},
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Row:
    """A bench of one shape and a device of another.

    What they take together, and its share before 50 %, at each time of the device; times are over that of the bench.
    """

    together: FloatArray
    share: FloatArray

    def device(self, y: float) -> float:
        """Device's time with which both take `y`; 0 where the bench alone takes as long."""
        if y <= float(self.together[0]):
            return float(_TIMES[0]) * math.sqrt(max(y - 1.0, 0.0) / max(float(self.together[0]) - 1.0, 1e-12))
        if y >= float(self.together[-1]):
            return y * float(_TIMES[-1] / self.together[-1])
        return float(np.interp(y, self.together, _TIMES))

    def reach(self, y: float, u_y: float) -> float:
        """Standard uncertainty of the device's time: half of the wider way to two standard uncertainties, as the curve bends."""
        middle = self.device(y)
        return 0.5 * max(self.device(y + 2 * u_y) - middle, middle - self.device(y - 2 * u_y))


def _likelihood(seen: Seen, table: _Row, y: float) -> float:
    """How likely the share seen is, were both stages of the shapes of a table."""
    expected = float(np.interp(y, table.together, table.share))
    return math.exp(-0.5 * (seen.share - expected) ** 2 / (seen.u_share**2 + SHARE_KNOWN_TO**2)) + 1e-12


def _bench_ratios(bench: Stage) -> Sequence[tuple[float, float]]:
    """Shapes that the bench may have, with their weights."""
    if bench.share is None:
        return [(1.0, ratio) for ratio in RATIOS]
    u = math.hypot(bench.u_share, SHARE_KNOWN_TO)
    return [(weight, _ratio_of(bench.share + step * u)) for step, weight in ((-1.0, 0.25), (0.0, 0.5), (1.0, 0.25))]


def _ratio_of(share: float) -> float:
    """Width of the front end over the time constant of a stage with a share before 50 %."""
    if share <= ONE_POLE_SHARE + 1e-3:
        return 0.0
    if share >= GAUSSIAN_SHARE - 1e-3:
        return math.inf
    return round(float(brentq(lambda log: _alone(math.exp(log))[1] - share, math.log(0.01), math.log(30.0))), 2)


@lru_cache(maxsize=256)
def _row(bench_ratio: float, device_ratio: float) -> _Row:
    bench_s, bench_tau = _stage(bench_ratio)
    device_s, device_tau = _stage(device_ratio)
    s = np.hypot(bench_s, device_s * _TIMES)
    found = _quarters(s, np.full_like(_TIMES, bench_tau), device_tau * _TIMES)
    together = found[:, 2] - found[:, 0]
    return _Row(together, (found[:, 1] - found[:, 0]) / together)


def _stage(ratio: float) -> tuple[float, float]:
    """Front end and time constant of a stage of that ratio which takes 1 from 10 to 90 %."""
    if math.isinf(ratio):
        return 1.0 / 2.5631031310892007, 1e-4
    duration, _ = _alone(ratio)
    return max(ratio, 1e-4) / duration, 1.0 / duration


@lru_cache(maxsize=256)
def _alone(ratio: float) -> tuple[float, float]:
    """10 to 90 % time of a stage of that ratio, in its time constant, and its share before 50 %."""
    quarters = _quarters(np.array([max(ratio, 1e-4)]), np.array([1.0]), np.array([1e-4]))[0]
    duration = float(quarters[2] - quarters[0])
    return duration, float(quarters[1] - quarters[0]) / duration


@lru_cache(maxsize=256)
def _span(ratio: float, low: float, high: float) -> float:
    """Time from one level to another of a stage of that ratio, over that from 10 to 90 %."""
    if (low, high) == (0.1, 0.9):
        return 1.0
    s, tau = _stage(ratio)
    places = _quarters(np.array([s]), np.array([tau]), np.array([1e-4]), (low, 0.5, high))[0]
    return float(places[2] - places[0])


def _quarters(
    s: FloatArray, one: FloatArray, other: FloatArray, levels: tuple[float, float, float] = (0.1, 0.5, 0.9)
) -> FloatArray:
    """When rows of a Gaussian stage and two poles pass three levels, shape (n, 3), by bisection."""
    other = np.where(np.abs(other / one - 1) < 1e-4, one * 1.0001, other)
    s, one, other = (np.maximum(x, 1e-5)[:, None] for x in (s, one, other))
    shares = np.array(levels)[None, :]
    low, high = np.tile(-9 * s, (1, 3)), np.tile(9 * s + 12 * (one + other), (1, 3))
    zero = np.zeros_like(s)
    for _ in range(60):
        middle = 0.5 * (low + high)
        value = (one * parts(middle, zero, one, s)[0] - other * parts(middle, zero, other, s)[0]) / (one - other)
        low, high = np.where(value < shares, middle, low), np.where(value < shares, high, middle)
    return 0.5 * (low + high)
