"""Propagation of uncertainty for correlated inputs, and coverage factors for few repeats."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from scipy import special

from darkedge.analysis.captures import FloatArray

Model = Callable[[FloatArray], FloatArray]


def sensitivities(model: Model, at: FloatArray, *, steps: FloatArray) -> FloatArray:
    """Partial derivatives of a model by central differences, shape (outputs, inputs).

    `steps` has the shape of `at`, shape (inputs,): how far each input is moved either way. The standard
    uncertainty of each input is a good step (JCGM 100:2008, 5.1.3 note 2).
    """
    columns = []
    for place in range(at.size):
        up, down = at.copy(), at.copy()
        up[place] += steps[place]
        down[place] -= steps[place]
        columns.append((model(up) - model(down)) / (2 * steps[place]))
    return np.column_stack(columns)


def propagate(model: Model, at: FloatArray, covariance: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Value and covariance of a model's outputs for correlated inputs.

    Parameters
    ----------
    model : callable
        Takes inputs of shape (inputs,), returns outputs of shape (outputs,).
    at : array, shape (inputs,)
        Estimates.
    covariance : array, shape (inputs, inputs)
        Their covariance; an input known exactly has a zero row.

    Returns
    -------
    array, shape (outputs,)
    array, shape (outputs, outputs)

    References
    ----------
    JCGM 100:2008 (GUM), 5.2.2, first order; JCGM 102:2011, 6.2 for several outputs.
    """
    u = np.sqrt(np.diag(covariance))
    steps = np.where(u > 0, 1e-2 * u, 1e-6 * np.maximum(np.abs(at), 1e-12))
    slopes = sensitivities(model, at, steps=steps)
    return model(at), np.asarray(slopes @ covariance @ slopes.T, dtype=np.float64)


def coverage_factor(probability: float, freedom: float) -> float:
    """Two-sided coverage factor: the t quantile of JCGM 100:2008, table G.2."""
    share = (1 + probability) / 2
    return float(special.ndtri(share) if math.isinf(freedom) else special.stdtrit(freedom, share))
