"""Least squares for many small fits at once: one row of samples and one row of parameters for each."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.captures import FloatArray

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
