"""The shape of an edge: one pole behind a Gaussian front end, fitted to many edges at once.

A step that begins at x0, through a Gaussian filter of width s and then one pole of time constant tau, is

    F(x) = Phi(z) - E(x),   E(x) = exp(u^2 / 2 - z u) Phi(z - u),   z = (x - x0) / s,   u = s / tau,

the distribution of the sum of a normal and an exponential variable. It spans the one-pole edge (s = 0, with its
corner) and the Gaussian edge (tau = 0). As the pole obeys tau dF/dx = Phi(z) - F = E, the derivatives are

    dF/dx0 = -E / tau,   dF/d ln s = phi(z) u - E u^2,   dF/d ln tau = -E ((x - x0) / tau - u^2) - phi(z) u.

An edge cut short by the end of its pulse heads for more than the level that it reaches; for such edges the
asymptote b is fitted too, and the shape is b F(x).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import erfcx, ndtr

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.waveform.least_squares import fit_rows

BoolArray = NDArray[np.bool_]

_ROOT_HALF = float(np.sqrt(0.5))
_ROOT_TWO_PI = float(np.sqrt(2 * np.pi))
FARTHEST = 1e8
"""Distance from the start of an edge, in s, beyond which nothing changes; its square must stay a number."""

LIMITS = (float(np.log(2e-3)), float(np.log(20.0)))
"""Natural logarithms between which tau and s are sought, in units in which an edge is about 1 wide."""


def shape_and_slope(x: FloatArray, x0: FloatArray, tau: FloatArray, s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """F and E of the module's formulas, broadcast over all arguments; E / tau is the slope."""
    z = np.clip((x - x0) / s, -FARTHEST, FARTHEST)
    u = s / tau
    early = u > z
    scaled = 0.5 * np.exp(-0.5 * z * z) * erfcx(np.where(early, u - z, 0.0) * _ROOT_HALF)
    plain = np.exp(np.minimum(0.5 * u * u - z * u, 0.0)) * ndtr(z - u)
    rest = np.where(early, scaled, plain)
    return ndtr(z) - rest, rest


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EdgeShapes:
    """Shapes fitted to edges, one row for each edge.

    `parameters` (n, 4): x0, ln tau, ln s, b. `jacobian` (n, 4, m): derivative of the shape at each sample by each
    parameter, zero where a parameter was held; `solver` (n, 4, m): what a change of each sample does to each
    parameter, linearised. `residual` (n, m). `good` (n,): whether the fit ended well.
    """

    parameters: FloatArray
    jacobian: FloatArray
    solver: FloatArray
    residual: FloatArray
    good: BoolArray

    def value(self, x: FloatArray) -> FloatArray:
        """Shape at x, shape (n, k) for x of shape (n, k)."""
        x0, tau, s, b = _unpacked(self.parameters)
        return np.asarray(b * shape_and_slope(x, x0, tau, s)[0])

    def slope(self, x: FloatArray) -> FloatArray:
        """Slope at x, shape (n, k)."""
        x0, tau, s, b = _unpacked(self.parameters)
        return np.asarray(b * shape_and_slope(x, x0, tau, s)[1] / tau)

    def gradient(self, x: FloatArray) -> FloatArray:
        """Derivatives of the shape at x by each parameter, shape (n, 4, k)."""
        return _model(x, self.parameters)[1]

    def select(self, which: NDArray[np.intp]) -> EdgeShapes:
        """Return some of the edges."""
        return EdgeShapes(
            parameters=self.parameters[which], jacobian=self.jacobian[which], solver=self.solver[which],
            residual=self.residual[which], good=self.good[which],
        )  # fmt: skip

    def crossings(self, fractions: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Where the shape passes each fraction, and how far a change of each sample moves that.

        Parameters
        ----------
        fractions : array, shape (n, k)

        Returns
        -------
        x : array, shape (n, k)
        gain : array, shape (n, k, m)
        """
        x = self.solve(fractions)
        slope = np.maximum(self.slope(x), 1e-3)
        moved = np.einsum("epk,epm->ekm", self.gradient(x), self.solver)
        return x, -moved / slope[:, :, None]

    def solve(self, fractions: FloatArray) -> FloatArray:
        """Where the shape passes each fraction, shape (n, k) for fractions of shape (n, k) below the asymptote."""
        x0, tau, s, _ = _unpacked(self.parameters)
        grid = x0 - 4 * s + (8 * s + 8 * tau) * np.linspace(0.0, 1.0, 65) ** 2
        values = self.value(grid)
        after = np.clip(np.sum(values[:, :, None] < fractions[:, None, :], axis=1), 1, grid.shape[1] - 1)
        low, high = np.take_along_axis(grid, after - 1, 1), np.take_along_axis(grid, after, 1)
        x = 0.5 * (low + high)
        for _ in range(6):  # Newton's method, kept inside the bracket
            x = np.clip(x + (fractions - self.value(x)) / np.maximum(self.slope(x), 1e-9), low, high)
        return np.asarray(x)


def _unpacked(parameters: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    return (
        parameters[:, 0:1], np.exp(parameters[:, 1:2]), np.exp(parameters[:, 2:3]), parameters[:, 3:4],
    )  # fmt: skip


def shape_and_derivatives(
    x: FloatArray, x0: FloatArray, tau: FloatArray, s: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """F and its derivatives by x0, ln tau and ln s, broadcast over all arguments (formulas of the module)."""
    value, rest = shape_and_slope(x, x0, tau, s)
    z, u = np.clip((x - x0) / s, -FARTHEST, FARTHEST), s / tau
    bell = np.exp(-0.5 * z * z) / _ROOT_TWO_PI
    return value, -rest / tau, -rest * ((x - x0) / tau - u * u) - bell * u, bell * u - rest * u * u


def _model(x: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    x0, tau, s, b = _unpacked(parameters)
    value, by_x0, by_tau, by_s = shape_and_derivatives(x, x0, tau, s)
    return b * value, np.stack((b * by_x0, b * by_tau, b * by_s, value), axis=1)


def first_guess(quarter: FloatArray) -> FloatArray:
    """First guess of x0, ln tau and ln s from x at 10, 50 and 90 %, both of shape (n, 3): width and skewness fix all three."""
    width = np.maximum(quarter[:, 2] - quarter[:, 0], 1e-3)
    skew = (quarter[:, 2] - quarter[:, 1]) / np.maximum(quarter[:, 1] - quarter[:, 0], 1e-9)
    # Rough laws read off the shape itself; they only have to be near.
    share = np.interp(skew, (1.0, 1.25, 1.73, 2.47, 2.74), (0.02, 0.29, 0.386, 0.44, 0.455))
    spread = np.interp(skew, (1.0, 1.25, 1.73, 2.47, 2.74), (0.39, 0.29, 0.193, 0.088, 0.02))
    tau, s = share * width, spread * width
    lead = np.interp(spread / share, (0.05, 0.2, 0.5, 1.0, 20.0), (0.693, 0.71, 0.78, 0.86, 1.0)) * tau
    return np.stack((quarter[:, 1] - lead, np.log(tau), np.log(s)), axis=1)


def fit_shapes(
    x: FloatArray, progress: FloatArray, weight: FloatArray, *, quarter: FloatArray, cut_short: BoolArray
) -> EdgeShapes:
    """Fit the shape to every edge by weighted least squares (Levenberg and Marquardt), all edges at once.

    Parameters
    ----------
    x, progress, weight : arrays, shape (n, m)
        Abscissa in units in which an edge is about 1 wide, progress from 0 to 1, and weights >= 0.
    quarter : array, shape (n, 3)
        Rough x at 10, 50 and 90 %.
    cut_short : array of bool, shape (n,)
        Edges whose asymptote is fitted.
    """
    start = np.concatenate((first_guess(quarter), np.ones((quarter.shape[0], 1))), axis=1)
    free = np.ones(start.shape, dtype=np.bool_)
    free[:, 3] = cut_short
    fits = fit_rows(_model, start, x, progress, weight, free=free, bounded=_bounded)
    return EdgeShapes(
        parameters=fits.parameters, jacobian=fits.jacobian, solver=fits.solver, residual=fits.residual, good=fits.good
    )  # fmt: skip


def _bounded(parameters: FloatArray) -> FloatArray:
    parameters[:, 1:3] = np.clip(parameters[:, 1:3], *LIMITS)
    parameters[:, 3] = np.clip(parameters[:, 3], 0.8, 20.0)
    return parameters
