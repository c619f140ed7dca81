"""One pulse capture into its measurements: levels, edges, delays, widths, switching times and flags."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import (
    Capture,
    Conditions,
    DeviceKind,
    OutputConnection,
    Record,
    TimedRecord,
)
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.waveform.channel import Channel, measure_channel
from darkedge.analysis.waveform.edges import IntArray
from darkedge.analysis.waveform.flaws import trace_flags
from darkedge.analysis.waveform.intervals import DRIVE, OUTPUT, Budget, level_uncertainties
from darkedge.analysis.waveform.pulses import (
    Pairing,
    light_makes_high,
    pair_edges,
    period_of,
    pulse_widths,
    time_delays,
    time_edges,
)
from darkedge.analysis.waveform.switching import switching_times

LEVELS = "histogram 10/50/90 %"
ESTIMATOR = "local polynomial"

BENCH_RATIO = 1.5
"""An edge less than this many times the bench's own is called bench limited."""

LARGE_SWING_RATIO = 0.1
USED_UP_RATIO = 0.2
LOADING_RATIO = 0.01
LIMIT_MARGIN = 10.0
CURRENT_MATCH_RATIO = 0.1

_DIODES = (DeviceKind.PHOTODIODE, DeviceKind.PIN)
_SWITCHES = (DeviceKind.TRANSISTOR_SWITCH, DeviceKind.OPTOCOUPLER)


def measure_pulse_capture(capture: Capture, *, fixture: Fixture = UNKNOWN_FIXTURE) -> tuple[Measurement, ...]:
    """Measure every element of a pulse capture.

    Edge times are as the scope shows them: the bench's own response is still in them, and `bench_limited` says where
    it matters. A quantity that could not be had is left out, and a flag says why.

    Parameters
    ----------
    capture : Capture
        Outputs by element, the drive where it was captured, and the conditions.
    fixture : Fixture
        What is known of the bench: skew, offset, gain, time base, loads, response.

    Returns
    -------
    tuple of Measurement
        One for each element, in the order of their numbers.

    References
    ----------
    IEEE Std 181-2011 for levels, reference levels and durations; JCGM 100:2008 for the uncertainties.
    """
    step = capture.conditions.volts_per_code
    drive = measure_channel(capture.drive) if capture.drive is not None else None
    return tuple(
        _measure_element(capture, element, drive, measure_channel(record, volts_per_code=step), fixture)
        for element, record in sorted(capture.outputs.items())
    )


def _measure_element(
    capture: Capture, element: int, drive: Channel | None, channel: Channel | None, fixture: Fixture
) -> Measurement:
    record = capture.outputs[element]
    conditions = replace(capture.conditions, element=element)
    flags = {*capture.remarks, *_condition_flags(conditions, fixture)}
    if isinstance(record, TimedRecord):
        flags.add("uneven_time")
    if channel is None:
        return Measurement(
            capture=capture.name, element=element, conditions=conditions, flags=(*flags, "no_pulse"), levels=LEVELS,
            estimator=ESTIMATOR, n_pulses=0,
        )  # fmt: skip
    pairing = pair_edges(drive.transitions, channel.transitions, end_s=channel.end_s) if drive is not None else None
    job = _Job(
        record=record, conditions=conditions, fixture=fixture, channel=channel, drive=drive, pairing=pairing
    )  # fmt: skip
    quantities = job.levels() | job.times()
    flags |= job.flags(quantities)
    return Measurement(
        capture=capture.name, element=element, conditions=conditions, quantities=quantities, flags=tuple(flags),
        levels=LEVELS, estimator=ESTIMATOR, n_pulses=job.n_pulses(),
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Job:
    """Everything that the quantities of one element rest on."""

    record: Record
    conditions: Conditions
    fixture: Fixture
    channel: Channel
    drive: Channel | None
    pairing: Pairing | None

    def edges(self) -> IntArray:
        """Output edges that count: those that answer the drive, all of them where there is none."""
        pairing = self.pairing
        if pairing is not None:
            return np.sort(pairing.output)
        return np.arange(self.channel.transitions.rising.size, dtype=np.intp)

    def n_pulses(self) -> int:
        rising = self.channel.transitions.rising[self.edges()]
        return int(max(np.sum(rising), np.sum(~rising)))

    def budget(self) -> Budget:
        drive = self.drive.levels if self.drive else None
        return Budget(
            u_levels_V=level_uncertainties(self.channel.levels, drive), u_timebase_ratio=self.fixture.u_timebase_ratio
        )

    def light_high(self) -> bool | None:
        pairing = self.pairing
        return light_makes_high(
            self.channel, connection_high=_connection_high(self.conditions),
            drive_inverting=pairing.inverting if pairing else None,
        )  # fmt: skip

    def levels(self) -> dict[str, Estimate]:
        """Levels less the scope's offset, the amplitude, and the photocurrent where the load is known."""
        levels, fixture = self.channel.levels, self.fixture
        amplitude, gain = levels.amplitude_V, fixture.u_gain_ratio
        u_amplitude = float(np.hypot(levels.u_amplitude_V, gain * amplitude))
        found = {
            name: Estimate(
                value=level - fixture.offset_V, u=float(np.sqrt(u**2 + fixture.u_offset_V**2 + (gain * level) ** 2))
            )
            for name, level, u in (
                ("low_V", levels.low_V, levels.u_low_V), ("high_V", levels.high_V, levels.u_high_V)
            )
        }  # fmt: skip
        found["amplitude_V"] = Estimate(value=amplitude, u=u_amplitude)
        if self.conditions.device_kind in _DIODES and self.conditions.load_ohm:
            load = fixture.effective_load(self.conditions.load_ohm, self.conditions.input_ohm)
            current = amplitude / (load.value or 1.0)
            u = current * float(np.hypot(u_amplitude / amplitude, (load.u or 0.0) / (load.value or 1.0)))
            found["photocurrent_A"] = Estimate(value=current, u=u)
        if self.conditions.output_connection == OutputConnection.PULL_UP and self.conditions.device_kind in _SWITCHES:
            found["output_low_V"] = found["low_V"]
        return found

    def times(self) -> dict[str, Estimate]:
        """Rise and fall, and what drive, period and polarity allow of delays, widths, duties and switching times."""
        budget, output, pairing = self.budget(), self.channel.transitions, self.pairing
        found = time_edges(output, self.edges(), budget=budget)
        skew = {"skew_s": self.fixture.channel_skew_s, "u_skew_s": self.fixture.u_channel_skew_s}
        light_high = self.light_high()
        if self.drive is not None and pairing is not None:
            found |= time_delays(self.drive.transitions, output, pairing, budget=budget, **skew)
            if light_high is not None and self.conditions.device_kind in _SWITCHES:
                found |= switching_times(
                    self.drive.transitions, output, pairing, light_high=light_high, budget=budget, **skew
                )
        return found | self._widths(budget, light_high)

    def _widths(self, budget: Budget, light_high: bool | None) -> dict[str, Estimate]:
        found: dict[str, Estimate] = {}
        pairing = self.pairing
        width_out = width_in = None
        if light_high is not None:
            width_out = pulse_widths(self.channel.transitions, self.edges(), active_high=light_high, channel=OUTPUT)
        if self.drive is not None:
            drive_high = True if pairing is None or light_high is None else light_high != pairing.inverting
            every = np.arange(self.drive.transitions.rising.size, dtype=np.intp)
            width_in = pulse_widths(self.drive.transitions, every, active_high=drive_high, channel=DRIVE)
        period = self.period_s()
        means = {name: widths.mean() for name, widths in (("in", width_in), ("out", width_out)) if widths is not None}
        for side, mean in means.items():
            found[f"width_{side}_s"] = budget.estimate(mean)
            if period is not None:
                found[f"duty_{side}"] = _without_timebase(budget).estimate(mean, scale=1 / period)
        if period is not None and len(means) == 2:
            change = means["out"].minus(means["in"])
            found["duty_cycle_distortion"] = _without_timebase(budget).estimate(change, scale=1 / period)
        return found

    def period_s(self) -> float | None:
        """Period from the edges, else as stated."""
        seen = period_of(self.drive.transitions if self.drive else None) or period_of(self.channel.transitions)
        return seen.value if seen is not None else self.conditions.drive_period_s

    def flags(self, quantities: dict[str, Estimate]) -> set[str]:
        """Flags of the trace, the pairing, the bias and the bench."""
        found = trace_flags(self.record.signal_V, self.record.time_s, self.channel)
        if self.conditions.device_kind in _SWITCHES:
            found.discard("slow_tail")
        pairing = self.pairing
        if self.drive is not None and (pairing is None or pairing.left_over):
            found.add("unpaired")
        if self.period_s() is None:
            found.add("period_unknown")
        if self.light_high() is None:
            found.add("conditions_missing")
        return found | self._bias_flags(quantities) | self._bench_flags(quantities)

    def _bias_flags(self, quantities: dict[str, Estimate]) -> set[str]:
        known = self.conditions
        bias = known.bias_read_V if known.bias_read_V is not None else known.bias_V
        if bias is None or known.device_kind not in _DIODES:
            return set()
        swing = quantities["amplitude_V"].value or 0.0
        found = set()
        if swing > LARGE_SWING_RATIO * bias:
            found.add("large_signal")
        if bias - swing < USED_UP_RATIO * bias:
            found.add("bias_used_up")
        return found

    def _bench_flags(self, quantities: dict[str, Estimate]) -> set[str]:
        edges = {str(name): quantities[name].value for name in ("rise_time_s", "fall_time_s") if name in quantities}
        fastest = min((t for t in edges.values() if t is not None), default=None)
        found = set()
        limit = self.conditions.bandwidth_limit_Hz
        if limit and fastest is not None and 0.35 / limit > fastest / LIMIT_MARGIN:
            found.add("bandwidth_limited")
        response = self.fixture.response
        if response is not None:
            falls_on_light = self.light_high() is False
            pairs = (
                ("fall_time_s" if falls_on_light else "rise_time_s", response.rise_time_s),
                ("rise_time_s" if falls_on_light else "fall_time_s", response.fall_time_s),
            )
            if any(edges.get(name) is not None and (edges[name] or 0.0) < BENCH_RATIO * own for name, own in pairs):
                found.add("bench_limited")
        return found


def _without_timebase(budget: Budget) -> Budget:
    """A duty is a ratio of two times on one time base, whose error cancels."""
    return replace(budget, u_timebase_ratio=0.0)


def _connection_high(conditions: Conditions) -> bool | None:
    if conditions.output_connection is None:
        return None
    return conditions.output_connection != OutputConnection.PULL_UP


def _condition_flags(conditions: Conditions, fixture: Fixture) -> set[str]:
    """Flags that the conditions and the fixture raise before a sample is looked at."""
    found = set()
    if conditions.bias_V is None or conditions.load_ohm is None:
        found.add("conditions_missing")
    if (conditions.coupling or "").upper() == "AC":
        found.add("ac_coupled")
    if conditions.load_ohm and conditions.input_ohm and conditions.load_ohm > LOADING_RATIO * conditions.input_ohm:
        found.add("low_input_resistance")
    if fixture.response is None:
        found.add("emitter_unknown")
    elif fixture.response.emitter_current_A and conditions.emitter_current_A is not None:
        ratio = conditions.emitter_current_A / fixture.response.emitter_current_A
        if abs(ratio - 1) > CURRENT_MATCH_RATIO:
            found.add("emitter_current_differs")
    return found
