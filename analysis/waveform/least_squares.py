"""Least squares for many small fits at once: one row of samples and one row of parameters for each."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.captures import FloatArray

IntArray = NDArray[np.intp]

Model = Callable[[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]
"""From x (n, m) and parameters (n, p) to values (n, m) and their derivatives by the parameters (n, p, m)."""

ITERATIONS = 25
LEAST_GAIN = 3e-5
"""Share of the sum of squares that a step must promise to be worth another: with the hundred-odd samples of an
edge, a step that wins less moves no crossing by a tenth of its uncertainty."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RowFits:
    """Fits, one row each.

    `parameters` (n, p); `jacobian` (n, p, m), zero where a parameter was held; `solver` (n, p, m): what a change of each
    sample does to each parameter, linearised; `residual` (n, m); `good` (n,): whether the fit ended in finite numbers.
    """

    parameters: FloatArray
    jacobian: FloatArray
    solver: FloatArray
    residual: FloatArray
    good: NDArray[np.bool_]


def fit_rows(
    model: Model,
    start: FloatArray,
    x: FloatArray,
    y: FloatArray,
    weight: FloatArray,
    *,
    free: NDArray[np.bool_],
    bounded: Callable[[FloatArray], FloatArray],
) -> RowFits:
    """Fit every row by weighted least squares (Levenberg and Marquardt).

    Parameters
    ----------
    model : callable
        Values and derivatives, all rows at once.
    start : array, shape (n, p)
        Parameters to start from.
    x, y, weight : arrays, shape (n, m)
        Samples and their weights >= 0; padding has weight 0.
    free : array of bool, shape (n, p)
        Parameters that are fitted; the others stay as they start.
    bounded : callable
        Puts parameters back between their limits.

    References
    ----------
    Marquardt, J. SIAM 11, 431 (1963), with the damping on the scaled diagonal.
    """
    parameters = start
    damping = np.full(x.shape[0], 1e-3)
    value, jacobian = model(x, parameters)
    residual = y - value
    cost = np.sum(weight * residual**2, axis=1)
    unit = np.eye(start.shape[1])
    for _ in range(ITERATIONS):
        normal, pull = _normal_equations(jacobian, residual, weight, free)
        damped = normal + (damping[:, None] * np.einsum("eii->ei", normal) + 1e-12)[:, :, None] * unit
        step = np.linalg.solve(damped, pull[:, :, None])[:, :, 0] * free
        tried = bounded(parameters + np.clip(step, -1.0, 1.0))
        new_value, new_jacobian = model(x, tried)
        new_residual = y - new_value
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
    return _finished(parameters, jacobian * free[:, :, None], residual, weight, free)


def _normal_equations(
    jacobian: FloatArray, residual: FloatArray, weight: FloatArray, free: NDArray[np.bool_]
) -> tuple[FloatArray, FloatArray]:
    weighted = jacobian * weight[:, None, :]
    normal = weighted @ jacobian.transpose(0, 2, 1)
    keep = free[:, :, None] & free[:, None, :]
    normal = normal * keep + (~free)[:, :, None] * np.eye(free.shape[1])
    return normal, (weighted @ residual[:, :, None])[:, :, 0] * free


def _finished(
    parameters: FloatArray, jacobian: FloatArray, residual: FloatArray, weight: FloatArray, free: NDArray[np.bool_]
) -> RowFits:
    normal, _ = _normal_equations(jacobian, residual, weight, free)
    # A ridge far below what any parameter that matters has: a width at its lower limit has no derivative.
    ridge = 1e-6 * np.einsum("eii->ei", normal).max(axis=1) + 1e-12
    inverse = np.linalg.inv(normal + ridge[:, None, None] * np.eye(free.shape[1]))
    solver = inverse @ (jacobian * weight[:, None, :])
    good = np.all(np.isfinite(solver), axis=(1, 2)) & np.all(np.isfinite(residual), axis=1)
    return RowFits(parameters=parameters, jacobian=jacobian, solver=solver, residual=residual, good=good)


RowModel = Callable[[IntArray, FloatArray], tuple[FloatArray, FloatArray]]
"""From rows (k,) and their parameters (k, p) to whitened residuals (k, m) and whitened derivatives of the model (k, p, m)."""

MOST_STEPS = 40
LEAST_WON = 1e-3
"""What a step must promise to win of chi-squared, in units of what one entry leaves, to be worth another."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WhiteFits:
    """Fits of whitened rows.

    `parameters` (n, p), `residual` (n, m), `derivative` (n, p, m), `inverse` (n, p, p) of the normal matrix, and `good` (n,): ended in
    finite numbers before the steps ran out.
    """

    parameters: FloatArray
    residual: FloatArray
    derivative: FloatArray
    inverse: FloatArray
    good: NDArray[np.bool_]


def fit_white_rows(
    model: RowModel, start: FloatArray, *, entries: FloatArray, bounded: Callable[[FloatArray], FloatArray]
) -> WhiteFits:
    """Least squares (Levenberg and Marquardt) of many rows whose noise was made white; a row that has ended is left alone.

    Parameters
    ----------
    model : callable
        Whitened residuals and derivatives of some rows.
    start : array, shape (n, p)
    entries : array, shape (n,)
        How many entries of each row hold data.
    bounded : callable
        Puts parameters back between their limits.

    References
    ----------
    Marquardt, J. SIAM 11, 431 (1963), with the damping on the scaled diagonal.
    """
    rows = np.arange(start.shape[0])
    parameters = start.copy()
    residual, derivative = model(rows, parameters)
    cost = np.sum(residual**2, axis=1)
    damping = np.full(rows.size, 1e-3)
    ended = np.zeros(rows.size, dtype=np.bool_)
    freedom = np.maximum(entries - start.shape[1], 1.0)
    for _ in range(MOST_STEPS):
        r, d = residual[rows], derivative[rows]
        step, tried, pull = _step(parameters[rows], r, d, damping[rows], bounded)
        new_residual, new_derivative = model(rows, tried)
        new_cost = np.sum(new_residual**2, axis=1)
        better = new_cost <= cost[rows]
        taken = rows[better]
        promised = np.sum(step * pull, axis=1)
        enough = promised <= LEAST_WON * cost[rows] / freedom[rows]
        parameters[taken], cost[taken] = tried[better], new_cost[better]
        residual[taken], derivative[taken] = new_residual[better], new_derivative[better]
        damping[rows] = np.clip(np.where(better, damping[rows] * 0.1, damping[rows] * 10.0), 1e-9, 1e9)
        done = enough | (cost[rows] < 1e-16) | ~np.isfinite(cost[rows]) | (damping[rows] >= 1e9)
        ended[rows[done]] = True
        rows = rows[~done]
        if rows.size == 0:
            break
    return _ended(parameters, residual, derivative, ended)


def _step(
    parameters: FloatArray,
    residual: FloatArray,
    derivative: FloatArray,
    damping: FloatArray,
    bounded: Callable[[FloatArray], FloatArray],
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Damped step of each row, the parameters it leads to, and the pull; a parameter that would leave its bounds is held."""
    normal, pull = derivative @ derivative.transpose(0, 2, 1), (derivative @ residual[:, :, None])[:, :, 0]
    diagonal = np.einsum("eii->ei", normal)
    size = np.sqrt(np.maximum(diagonal, 1e-12 * diagonal.max(axis=1, keepdims=True) + 1e-300))
    scaled = normal / (size[:, :, None] * size[:, None, :])
    free = np.ones(parameters.shape, dtype=np.bool_)
    unit = np.eye(parameters.shape[1])
    for _ in range(2):
        system = scaled * (free[:, :, None] & free[:, None, :]) + (damping[:, None, None] + 1e-9) * unit
        system = system + (~free)[:, :, None] * unit
        step = np.linalg.solve(system, (free * pull / size)[:, :, None])[:, :, 0] / size
        step = step / np.maximum(np.max(np.abs(step), axis=1, keepdims=True), 1.0)
        tried = bounded(parameters + step)
        held = free & (np.abs(tried - parameters - step) > 1e-12) & (tried == parameters)
        if not bool(np.any(held)):
            break
        free &= ~held
    return tried - parameters, tried, pull


def _ended(parameters: FloatArray, residual: FloatArray, derivative: FloatArray, ended: NDArray[np.bool_]) -> WhiteFits:
    normal = derivative @ derivative.transpose(0, 2, 1)
    diagonal = np.einsum("eii->ei", normal)
    # A ridge far below what any parameter that matters has: a width at its lower limit has no derivative.
    ridge = 1e-6 * diagonal.max(axis=1) + 1e-300
    inverse = np.linalg.inv(normal + ridge[:, None, None] * np.eye(parameters.shape[1]))
    good = ended & np.all(np.isfinite(inverse), axis=(1, 2)) & np.all(np.isfinite(residual), axis=1)
    return WhiteFits(parameters=parameters, residual=residual, derivative=derivative, inverse=inverse, good=good)
