"""Fits, choices and verdicts as JSON: full precision, null for what is missing."""

from __future__ import annotations

import json
from collections.abc import Sequence

from darkedge.analysis.columns import twins
from darkedge.analysis.dark.results import DarkFit
from darkedge.analysis.decide.results import Choice, DeviceVerdict, LimitVerdict, OperatingPoint, Screening
from darkedge.analysis.explain import ExplainedDevice
from darkedge.analysis.junction.results import PARAMETERS, JunctionFit, ShortestPulse
from darkedge.analysis.measurement import Estimate

Plain = dict[str, object]


def fits_json(devices: Sequence[ExplainedDevice]) -> str:
    """One object for each device and element, as a JSON array."""
    return _dump([_device(device) for device in devices])


def choices_json(choices: Sequence[Choice]) -> str:
    """One object for each device and element, as a JSON array."""
    return _dump(
        [
            {
                "device": choice.device,
                "element": choice.element,
                "best": choice.best and _operating_point(choice.best),
                "nearest": choice.nearest and _operating_point(choice.nearest),
                "candidates": [_operating_point(point) for point in choice.candidates],
                "notes": list(choice.notes),
            }
            for choice in choices
        ]
    )


def screening_json(screening: Screening) -> str:
    """One object for each device and element, then one for each lot, as a JSON array."""
    devices: list[Plain] = [_device_verdict(device) for device in screening.devices]
    lots: list[Plain] = [
        {
            "lot": lot.lot,
            "verdict": lot.verdict.value,
            "passed": lot.passed,
            "failed": lot.failed,
            "undecided": lot.undecided,
            "rule": screening.rule.value,
            "confidence": screening.confidence,
        }
        for lot in screening.lots
    ]
    return _dump([*devices, *lots])


def _dump(value: list[Plain]) -> str:
    return json.dumps(value, indent=1, allow_nan=False, ensure_ascii=False)


def _with_twins(name: str, estimate: Estimate | None) -> Plain:
    u, low, high = twins(name)
    if estimate is None:
        return {name: None, u: None, low: None, high: None}
    return {name: estimate.value, u: estimate.u, low: estimate.lo95, high: estimate.hi95}


def _device(device: ExplainedDevice) -> Plain:
    out: Plain = {"lot": device.lot, "device": device.device, "element": device.element}
    out |= {"model": None, "capacitance": [], "flags": [], "notes": []}
    if device.junction is not None:
        out |= _junction(device.junction)
    out["shortest_pulse"] = [_shortest(pulse) for pulse in device.shortest]
    out["dark"] = None if device.dark is None else _dark(device.dark)
    return out


def _junction(fit: JunctionFit) -> Plain:
    out: Plain = {"model": fit.model}
    for name in PARAMETERS:
        if name in fit.parameters:
            out |= _with_twins(name, fit.parameters[name])
    out["capacitance"] = [{"bias_V": p.bias_V, "c_F": p.c_F, "u_c_F": p.u_c_F} for p in fit.capacitance]
    out |= {
        "fixed": list(fit.fixed),
        "chi2_per_dof": fit.chi2_per_dof,
        "flags": list(fit.flags),
        "notes": list(fit.notes),
    }
    out["correlation"] = [{"between": list(pair), "r": r} for pair, r in fit.correlation.items()]
    return out


def _shortest(pulse: ShortestPulse) -> Plain:
    return {
        "bias_V": pulse.bias_V,
        "load_ohm": pulse.load_ohm,
        **_with_twins("shortest_pulse_s", pulse.shortest_pulse_s),
        **_with_twins("highest_rate_Hz", pulse.highest_rate_Hz),
    }


def _dark(fit: DarkFit) -> Plain:
    points: list[Plain] = [
        {
            "bias_V": point.bias_V,
            **_with_twins("dark_current_A", point.current_A),
            "temperature_degC": point.temperature_degC,
            "capture": point.capture,
            "flags": list(point.flags),
        }
        for point in fit.points
    ]
    parameters: Plain = {}
    for name, estimate in fit.parameters.items():
        parameters |= _with_twins(name, estimate)
    return {
        "model": fit.model or None,
        "parameters": parameters,
        "points": points,
        "chi2_per_dof": fit.chi2_per_dof,
        "notes": list(fit.notes),
    }


def _operating_point(point: OperatingPoint) -> Plain:
    out: Plain = {"bias_V": point.bias_V, "load_ohm": point.load_ohm}
    out |= _with_twins("signal_V", point.signal_V)
    out |= _with_twins("rise_time_s", point.rise_time_s)
    out |= _with_twins("shortest_pulse_s", point.shortest_pulse_s)
    out |= _with_twins("dark_current_A", point.dark_current_A)
    out["misses"] = list(point.misses)
    return out


def _device_verdict(device: DeviceVerdict) -> Plain:
    return {
        "lot": device.lot,
        "device": device.device,
        "element": device.element,
        "verdict": device.verdict.value,
        "limits": [_limit_verdict(limit) for limit in device.limits],
    }


def _limit_verdict(held: LimitVerdict) -> Plain:
    limit = held.limit
    out: Plain = {
        "quantity": limit.quantity,
        "lower": limit.lower,
        "upper": limit.upper,
        "when": dict(limit.when),
        "verdict": held.verdict.value,
        "probability_conforming": held.probability_conforming,
        "captures": list(held.captures),
        "reason": held.reason or None,
    }
    return out | _with_twins("value", held.estimate)
