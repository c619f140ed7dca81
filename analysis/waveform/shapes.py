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

BoolArray = NDArray[np.bool_]

ITERATIONS = 25
LEAST_GAIN = 3e-5
"""Share of the sum of squares that a step must win to be worth another: with the hundred-odd samples of an edge,
a step that wins less moves no crossing by a tenth of its uncertainty."""
_ROOT_HALF = float(np.sqrt(0.5))
_ROOT_TWO_PI = float(np.sqrt(2 * np.pi))
_LIMITS = (np.log(2e-3), np.log(20.0))


def shape_and_slope(x: FloatArray, x0: FloatArray, tau: FloatArray, s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """F and E of the module's formulas, broadcast over all arguments; E / tau is the slope."""
    z = (x - x0) / s
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


def _model(x: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    x0, tau, s, b = _unpacked(parameters)
    value, rest = shape_and_slope(x, x0, tau, s)
    z, u = (x - x0) / s, s / tau
    bell = np.exp(-0.5 * z * z) / _ROOT_TWO_PI
    by_tau = -rest * ((x - x0) / tau - u * u) - bell * u
    jacobian = np.stack((-b * rest / tau, b * by_tau, b * (bell * u - rest * u * u), value), axis=1)
    return b * value, jacobian


def _start(quarter: FloatArray) -> FloatArray:
    """First guess from x at 10, 50 and 90 %, shape (n, 3): width and skewness of the edge fix all three parameters."""
    width = quarter[:, 2] - quarter[:, 0]
    skew = (quarter[:, 2] - quarter[:, 1]) / np.maximum(quarter[:, 1] - quarter[:, 0], 1e-9)
    # Rough laws read off the shape itself; they only have to be near.
    share = np.interp(skew, (1.0, 1.25, 1.73, 2.47, 2.74), (0.02, 0.29, 0.386, 0.44, 0.455))
    spread = np.interp(skew, (1.0, 1.25, 1.73, 2.47, 2.74), (0.39, 0.29, 0.193, 0.088, 0.02))
    tau, s = share * width, spread * width
    lead = np.interp(spread / share, (0.05, 0.2, 0.5, 1.0, 20.0), (0.693, 0.71, 0.78, 0.86, 1.0)) * tau
    return np.stack((quarter[:, 1] - lead, np.log(tau), np.log(s), np.ones_like(tau)), axis=1)


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

    References
    ----------
    Marquardt, J. SIAM 11, 431 (1963), with the damping on the scaled diagonal.
    """
    parameters = _start(quarter)
    free = np.ones_like(parameters)
    free[:, 3] = cut_short
    damping = np.full(x.shape[0], 1e-3)
    value, jacobian = _model(x, parameters)
    residual = progress - value
    cost = np.sum(weight * residual**2, axis=1)
    for _ in range(ITERATIONS):
        normal, pull = _normal_equations(jacobian, residual, weight, free)
        diagonal = np.einsum("eii->ei", normal)
        damped = normal + (damping[:, None] * diagonal + 1e-12)[:, :, None] * np.eye(4)
        step = np.linalg.solve(damped, pull[:, :, None])[:, :, 0] * free
        tried = _bounded(parameters + np.clip(step, -1.0, 1.0))
        new_value, new_jacobian = _model(x, tried)
        new_residual = progress - new_value
        new_cost = np.sum(weight * new_residual**2, axis=1)
        better = new_cost <= cost
        parameters = np.where(better[:, None], tried, parameters)
        residual = np.where(better[:, None], new_residual, residual)
        jacobian = np.where(better[:, None, None], new_jacobian, jacobian)
        cost = np.where(better, new_cost, cost)
        damping = np.clip(np.where(better, damping * 0.2, damping * 8.0), 1e-9, 1e9)
        promised = np.sum(step * pull, axis=1)  # twice what the step would win, were the problem linear
        if bool(np.all((promised <= LEAST_GAIN * cost) | (cost < 1e-14))):
            break
    return _finished(parameters, jacobian, residual, weight, free)


def _bounded(parameters: FloatArray) -> FloatArray:
    parameters[:, 1:3] = np.clip(parameters[:, 1:3], *_LIMITS)
    parameters[:, 3] = np.clip(parameters[:, 3], 0.8, 20.0)
    return parameters


def _normal_equations(
    jacobian: FloatArray, residual: FloatArray, weight: FloatArray, free: FloatArray
) -> tuple[FloatArray, FloatArray]:
    weighted = jacobian * weight[:, None, :]
    normal = weighted @ jacobian.transpose(0, 2, 1)
    keep = free[:, :, None] * free[:, None, :]
    normal = normal * keep + (1.0 - free)[:, :, None] * np.eye(4)
    return normal, (weighted @ residual[:, :, None])[:, :, 0] * free


def _finished(
    parameters: FloatArray, jacobian: FloatArray, residual: FloatArray, weight: FloatArray, free: FloatArray
) -> EdgeShapes:
    jacobian = jacobian * free[:, :, None]
    normal, _ = _normal_equations(jacobian, residual, weight, free)
    # A ridge far below what any parameter that matters has: a width at its lower limit has no derivative.
    ridge = 1e-6 * np.einsum("eii->ei", normal).max(axis=1)
    inverse = np.linalg.inv(normal + ridge[:, None, None] * np.eye(4))
    solver = inverse @ (jacobian * weight[:, None, :])
    good = np.all(np.isfinite(solver), axis=(1, 2)) & np.all(np.isfinite(residual), axis=1)
    return EdgeShapes(parameters=parameters, jacobian=jacobian, solver=solver, residual=residual, good=good)
