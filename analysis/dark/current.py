"""Dark current from a dark trace and its offset traces.

The recipe: own sense resistor, DC coupling, high-impedance input, one fixed range, offset traces at zero bias interleaved
on the same range and resistor, averages over whole mains periods, the drop across the resistor taken off the bias.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from darkedge.analysis.captures import Conditions, OutputConnection
from darkedge.analysis.dark.traces import TraceSummary
from darkedge.analysis.fixture import Fixture
from darkedge.analysis.measurement import Estimate

_DETECTED = 2.0
"""Standard uncertainties above zero from which a current is called measured."""
_ONE_SIDED_95 = 1.645
_IMPOSSIBLE = 4.0
"""Standard uncertainties below zero from which the offset does not belong to the trace: one in thirty thousand."""
_NO_LIGHT = 0.01
"""Ripple over signal below which the light behind it does not matter: a filament lamp, the steadiest of the usual lamps on the
mains, flickers by about a tenth of its light (common practice, no source), so its light is at most a tenth of the signal."""
_MORE_LIGHT = 1.1
_SUPPLY_RATIO = 0.01
"""A bench supply is what it says within 1 % (common practice, no source): the half-width of a rectangle."""
_USED_UP = 0.5
"""Drop across the resistor, over the bias, from which the junction is not at the bias that was set."""


def dark_current(
    dark: TraceSummary, offsets: Sequence[TraceSummary], *, conditions: Conditions, fixture: Fixture
) -> tuple[Estimate | None, tuple[str, ...]]:
    """Dark current of one dark trace held against its offset traces.

    I = (V_dark - V_offset) / R_eff, R_eff the load with the scope's input across it. The input bias current of the scope flows in
    both traces and cancels; where there is no offset trace the fixture's offset and input bias current stand in with their
    uncertainties, and where the fixture knows no offset either nothing is said. For a transistor output with a pull-up it is the collector current,
    I = V_supply / R - V / R_eff, with the supply known to 1 %.

    Ripple at the mains means light, and light adds current: what is left is an upper bound, unless the ripple is under 1 % of
    the signal.

    Parameters
    ----------
    dark : TraceSummary
    offsets : sequence of TraceSummary
        Zero-bias traces around it with the same load and range; may be empty.
    conditions : Conditions
        Of the dark trace: `load_ohm` and `bias_V` are needed, `input_ohm` and `output_connection` used.
    fixture : Fixture

    Returns
    -------
    Estimate or None
        Value with u; a bound `hi95` alone where the current does not stand two u out of zero (`below_floor`), where light
        leaks in, or where a pull-up also feeds a scope input that is not known. `None` where nothing can be said: AC coupling,
        clipping, load or bias unknown (`conditions_missing`), noise unknown, offset unknown or plainly not that of this trace (`offset_doubtful`).
    tuple of str
        Flags.

    References
    ----------
    JCGM 100:2008 (GUM), 5.1: combined uncertainty. The one-sided bound is that of a normal estimate, never below that of a reading of zero, so
    it holds in 95 % whatever the current.
    """
    flags = set(dark.flags) | {flag for trace in offsets for flag in trace.flags}
    if _cut_off(dark, offsets):
        flags.add("clipped")
    if _without_noise((dark, *offsets)):
        flags.add("noise_unknown")
    if conditions.load_ohm is None or conditions.bias_V is None:
        return None, (*flags, "conditions_missing")
    if {"ac_coupled", "clipped"} & flags or _without_noise((dark, *offsets)):
        return None, tuple(flags)
    if conditions.input_ohm is not None and conditions.input_ohm < 100 * conditions.load_ohm:
        flags.add("low_input_resistance")
    if conditions.output_connection is OutputConnection.PULL_UP:
        current, more = _pulled_up(dark, offsets, conditions, fixture)
    else:
        current, more = _sensed(dark, offsets, conditions, fixture)
    return current, tuple(flags | more)


def junction_bias(bias_V: float, current_A: float, resistance_ohm: float) -> float:
    """Bias across the junction: what is set, less the drop across the sense resistor."""
    return bias_V - current_A * resistance_ohm


def _sensed(
    dark: TraceSummary, offsets: Sequence[TraceSummary], conditions: Conditions, fixture: Fixture
) -> tuple[Estimate | None, set[str]]:
    """Current of a junction, or of an emitter, in a resistor to ground."""
    assert conditions.load_ohm is not None
    assert conditions.bias_V is not None
    offset = _offset(offsets, conditions, fixture)
    if offset is None:
        return None, {"offset_doubtful"}
    resistance, u_resistance = _effective(conditions, fixture)
    value = (dark.mean_V - offset[0]) / resistance
    u_volts = math.hypot(dark.u_mean_V, offset[1]) / resistance
    u = math.hypot(u_volts, value * u_resistance / resistance, value * fixture.u_gain_ratio)
    if value < -_IMPOSSIBLE * u or _lit(dark, offsets, value * resistance):
        return None, {"offset_doubtful"}
    current, flags = _value_or_bound(value, u, (dark.mains_V or 0.0) / resistance)
    across_load = conditions.output_connection in (None, OutputConnection.LOAD_TO_GROUND)
    if across_load and value * resistance > _USED_UP * conditions.bias_V:
        flags.add("bias_used_up")
    return current, flags


def _pulled_up(
    dark: TraceSummary, offsets: Sequence[TraceSummary], conditions: Conditions, fixture: Fixture
) -> tuple[Estimate | None, set[str]]:
    """Collector current: what the pull-up delivers less what the scope draws. An unknown scope may draw it all: a bound."""
    assert conditions.load_ohm is not None
    supply = conditions.bias_V if conditions.bias_read_V is None else conditions.bias_read_V
    assert supply is not None
    known = fixture.load(conditions.load_ohm)
    load, u_load = (known.actual_ohm, known.u_actual_ohm) if known else (conditions.load_ohm, 0.0)
    offset, u_offset = _offset(offsets, conditions, fixture) or (0.0, 0.0)
    effective, u_effective = _effective(conditions, fixture)
    seen = dark.mean_V - offset
    u_seen = math.hypot(dark.u_mean_V, u_offset, fixture.u_gain_ratio * seen)
    u_drawn = seen * math.sqrt(max((u_effective / effective**2) ** 2 - (u_load / load**2) ** 2, 0.0))
    value = supply / load - seen / effective
    u = math.hypot(
        supply * _SUPPLY_RATIO / math.sqrt(3) / load, u_seen / effective, (supply - seen) * u_load / load**2, u_drawn
    )
    if value < -_IMPOSSIBLE * u:
        return None, {"offset_doubtful"}
    current, flags = _value_or_bound(value, u, (dark.mains_V or 0.0) / effective)
    if conditions.input_ohm is None and fixture.scope_input_ohm is None:
        return Estimate(hi95=_upper(value, u)), flags | {"conditions_missing"}
    return current, flags


def _value_or_bound(value_A: float, u_A: float, ripple_A: float) -> tuple[Estimate, set[str]]:
    if value_A < _DETECTED * u_A:
        return Estimate(hi95=_upper(value_A, u_A) + ripple_A), {"below_floor"}
    if ripple_A > _NO_LIGHT * value_A:
        return Estimate(hi95=_upper(value_A, u_A) + ripple_A), set()
    return Estimate(value=value_A, u=u_A), set()


def _upper(value_A: float, u_A: float) -> float:
    return max(value_A, 0.0) + _ONE_SIDED_95 * u_A


def _effective(conditions: Conditions, fixture: Fixture) -> tuple[float, float]:
    assert conditions.load_ohm is not None
    resistance = fixture.effective_load(conditions.load_ohm, conditions.input_ohm)
    assert resistance.value is not None
    assert resistance.u is not None
    return resistance.value, resistance.u


def _offset(offsets: Sequence[TraceSummary], conditions: Conditions, fixture: Fixture) -> tuple[float, float] | None:
    """Offset and its uncertainty: the mean of the traces around, widened by what they disagree."""
    if offsets:
        means = np.array([trace.mean_V for trace in offsets])
        u_each = math.sqrt(sum(trace.u_mean_V**2 for trace in offsets)) / len(offsets)
        moved = float(np.ptp(means)) / math.sqrt(12)
        return float(means.mean()), math.hypot(u_each, moved)
    if fixture.offset_V == 0.0 and fixture.u_offset_V == 0.0:
        return None
    resistance = _effective(conditions, fixture)[0]
    leak, u_leak = fixture.scope_input_bias_A * resistance, fixture.u_scope_input_bias_A * resistance
    return fixture.offset_V + leak, math.hypot(fixture.u_offset_V, u_leak)


def _lit(dark: TraceSummary, offsets: Sequence[TraceSummary], signal_V: float) -> bool:
    """Whether an offset trace saw plainly more light than the dark trace: what is left is then too little."""
    ripple, noise = dark.mains_V or 0.0, 3 * dark.noise_V * math.sqrt(2 / dark.samples)
    return any((trace.mains_V or 0.0) > max(_MORE_LIGHT * ripple + noise, _NO_LIGHT * signal_V) for trace in offsets)


def _cut_off(dark: TraceSummary, offsets: Sequence[TraceSummary]) -> bool:
    """Whether the dark trace stands still although the offset traces, on the same range, show noise: it is at the end of the range."""
    return (
        dark.noise_V == 0.0 and bool(offsets) and min(t.noise_V for t in offsets) > 0.7 * max(t.step_V for t in offsets)
    )


def _without_noise(traces: Sequence[TraceSummary]) -> bool:
    return any(trace.u_mean_V == 0.0 or trace.samples < 16 for trace in traces)
