"""What people say for columns, conditions and values: the same words on screen and on the page."""

from __future__ import annotations

from darkedge.analysis.captures import DeviceKind
from darkedge.analysis.decide.results import Limit
from darkedge.analysis.measurement import Estimate
from darkedge.analysis.quantities import format_quantity, unit_of

QUANTITY_WORDS = {
    "low_V": "low", "high_V": "high", "amplitude_V": "amplitude", "rise_time_s": "rise", "fall_time_s": "fall",
    "t_plh_s": "tPLH", "t_phl_s": "tPHL", "width_in_s": "width in", "width_out_s": "width out",
    "pulse_width_distortion_s": "PWD", "duty_in": "duty in", "duty_out": "duty out",
    "duty_cycle_distortion": "DCD", "jitter_s": "jitter", "dark_current_A": "dark current",
    "on_delay_s": "td", "on_time_s": "ton", "storage_time_s": "ts", "off_time_s": "toff",
    "current_transfer_ratio": "CTR", "output_low_V": "out low", "photocurrent_A": "photocurrent",
    "responsivity_A_per_W": "responsivity", "seen_rise_time_s": "rise as seen", "seen_fall_time_s": "fall as seen",
}  # fmt: skip
CONDITION_WORDS = {
    "bias_V": "bias", "load_ohm": "load", "emitter_current_A": "emitter", "pulse_width_s": "pulse",
    "drive_period_s": "period", "temperature_degC": "at", "element": "element", "driven_element": "driven element",
}  # fmt: skip
PARAMETER_WORDS = {
    "c_j0_F": "junction capacitance at zero bias", "v_bi_V": "built-in voltage", "grading": "grading exponent",
    "c_stray_F": "stray capacitance", "full_depletion_V": "full depletion at", "transit_s": "transit time",
}  # fmt: skip


def cell(estimate: Estimate | None, name: str) -> str:
    """A value with its uncertainty, a bound as a bound, a dash for what could not be had."""
    unit = unit_of(name).symbol
    if estimate is None:
        return "–"
    if estimate.value is not None:
        return format_quantity(estimate.value, unit, u=estimate.u)
    if estimate.hi95 is not None and estimate.lo95 is None:
        return f"< {format_quantity(estimate.hi95, unit)}"
    if estimate.lo95 is not None and estimate.hi95 is None:
        return f"> {format_quantity(estimate.lo95, unit)}"
    return f"{format_quantity(estimate.lo95, unit)} … {format_quantity(estimate.hi95, unit)}"


def interval(estimate: Estimate, name: str) -> str:
    """The 95 % interval, a dash where there is none."""
    if estimate.lo95 is None and estimate.hi95 is None:
        return "–"
    unit = unit_of(name).symbol
    return f"{format_quantity(estimate.lo95, unit)} … {format_quantity(estimate.hi95, unit)}"


def limit_words(limit: Limit) -> str:
    """A limit as people say it: `rise ≤ 110 ns at bias 12 V, load 1 kΩ`."""
    unit = unit_of(limit.quantity).symbol
    bounds = [f"≥ {format_quantity(limit.lower, unit)}"] if limit.lower is not None else []
    bounds += [f"≤ {format_quantity(limit.upper, unit)}"] if limit.upper is not None else []
    when = ", ".join(
        f"{CONDITION_WORDS.get(key, key)} "
        f"{value if isinstance(value, str) else format_quantity(value, unit_of(key).symbol)}"
        for key, value in limit.when.items()
    )
    name = QUANTITY_WORDS.get(limit.quantity, limit.quantity)
    return f"{name} {' and '.join(bounds)}" + (f" at {when}" if when else "")


def dark_current_words(kind: DeviceKind | None) -> str:
    """What the dark current of a kind of device is the current of."""
    transistor = kind in (DeviceKind.TRANSISTOR_SWITCH, DeviceKind.OPTOCOUPLER)
    return "collector current in the dark" if transistor else "dark current"
