"""Dark current against bias: diffusion, generation with the depletion width, shunt.

I(V) = I_s (1 - exp(-qV/kT)) + I_g ((1 + V/V_bi)^m - 1) / ((1 + 1/V_bi)^m - 1) + V / R_shunt, I_g the generation current at one volt. Diffusion saturates within a tenth of a volt, generation follows the
depletion width, the shunt is a straight line (S. M. Sze, Physics of Semiconductor Devices, p-n junction current; A. Chilingarov,
RD50 note 2011: generation current in proportion to the depleted width).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence

import numpy as np
from scipy import constants, optimize, stats

from darkedge.analysis.captures import FloatArray, Kind, OutputConnection
from darkedge.analysis.dark.results import DarkFit, DarkPoint
from darkedge.analysis.dark.traces import junction_bias
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.measurement import Estimate, Measurement

ASSUMED_V_BI_V = 0.6
ASSUMED_GRADING = 0.5
"""Built-in voltage and grading of the depletion width where no junction fit says better; named in the notes."""
_TERMS = ("saturation", "generation", "shunt")
_FEWEST = 4
_BEYOND_RATIO = 0.2
"""How far beyond the measured biases a prediction is given, of their span."""


def fit_dark_current(measurements: Sequence[Measurement], *, fixture: Fixture = UNKNOWN_FIXTURE) -> list[DarkFit]:
    """Fit dark current against bias for each device and element.

    Parameters
    ----------
    measurements : sequence of Measurement
        Rows of kind `dark` are used; repeats at one bias stay points of their own.
    fixture : Fixture
        Gives the resistance across which the bias drops.

    Returns
    -------
    list of DarkFit
        One for each device and element with at least one dark point. Terms are chosen by Akaike's criterion, corrected for few
        points; with fewer than four values, or where no combination fits (chance below 0.1 %), `model` is empty and a
        note says why.
    """
    groups: dict[tuple[str | None, str | None, int | None], list[Measurement]] = {}
    for row in measurements:
        if row.conditions.kind is Kind.DARK and "dark_current_A" in row.quantities:
            groups.setdefault((row.conditions.lot, row.conditions.device, row.element), []).append(row)
    return [_fit_one(device, element, rows, fixture) for (_, device, element), rows in groups.items()]


def predict_dark_current(fit: DarkFit, bias_V: float) -> Estimate | None:
    """Dark current at a bias between (or a little beyond) those measured; `None` elsewhere.

    By the model where there is one; else along straight lines through the measured points, on a logarithmic scale of current. The
    uncertainty is that of the neighbouring points, widened by the scatter of the fit. Bounds predict a bound: the nearest
    measured bias above, whose current is not smaller.
    """
    values = sorted(
        (p.bias_V, p.current_A.value, p.current_A.u)
        for p in fit.points
        if p.current_A.value is not None and p.current_A.u is not None
    )
    if len(values) < 2:
        return _bound(fit, bias_V)
    biases = np.array([v[0] for v in values])
    span = biases[-1] - biases[0]
    if not biases[0] - _BEYOND_RATIO * span <= bias_V <= biases[-1] + _BEYOND_RATIO * span:
        return None
    currents, us = np.array([v[1] for v in values]), np.array([v[2] for v in values])
    u = float(np.interp(bias_V, biases, us / currents))
    if fit.model:
        value = _model_current(fit, bias_V)
        return Estimate(value=value, u=value * u * max(1.0, math.sqrt(fit.chi2_per_dof or 1.0)))
    if not biases[0] <= bias_V <= biases[-1]:
        return None
    value = float(np.exp(np.interp(bias_V, biases, np.log(currents))))
    return Estimate(value=value, u=value * u)


def _bound(fit: DarkFit, bias_V: float) -> Estimate | None:
    bounds = sorted((p.bias_V, p.current_A.hi95) for p in fit.points if p.current_A.hi95 is not None)
    above = [hi for at, hi in bounds if at >= bias_V * (1 - 1e-6) and hi is not None]
    return Estimate(hi95=above[0]) if above else None


def _fit_one(device: str | None, element: int | None, rows: Sequence[Measurement], fixture: Fixture) -> DarkFit:
    points = tuple(sorted((p for row in rows if (p := _point(row, fixture)) is not None), key=lambda p: p.bias_V))
    valued = [p for p in points if p.current_A.value is not None and p.current_A.u]
    distinct = len({round(p.bias_V, 2) for p in valued})
    if distinct < _FEWEST:
        note = (
            f"Biases with a value of the dark current: {distinct}; a model wants at least {_FEWEST}. "
            "Measure at more biases, or with a larger sense resistor where only a bound is known."
        )
        return DarkFit(device=device, element=element, points=points, notes=(note,))
    return _fit_terms(device, element, points, valued)


def _point(row: Measurement, fixture: Fixture) -> DarkPoint | None:
    bias = row.conditions.bias_V
    if bias is None:
        return None
    current = row.quantities["dark_current_A"]
    load = row.conditions.load_ohm
    across_load = row.conditions.output_connection in (None, OutputConnection.LOAD_TO_GROUND)
    if across_load and load is not None and current.value is not None:
        resistance = fixture.effective_load(load, row.conditions.input_ohm).value
        bias = junction_bias(bias, current.value, resistance or load)
    return DarkPoint(
        bias_V=bias,
        current_A=current,
        temperature_degC=row.conditions.temperature_degC,
        capture=row.capture,
        flags=row.flags,
    )


def _fit_terms(
    device: str | None, element: int | None, points: tuple[DarkPoint, ...], valued: Sequence[DarkPoint]
) -> DarkFit:
    bias = np.array([p.bias_V for p in valued])
    current = np.array([p.current_A.value for p in valued], dtype=np.float64)
    u = np.array([p.current_A.u for p in valued], dtype=np.float64)
    shapes = _shapes(bias)
    best: tuple[float, tuple[int, ...], FloatArray, float] | None = None
    for size in (1, 2, 3):
        for terms in itertools.combinations(range(3), size):
            if len(valued) - size < 1:
                continue
            solved, residual = optimize.nnls(shapes[:, terms] / u[:, None], current / u)
            if np.any(solved <= 0):
                continue
            chi2 = float(residual) ** 2
            criterion: float = chi2 + 2 * size + 2 * size * (size + 1) / max(len(valued) - size - 1, 0.5)
            if best is None or criterion < best[0]:
                best = (criterion, terms, solved, chi2)
    freedom = 0 if best is None else len(valued) - len(best[1])
    if best is None or stats.chi2.sf(best[3], freedom) < 1e-3:
        return DarkFit(device=device, element=element, points=points, notes=(_misfit(best, freedom),))
    _, terms, solved, chi2 = best
    weighted = shapes[:, terms] / u[:, None]
    covariance = np.asarray(np.linalg.inv(weighted.T @ weighted), dtype=np.float64)
    note = (
        f"Generation is taken to follow the depletion width of a junction with V_bi {ASSUMED_V_BI_V} V and grading "
        f"{ASSUMED_GRADING}: an assumption, stated, not fitted."
    )
    return DarkFit(
        device=device,
        element=element,
        points=points,
        model="+".join(_TERMS[k] for k in terms),
        parameters=_parameters(terms, solved, covariance),
        chi2_per_dof=chi2 / freedom,
        notes=(note,) if 1 in terms else (),
    )


def _misfit(best: tuple[float, tuple[int, ...], FloatArray, float] | None, freedom: int) -> str:
    found = "no combination" if best is None else f"chi-squared {best[3]:.3g} for {freedom} degrees of freedom"
    return (
        f"Diffusion, generation and shunt together do not describe these points ({found}); they are shown without a model. "
        "Look for light, drift of temperature, or breakdown at the highest bias."
    )


def _parameters(terms: tuple[int, ...], solved: FloatArray, covariance: FloatArray) -> dict[str, Estimate]:
    found = {}
    for place, term in enumerate(terms):
        value, u = float(solved[place]), float(math.sqrt(covariance[place, place]))
        if term == 2:
            value, u = 1.0 / value, u / value**2
        name = ("saturation_A", "generation_A", "shunt_ohm")[term]
        found[name] = Estimate(value=value, u=u, lo95=max(value - 1.96 * u, 0.0), hi95=value + 1.96 * u)
    return found


def _shapes(bias_V: FloatArray) -> FloatArray:
    """Columns of the three terms at each bias, shape (n, 3)."""
    thermal_V = constants.k * 298.15 / constants.e
    width = (1 + np.maximum(bias_V, 0) / ASSUMED_V_BI_V) ** ASSUMED_GRADING - 1
    per_volt = (1 + 1 / ASSUMED_V_BI_V) ** ASSUMED_GRADING - 1
    return np.column_stack([-np.expm1(-bias_V / thermal_V), width / per_volt, bias_V])


def _model_current(fit: DarkFit, bias_V: float) -> float:
    row = _shapes(np.array([bias_V]))[0]
    parts = fit.parameters
    total = 0.0
    for name, place in (("saturation_A", 0), ("generation_A", 1)):
        if name in parts:
            total += (parts[name].value or 0.0) * row[place]
    if "shunt_ohm" in parts:
        total += row[2] / (parts["shunt_ohm"].value or math.inf)
    return float(total)
