"""Make the sample captures: invented devices on the virtual bench, whose equations are integrated in time.

    python tests/make_sample_captures.py sample_captures
    python tests/make_sample_captures.py --check sample_captures

The same seed gives the same bytes on the same machine. Nothing of the analysis is used but the writer of capture files; the true edge times
in tests/sample_truth.json are read off the noise-free integrated waveform behind the scope's bandwidth, by plain interpolation.
"""

from __future__ import annotations

import argparse
import filecmp
import json
import sys
import tempfile
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from importlib.metadata import version
from pathlib import Path

import numpy as np

from darkedge.instruments.virtual.front_end import limit_bandwidth
from darkedge.instruments.virtual.parts import Device, Element, Emitter, Junction, Transistor
from darkedge.instruments.virtual.scope import Flaws, Oscilloscope
from darkedge.instruments.virtual.sources import BiasSupply, FunctionGenerator
from darkedge.instruments.virtual.wiring import GENERATOR_OHM, Wiring, World

SEED = 20260303
START = datetime(2026, 3, 3, 9, 0, tzinfo=UTC)
TRUTH = Path(__file__).with_name("sample_truth.json")
ACTUAL_OHM = {1e3: 998.7, 2.2e3: 2203.0, 4.7e3: 4694.0, 1e4: 10_012.0, 1e6: 998_300.0}
STRAY_F, U_STRAY_F = 14.2e-12, 0.4e-12
EMITTER = Emitter(delay_s=3e-9, on_s=4e-9, off_s=7e-9)
FLAWS = Flaws(noise_ratio=0.005)
LIMIT_RISE, LIMIT_DARK = "110 ns", "5 nA"

DIODE = Junction(c_j0_F=96e-12, v_bi_V=0.62, grading=0.43, coupling_ratio=0.0018, generation_A=4e-10, shunt_ohm=4e10)
PIN = Junction(
    c_j0_F=62e-12,
    v_bi_V=0.7,
    grading=0.46,
    full_depletion_V=9.0,
    coupling_ratio=0.0018,
    generation_A=1.5e-10,
    shunt_ohm=8e10,
)
SWITCH_DIODE = Junction(c_j0_F=30e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=0.002)


@dataclass
class Run:
    """One run: the device in the socket, the instruments, the captures taken so far."""

    name: str
    device: Device
    part: str
    kind: str
    connection: str = "load_to_ground"
    lot: str = ""
    temperature_degC: float = 23.5
    points: list[dict[str, object]] = field(default_factory=list)
    texts: dict[str, str] = field(default_factory=dict)
    truth: dict[str, dict[str, float]] = field(default_factory=dict)


class Bench:
    """Virtual instruments driven by their commands, as a sweep would."""

    def __init__(self, run: Run, seed: int, clock: Iterator[str]) -> None:
        self.run, self.clock = run, clock
        self.world = World(
            device=run.device,
            wiring=Wiring(
                connection=run.connection, temperature_degC=run.temperature_degC, stray_F=STRAY_F, load_ohm=1e3
            ),
        )
        self.scope = Oscilloscope(self.world, seed=seed, flaws=FLAWS)
        self.generator, self.supply = FunctionGenerator(self.world), BiasSupply(self.world)
        self.load_ohm = 1e3

    def load(self, nominal_ohm: float) -> None:
        self.load_ohm = nominal_ohm
        self.world.mount(load_ohm=ACTUAL_OHM[nominal_ohm])

    def bias(self, volts: float) -> None:
        self._do(self.supply, f"VOLT {volts:.6g};:OUTP ON")
        self.bias_V = volts

    def light(self, current_A: float, width_s: float, period_s: float, channel: int = 1) -> None:
        self.dark()
        open_V = EMITTER.forward_V + current_A * (GENERATOR_OHM + self.world.wiring.series_ohm)
        self._do(self.generator, f"SOUR{channel}:PULS:PER MAX;WIDT {width_s:.9g};PER {period_s:.9g}")
        self._do(
            self.generator, f"OUTP{channel}:IMP 50;:SOUR{channel}:VOLT:HIGH {open_V / 2:.6g};LOW 0;:OUTP{channel} ON"
        )
        self.current_A, self.width_s, self.period_s, self.channel = current_A, width_s, period_s, channel

    def dark(self) -> None:
        self._do(self.generator, "OUTP1 OFF;:OUTP2 OFF")

    def range(self, channel: int, low_V: float, high_V: float) -> None:
        span = max((high_V - low_V) * 1.25, 8e-3)
        self._do(self.scope, f"SENS{channel}:VOLT:RANG:PTP {span:.6g};OFFS {(low_V + high_V) / 2:.6g}")

    def time(self, start_s: float, span_s: float, points: int, averages: int = 4) -> None:
        self._do(self.scope, f"SWE:TIME {span_s:.9g};POIN {points};OFFS:TIME {start_s:.9g}")
        self._do(self.scope, f"AVER:COUN {averages};STAT ON;:FORM REAL,64")
        self.start_s, self.span_s, self.count, self.averages = start_s, span_s, points, averages

    def pulse(self, *, elements: Iterable[int] = (1,), element: int | None = 1) -> None:
        """Take one pulse capture and keep the truth of it."""
        drive_V = self.world.drive_V(self.channel - 1, high=True)
        self.range(1, 0.0, drive_V)
        self._do(self.scope, f"TRIG:SOUR INT1;LEV {drive_V / 2:.6g};SLOP POS")
        self._range_outputs(list(elements))
        name = self._take("pulse", list(elements), element)
        for number in elements:
            self.run.truth[f"{name}:{number}"] = self._truth(number)

    def still(self, kind: str, low_V: float, high_V: float) -> None:
        """Take a dark or an offset trace on a fixed range."""
        self.dark()
        self._do(self.scope, "TRIG:SOUR IMM")
        self.range(2, low_V, high_V)
        self._take(kind, [1], 1)

    def _range_outputs(self, elements: list[int]) -> None:
        for number in elements:
            shown = self.world.output_signal(number - 1, np.linspace(self.start_s, self.start_s + self.span_s, 4001))
            low, high = float(shown.min()), float(shown.max())
            room = max(high - low, 8e-3)
            self.range(number + 1, low, low + room)

    def _take(self, kind: str, elements: list[int], element: int | None) -> str:
        self._do(self.scope, "INIT")
        assert self.scope.carry_out("*OPC?") == b"1\n"
        step = self.span_s / self.count
        time = [f"{self.start_s + k * step:.9g}" for k in range(self.count)]
        columns = {"time_s": time}
        if kind == "pulse":
            columns["drive_V"] = [f"{v:.4g}" for v in self._trace(1)]
        for number in elements:
            columns["output_V" if number == 1 else f"output{number}_V"] = [f"{v:.6g}" for v in self._trace(number + 1)]
        point = f"{len(self.run.points) + 1:04d}"
        header = self._header(kind, point, element)
        lines = [
            "# format = darkedge-capture 1",
            *(f"# {k} = {v}".rstrip() for k, v in header.items()),
            ",".join(columns),
        ]
        lines += [",".join(row) for row in zip(*columns.values(), strict=True)]
        name = f"{point}_{kind}.csv"
        self.run.texts[name] = "\n".join(lines) + "\n"
        self.run.points.append({**header, "capture": name})
        return name

    def _header(self, kind: str, point: str, element: int | None) -> dict[str, object]:
        lit = kind == "pulse"
        output = self.scope.channels[1]
        return {
            "run": self.run.name, "point": point, "kind": kind, "device": self.run.device.name, "lot": self.run.lot,
            "element": "" if element is None else element, "driven_element": self.channel if lit else "", "reference": "voltage",
            "bias_V": f"{self.bias_V:g}", "bias_read_V": f"{self.world.bias_V * 1.0002:.5g}", "load_ohm": f"{self.load_ohm:g}",
            "emitter_current_A": f"{self.current_A:g}" if lit else "", "pulse_width_s": f"{self.width_s:g}" if lit else "",
            "drive_period_s": f"{self.period_s:g}" if lit else "", "temperature_degC": f"{self.run.temperature_degC:g}",
            "averages": self.averages, "coupling": "DC", "input_ohm": "1e+06", "bandwidth_limit_Hz": "", "probe_ratio": 1,
            "volts_per_code": f"{output.range_V / 256:.6g}", "taken_utc": next(self.clock), "darkedge": version("darkedge"),
            "device_kind": self.run.kind, "output_connection": self.run.connection,
        }  # fmt: skip

    def _trace(self, channel: int) -> np.ndarray:
        block = self.scope.carry_out(f"TRAC? CH{channel}")
        digits = int(block[1:2])
        return np.frombuffer(block[2 + digits : 2 + digits + int(block[2 : 2 + digits])], ">f8")

    def _truth(self, number: int) -> dict[str, float]:
        """Edge times of the noise-free waveform behind the scope's bandwidth, by plain interpolation on a fine grid."""
        step = self.span_s / 200_000
        time = self.start_s + step * np.arange(-2000, 200_000)
        shown = limit_bandwidth(self.world.output_signal(number - 1, time), step, FLAWS.bandwidth_Hz)
        before = (time < -10 * step) & (time > self.start_s)
        lit = (time > 0.97 * self.width_s) & (time < self.width_s)
        rest, top = float(shown[before].mean()), float(shown[lit].mean())
        rising = top > rest
        found = {"rest_V": rest, "lit_V": top}
        if abs(float(shown[lit][-1] - shown[lit][0])) > 0.005 * abs(top - rest):
            return found  # the pulse ends before the output settles: edge times depend on what is called its top
        drive = limit_bandwidth(self.world.drive_signal(time), step, FLAWS.bandwidth_Hz)
        base, full = float(drive[before].mean()), float(drive[lit].mean())
        first, second = time <= self.width_s - 10e-9, time >= self.width_s - 10e-9
        on, off = _crossings(time[first], shown[first], rest, top), _crossings(time[second], shown[second], top, rest)
        drive_on, drive_off = (
            _crossings(time[first], drive[first], base, full),
            _crossings(time[second], drive[second], full, base),
        )
        if on is None or off is None or drive_on is None or drive_off is None:
            return found
        found["rise_time_s" if rising else "fall_time_s"] = on[2] - on[0]
        found["fall_time_s" if rising else "rise_time_s"] = off[2] - off[0]
        found["t_plh_s" if rising else "t_phl_s"] = on[1] - drive_on[1]
        found["t_phl_s" if rising else "t_plh_s"] = off[1] - drive_off[1]
        return found

    @staticmethod
    def _do(instrument: Oscilloscope | FunctionGenerator | BiasSupply, message: str) -> None:
        instrument.carry_out(message)
        answer = instrument.carry_out("SYST:ERR?")
        if not answer.startswith(b"0,"):
            raise RuntimeError(f"{message}: {answer!r}")


def _crossings(time: np.ndarray, signal: np.ndarray, start: float, end: float) -> tuple[float, float, float] | None:
    progress = (signal - start) / (end - start)
    found = []
    for level in (0.1, 0.5, 0.9):
        above = np.flatnonzero(progress >= level)
        if above.size == 0 or above[0] == 0:
            return None
        k = above[0]
        share = (level - progress[k - 1]) / (progress[k] - progress[k - 1])
        found.append(float(time[k - 1] + share * (time[k] - time[k - 1])))
    return found[0], found[1], found[2]


def diode_pulse(bench: Bench, bias_V: float, load_ohm: float, width_s: float | None = None) -> None:
    """One pulse on a diode: whole pulse in the record, each edge with some tens of samples."""
    settled = 0.8e-6 * load_ohm / 1e3
    width = settled if width_s is None else width_s
    bench.load(load_ohm)
    bench.bias(bias_V)
    bench.light(5e-3, width, 10 * settled)
    bench.time(-0.25 * settled, 2.5 * settled, 1000)
    bench.pulse()


def dark_series(bench: Bench, biases: Iterable[float], high_V: float = 4e-3) -> None:
    """Dark traces at several biases with offset traces between, one fixed range, one sense resistor."""
    bench.load(1e6)
    bench.time(0.0, 0.2, 800)
    bench.bias(0.0)
    bench.still("offset", -1e-3, high_V)
    for bias_V in biases:
        bench.bias(bias_V)
        bench.still("dark", -1e-3, high_V)
        bench.bias(0.0)
        bench.still("offset", -1e-3, high_V)


def runs() -> Iterator[tuple[Path, Run]]:
    """Every run of the samples, where it stands."""
    random = np.random.default_rng(SEED)
    clock = (f"{START + timedelta(seconds=40 * k):%Y-%m-%dT%H:%M:%SZ}" for k in range(100_000))
    yield Path("photodiode"), photodiode_run(random, clock)
    yield Path("pin"), pin_run(random, clock)
    yield Path("npn_switch"), switch_run(random, clock)
    yield Path("optocoupler"), optocoupler_run(random, clock)
    yield Path("dual_optocoupler"), dual_run(random, clock)
    yield Path("compound_transistor"), compound_run(random, clock)
    yield Path("dark_traces"), dark_run(random, clock)
    for run in lot_runs(random, clock):
        yield Path("lot_K-0417") / run.device.name, run


def _element(junction: Junction, transistors: tuple[Transistor, ...] = ()) -> Element:
    return Element(junction=junction, emitter=EMITTER, transistors=transistors)


def photodiode_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    run = Run(
        "photodiode", Device(kind="photodiode", elements=(_element(DIODE),), name="SP-2-21"), "SP-2", "photodiode"
    )
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    for load in (1e3, 1e4):
        for bias in (1.0, 1.6, 2.6, 4.3, 7.0, 12.0, 18.0, 30.0):
            diode_pulse(bench, bias, load)
    for width in (4e-6, 2e-6, 1e-6, 0.7e-6, 0.5e-6, 0.3e-6):
        diode_pulse(bench, 12.0, 1e4, width)
    dark_series(bench, (1.0, 5.0, 12.0, 18.0, 30.0))
    return run


def pin_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    run = Run("pin", Device(kind="pin", elements=(_element(PIN),), name="SP-4-02"), "SP-4", "pin")
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    for load in (1e3, 1e4):
        for bias in (1.0, 2.0, 4.0, 6.5, 8.0, 11.0, 15.0, 24.0):
            diode_pulse(bench, bias, load)
    dark_series(bench, (5.0, 12.0))
    return run


def _switch_pulse(
    bench: Bench, current_A: float, load_ohm: float, channel: int = 1, elements: tuple[int, ...] = (1,)
) -> None:
    bench.load(load_ohm)
    bench.bias(5.0)
    bench.light(current_A, 100e-6, 1e-3, channel)
    bench.time(-20e-6, 160e-6, 1600)
    bench.pulse(elements=elements, element=1 if elements == (1,) else None)


def switch_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    device = Device(kind="transistor_switch", elements=(_element(SWITCH_DIODE, (Transistor(),)),), name="SP-7-05")
    run = Run("npn_switch", device, "SP-7", "transistor_switch", "pull_up")
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    for current in (5e-3, 10e-3, 20e-3):
        _switch_pulse(bench, current, 4.7e3)
    return run


def optocoupler_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    part = Transistor(gain=260, reverse_transit_s=1.6e-6)
    device = Device(kind="optocoupler", elements=(_element(SWITCH_DIODE, (part,)),), name="SP-9-11")
    run = Run("optocoupler", device, "SP-9", "optocoupler", "pull_up")
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    for current in (5e-3, 10e-3):
        _switch_pulse(bench, current, 4.7e3)
    return run


def dual_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    elements = (
        _element(SWITCH_DIODE, (Transistor(gain=240, reverse_transit_s=1.4e-6),)),
        _element(replace(SWITCH_DIODE, c_j0_F=34e-12), (Transistor(gain=200, reverse_transit_s=1.8e-6),)),
    )
    device = Device(kind="optocoupler", elements=elements, crosstalk_ratio=0.004, name="SP-9D-03")
    run = Run("dual_optocoupler", device, "SP-9D", "optocoupler", "pull_up")
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    for channel in (1, 2):
        _switch_pulse(bench, 10e-3, 4.7e3, channel, (1, 2))
    return run


def compound_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    junction = replace(SWITCH_DIODE, generation_A=3e-9)
    pair = (Transistor(gain=220, base_resistor_ohm=1e9), Transistor(gain=150, base_resistor_ohm=1e8))
    device = Device(kind="transistor_switch", elements=(_element(junction, pair),), name="SP-11-01")
    run = Run("compound_transistor", device, "SP-11", "transistor_switch", "pull_up", temperature_degC=70.0)
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    _switch_pulse(bench, 5e-3, 1e4)
    bench.time(0.0, 0.2, 800)
    bench.still("dark", -0.2, 5.2)
    return run


def dark_run(random: np.random.Generator, clock: Iterator[str]) -> Run:
    quiet = replace(DIODE, saturation_A=5e-14, generation_A=1e-13, shunt_ohm=1e14)
    first = Device(kind="photodiode", elements=(_element(DIODE),), name="SP-2-22")
    run = Run("dark_traces", first, "SP-2", "photodiode")
    bench = Bench(run, int(random.integers(1 << 30)), clock)
    for name, junction, leak in (("SP-2-22", DIODE, 0.0), ("SP-2-23", DIODE, 4e-9), ("SP-2-24", quiet, 0.0)):
        run.device = Device(kind="photodiode", elements=(_element(junction),), name=name)
        bench.world.mount(device=run.device)
        bench.world.light_leak_A = leak
        dark_series(bench, (12.0,))
    return run


def lot_runs(random: np.random.Generator, clock: Iterator[str]) -> Iterator[Run]:
    for number in range(1, 9):
        spread = random.normal(0.0, 1.0, 4)
        junction = replace(
            DIODE,
            c_j0_F=DIODE.c_j0_F * (1 + 0.01 * spread[0]) * (1.5 if number == 4 else 1.0),
            v_bi_V=DIODE.v_bi_V * (1 + 0.01 * spread[1]),
            generation_A=DIODE.generation_A * (1 + 0.1 * spread[2]),
            coupling_ratio=DIODE.coupling_ratio * (1 + 0.03 * spread[3]),
            shunt_ohm=1e9 if number == 7 else DIODE.shunt_ohm,
        )
        name = f"SP-2-{number:02d}"
        device = Device(kind="photodiode", elements=(_element(junction),), name=name)
        run = Run(name, device, "SP-2", "photodiode", lot="K-0417")
        bench = Bench(run, int(random.integers(1 << 30)), clock)
        for load in (1e3, 1e4):
            diode_pulse(bench, 12.0, load)
        dark_series(bench, (12.0,), high_V=12e-3 if number == 7 else 4e-3)
        yield run


def plan_text(run: Run, depth: int) -> str:
    """The plan that belongs to a run, as its captures show it."""
    pulses = [p for p in run.points if p["kind"] == "pulse"]
    darks = [p for p in run.points if p["kind"] == "dark"]

    def values(name: str, points: list[dict[str, object]]) -> str:
        numbers = dict.fromkeys(float(str(p[name])) for p in points)
        return "[" + ", ".join(f"{n:g}" for n in numbers) + "]"

    transistor = run.connection == "pull_up"
    rating = 'collector_emitter_V = 30\ncollector_current_A = "50 mA"' if transistor else "reverse_bias_V = 32"
    lines = [
        'format = "darkedge-plan 1"', f'title = "{run.part}, {run.name}"', "",
        "[device]", f'kind = "{run.kind}"', f"elements = {len(run.device.elements)}", f'output_connection = "{run.connection}"', "",
        "[ratings]", rating, 'emitter_peak_current_A = "100 mA"', 'emitter_mean_current_A = "20 mA"', "emitter_reverse_V = 5", "",
        "[emitter]", 'kind = "inside_device"' if "optocoupler" in run.kind else 'kind = "led"', 'wavelength_m = "850 nm"',
        "series_ohm = 220", f"forward_V = {EMITTER.forward_V}", 'reference = "voltage"', "",
        "[axes]",
    ]  # fmt: skip
    source = pulses or [{"load_ohm": 1e3, "bias_V": 12, "emitter_current_A": 5e-3, "pulse_width_s": 1e-5}]
    lines += [f"load_ohm = {values('load_ohm', source)}", 'load_change = "ask"']
    lines += [
        f"element = [{', '.join(str(k + 1) for k in range(len(run.device.elements)))}]",
        f"bias_V = {values('bias_V', source)}",
    ]
    lines += [
        f"emitter_current_A = {values('emitter_current_A', source)}",
        f"pulse_width_s = {values('pulse_width_s', source)}",
    ]
    lines += ["repeats = 1", "", "[drive]", "duty = 0.1", "low_V = 0", ""]
    if darks and not transistor:
        lines += [
            "[dark]",
            'load_ohm = "1 Mohm"',
            f"bias_V = {values('bias_V', darks[:1] if run.name == 'dark_traces' else darks)}",
        ]
        lines += ["settle_s = 2", 'duration_s = "200 ms"', ""]
    lines += ["[fixture]", f'file = "{"../" * depth}fixture.toml"', ""]
    return "\n".join(lines)


def response_truth() -> tuple[float, float]:
    """10-90 % times of emitter and scope together on the on and the off edge, integrated and read off."""
    device = Device(kind="photodiode", elements=(_element(replace(DIODE, transit_s=1e-12)),))
    world = World(device=device, wiring=Wiring(load_ohm=1.0, stray_F=0.0))
    world.rail.level_V, world.rail.on = 30.0, True
    drive = world.drives[0]
    drive.high_V, drive.width_s, drive.period_s, drive.on = 1.425, 2e-6, 20e-6, True
    step = 2e-11
    time = np.arange(-5000, 200_000) * step
    shown = limit_bandwidth(world.output_signal(0, time), step, FLAWS.bandwidth_Hz)
    on = _crossings(time[time < 2e-6], shown[time < 2e-6], 0.0, float(shown[(time > 1.8e-6) & (time < 1.99e-6)].mean()))
    late = time >= 2e-6
    off = _crossings(time[late], shown[late], float(shown[(time > 1.8e-6) & (time < 1.99e-6)].mean()), 0.0)
    assert on is not None
    assert off is not None
    return on[2] - on[0], off[2] - off[0]


def fixture_text() -> str:
    rise, fall = response_truth()
    lines = [
        'format = "darkedge-fixture 1"', "measured = 2026-03-02", "valid_days = 90", 'scope_input_ohm = "1 Mohm"',
        'u_scope_input_ohm = "5 kohm"', 'channel_skew_s = "0.4 ns"', 'u_channel_skew_s = "0.1 ns"', "u_gain_ratio = 0.005",
        "u_timebase_ratio = 2e-6", 'offset_V = "0.3 mV"', 'u_offset_V = "0.1 mV"', "",
    ]  # fmt: skip
    for nominal, actual in ACTUAL_OHM.items():
        lines += [
            "[[load]]",
            f"nominal_ohm = {nominal:g}",
            f"actual_ohm = {actual:g}",
            f"u_actual_ohm = {actual * 5e-4:.3g}",
        ]
        lines += [f'stray_F = "{STRAY_F * 1e12:g} pF"', f'u_stray_F = "{U_STRAY_F * 1e12:g} pF"', ""]
    lines += ["[response]                                     # emitter and scope together, at the current below"]
    lines += [
        f'rise_time_s = "{rise * 1e9:.2f} ns"',
        f'fall_time_s = "{fall * 1e9:.2f} ns"',
        'u_rise_time_s = "0.3 ns"',
    ]
    lines += ['u_fall_time_s = "0.5 ns"', 'emitter_current_A = "5 mA"', ""]
    return "\n".join(lines)


BENCH_TEXT = """format = "darkedge-bench 1"
visa = "@py"

[oscilloscope]
address = "TCPIP::192.0.2.10::5025::SOCKET"
dialect = "scpi-1999"
[oscilloscope.channels]
drive = 1
output = 2
output2 = 3

[function_generator]
address = "TCPIP::192.0.2.11::5025::SOCKET"
dialect = "scpi-1999"
emitter_channels = [1, 2]

[bias]
source = "supply"
address = "TCPIP::192.0.2.12::5025::SOCKET"
dialect = "scpi-1999"
source_ohm = 0
decoupling_F = "100 nF"
compliance_A = "1 mA"
"""

LIMITS_TEXT = f"""format = "darkedge-limits 1"

[decision]
rule = "guarded"
confidence = 0.95

[[limit]]
quantity = "rise_time_s"
upper = "{LIMIT_RISE}"
when = {{ bias_V = 12, load_ohm = "1 kohm" }}

[[limit]]
quantity = "dark_current_A"
upper = "{LIMIT_DARK}"
when = {{ bias_V = 12 }}
"""

LOT_TEXT = """format = "darkedge-lot 1"
lot = "K-0417"
part = "SP-2 pick-up"
received = 2026-03-01
size = 200
"""


def foreign_files(random: np.random.Generator) -> dict[str, str]:
    """Three captures as other programs save them: two header rows, sample numbers with start and increment, decimal commas."""
    found = {}
    for name, bias, load in (
        ("SP-2-31_12V_1000ohm", 12.0, 1e3),
        ("SP-2-32_5V_10kohm", 5.0, 1e4),
        ("SP-2-33_12V_1000ohm", 12.0, 1e3),
    ):
        run = Run(name, Device(kind="photodiode", elements=(_element(DIODE),), name=name), "SP-2", "photodiode")
        bench = Bench(run, int(random.integers(1 << 30)), iter(["", ""]))
        diode_pulse(bench, bias, load)
        rows = [line.split(",") for line in next(iter(run.texts.values())).splitlines() if line[0] not in "#t"]
        found[name] = rows
    first, second, third = found
    signed = "{:+.6E},{:+.5E},{:+.5E}"
    step = float(found[second][1][0]) - float(found[second][0][0])
    return {
        f"{first}.csv": "x-axis,1,2\nsecond,Volt,Volt\n"
        + "".join(signed.format(*map(float, row)) + "\n" for row in found[first]),
        f"{second}.csv": f"X,CH1,CH2,Start,Increment,\nSequence,Volt,Volt,{float(found[second][0][0]):.6e},{step:.6e},\n"
        + "".join(f"{k},{row[1]},{row[2]},\n" for k, row in enumerate(found[second])),
        f"{third}.txt": "Aufnahme;03.03.2026;10:12:00\nZeit [s];Kanal 1 [V];Kanal 2 [V]\n"
        + "".join(";".join(cell.replace(".", ",") for cell in row) + "\n" for row in found[third]),
    }


def build(folder: Path) -> dict[str, object]:
    """Write everything into a folder, and return the truth."""
    truth: dict[str, object] = {"limits": {"rise_time_s": LIMIT_RISE, "dark_current_A": LIMIT_DARK}, "runs": {}}
    for place, run in runs():
        here = folder / place
        (here / "captures").mkdir(parents=True)
        for name, text in run.texts.items():
            _write(here / "captures" / name, text)
        depth = len(place.parts)
        _write(here / "plan.toml", plan_text(run, depth))
        _write(here / "bench.json", json.dumps(_bench_json(), indent=1) + "\n")
        _write(here / "journal.csv", _journal(run))
        truth["runs"][place.as_posix()] = _run_truth(run)
    _write(folder / "lot_K-0417" / "lot.toml", LOT_TEXT)
    for name, text in (("bench.toml", BENCH_TEXT), ("fixture.toml", fixture_text()), ("limits.toml", LIMITS_TEXT)):
        _write(folder / name, text)
    (folder / "foreign").mkdir()
    for name, text in foreign_files(np.random.default_rng(SEED + 1)).items():
        _write(folder / "foreign" / name, text)
    return truth


def _bench_json() -> dict[str, object]:
    return {
        "oscilloscope": {"identity": "darkedge,virtual oscilloscope,0,0", "dialect": "scpi-1999"},
        "function_generator": {"identity": "darkedge,virtual function generator,0,0", "dialect": "scpi-1999"},
        "bias": {"identity": "darkedge,virtual bias supply,0,0", "dialect": "scpi-1999"},
    }


def _journal(run: Run) -> str:
    columns = [
        "point", "capture", "kind", "element", "driven_element", "load_ohm", "bias_V", "emitter_current_A", "pulse_width_s",
        "repeat", "taken_utc",
    ]  # fmt: skip
    lines = [",".join(columns)]
    lines += [",".join(str(1 if c == "repeat" else p[c]) for c in columns) for p in run.points]
    return "\n".join(lines) + "\n"


def _run_truth(run: Run) -> dict[str, object]:
    elements = []
    for element in run.device.elements:
        junction = element.junction
        made = {
            "c_j0_F": junction.c_j0_F, "v_bi_V": junction.v_bi_V, "grading": junction.grading,
            "full_depletion_V": junction.full_depletion_V, "c_stray_F": STRAY_F, "coupling_ratio": junction.coupling_ratio,
            "dark_current_A": {f"{v:g}": junction.dark_A(v, run.temperature_degC) for v in (1, 5, 12, 18, 30)},
        }  # fmt: skip
        elements.append(made)
    return {"device": run.device.name, "elements": elements, "captures": run.truth}


def _write(path: Path, text: str) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(text.encode("utf-8"))


def check(folder: Path) -> int:
    """Build afresh and compare; 1 where a file differs or is missing."""
    with tempfile.TemporaryDirectory() as place:
        fresh = Path(place) / "fresh"
        fresh.mkdir()
        build(fresh)
        names = sorted(p.relative_to(fresh) for p in fresh.rglob("*") if p.is_file())
        differing = [
            n for n in names if not (folder / n).is_file() or not filecmp.cmp(fresh / n, folder / n, shallow=False)
        ]
    for name in differing:
        print(f"differs: {name}")
    return 1 if differing else 0


def main() -> int:
    parser = argparse.ArgumentParser(description="Make the sample captures.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--check", action="store_true", help="compare a fresh build with the folder")
    given = parser.parse_args()
    if given.check:
        return check(given.folder)
    for stale in given.folder.glob("*"):
        if stale.name != "README.md":
            _remove(stale)
    given.folder.mkdir(exist_ok=True)
    TRUTH.write_text(json.dumps(build(given.folder), indent=1) + "\n", encoding="utf-8")
    return 0


def _remove(path: Path) -> None:
    if path.is_dir():
        for inner in path.iterdir():
            _remove(inner)
        path.rmdir()
    else:
        path.unlink()


if __name__ == "__main__":
    sys.exit(main())
