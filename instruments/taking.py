"""Takes the captures of one point: bench set as the point wants it, scope ranged in volts and time, records fetched."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from importlib.metadata import version

from darkedge.analysis.captures import Capture, Conditions, Kind, Reference, Waveform
from darkedge.analysis.errors import BenchError
from darkedge.analysis.plan import LoadChange, Plan, Step
from darkedge.instruments.function_generator import Pulses
from darkedge.instruments.hands import Hands
from darkedge.instruments.live_bench import LiveBench, Time, signals
from darkedge.instruments.oscilloscope import Traces, Window
from darkedge.instruments.ranging import (
    ENOUGH_ON_EDGE,
    Seen,
    Stretch,
    better_window,
    clipped,
    edge_stretch,
    longer,
    look,
    samples_on,
    whole_pulse,
    window_for,
)

MOST_LOOKS = 12
BANDWIDTH_LIMIT_Hz = 20e6
"""What a scope's bandwidth limit usually is (common practice, no source); the capture says it only where the limit stays on."""
DARK_ROOM = 1.5
Utc = Callable[[], datetime]


def utc_now() -> datetime:
    """The time of day, UTC."""
    return datetime.now(UTC)


@dataclass(frozen=True, slots=True, kw_only=True)
class Naming:
    """What the captures of a run say of themselves beside their point."""

    run: str
    device: str
    lot: str | None = None
    temperature_degC: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Taken:
    """The captures of one point, and the fixed window of a dark series."""

    captures: tuple[Capture, ...]
    taken_utc: str
    window: Window | None = None


class PointTaker:
    """Sets the bench for one point after another, changing only what differs, and takes their captures.

    `dark_window` is the window of a dark series that was begun before.
    """

    def __init__(
        self,
        bench: LiveBench,
        plan: Plan,
        naming: Naming,
        hands: Hands,
        *,
        clock: Time,
        utc: Utc = utc_now,
        dark_window: Window | None = None,
    ) -> None:
        self.bench, self.plan, self.naming, self.hands = bench, plan, naming, hands
        self.clock, self.utc = clock, utc
        self.signals = signals(plan)
        self._load_ohm: float | None = None
        self._covered = False
        self._bias_V: float | None = None
        self._light: tuple[object, ...] | None = None
        self._pulses: Pulses | None = None
        self._windows: dict[tuple[object, ...], Window] = {}
        self._stretches: dict[tuple[object, ...], Stretch] = {}
        self._dark_window = dark_window
        self._dark_ready = False

    def prepare(self) -> None:
        """The state every run begins in: emitter off, bias at zero, channels as the analysis needs them."""
        self.bench.generator.off()
        self.bench.bias.prepare()
        self.bench.oscilloscope.prepare(self.signals)

    def forget_ranges(self) -> None:
        """Range afresh at the next point."""
        self._windows.clear()
        self._stretches.clear()

    def take(self, step: Step) -> Taken:
        """Take one point.

        Raises
        ------
        BenchError
            The bench failed; nothing was written.
        InputError
            Hand work was not confirmed.
        """
        self._put_in_load(step)
        return self._pulse_point(step) if step.kind is Kind.PULSE else self._still_point(step)

    # Hand work and bias

    def _put_in_load(self, step: Step) -> None:
        """Another load only with the light off and the bias down."""
        if self._load_ohm == step.load_ohm:
            return
        change = self.plan.axes.load_change
        if change is not LoadChange.FIXED:
            self._dark()
            self.bench.bias.discharge()
            self._bias_V = None
            if change is LoadChange.SWITCHED and self.bench.switch is not None:
                self.bench.switch.put_in_load(step.load_ohm)
            else:
                self.hands.put_in_load(step.load_ohm)
        self._load_ohm = step.load_ohm
        self._dark_ready = False

    def _go_to_bias(self, bias_V: float) -> None:
        if self._bias_V != bias_V:
            self._bias_V = None
            self.bench.bias.go_to(bias_V)
            self._bias_V = bias_V

    def _dark(self) -> None:
        self._light = self._pulses = None
        self.bench.generator.off()

    # Pulses

    def _pulse_point(self, step: Step) -> Taken:
        assert step.element is not None
        assert step.emitter_current_A is not None
        assert step.pulse_width_s is not None  # a pulse step has all three
        self._go_to_bias(step.bias_V)
        pulses = self._shine(step.element, step.emitter_current_A, step.pulse_width_s)
        self._trigger(step, pulses)
        width, period = pulses.pulse_width_s, pulses.period_s
        place = (step.load_ohm, step.element, step.emitter_current_A, width)
        stretch = self._stretches.get(place, whole_pulse(width, period))
        while True:
            traces = self._ranged(stretch, step, pulses)
            seen = self._look(traces, step.element, width)
            further = longer(stretch, period)
            if seen.settled or further is None:
                break
            stretch = further
        self._stretches[place] = stretch
        taken = self.utc()
        captures = [self._capture(step, traces, pulses, taken, "")]
        for suffix, edge in self._edge_stretches(traces, seen, pulses):
            captures.append(self._capture(step, self._ranged(edge, step, pulses), pulses, taken, suffix))
        return Taken(captures=tuple(captures), taken_utc=_stamp(taken))

    def _shine(self, element: int, current_A: float, width_s: float) -> Pulses:
        wanted = (element, current_A, width_s)
        if self._pulses is None or self._light != wanted:
            self._light = None
            self._pulses = self.bench.generator.pulse(
                element=element,
                current_A=current_A,
                width_s=width_s,
                period_s=self.plan.drive.period_for(width_s),
                plan=self.plan,
            )
            self._light = wanted
        return self._pulses

    def _trigger(self, step: Step, pulses: Pulses) -> None:
        """Trigger half way up the drive, as expected where the reference is electrical, else as seen."""
        place = ("drive", step.element, step.emitter_current_A)
        window = self._windows.get(place)
        if window is None:
            expected = self._expected_drive(pulses)
            window = window_for(*expected) if expected else self._search_drive(pulses)
            self._windows[place] = window
        self.bench.oscilloscope.show("drive", window)
        self.bench.oscilloscope.trigger("drive", level_V=window.offset_V)

    def _expected_drive(self, pulses: Pulses) -> tuple[float, float] | None:
        emitter, current = self.plan.emitter, pulses.emitter_current_A
        if emitter.reference is Reference.LIGHT:
            return None
        across = current * emitter.series_ohm
        if emitter.reference is Reference.CURRENT:
            return 0.0, across
        return min(pulses.low_V, 0.0), emitter.forward_V + across

    def _search_drive(self, pulses: Pulses) -> Window:
        """Let the scope run free over two periods, and see between which levels the drive moves."""
        scope, link = self.bench.oscilloscope, self.bench.oscilloscope.link
        window = Window(range_V=16.0)
        scope.trigger(None)
        scope.time(start_s=0.0, span_s=2.2 * pulses.period_s, points=link.points, averages=1)
        for _ in range(MOST_LOOKS):
            window = scope.show("drive", window)
            traces = scope.acquire(["drive"], period_s=pulses.period_s)
            better = better_window(traces.volts["drive"], window)
            if better is None:
                break
            real = scope.show("drive", better)
            if real.range_V >= window.range_V and better.range_V <= window.range_V:
                break
            window = real
        signal = traces.volts["drive"]
        low, high = float(signal.min()), float(signal.max())
        if high - low < 0.2 * window.range_V:
            raise BenchError(
                "no drive pulse is seen", where="oscilloscope, drive", found=f"{low:.3g} V to {high:.3g} V",
                mend="check the cable from the generator or the reference detector, and oscilloscope.channels",
            )  # fmt: skip
        return window_for(low, high)

    def _ranged(self, stretch: Stretch, step: Step, pulses: Pulses) -> Traces:
        """Records of a stretch with every signal inside its range and filling it as far as the scope's ranges allow."""
        scope, full = self.bench.oscilloscope, self.bench.oscilloscope.link.averages
        keys = {name: self._place(name, step) for name in self.signals}
        known = all(key in self._windows for key in keys.values())
        windows = {
            name: scope.show(name, self._windows.get(key, Window(range_V=self._first_range_V(name))))
            for name, key in keys.items()
        }
        averages = full if known else 1
        stuck: set[str] = set()
        for _ in range(MOST_LOOKS):
            scope.time(start_s=stretch.start_s, span_s=stretch.span_s, points=scope.link.points, averages=averages)
            traces = self._acquire(pulses)
            changed = False
            for name in self.signals:
                better = None if name in stuck else better_window(traces.volts[name], windows[name])
                if better is None:
                    continue
                real = scope.show(name, better)
                if abs(real.range_V / windows[name].range_V - 1) < 0.05 and better.range_V < windows[name].range_V:
                    stuck.add(name)  # the scope has nothing finer
                changed |= real != windows[name]
                windows[name] = real
            if not changed and averages == full:
                break
            averages = averages if changed else full
        for name, key in keys.items():
            self._windows[key] = windows[name]
        return traces

    def _place(self, signal: str, step: Step) -> tuple[object, ...]:
        """What decides the range of a signal: the drive depends on the light alone."""
        if signal == "drive":
            return ("drive", step.element, step.emitter_current_A)
        return (signal, step.element, step.emitter_current_A, step.load_ohm)

    def _first_range_V(self, signal: str) -> float:
        return max(2 * (self._bias_V or 0.0), 1.0) if signal != "drive" else 8.0

    def _acquire(self, pulses: Pulses) -> Traces:
        return self.bench.oscilloscope.acquire(self.signals, period_s=pulses.period_s)

    def _look(self, traces: Traces, element: int, width_s: float) -> Seen:
        return look(traces.time_s(), traces.volts[self.signals[element]], width_s)

    def _edge_stretches(self, traces: Traces, seen: Seen, pulses: Pulses) -> list[tuple[str, Stretch]]:
        """A closer look at each edge that has too few samples, where one helps."""
        found = []
        width, end = pulses.pulse_width_s, 0.98 * pulses.period_s
        for suffix, edge, drive_s, earliest, latest in (
            ("_on", seen.on, 0.0, -end / 2, 0.98 * width),
            ("_off", seen.off, width, 0.02 * width, end - 0.2 * width),
        ):
            if edge is None or samples_on(edge, traces.step_s) >= ENOUGH_ON_EDGE:
                continue
            stretch = edge_stretch(edge, drive_s=drive_s, earliest_s=earliest, latest_s=latest)
            if stretch.span_s < 0.7 * traces.step_s * self.bench.oscilloscope.points:
                found.append((suffix, stretch))
        return found

    # Still traces

    def _still_point(self, step: Step) -> Taken:
        """A dark or an offset trace: light off, one fixed range for the whole series, settled, running free."""
        dark = self.plan.dark
        assert dark is not None  # only a plan with [dark] has such steps
        self._dark()
        if not self._covered:
            self.bench.bias.discharge()
            self._bias_V = None
            self.hands.cover()
            self._covered = True
        if not self._dark_ready:
            self._fix_dark_window(max(dark.bias_V), dark.settle_s, dark.duration_s)
        self._go_to_bias(step.bias_V)
        self.clock.wait(dark.settle_s)
        traces = self._still_traces(dark.duration_s)
        taken = self.utc()
        return Taken(
            captures=(self._capture(step, traces, None, taken, ""),), taken_utc=_stamp(taken), window=self._dark_window
        )

    def _fix_dark_window(self, highest_V: float, settle_s: float, duration_s: float) -> None:
        """Choose one window that holds zero and the largest dark current, and keep it for the series."""
        scope = self.bench.oscilloscope
        outputs = self.signals[1:]
        scope.trigger(None)
        if self._dark_window is None:
            self._go_to_bias(highest_V)
            self.clock.wait(settle_s)
            windows = dict.fromkeys(outputs, Window(range_V=max(2.2 * highest_V, 1.0)))
            windows = {name: scope.show(name, window) for name, window in windows.items()}
            for _ in range(MOST_LOOKS):
                traces = self._still_traces(duration_s)
                low = min(float(values.min()) for values in traces.volts.values())
                high = max(float(values.max()) for values in traces.volts.values())
                current = next(iter(windows.values()))
                # Zero belongs into the window, with room for what grows while it warms up.
                wanted = window_for(min(low, 0.0), max(high, 0.0))
                wanted = replace(wanted, range_V=DARK_ROOM * wanted.range_V)
                if any(clipped(values, current) for values in traces.volts.values()):
                    wanted = Window(range_V=4 * current.range_V)
                real = {name: scope.show(name, wanted) for name in outputs}
                same = all(math.isclose(real[n].range_V, windows[n].range_V, rel_tol=0.05) for n in outputs)
                windows = real
                if same:
                    break
            self._dark_window = next(iter(windows.values()))
        for name in outputs:
            scope.show(name, self._dark_window)
        self._dark_ready = True

    def _still_traces(self, duration_s: float) -> Traces:
        scope = self.bench.oscilloscope
        scope.trigger(None)
        scope.time(start_s=0.0, span_s=duration_s, points=scope.link.points, averages=1)
        return scope.acquire(self.signals[1:], period_s=duration_s)

    # Captures

    def _capture(self, step: Step, traces: Traces, pulses: Pulses | None, taken: datetime, suffix: str) -> Capture:
        def waveform(signal: str) -> Waveform:
            return Waveform(signal_V=traces.volts[signal], dt_s=_tidy(traces.step_s), t0_s=_tidy(traces.start_s))

        outputs = {k: waveform(name) for k, name in enumerate(self.signals[1:], start=1)}
        return Capture(
            name=f"{step.name}_{step.kind}{suffix}.csv",
            outputs=outputs,
            drive=waveform("drive") if "drive" in traces.volts else None,
            conditions=self._conditions(step, traces, pulses, taken),
        )

    def _conditions(self, step: Step, traces: Traces, pulses: Pulses | None, taken: datetime) -> Conditions:
        state = self.bench.oscilloscope.state("output")
        several = len(self.signals) > 2
        return Conditions(
            run=self.naming.run,
            point=step.name,
            kind=step.kind,
            device=self.naming.device,
            lot=self.naming.lot,
            element=None if several else 1,
            driven_element=step.element if pulses is not None else None,
            reference=self.plan.emitter.reference if pulses is not None else None,
            bias_V=step.bias_V,
            bias_read_V=None if self.bench.bias.read_V is None else _tidy(self.bench.bias.read_V),
            load_ohm=step.load_ohm,
            emitter_current_A=None if pulses is None else _tidy(pulses.emitter_current_A, 6),
            pulse_width_s=None if pulses is None else _tidy(pulses.pulse_width_s, 6),
            drive_period_s=None if pulses is None else _tidy(pulses.period_s, 9),
            temperature_degC=self.naming.temperature_degC,
            averages=traces.averages,
            coupling=state.coupling,
            input_ohm=state.input_ohm,
            bandwidth_limit_Hz=BANDWIDTH_LIMIT_Hz if state.bandwidth_limited else None,
            probe_ratio=state.probe_ratio,
            volts_per_code=None if state.volts_per_code is None else _tidy(state.volts_per_code, 9),
            taken_utc=_stamp(taken),
            darkedge=version("darkedge"),
            device_kind=self.plan.device.kind,
            output_connection=self.plan.device.output_connection,
        )


def _tidy(value: float, digits: int = 12) -> float:
    """Drop digits that only the way through a float made."""
    return float(f"{value:.{digits}g}")


def _stamp(taken: datetime) -> str:
    return taken.strftime("%Y-%m-%dT%H:%M:%SZ")
