"""Edges with known truth for the campaigns: shapes in closed form, noise of several colours, and the Cramer-Rao bound.

Shares no formula with the analysis: steps are made with `scipy.stats` distributions, and instants by root finding.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.stats import exponnorm, norm

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class TrueEdge:
    """A step from 0 to 1 that begins at 0: a normal front end of `sigma`, then one pole of `tau` (either may be 0)."""

    sigma: float
    tau: float

    @property
    def parameters(self) -> tuple[str, ...]:
        """The parameters of this edge's own family, besides its place."""
        return tuple(name for name in ("sigma", "tau") if getattr(self, name) > 0)

    def step(self, t: FloatArray) -> FloatArray:
        """The step at times t."""
        if self.tau == 0:
            return np.asarray(norm.cdf(t, scale=self.sigma))
        if self.sigma == 0:
            return np.where(t > 0, -np.expm1(-np.maximum(t, 0) / self.tau), 0.0)
        return np.asarray(exponnorm.cdf(t, self.tau / self.sigma, scale=self.sigma))

    def instant(self, share: float) -> float:
        """When the step passes a share of its way."""
        if self.tau == 0:
            return float(norm.ppf(share, scale=self.sigma))
        if self.sigma == 0:
            return float(-self.tau * np.log1p(-share))
        reach = 8 * (self.sigma + self.tau)
        return float(brentq(lambda t: float(self.step(np.array([t]))[0]) - share, -reach, 4 * reach, xtol=1e-13))

    def duration(self, low: float = 0.1, high: float = 0.9) -> float:
        """Time from a lower to a higher share of the way."""
        return self.instant(high) - self.instant(low)

    def scaled(self, factor: float) -> TrueEdge:
        """The same shape, slower."""
        return TrueEdge(sigma=self.sigma * factor, tau=self.tau * factor)

    def moved(self, name: str, by: float) -> TrueEdge:
        """With one parameter a little larger."""
        return TrueEdge(**{"sigma": self.sigma, "tau": self.tau, name: getattr(self, name) + by})


def made_to_last(sigma: float, tau: float, duration: float) -> TrueEdge:
    """An edge with that ratio of front end to pole which takes `duration` from 10 to 90 %."""
    raw = TrueEdge(sigma=sigma, tau=tau)
    return raw.scaled(duration / raw.duration())


def pulse(t: FloatArray, rise: TrueEdge, fall: TrueEdge, width: float) -> FloatArray:
    """A pulse whose light goes on at 0 and off at `width`."""
    return rise.step(t) - fall.step(t - width)


def rise_time_bound(t: FloatArray, rise: TrueEdge, fall: TrueEdge, width: float, noise: float) -> tuple[float, float]:
    """Cramer-Rao bounds of the standard deviations of the rise time and of its 50 % instant, white noise.

    Unknown are both levels, and for each edge its place and the parameters of its own family.
    """
    columns = [np.ones_like(t), pulse(t, rise, fall, width)]
    h = 1e-4
    d = h * rise.duration()
    columns.append((rise.step(t + d) - rise.step(t - d)) / (2 * d))
    for name in rise.parameters:
        d = h * max(getattr(rise, name), 1e-3 * rise.duration())
        columns.append((rise.moved(name, d).step(t) - rise.moved(name, -d).step(t)) / (2 * d))
    d = h * fall.duration()
    columns.append((fall.step(t - width + d) - fall.step(t - width - d)) / (2 * d))
    for name in fall.parameters:
        d = h * max(getattr(fall, name), 1e-3 * fall.duration())
        columns.append((fall.moved(name, d).step(t - width) - fall.moved(name, -d).step(t - width)) / (2 * d))
    design = np.stack(columns)
    scale = np.sqrt(np.sum(design**2, axis=1))
    inverse = np.linalg.pinv((design / scale[:, None]) @ (design / scale[:, None]).T, rcond=1e-12)
    covariance = noise**2 * inverse / np.outer(scale, scale)

    def by_parameter(quantity: Callable[[TrueEdge], float], place: float) -> float:
        gradient = np.zeros(len(columns))
        gradient[2] = place
        for k, name in enumerate(rise.parameters):
            d = h * max(getattr(rise, name), 1e-3 * rise.duration())
            gradient[3 + k] = (quantity(rise.moved(name, d)) - quantity(rise.moved(name, -d))) / (2 * d)
        return float(np.sqrt(gradient @ covariance @ gradient))

    return by_parameter(lambda edge: edge.duration(), 0.0), by_parameter(lambda edge: edge.instant(0.5), -1.0)


def coloured(rng: np.random.Generator, n: int, bandwidth_ratio: float | None) -> FloatArray:
    """Noise of standard deviation 1: white, or behind one pole whose corner is `bandwidth_ratio` of the sample rate."""
    if bandwidth_ratio is None:
        return rng.standard_normal(n)
    pole = np.exp(-2 * np.pi * bandwidth_ratio)
    from scipy.signal import lfilter

    lead = int(20 / (1 - pole)) + 10
    raw = lfilter([np.sqrt(1 - pole**2)], [1, -pole], rng.standard_normal(n + lead))
    return np.asarray(raw[lead:])
