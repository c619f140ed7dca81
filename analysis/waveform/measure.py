"""One pulse capture into its measurements: levels, edges, delays, widths, switching times and flags."""

from __future__ import annotations

from collections.abc import Hashable, Sequence
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
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture, Response
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.waveform.bench_out import GAUSSIAN_SHARE, Seen, Stage, without_bench
from darkedge.analysis.waveform.channel import Channel, measure_channels
from darkedge.analysis.waveform.crossings import ENOUGH_TO_FIT
from darkedge.analysis.waveform.edges import IntArray, Transitions
from darkedge.analysis.waveform.flaws import trace_flags
from darkedge.analysis.waveform.intervals import DRIVE, OUTPUT, Budget, Interval, durations, level_uncertainties
from darkedge.analysis.waveform.pulses import (
    Pairing,
    light_makes_high,
    mean_width,
    pair_edges,
    period_of,
    time_delays,
    time_edges,
)
from darkedge.analysis.waveform.reference import TEN_FIFTY_NINETY, ReferenceLevels, relocate
from darkedge.analysis.waveform.reference_captures import share_before_half
from darkedge.analysis.waveform.switching import switching_times

BY_SHAPE, BY_POLYNOMIAL, BY_LINE = "edge shape", "local polynomial", "straight line"
"""How the edges were timed: fitted shape, shape with its residuals smoothed, or two samples and a straight line."""

BENCH_RATIO = 1.5
"""An edge less than this many times the bench's own is called bench limited."""

LARGE_SWING_RATIO = 0.1
"""Swing over bias beyond which the capacitance changes during the edge."""

USED_UP_RATIO = 0.2
"""Share of the bias that must be left across the junction with the light on (common practice, no source)."""

LOADING_RATIO = 0.01
"""Load over input resistance beyond which the scope's input counts as part of the load."""

LIMIT_MARGIN = 10.0
"""A bandwidth limit's own rise time, 0.35 / bandwidth, is to be this many times shorter than the edge."""

JITTER_KNOWN_TO = 0.1
"""Relative standard uncertainty of a stated trigger jitter: that of the scatter of some fifty triggers."""

GAUSSIAN_TEN_NINETY = 2.5631031310892007
"""10 to 90 % time of a Gaussian edge over its standard deviation."""

UNSATURATED_V = 1.0
"""Voltage left across an output transistor above which it is surely not saturated (common practice, no source)."""

_DIODES = (DeviceKind.PHOTODIODE, DeviceKind.PIN)
_SWITCHES = (DeviceKind.TRANSISTOR_SWITCH, DeviceKind.OPTOCOUPLER)


def measure_pulse_capture(
    capture: Capture,
    *,
    fixture: Fixture = UNKNOWN_FIXTURE,
    reference: ReferenceLevels = TEN_FIFTY_NINETY,
    keep_parts: bool = False,
) -> tuple[Measurement, ...]:
    """Measure every element of a pulse capture.

    Where the fixture knows the response of emitter and scope, rise and fall time are the device's own and `seen_` stands before what the
    scope showed; where it does not, the bench is still in them and `emitter_unknown` says so. A quantity that could not be had is left out, and a flag says why.

    Parameters
    ----------
    capture : Capture
        Outputs by element, the drive where it was captured, and the conditions.
    fixture : Fixture
        What is known of the bench: skew, offset, gain, time base, loads, response.
    reference : ReferenceLevels
        Where the output's instants are taken.
    keep_parts : bool
        Keep with each estimate what its uncertainty was put together from.

    Returns
    -------
    tuple of Measurement
        One for each element, in the order of their numbers.

    References
    ----------
    IEEE Std 181-2011 for levels, reference levels and durations; JCGM 100:2008 for the uncertainties.
    """
    return measure_pulse_captures([(capture, fixture)], reference=reference, keep_parts=keep_parts)[0]


def measure_pulse_captures(
    captures: Sequence[tuple[Capture, Fixture]],
    *,
    reference: ReferenceLevels = TEN_FIFTY_NINETY,
    keep_parts: bool = False,
) -> list[tuple[Measurement, ...]]:
    """Measure several pulse captures, each with its fixture, which is quicker than one by one; see `measure_pulse_capture`."""
    records: list[Record] = []
    steps: list[float | None] = []
    pools: list[Hashable] = []
    for capture, _ in captures:
        outputs = [record for _, record in sorted(capture.outputs.items())]
        drive = [] if capture.drive is None else [capture.drive]
        records += drive + outputs
        alike = _taken_alike(capture)
        pools += [None if alike is None else ("drive", alike)] * len(drive)
        pools += [None if alike is None else ("output", alike)] * len(outputs)
        steps += [None] * len(drive) + [capture.conditions.volts_per_code] * len(outputs)
    channels = iter(measure_channels(records, volts_per_code=steps, pools=pools))
    found = []
    for capture, fixture in captures:
        drive_channel = None if capture.drive is None else next(channels)
        found.append(
            tuple(
                _measure_element(
                    capture, element, drive_channel, next(channels), fixture, reference, keep_parts=keep_parts
                )
                for element in sorted(capture.outputs)
            )
        )
    return found


def _taken_alike(capture: Capture) -> Hashable:
    """What captures of one run have in common that makes their noise alike; `None` where the run is not known."""
    known = capture.conditions
    if known.run is None:
        return None
    return (
        capture.name.rpartition("/")[0], known.run, known.averages, known.bandwidth_limit_Hz, known.input_ohm, known.load_ohm,
    )  # fmt: skip


def _measure_element(
    capture: Capture,
    element: int,
    drive: Channel | None,
    channel: Channel | None,
    fixture: Fixture,
    reference: ReferenceLevels,
    *,
    keep_parts: bool,
) -> Measurement:
    record = capture.outputs[element]
    conditions = replace(capture.conditions, element=element)
    flags = {*capture.remarks, *_condition_flags(conditions, fixture)}
    if isinstance(record, TimedRecord):
        flags.add("uneven_time")
    if channel is None:
        return Measurement(
            capture=capture.name, element=element, conditions=conditions, quantities=_hidden_amplitude(record, drive),
            flags=(*flags, "no_pulse"), levels=reference.words, n_pulses=0,
        )  # fmt: skip
    pairing = _pairing(drive, channel, fixture)
    job = _Job(
        record=record, conditions=conditions, fixture=fixture, channel=channel, drive=drive, pairing=pairing,
        reference=reference,
        keep_parts=keep_parts,
        period=_period(drive, channel, conditions),
    )  # fmt: skip
    quantities = job.levels() | job.times()
    flags |= job.flags(quantities)
    if "clipped" in flags:
        quantities = _of_clipped(quantities)
    return Measurement(
        capture=capture.name, element=element, conditions=conditions, quantities=quantities, flags=tuple(flags),
        levels=reference.words, estimator=job.estimator(), n_pulses=job.n_pulses(),
        trigger_s=None if drive is None or drive.transitions.rising.size == 0 else float(drive.transitions.time_s[0, 1]),
    )  # fmt: skip


_OF_CLIPPED = ("width_in_s", "duty_in")
"""What a clipped output leaves: what the drive alone says."""


def _of_clipped(quantities: dict[str, Estimate]) -> dict[str, Estimate]:
    """What is left where the output runs into the end of the range: its amplitude is at least what shows, and no time of it is known."""
    found = {name: quantities[name] for name in _OF_CLIPPED if name in quantities}
    seen = quantities.get("amplitude_V")
    if seen is not None and seen.value is not None and seen.u is not None:
        found["amplitude_V"] = Estimate(lo95=seen.value - 1.645 * seen.u)
    return found


def _hidden_amplitude(record: Record, drive: Channel | None) -> dict[str, Estimate]:
    """How large a pulse can be that was not seen: no larger than all that the trace moves, where the drive did pulse.

    A trace that never moves by a code may be clipped or not connected, and bounds nothing.
    """
    moved = float(np.ptp(record.signal_V))
    if drive is None or drive.transitions.rising.size == 0 or moved <= 0:
        return {}
    return {"amplitude_V": Estimate(hi95=moved)}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Job:
    """Everything that the quantities of one element rest on."""

    record: Record
    conditions: Conditions
    fixture: Fixture
    channel: Channel
    drive: Channel | None
    pairing: Pairing | None
    period: Estimate | None
    reference: ReferenceLevels
    keep_parts: bool = False

    def referred(self) -> Transitions | None:
        """The output's instants at the levels asked for; `None` where a fixed threshold is not passed."""
        if self.reference == TEN_FIFTY_NINETY:
            return self.channel.transitions
        fixture, levels = self.fixture, self.channel.levels
        u_volts = float(np.hypot(fixture.u_offset_V, fixture.u_gain_ratio * max(abs(levels.low_V), abs(levels.high_V))))
        return relocate(self.channel, self.record, self.reference, offset_V=fixture.offset_V, u_volts=u_volts)

    def edges(self) -> IntArray:
        """Output edges that count: those that answer the drive, all of them where there is none."""
        pairing = self.pairing
        if pairing is not None:
            return np.sort(pairing.output)
        return np.arange(self.channel.transitions.rising.size, dtype=np.intp)

    def estimator(self) -> str | None:
        """How most of the edges that count were timed."""
        edges, transitions = self.edges(), self.channel.transitions
        if edges.size == 0:
            return None
        if np.mean(transitions.by_shape[edges]) > 0.5:
            return BY_SHAPE
        return BY_POLYNOMIAL if np.median(transitions.n_samples[edges]) >= ENOUGH_TO_FIT else BY_LINE

    def n_pulses(self) -> int:
        rising = self.channel.transitions.rising[self.edges()]
        return int(max(np.sum(rising), np.sum(~rising)))

    def budget(self) -> Budget:
        drive = self.drive.levels if self.drive else None
        return Budget(
            u_levels_V=level_uncertainties(self.channel.levels, drive),
            u_timebase_ratio=self.fixture.u_timebase_ratio,
            keep_parts=self.keep_parts,
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
        found = {
            name: self._of_parts(
                level - fixture.offset_V,
                {"noise of the level": u, "offset of the scope": fixture.u_offset_V, "gain of the scope": gain * level},
            )
            for name, level, u in (("low_V", levels.low_V, levels.u_low_V), ("high_V", levels.high_V, levels.u_high_V))
        }
        parts = {"noise of both levels": levels.u_amplitude_V, "gain of the scope": gain * amplitude}
        found["amplitude_V"] = self._of_parts(amplitude, parts)
        if self.conditions.device_kind in _DIODES and self.conditions.load_ohm:
            load = fixture.effective_load(self.conditions.load_ohm, self.conditions.input_ohm)
            resistance = load.value or 1.0
            current = amplitude / resistance
            of_current = {name: u / resistance for name, u in parts.items()}
            found["photocurrent_A"] = self._of_parts(
                current, of_current | {"load": current * (load.u or 0.0) / resistance}
            )
        if self.conditions.output_connection == OutputConnection.PULL_UP and self.conditions.device_kind in _SWITCHES:
            found["output_low_V"] = found["low_V"]
        ratio = self._transfer_ratio(found)
        return found if ratio is None else found | {"current_transfer_ratio": ratio}

    def _of_parts(self, value: float, parts: dict[str, float]) -> Estimate:
        """A value whose uncertainty is put together from independent parts (JCGM 100:2008, 5.1.2)."""
        u = float(np.sqrt(np.sum(np.square(list(parts.values())))))
        kept = {name: abs(part) for name, part in parts.items()} if self.keep_parts else None
        return Estimate(value=value, u=u, parts=kept)

    def _transfer_ratio(self, levels: dict[str, Estimate]) -> Estimate | None:
        """Collector current over emitter current of a coupler; only a lower bound where the output may be saturated.

        The collector current is the swing over the effective load (IEC 60747-5-5, current transfer ratio).
        """
        known = self.conditions
        driven = known.driven_element in (None, known.element)
        if (
            known.device_kind != DeviceKind.OPTOCOUPLER
            or not driven
            or not known.load_ohm
            or not known.emitter_current_A
        ):
            return None
        load = self.fixture.effective_load(known.load_ohm, known.input_ohm)
        amplitude = levels["amplitude_V"]
        value = (amplitude.value or 0.0) / (load.value or 1.0) / known.emitter_current_A
        u = value * float(
            np.hypot((amplitude.u or 0.0) / (amplitude.value or 1.0), (load.u or 0.0) / (load.value or 1.0))
        )
        if self._voltage_left() > UNSATURATED_V:
            return Estimate(value=value, u=u)
        return Estimate(lo95=value - 1.645 * u)

    def _voltage_left(self) -> float:
        """Voltage across the output transistor with the light on; 0 where it cannot be told."""
        if self.conditions.output_connection == OutputConnection.PULL_UP:
            return self.channel.levels.low_V
        supply = self.conditions.bias_read_V if self.conditions.bias_read_V is not None else self.conditions.bias_V
        return 0.0 if supply is None else supply - self.channel.levels.high_V

    def times(self) -> dict[str, Estimate]:
        """Rise and fall, and what drive, period and polarity allow of delays, widths, duties and switching times."""
        budget, output, pairing = self.budget(), self.channel.transitions, self.pairing
        referred = self.referred()
        found = time_edges(self._outer() if referred is None else referred, self.edges(), budget=budget)
        skew = {"skew_s": self.fixture.channel_skew_s, "u_skew_s": self.fixture.u_channel_skew_s}
        light_high = self.light_high()
        found |= self._without_bench(found, light_high)
        if self.drive is not None and pairing is not None:
            if referred is not None:
                found |= time_delays(self.drive.transitions, referred, pairing, budget=budget, **skew)
            if light_high is not None and self.conditions.device_kind in _SWITCHES:
                found |= switching_times(
                    self.drive.transitions, output, pairing, light_high=light_high, budget=budget, **skew
                )
        return found | self._widths(budget, light_high, referred)

    def _without_bench(self, seen: dict[str, Estimate], light_high: bool | None) -> dict[str, Estimate]:
        """Rise and fall time of the device alone, and beside them as the scope showed them, where the bench's response is known.

        A switching transistor is no stage in a row: its edges stay as they are.
        """
        response, known = self.fixture.response, self.conditions
        if response is not None and (light_high is None or not response.holds_at(known.emitter_current_A)):
            response = None
        if known.device_kind in _SWITCHES or (response is None and self._jitter_s() == 0.0):
            return {}
        found: dict[str, Estimate] = {}
        for name, rising in (("rise_time_s", True), ("fall_time_s", False)):
            edges = self.edges()[self.channel.transitions.rising[self.edges()] == rising]
            if edges.size == 0 or name not in seen:
                continue
            whole = self.budget().estimate(durations(self.channel.transitions, edges).mean())
            share, u_share = share_before_half(self.channel.transitions, edges)
            alone = without_bench(
                Seen(duration_s=whole.value or 0.0, u_duration_s=whole.u or 0.0, share=share, u_share=u_share),
                self._bench_stage(response, on=rising == light_high),
                low=self.reference.low_ratio, high=self.reference.high_ratio,
            )  # fmt: skip
            found |= {name: alone if self.keep_parts else replace(alone, parts=None), f"seen_{name}": seen[name]}
        return found

    def _jitter_s(self) -> float:
        """Trigger jitter that averaging has put into the edges."""
        return self.fixture.trigger_jitter_s if (self.conditions.averages or 1) > 1 else 0.0

    def _bench_stage(self, response: Response | None, *, on: bool) -> Stage:
        """One edge of the bench; averaging under trigger jitter adds a Gaussian stage to it, or is all that is known of it."""
        jitter = GAUSSIAN_TEN_NINETY * self._jitter_s()
        if response is None:
            return Stage(duration_s=jitter, u_duration_s=JITTER_KNOWN_TO * jitter, share=GAUSSIAN_SHARE)
        time, u_time, share, u_share = (
            (response.rise_time_s, response.u_rise_time_s, response.rise_share, response.u_rise_share)
            if on
            else (response.fall_time_s, response.u_fall_time_s, response.fall_share, response.u_fall_share)
        )
        jitter = self.fixture.trigger_jitter_s if (self.conditions.averages or 1) > 1 else 0.0
        return Stage(
            duration_s=float(np.hypot(time, GAUSSIAN_TEN_NINETY * jitter)),
            u_duration_s=u_time,
            share=share,
            u_share=u_share,
        )

    def _outer(self) -> Transitions:
        """Instants at the outer levels asked for, the middle ones at half the amplitude."""
        found = relocate(self.channel, self.record, replace(self.reference, rising_V=None, falling_V=None))
        assert found is not None  # only a fixed threshold can be missed
        return found

    def _widths(self, budget: Budget, light_high: bool | None, output: Transitions | None) -> dict[str, Estimate]:
        """Widths of drive and output pulses, and the duties where the period is known."""
        period, pairing = self.period_s(), self.pairing
        means: dict[str, Interval] = {}
        if self.drive is not None:
            drive_high = True if pairing is None or light_high is None else light_high != pairing.inverting
            every = np.arange(self.drive.transitions.rising.size, dtype=np.intp)
            drive = self.drive.transitions
            width = mean_width(drive, every, active_high=drive_high, channel=DRIVE, period_s=period)
            means |= {} if width is None else {"in": width}
        if light_high is not None and output is not None:
            width = mean_width(output, self.edges(), active_high=light_high, channel=OUTPUT, period_s=period)
            means |= {} if width is None else {"out": width}
        found = {f"width_{side}_s": budget.estimate(mean) for side, mean in means.items()}
        found |= {f"duty_{side}": self._share(mean, budget) for side, mean in means.items() if period is not None}
        if period is not None and len(means) == 2:
            found["duty_cycle_distortion"] = self._share(means["out"].minus(means["in"]), budget)
        return found

    def _share(self, interval: Interval, budget: Budget) -> Estimate:
        """An interval over the period, whose uncertainty joins; the error of their common time base cancels."""
        period = self.period
        whole, u_whole = (1.0, 0.0) if period is None else (period.value or 1.0, period.u or 0.0)
        ratio = replace(budget, u_timebase_ratio=0.0)
        return ratio.estimate(
            interval, u_more_s=abs(interval.value_s) * u_whole / whole, more="period", scale=1 / whole
        )

    def period_s(self) -> float | None:
        """Period of the pulses, `None` where it is neither in the capture nor stated."""
        return None if self.period is None else self.period.value

    def flags(self, quantities: dict[str, Estimate]) -> set[str]:
        """Flags of the trace, the pairing, the bias and the bench."""
        found = trace_flags(self.record.signal_V, self.record.time_s, self.channel)
        if self.conditions.device_kind in _SWITCHES:
            found.discard("slow_tail")
        pairing = self.pairing
        if self.estimator() == BY_POLYNOMIAL:
            found.add("shape_free")
        if self.drive is not None and (pairing is None or pairing.left_over):
            found.add("unpaired")
        if self.period_s() is None:
            found.add("period_unknown")
        if self.light_high() is None:
            found.add("conditions_missing")
        if self.referred() is None:
            found.add("threshold_missed")
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
            for name, own in pairs:
                seen = quantities.get(f"seen_{name}", quantities.get(name))
                if seen is not None and (seen.value or 0.0) < BENCH_RATIO * own:
                    found.add("bench_limited")
        return found


def _pairing(drive: Channel | None, output: Channel, fixture: Fixture) -> Pairing | None:
    if drive is None:
        return None
    return pair_edges(drive.transitions, output.transitions, end_s=output.end_s, skew_s=fixture.channel_skew_s)


def _period(drive: Channel | None, output: Channel, conditions: Conditions) -> Estimate | None:
    """Period from whichever channel tells it best, else as stated."""
    seen = [found for channel in (drive, output) if channel and (found := period_of(channel.transitions)) is not None]
    if seen:
        return min(seen, key=lambda found: found.u or 0.0)
    stated = conditions.drive_period_s
    return None if stated is None else Estimate(value=stated, u=0.0)


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
    elif not fixture.response.holds_at(conditions.emitter_current_A):
        found.add("emitter_current_differs")
    return found
