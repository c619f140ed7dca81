"""Capacitance from a table of C against V, as a bridge gives it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.errors import FitError
from darkedge.analysis.measurement import Estimate

TABLE_MODELS: Mapping[str, tuple[str, ...]] = {
    "abrupt": ("c_j0_F", "v_bi_V"),
    "linearly_graded": ("c_j0_F", "v_bi_V"),
    "graded": ("c_j0_F", "v_bi_V", "grading"),
    "abrupt_with_stray": ("c_j0_F", "v_bi_V", "c_stray_F"),
    "graded_with_stray": ("c_j0_F", "v_bi_V", "grading", "c_stray_F"),
}
"""Models of a table and their free parameters: m = 1/2, m = 1/3, m free, each alone or with a parallel capacitance."""

_FIXED_GRADING = {"abrupt": 0.5, "linearly_graded": 1 / 3, "abrupt_with_stray": 0.5}
DEGENERATE_CORRELATION = 0.99
"""Correlation of two parameters beyond which the data do not tell them apart."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TableFit:
    """Fit of a C-V table: parameters with standard uncertainties and correlations, and the root mean square residual."""

    model: str
    parameters: Mapping[str, Estimate]
    correlation: Mapping[tuple[str, str], float]
    rms_F: float


def fit_capacitance_table(
    bias_V: FloatArray, c_F: FloatArray, *, model: str = "graded", u_c_F: FloatArray | None = None
) -> TableFit:
    """Fit C(V) = C_stray + C_j0 (1 + V/V_bi)^-m to a table.

    Parameters
    ----------
    bias_V, c_F : array, shape (n,)
        Reverse bias and capacitance.
    model : str
        One of `TABLE_MODELS`.
    u_c_F : array, shape (n,), optional
        Standard uncertainties; without them all rows count alike and the scatter gives the uncertainty.

    Raises
    ------
    FitError
        Too few rows, an unknown model, capacitance that does not fall with bias, or parameters that the data do not tell apart (two
        correlated beyond 0.99: m and a parallel capacitance over a range of about one built-in voltage are).
    """
    names = TABLE_MODELS.get(model)
    if names is None:
        raise FitError("unknown model of a C-V table", found=repr(model), wanted=", ".join(TABLE_MODELS))
    if bias_V.size != c_F.size or bias_V.size < len(names) + 2:
        raise FitError(
            "too few rows for this model",
            found=str(bias_V.size),
            wanted=f"at least {len(names) + 2} of bias and capacitance",
        )
    if not (np.all(np.isfinite(bias_V)) and np.all(np.isfinite(c_F)) and np.all(c_F > 0)):
        raise FitError("bias or capacitance is not a positive number", mend="leave out the rows without a reading")
    if np.polyfit(bias_V, c_F, 1)[0] >= 0:
        raise FitError(
            "the capacitance does not fall with reverse bias", mend="check the sign and the column of the bias"
        )
    weights = np.ones_like(c_F) / c_F.mean() if u_c_F is None else 1.0 / u_c_F
    theta, jacobian, residual = _solve(bias_V, c_F, weights, model, names)
    freedom = bias_V.size - len(names)
    scale = float(residual @ residual) / freedom if u_c_F is None else 1.0
    covariance = np.linalg.pinv(jacobian.T @ jacobian) * scale
    u_theta = np.sqrt(np.diag(covariance))
    correlation = {
        (a, b): float(covariance[i, j] / u_theta[i] / u_theta[j])
        for i, a in enumerate(names)
        for j, b in enumerate(names)
        if i < j
    }
    _refuse_degenerate(correlation, names)
    values = np.exp(theta)
    parameters = {
        name: Estimate(
            value=float(v), u=float(v * u), lo95=float(v * np.exp(-1.96 * u)), hi95=float(v * np.exp(1.96 * u))
        )
        for name, v, u in zip(names, values, u_theta, strict=True)
    }
    predicted = _model(theta, bias_V, model, names)
    return TableFit(
        model=model,
        parameters=parameters,
        correlation=correlation,
        rms_F=float(np.sqrt(np.mean((predicted - c_F) ** 2))),
    )


def _model(theta: FloatArray, bias_V: FloatArray, model: str, names: tuple[str, ...]) -> FloatArray:
    values = dict(zip(names, np.exp(theta), strict=True))
    grading = values.get("grading", _FIXED_GRADING.get(model, 0.5))
    junction = values["c_j0_F"] * np.maximum(1 + bias_V / values["v_bi_V"], 1e-3) ** -grading
    return np.asarray(junction + values.get("c_stray_F", 0.0), dtype=np.float64)


def _solve(
    bias_V: FloatArray, c_F: FloatArray, weights: FloatArray, model: str, names: tuple[str, ...]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    start = {"c_j0_F": c_F.max(), "v_bi_V": 0.7, "grading": 0.45, "c_stray_F": 0.05 * c_F.max()}

    def residuals(theta: FloatArray) -> FloatArray:
        return (_model(theta, bias_V, model, names) - c_F) * weights

    best = None
    for v_bi in (0.5, 0.7, 1.2):
        guess = np.log([{**start, "v_bi_V": v_bi}[name] for name in names])
        found = least_squares(residuals, guess, xtol=1e-14, ftol=1e-14, gtol=1e-14)
        if best is None or found.cost < best.cost:
            best = found
    assert best is not None
    return (
        np.asarray(best.x, dtype=np.float64),
        np.asarray(best.jac, dtype=np.float64),
        np.asarray(best.fun, dtype=np.float64),
    )


def _refuse_degenerate(correlation: Mapping[tuple[str, str], float], names: tuple[str, ...]) -> None:
    if len(names) < 4:
        return
    worst = max(correlation, key=lambda pair: abs(correlation[pair]))
    if abs(correlation[worst]) > DEGENERATE_CORRELATION:
        raise FitError(
            f"the data do not tell {worst[0]} and {worst[1]} apart",
            found=f"correlation {correlation[worst]:.4f}",
            wanted=f"at most {DEGENERATE_CORRELATION}",
            mend="fix the grading, give the stray capacitance, or measure to several times the built-in voltage",
        )
