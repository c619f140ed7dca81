"""Dark current against bias: diffusion, generation with the depletion width, shunt.

I(V) = I_s (1 - exp(-qV/kT)) + I_g (w(V) - 1) / (w(1 V) - 1) + V / R_shunt, w(V) the depletion width over that at zero bias and I_g
what generation adds by one volt. What saturates within a tenth of a volt is diffusion and whatever is generated in the width that is
there at zero bias; generation grows with the width that the bias adds; the shunt is a straight line.
(S. M. Sze, Physics of Semiconductor Devices, p-n junction current; A. Chilingarov, RD50 note 2011: generation in proportion to the
depleted width; P. U. Calzolari and S. Graffi, Solid-State Electron. 15 (1972) 1003: the width that generates is less than
that depleted. Both are sums of these terms.)
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import constants, optimize, stats

from darkedge.analysis.captures import DeviceKind, FloatArray, Kind, OutputConnection
from darkedge.analysis.dark.current import junction_bias
from darkedge.analysis.dark.results import ASSUMED, DarkFit, DarkPoint, Depletion
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.measurement import Estimate, Measurement

_TERMS = ("saturation", "generation", "shunt")
_FEWEST = 4
_MISFIT_CHANCE = 1e-3
_SAME_BIAS_RATIO = 0.01
_SAME_TEMPERATURE_K = 1.0
"""Dark current doubles every eight to ten kelvin, so one kelvin is a tenth of it."""
_BEYOND_RATIO = 0.2
"""How far beyond the measured biases a prediction is given, of their span."""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Values:
    """Points that carry a value and belong together, as arrays of shape (n,), in order of bias."""

    bias_V: FloatArray
    current_A: FloatArray
    u_A: FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class _Solution:
    terms: tuple[int, ...]
    coefficients: FloatArray
    covariance: FloatArray
    chi2: float
    freedom: int
    criterion: float


def fit_dark_current(
    measurements: Sequence[Measurement],
    *,
    fixture: Fixture = UNKNOWN_FIXTURE,
    depletion: Depletion = ASSUMED,
) -> list[DarkFit]:
    """Fit dark current against bias for each device and element.

    Non-negative least squares, weighted by the uncertainties; terms are kept by Akaike's criterion, corrected for few points.

    Parameters
    ----------
    measurements : sequence of Measurement
        Rows of kind `dark` are used; repeats at one bias stay points of their own.
    fixture : Fixture
        Gives the resistance across which the bias drops.
    depletion : Depletion
        How the depletion width grows, from a junction fit where there is one.

    Returns
    -------
    list of DarkFit
        One for each device and element with at least one dark point. `model` is empty, and a note says why, where fewer
        than four biases carry a value at one temperature, or where no combination fits (chance below 0.1 %). Points that
        drift are shown and not fitted.

    References
    ----------
    C. L. Lawson and R. J. Hanson, Solving Least Squares Problems, ch. 23. N. Sugiura, Commun. Stat. A 7 (1978) 13: the corrected criterion.
    """
    groups: dict[tuple[str | None, str | None, int | None], list[Measurement]] = {}
    for row in measurements:
        if row.conditions.kind is Kind.DARK and "dark_current_A" in row.quantities:
            groups.setdefault((row.conditions.lot, row.conditions.device, row.element), []).append(row)
    return [_fit_one(device, element, rows, fixture, depletion) for (_, device, element), rows in groups.items()]


def predict_dark_current(fit: DarkFit, bias_V: float) -> Estimate | None:
    """Dark current at a bias between (or a little beyond) those measured; `None` elsewhere.

    By the model where there is one, up to a fifth of the span beyond the measured biases; else, between them only, along straight lines on a
    logarithmic scale of current. The uncertainty is that of the neighbouring points, widened by the scatter of the fit, or
    by what a straight line on a linear scale would give instead. Bounds predict a bound: that at the nearest measured bias
    above, whose current is not smaller.
    """
    values = _values(fit.points)
    if values.bias_V.size < 2:
        return _bound(fit.points, bias_V)
    lowest, highest = float(values.bias_V[0]), float(values.bias_V[-1])
    beyond = _BEYOND_RATIO * (highest - lowest) if fit.model else _SAME_BIAS_RATIO * highest
    if not max(lowest - beyond, 0.0) <= bias_V <= highest + beyond:
        return _bound(fit.points, bias_V)
    relative = float(np.interp(bias_V, values.bias_V, values.u_A / values.current_A))
    if fit.model:
        value = _model_current(fit, bias_V)
        return Estimate(value=value, u=value * relative * max(1.0, math.sqrt(fit.chi2_per_dof or 1.0)))
    value = float(np.exp(np.interp(bias_V, values.bias_V, np.log(values.current_A))))
    straight = float(np.interp(bias_V, values.bias_V, values.current_A))
    return Estimate(value=value, u=math.hypot(value * relative, (straight - value) / math.sqrt(3)))


def _bound(points: Sequence[DarkPoint], bias_V: float) -> Estimate | None:
    bounds = [
        (p.bias_V, p.current_A.hi95) for p in points if p.current_A.value is None and p.current_A.hi95 is not None
    ]
    above = [(at, hi) for at, hi in bounds if at >= bias_V * (1 - _SAME_BIAS_RATIO)]
    return Estimate(hi95=min(above)[1]) if above else None


def _fit_one(
    device: str | None,
    element: int | None,
    rows: Sequence[Measurement],
    fixture: Fixture,
    depletion: Depletion,
) -> DarkFit:
    points = tuple(sorted((p for row in rows if (p := _point(row, fixture)) is not None), key=lambda p: p.bias_V))
    values = _values(points)
    unfitted = DarkFit(device=device, element=element, points=points, depletion=depletion, notes=_notes(rows, points))
    if values.bias_V.size < _FEWEST:
        note = (
            f"Biases with a value of the dark current: {values.bias_V.size}; a model wants at least {_FEWEST}. "
            "Measure at more biases, or with a larger sense resistor where only a bound is known."
        )
        return replace(unfitted, notes=(note, *unfitted.notes))
    best = _best(values, depletion)
    if best is None or stats.chi2.sf(best.chi2, best.freedom) < _MISFIT_CHANCE:
        return replace(unfitted, notes=(_misfit(best), *unfitted.notes))
    assumed = (
        f"Generation is taken to follow the depletion width of a junction with V_bi {depletion.v_bi_V:.3g} V and grading "
        f"{depletion.grading:.3g}: stated, not fitted here."
    )
    return replace(
        unfitted,
        model="+".join(_TERMS[k] for k in best.terms),
        parameters=_parameters(best, _shared_ratio(rows, fixture)),
        chi2_per_dof=best.chi2 / best.freedom,
        notes=(*((assumed,) if 1 in best.terms else ()), *unfitted.notes),
    )


def _notes(rows: Sequence[Measurement], points: Sequence[DarkPoint]) -> tuple[str, ...]:
    drifting = sum("drifting" in point.flags for point in points)
    temperatures = [p.temperature_degC for p in points if p.temperature_degC is not None]
    transistor = any(
        row.conditions.device_kind in (DeviceKind.TRANSISTOR_SWITCH, DeviceKind.OPTOCOUPLER)
        or row.conditions.output_connection in (OutputConnection.PULL_UP, OutputConnection.EMITTER_RESISTOR)
        for row in rows
    )
    found = []
    if drifting:
        found.append(f"Points that drift, shown and not used: {drifting} of {len(points)}.")
    if temperatures and max(temperatures) - min(temperatures) > 2 * _SAME_TEMPERATURE_K:
        found.append(
            f"The points were taken between {min(temperatures):g} and {max(temperatures):g} °C; those within "
            f"{_SAME_TEMPERATURE_K:g} K of the temperature that most share are used."
        )
    if transistor:
        found.append("This is the collector current with the emitter off: leakage times the gain of the transistor.")
    return tuple(found)


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


def _values(points: Sequence[DarkPoint]) -> _Values:
    """The points that can be compared, repeats at one bias averaged: their spread counts, what they share is not averaged away."""
    usable = [p for p in _at_one_temperature(points) if p.current_A.value and p.current_A.u and p.bias_V > 0]
    groups: list[list[DarkPoint]] = []
    for point in sorted(usable, key=lambda p: p.bias_V):
        if groups and point.bias_V <= groups[-1][0].bias_V * (1 + _SAME_BIAS_RATIO):
            groups[-1].append(point)
        else:
            groups.append([point])
    means = [_mean(group) for group in groups]
    bias, current, u = np.array(means, dtype=np.float64).reshape(-1, 3).T
    return _Values(bias_V=bias, current_A=current, u_A=u)


def _mean(points: Sequence[DarkPoint]) -> tuple[float, float, float]:
    currents = np.array([p.current_A.value for p in points], dtype=np.float64)
    u = float(np.mean([p.current_A.u or 0.0 for p in points]))
    scatter = float(np.std(currents, ddof=1)) / math.sqrt(len(points)) if len(points) > 1 else 0.0
    return float(np.mean([p.bias_V for p in points])), float(currents.mean()), max(u, scatter)


def _at_one_temperature(points: Sequence[DarkPoint]) -> list[DarkPoint]:
    """Points that do not drift, those near the temperature that most of them share; all where none is stated."""
    clean = [p for p in points if "drifting" not in p.flags]
    known = [p.temperature_degC for p in clean if p.temperature_degC is not None]
    if not known:
        return clean
    shared = max(known, key=lambda t: (sum(abs(t - other) <= _SAME_TEMPERATURE_K for other in known), -t))
    return [
        p for p in clean if p.temperature_degC is not None and abs(p.temperature_degC - shared) <= _SAME_TEMPERATURE_K
    ]


def _best(values: _Values, depletion: Depletion) -> _Solution | None:
    shapes = _shapes(values.bias_V, depletion)
    solved = [
        found
        for size in range(1, min(len(_TERMS), values.bias_V.size - 1) + 1)
        for terms in itertools.combinations(range(len(_TERMS)), size)
        if (found := _solve(shapes[:, terms], values, terms)) is not None
    ]
    return min(solved, key=lambda s: s.criterion, default=None)


def _solve(shapes: FloatArray, values: _Values, terms: tuple[int, ...]) -> _Solution | None:
    """One combination of terms; `None` where one of them comes out as nothing (a smaller combination says the same)."""
    weighted = shapes / values.u_A[:, None]
    coefficients, residual = optimize.nnls(weighted, values.current_A / values.u_A)
    if np.any(coefficients <= 0):
        return None
    count, size = values.bias_V.size, len(terms)
    chi2 = float(residual) ** 2
    return _Solution(
        terms=terms,
        coefficients=np.asarray(coefficients, dtype=np.float64),
        covariance=np.asarray(np.linalg.inv(weighted.T @ weighted), dtype=np.float64),
        chi2=chi2,
        freedom=count - size,
        criterion=chi2 + 2 * size + 2 * size * (size + 1) / max(count - size - 1, 0.5),
    )


def _misfit(best: _Solution | None) -> str:
    found = (
        "no combination"
        if best is None
        else f"chi-squared {best.chi2:.3g} for {best.freedom} degree{'s' if best.freedom != 1 else ''} of freedom"
    )
    return (
        f"Diffusion, generation and shunt together do not describe these points ({found}); they are shown without a model. "
        "Look for light, drift of temperature, or breakdown at the highest bias."
    )


def _shared_ratio(rows: Sequence[Measurement], fixture: Fixture) -> float:
    """Relative uncertainty that all points share, of gain and load: more points do not average it away."""
    loads = [fixture.effective_load(x.load_ohm, x.input_ohm) for row in rows if (x := row.conditions).load_ohm]
    return math.hypot(fixture.u_gain_ratio, max(((r.u or 0.0) / r.value for r in loads if r.value), default=0.0))


def _parameters(solution: _Solution, shared_ratio: float) -> dict[str, Estimate]:
    """Parameters with 95 % intervals; that of the shunt is turned over, as its conductance is what was fitted."""
    found = {}
    for place, term in enumerate(solution.terms):
        value = float(solution.coefficients[place])
        u = math.hypot(math.sqrt(solution.covariance[place, place]), shared_ratio * value)
        low, high = max(value - 1.96 * u, 0.0), value + 1.96 * u
        if _TERMS[term] == "shunt":
            found["shunt_ohm"] = Estimate(value=1 / value, u=u / value**2, lo95=1 / high, hi95=1 / low if low else None)
        else:
            found[f"{_TERMS[term]}_A"] = Estimate(value=value, u=u, lo95=low, hi95=high)
    return found


def _shapes(bias_V: FloatArray, depletion: Depletion) -> FloatArray:
    """Columns of the three terms at each bias, shape (n, 3)."""
    thermal_V = constants.k * 298.15 / constants.e
    added = depletion.width_ratio(bias_V) - 1
    at_one_volt = float(depletion.width_ratio(np.ones(1))[0]) - 1
    return np.column_stack([-np.expm1(-bias_V / thermal_V), added / at_one_volt, bias_V])


def _model_current(fit: DarkFit, bias_V: float) -> float:
    shapes = _shapes(np.array([bias_V]), fit.depletion)[0]
    parts = (fit.parameters.get("saturation_A"), fit.parameters.get("generation_A"), fit.parameters.get("shunt_ohm"))
    saturation, generation, shunt = (None if part is None else part.value for part in parts)
    conductance = 1 / shunt if shunt else 0.0
    return float(shapes @ np.array([saturation or 0.0, generation or 0.0, conductance]))
