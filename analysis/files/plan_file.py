"""The plan file: read whole, held against its own ratings, every fault reported before anything is switched on."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import BeforeValidator, Field, ValidationInfo

from darkedge.analysis.captures import DeviceKind, OutputConnection, Reference
from darkedge.analysis.cautions import TOUCHABLE_DC_V
from darkedge.analysis.errors import InputError, PlanError
from darkedge.analysis.files.toml_checks import Checked, NotNegative, Number, Positive, check, fault, read_toml
from darkedge.analysis.plan import (
    Axes,
    DarkPlan,
    DeviceSpec,
    Drive,
    Emitter,
    EmitterKind,
    LoadChange,
    Plan,
    Ratings,
)
from darkedge.analysis.quantities import parse_quantity

FORMAT = "darkedge-plan 1"
MOST_POINTS = 100_000


def _read_axis(value: object, info: ValidationInfo) -> tuple[float, ...]:
    key = info.field_name or ""
    if isinstance(value, dict):
        numbers = _spaced(value, key)
    elif isinstance(value, list):
        numbers = [_quantity(entry, key, f"{key}[{place}]") for place, entry in enumerate(value)]
    else:
        numbers = [_quantity(value, key, key)]
    if not numbers:
        raise fault(f"{key} is empty", wanted="at least one value")
    for place, number in enumerate(numbers):
        if number < 0 and key == "bias_V":
            raise fault(
                f"{key}[{place}] is negative; reverse bias is given as a magnitude",
                found=f"{number:g}",
                mend=f"write {-number:g}",
            )
        if number < 0 or (number == 0 and key != "bias_V"):
            raise fault(f"{key}[{place}] is not positive", found=f"{number:g}", wanted="a value above zero")
    if len(set(numbers)) < len(numbers):
        raise fault(f"{key} holds a value twice", mend="use repeats to measure a point more than once")
    return tuple(numbers)


def _spaced(stated: dict[str, object], key: str) -> list[float]:
    unknown = set(stated) - {"from", "to", "points", "spacing"}
    missing = {"from", "to", "points"} - set(stated)
    if unknown or missing:
        raise fault(f"{key} is not a range", found=", ".join(sorted(stated)), wanted="from, to, points and spacing")
    low, high = (_quantity(stated[end], key, f"{key}.{end}") for end in ("from", "to"))
    points, spacing = stated["points"], stated.get("spacing", "linear")
    if not isinstance(points, int) or isinstance(points, bool) or not 1 <= points <= MOST_POINTS:
        raise fault(f"{key}.points is not a number of points", found=repr(points), wanted=f"1 to {MOST_POINTS}")
    if spacing not in ("linear", "log"):
        raise fault(f"{key}.spacing is unknown", found=repr(spacing), wanted="linear or log")
    if spacing == "log" and (low <= 0 or high <= 0):
        raise fault(f"{key}: a log spacing starts and ends above zero", found=f"{low:g} to {high:g}")
    numbers = np.geomspace(low, high, points) if spacing == "log" else np.linspace(low, high, points)
    return [float(f"{number:.4g}") for number in numbers]  # settings that people can read and repeat


def _quantity(value: object, key: str, where: str) -> float:
    try:
        return parse_quantity(value, key)  # type: ignore[arg-type]
    except InputError as error:
        raise fault(f"{where}: {error.what}", found=error.found, wanted=error.wanted, mend=error.mend) from error


Axis = Annotated[tuple[float, ...], BeforeValidator(_read_axis)]


class _Device(Checked):
    kind: Literal["photodiode", "pin", "transistor_switch", "optocoupler"]
    elements: int = Field(default=1, ge=1, le=16)
    output_connection: Literal["load_to_ground", "pull_up", "emitter_resistor"] = "load_to_ground"


class _Ratings(Checked):
    reverse_bias_V: Positive | None = None
    emitter_peak_current_A: Positive | None = None
    emitter_mean_current_A: Positive | None = None
    emitter_reverse_V: NotNegative | None = None
    collector_emitter_V: Positive | None = None
    collector_current_A: Positive | None = None
    dissipation_W: Positive | None = None
    bias_above_60_V: bool = False


class _Emitter(Checked):
    kind: Literal["led", "laser", "inside_device"]
    wavelength_m: Positive
    series_ohm: Positive
    forward_V: Positive
    reference: Literal["voltage", "current", "light"] = "voltage"


class _Axes(Checked):
    load_ohm: Axis
    load_change: Literal["fixed", "ask", "switched"] = "fixed"
    element: list[int] = Field(default_factory=lambda: [1], min_length=1)
    bias_V: Axis
    emitter_current_A: Axis
    pulse_width_s: Axis
    repeats: int = Field(default=1, ge=1, le=10_000)


class _Drive(Checked):
    duty: Number | None = None
    period_s: Positive | None = None
    low_V: Number = 0.0


class _Dark(Checked):
    load_ohm: Positive
    bias_V: Axis
    settle_s: NotNegative = 0.0
    duration_s: Positive


class _Expected(Checked):
    photocurrent_ratio: Positive | None = None
    capacitance_F: Positive | None = None


class _FixtureLink(Checked):
    file: str


class _Plan(Checked):
    format: str
    title: str = ""
    device: _Device
    ratings: _Ratings
    emitter: _Emitter
    axes: _Axes
    drive: _Drive
    dark: _Dark | None = None
    fixture: _FixtureLink | None = None
    expected: _Expected = Field(default_factory=_Expected)


def read_plan(path: Path) -> Plan:
    """Read a plan file.

    Raises
    ------
    PlanError
        Every fault at once: unknown keys, wrong units, contradictions, ratings that the plan needs and lacks, and points
        beyond a rating.
    """
    stated = check(read_toml(path, PlanError), _Plan, where=str(path), word=FORMAT, error_class=PlanError)
    faults = _drive_faults(stated)
    if not faults:
        plan = _plan(stated, path)
        faults = _rating_faults(plan)
        if not faults:
            return plan
    what = faults[0] if len(faults) == 1 else f"{len(faults)} faults\n  " + "\n  ".join(faults)
    raise PlanError(what, where=str(path))


def _plan(stated: _Plan, path: Path) -> Plan:
    axes = stated.axes
    return Plan(
        title=stated.title,
        device=DeviceSpec(
            kind=DeviceKind(stated.device.kind),
            elements=stated.device.elements,
            output_connection=OutputConnection(stated.device.output_connection),
        ),
        ratings=Ratings(**stated.ratings.model_dump()),
        emitter=Emitter(
            kind=EmitterKind(stated.emitter.kind),
            wavelength_m=stated.emitter.wavelength_m,
            series_ohm=stated.emitter.series_ohm,
            forward_V=stated.emitter.forward_V,
            reference=Reference(stated.emitter.reference),
        ),
        axes=Axes(
            load_ohm=axes.load_ohm,
            bias_V=axes.bias_V,
            emitter_current_A=axes.emitter_current_A,
            pulse_width_s=axes.pulse_width_s,
            element=tuple(axes.element),
            repeats=axes.repeats,
            load_change=LoadChange(axes.load_change),
        ),
        drive=Drive(**stated.drive.model_dump()),
        dark=None if stated.dark is None else DarkPlan(**stated.dark.model_dump()),
        fixture_file=None if stated.fixture is None else stated.fixture.file,
        expected_photocurrent_ratio=stated.expected.photocurrent_ratio,
        expected_capacitance_F=stated.expected.capacitance_F,
        source=str(path),
    )


def _drive_faults(stated: _Plan) -> list[str]:
    drive, axes, faults = stated.drive, stated.axes, []
    if (drive.duty is None) == (drive.period_s is None):
        faults.append("drive: wanted either duty or period_s; they are two different sweeps. Give one of the two")
    elif drive.duty is not None and not 0 < drive.duty < 1:
        faults.append(f"drive.duty: not between 0 and 1; found {drive.duty:g}")
    elif drive.period_s is not None and max(axes.pulse_width_s) >= drive.period_s:
        faults.append(
            f"drive.period_s: not longer than the longest pulse; found {drive.period_s:g} s and {max(axes.pulse_width_s):g} s"
        )
    elements = range(1, stated.device.elements + 1)
    faults += [
        f"axes.element[{place}]: the device has no such element; found {element}, wanted 1 to {stated.device.elements}"
        for place, element in enumerate(axes.element)
        if element not in elements
    ]
    if len(set(axes.element)) < len(axes.element):
        faults.append("axes.element: holds an element twice; use repeats to measure a point more than once")
    if drive.low_V >= stated.emitter.forward_V:
        faults.append(
            f"drive.low_V: not below emitter.forward_V, so the emitter would never go dark; found {drive.low_V:g} V, "
            f"wanted below {stated.emitter.forward_V:g} V"
        )
    if len(axes.load_ohm) > 1 and axes.load_change == "fixed":
        faults.append('axes.load_change: "fixed" with more than one load; wanted "ask" or "switched"')
    elif stated.dark is not None and axes.load_change == "fixed" and stated.dark.load_ohm not in axes.load_ohm:
        faults.append('axes.load_change: "fixed", and dark.load_ohm is another load; wanted "ask" or "switched"')
    return faults


def _rating_faults(plan: Plan) -> list[str]:
    return [*_bias_faults(plan), *_emitter_faults(plan), *_transistor_faults(plan)]


def _bias_faults(plan: Plan) -> list[str]:
    ratings, transistor = plan.ratings, plan.has_transistor
    key = "collector_emitter_V" if transistor else "reverse_bias_V"
    rating = ratings.collector_emitter_V if transistor else ratings.reverse_bias_V
    faults = [] if rating is not None else [f"ratings.{key}: missing; the plan sets a bias"]
    stated = [(f"axes.bias_V[{k}]", v) for k, v in enumerate(plan.axes.bias_V)]
    stated += [(f"dark.bias_V[{k}]", v) for k, v in enumerate(plan.dark.bias_V if plan.dark else ())]
    for where, bias in stated:
        if rating is not None and bias > rating:
            faults.append(f"{where}: beyond ratings.{key}; found {bias:g} V, wanted at most {rating:g} V")
        if bias > TOUCHABLE_DC_V and not ratings.bias_above_60_V:
            faults.append(
                f"{where}: above 60 V DC, which can hurt; found {bias:g} V. If qualified people and your local rules allow "
                "it, write bias_above_60_V = true under [ratings]"
            )
    return faults


def _emitter_faults(plan: Plan) -> list[str]:
    ratings, faults = plan.ratings, []
    highest = max(plan.axes.emitter_current_A)
    for key, rating in (
        ("emitter_peak_current_A", ratings.emitter_peak_current_A),
        ("emitter_mean_current_A", ratings.emitter_mean_current_A),
    ):
        if rating is None:
            faults.append(f"ratings.{key}: missing; the plan drives an emitter")
    for place, current in enumerate(plan.axes.emitter_current_A):
        if ratings.emitter_peak_current_A is not None and current > ratings.emitter_peak_current_A:
            faults.append(
                f"axes.emitter_current_A[{place}]: beyond ratings.emitter_peak_current_A; found {current:g} A, "
                f"wanted at most {ratings.emitter_peak_current_A:g} A"
            )
    duty = max(width / plan.drive.period_for(width) for width in plan.axes.pulse_width_s)
    if ratings.emitter_mean_current_A is not None and highest * duty > ratings.emitter_mean_current_A:
        faults.append(
            f"axes.emitter_current_A: the mean is beyond ratings.emitter_mean_current_A; found {highest * duty:g} A at a "
            f"duty of {duty:g}, wanted at most {ratings.emitter_mean_current_A:g} A. Lower the duty or the current"
        )
    if plan.drive.low_V < 0:
        if ratings.emitter_reverse_V is None:
            faults.append("ratings.emitter_reverse_V: missing; drive.low_V is below zero")
        elif -plan.drive.low_V > ratings.emitter_reverse_V:
            faults.append(
                f"drive.low_V: beyond ratings.emitter_reverse_V; found {plan.drive.low_V:g} V, "
                f"wanted at least {-ratings.emitter_reverse_V:g} V"
            )
    return faults


def _transistor_faults(plan: Plan) -> list[str]:
    """What the switch carries at worst: the whole supply across the load, and half of it across the transistor."""
    ratings = plan.ratings
    if not plan.has_transistor:
        return []
    steps = plan.steps()
    current = max(step.bias_V / step.load_ohm for step in steps)
    power = max(step.bias_V**2 / (4 * step.load_ohm) for step in steps)
    faults = []
    for what, found, key, rating, unit in (
        ("the switch would carry", current, "collector_current_A", ratings.collector_current_A, "A"),
        ("the switch would turn into heat", power, "dissipation_W", ratings.dissipation_W, "W"),
    ):
        if rating is not None and found > rating:
            faults.append(
                f"axes.load_ohm: {what} more than ratings.{key}; found {found:.3g} {unit}, wanted at most {rating:g} {unit}. "
                "Raise the load or lower the supply"
            )
    return faults
