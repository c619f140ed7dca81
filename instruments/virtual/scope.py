"""The virtual oscilloscope: four channels, SCPI-1999's digitiser commands."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from darkedge.instruments.virtual.errors import ScpiError
from darkedge.instruments.virtual.front_end import CODES, FrontEnd, limit_bandwidth, to_codes
from darkedge.instruments.virtual.instrument import (
    Call,
    NeverDone,
    Range,
    Reply,
    ScpiInstrument,
    read_boolean,
    read_choice,
)
from darkedge.instruments.virtual.syntax import format_block
from darkedge.instruments.virtual.wiring import World

FloatArray = NDArray[np.float64]
CHANNELS = 4
MEMORY = 10_000
OVERSAMPLING = 4
_STEPS_V = tuple(m * 10.0**e for e in range(-3, 2) for m in (0.8, 1.6, 4.0))


def hardware_range(value: float) -> float:
    """The next range the hardware has: 1, 2, 5 steps a division over eight divisions."""
    return next((step for step in _STEPS_V if step >= value * (1 - 1e-9)), _STEPS_V[-1])


@dataclass(slots=True)
class Channel:
    """One input as set."""

    range_V: float = 8.0
    offset_V: float = 0.0
    coupling: str = "DC"
    impedance_ohm: float = 1e6
    limit_on: bool = False
    limit_Hz: float = 20e6
    attenuation: float = 1.0


@dataclass(slots=True)
class Timing:
    """Time base, trigger and averaging as set."""

    span_s: float = 1e-3
    points: int = 1000
    start_s: float = -1e-4
    averages: int = 1
    averaging: bool = False
    source: str = "INT1"
    level_V: float = 0.0
    slope: str = "POS"


@dataclass(slots=True)
class Flaws:
    """What this scope does wrong, as real ones do."""

    bandwidth_Hz: float = 200e6
    noise_ratio: float = 0.002
    zero_error_V: tuple[float, ...] = (0.3e-3, 0.3e-3, -0.2e-3, 0.0)
    skew_s: tuple[float, ...] = (0.0, 0.4e-9, 0.4e-9, 0.0)
    jitter_s: float = 20e-12
    gain_ratio: tuple[float, ...] = (1.0, 1.002, 0.999, 1.0)
    input_bias_A: float = 2e-10


_RANGE = Range(low=8e-3, high=40.0, default=8.0, unit="V", round_to=hardware_range)
_OFFSET = Range(low=-40, high=40, default=0, unit="V")
_SPAN = Range(low=20e-9, high=10.0, default=1e-3, unit="S")
_START = Range(low=-10, high=10, default=0, unit="S")
_POINTS = Range(low=100, high=MEMORY, default=1000, round_to=lambda x: float(round(x)))
_COUNT = Range(low=1, high=1024, default=1, round_to=lambda x: float(2 ** round(np.log2(x))))
_LEVEL = Range(low=-40, high=40, default=0, unit="V")
_LIMIT = Range(low=20e6, high=20e6, default=20e6, unit="HZ")
_ATTENUATION = Range(low=1, high=100, default=1)


class Oscilloscope(ScpiInstrument):
    """Four channels on the world's nodes: drive, output, output of a second element, nothing."""

    def __init__(self, world: World, *, seed: int, flaws: Flaws | None = None) -> None:
        super().__init__(("darkedge", "virtual oscilloscope", "0", "0"))
        self.world, self.flaws = world, flaws or Flaws()
        self._random = np.random.default_rng(seed)
        self.channels = [Channel() for _ in range(CHANNELS)]
        self.timing = Timing()
        self._record: dict[int, FloatArray] = {}
        self._waiting = False
        self.format, self.swapped = "ASC", False
        self._add_channel_commands()
        self._add_timing_commands()
        self._add_data_commands()

    def reset(self) -> None:
        """Defined state of `*RST`: everything at its default, nothing acquired."""
        self.channels = [Channel() for _ in range(CHANNELS)]
        self.timing, self._record, self._waiting = Timing(), {}, False
        self.format, self.swapped = "ASC", False
        self._tell_input()

    def finish(self) -> None:
        """Nothing is ever pending but a trigger that does not come; then there is no answer."""
        if self._waiting:
            raise NeverDone

    def _add_channel_commands(self) -> None:
        def number(pattern: str, setting: Range, name: str) -> None:
            def put(call: Call) -> Reply:
                setattr(self._channel(call), name, setting.read(call.only()))
                self._tell_input()
                return None

            self.add(pattern, put)
            self.add(f"{pattern}?", lambda call: setting.answer(getattr(self._channel(call), name), call.parameters))

        number("[SENSe#:]VOLTage[:DC]:RANGe:PTPeak", _RANGE, "range_V")
        number("[SENSe#:]VOLTage[:DC]:RANGe:OFFSet", _OFFSET, "offset_V")
        number("INPut#:FILTer[:LPASs]:FREQuency", _LIMIT, "limit_Hz")
        number("INPut#:ATTenuation", _ATTENUATION, "attenuation")
        number(
            "INPut#:IMPedance",
            Range(low=50, high=1e6, default=1e6, unit="OHM", round_to=lambda x: 50.0 if x < 1e3 else 1e6),
            "impedance_ohm",
        )
        self.add("INPut#:COUPling", self._set_coupling)
        self.add("INPut#:COUPling?", lambda call: self._text(call, lambda: self._channel(call).coupling))
        self.add("INPut#:FILTer[:LPASs][:STATe]", self._set_limit)
        self.add(
            "INPut#:FILTer[:LPASs][:STATe]?",
            lambda call: self._text(call, lambda: str(int(self._channel(call).limit_on))),
        )

    def _add_timing_commands(self) -> None:
        def number(pattern: str, setting: Range, name: str, kind: type[int] | type[float]) -> None:
            def put(call: Call) -> Reply:
                setattr(self.timing, name, kind(setting.read(call.only())))
                return None

            self.add(pattern, put)
            self.add(f"{pattern}?", lambda call: setting.answer(getattr(self.timing, name), call.parameters))

        number("[SENSe:]SWEep:TIME", _SPAN, "span_s", float)
        number("[SENSe:]SWEep:POINts", _POINTS, "points", int)
        number("[SENSe:]SWEep:OFFSet:TIME", _START, "start_s", float)
        number("[SENSe:]AVERage:COUNt", _COUNT, "averages", int)
        number("TRIGger:LEVel", _LEVEL, "level_V", float)
        self.add("[SENSe:]AVERage[:STATe]", self._set_averaging)
        self.add("[SENSe:]AVERage[:STATe]?", lambda call: self._text(call, lambda: str(int(self.timing.averaging))))
        self.add("TRIGger:SOURce", self._set_source)
        self.add("TRIGger:SOURce?", lambda call: self._text(call, lambda: self.timing.source))
        self.add("TRIGger:SLOPe", self._set_slope)
        self.add("TRIGger:SLOPe?", lambda call: self._text(call, lambda: self.timing.slope))
        self.add("INITiate[:IMMediate]", self._acquire)
        self.add("ABORt", self._abort)

    def _add_data_commands(self) -> None:
        self.add("FORMat[:DATA]", self._set_format)
        self.add("FORMat[:DATA]?", lambda call: self._text(call, lambda: self.format))
        self.add("FORMat:BORDer", self._set_border)
        self.add("FORMat:BORDer?", lambda call: self._text(call, lambda: "SWAP" if self.swapped else "NORM"))
        self.add("TRACe[:DATA]?", self._trace)

    def _channel(self, call: Call) -> Channel:
        return self.channels[call.channel(CHANNELS) - 1]

    def _tell_input(self) -> None:
        self.world.scope_input_ohm = self.channels[1].impedance_ohm * self.channels[1].attenuation

    def _set_coupling(self, call: Call) -> Reply:
        self._channel(call).coupling = read_choice(call.only(), ("AC", "DC"))
        return None

    def _set_limit(self, call: Call) -> Reply:
        self._channel(call).limit_on = read_boolean(call.only())
        return None

    def _set_averaging(self, call: Call) -> Reply:
        self.timing.averaging = read_boolean(call.only())
        return None

    def _set_source(self, call: Call) -> Reply:
        names = ("IMMediate", *(f"INTernal{k}" for k in range(1, CHANNELS + 1)))
        self.timing.source = read_choice(call.only(), names)
        return None

    def _set_slope(self, call: Call) -> Reply:
        self.timing.slope = read_choice(call.only(), ("POSitive", "NEGative"))
        return None

    def _set_format(self, call: Call) -> Reply:
        word = call.parameters[0] if call.parameters else call.only()
        width = call.parameters[1] if len(call.parameters) > 1 else ""
        kind = read_choice(word, ("ASCii", "REAL", "INTeger"))
        if len(call.parameters) > 2:
            raise ScpiError(-108, call.parameters[2][:20])
        known = {("ASC", ""): "ASC", ("REAL", "32"): "REAL,32", ("REAL", "64"): "REAL,64", ("INT", "16"): "INT,16"}
        if (kind, width) not in known:
            raise ScpiError(-224, ",".join(call.parameters)[:30])
        self.format = known[kind, width]
        return None

    def _set_border(self, call: Call) -> Reply:
        self.swapped = read_choice(call.only(), ("NORMal", "SWAPped")) == "SWAP"
        return None

    def _abort(self, call: Call) -> Reply:
        call.none()
        self._waiting = False
        return None

    def _acquire(self, call: Call) -> Reply:
        call.none()
        self._record = {}
        start = self._trigger_time()
        self._waiting = start is None
        if start is not None:
            self._record = {index: self._capture(index, start) for index in self._used()}
        return None

    def _used(self) -> range:
        """Channels that something is wired to; the others show nothing but their own noise, made when asked for."""
        return range(1 + len(self.world.device.elements))

    def _trigger_time(self) -> float | None:
        """When the trigger fires, time from the start of a pulse; `None` where it never does."""
        if self.timing.source == "IMM":
            return float(self._random.uniform(0.0, 1.0))
        index = int(self.timing.source[3:]) - 1
        period = self.world.period_s()
        grid = np.unique(np.concatenate([np.linspace(-period / 2, period / 2, 4001), np.linspace(-50e-9, 50e-9, 2001)]))
        above = self._node(index, grid) > self.timing.level_V
        rising = self.timing.slope == "POS"
        crossings = np.flatnonzero(~above[:-1] & above[1:] if rising else above[:-1] & ~above[1:])
        return float(grid[crossings[0] + 1]) if crossings.size else None

    def _node(self, index: int, time_s: FloatArray) -> FloatArray:
        if index == 0:
            return self.world.drive_signal(time_s)
        if index < CHANNELS - 1:
            return self.world.output_signal(index - 1, time_s)
        return np.zeros_like(time_s)

    def _capture(self, index: int, start_s: float) -> FloatArray:
        """One channel's record in volts: shots under jitter, noise and bandwidth, each to codes, then averaged."""
        timing, front = self.timing, self._front_end(index)
        shots = timing.averages if timing.averaging else 1
        dt = timing.span_s / timing.points / OVERSAMPLING
        lead = OVERSAMPLING * 20
        ticks = np.arange(-lead, timing.points * OVERSAMPLING) * dt
        time: FloatArray = timing.start_s + start_s + ticks.astype(np.float64) - front.skew_s
        clean = limit_bandwidth(self._shown(index, time), dt, front.bandwidth_Hz)[lead:]
        shifts = self._random.normal(0.0, self.flaws.jitter_s, shots)
        slope = np.gradient(clean, dt)
        rms_V = float(np.hypot(front.noise_ratio * front.range_V, self._part_noise_V(index)))
        noise = self._noise(shots, clean.size, dt, front.bandwidth_Hz) * rms_V
        shown = (clean + shifts[:, None] * slope + noise)[:, ::OVERSAMPLING]
        record: FloatArray = to_codes(shown + front.zero_error_V, front).mean(axis=0)
        return record

    def _shown(self, index: int, time_s: FloatArray) -> FloatArray:
        channel = self.channels[index]
        signal = self._node(index, time_s) * self.flaws.gain_ratio[index]
        if 0 < index < CHANNELS - 1 and self.world.wiring.connection != "pull_up":
            load = self.world.wiring.load_ohm
            across = load * channel.impedance_ohm / (load + channel.impedance_ohm)
            signal = signal + self.flaws.input_bias_A * across
            if self.world.light_leak_A:
                phase = 2 * np.pi * 2 * self.world.mains_Hz * time_s
                signal = signal + self.world.light_leak_A * across * (1 + np.cos(phase)) / 2
        if channel.coupling == "AC":
            signal = signal - signal.mean()
        return signal

    def _part_noise_V(self, index: int) -> float:
        """Rms noise voltage of a bad part across the load, as the scope's input sees it."""
        element = index - 1
        if not 0 <= element < len(self.world.device.elements) or self.world.wiring.connection == "pull_up":
            return 0.0
        load, own = self.world.wiring.load_ohm, self.channels[index].impedance_ohm
        return self.world.device.elements[element].junction.noise_A * load * own / (load + own)

    def _front_end(self, index: int) -> FrontEnd:
        channel = self.channels[index]
        limit = min(self.flaws.bandwidth_Hz, channel.limit_Hz if channel.limit_on else np.inf)
        return FrontEnd(
            range_V=channel.range_V,
            offset_V=channel.offset_V,
            bandwidth_Hz=float(limit),
            noise_ratio=self.flaws.noise_ratio,
            zero_error_V=self.flaws.zero_error_V[index],
            skew_s=self.flaws.skew_s[index],
        )

    def _noise(self, shots: int, size: int, dt_s: float, bandwidth_Hz: float) -> FloatArray:
        """Noise of unit rms after the bandwidth limit, whatever the sample step; shape (shots, size)."""
        lead = 64
        white = self._random.normal(0.0, 1.0, (shots, size + lead))
        keep = float(np.exp(-2 * np.pi * bandwidth_Hz * dt_s))
        if keep > 1e-3:
            white = lfilter([1 - keep], [1, -keep], white, axis=1) * np.sqrt((1 + keep) / (1 - keep))
        noise: FloatArray = white[:, lead:]
        return noise

    def _trace(self, call: Call) -> Reply:
        name = read_choice(call.only(), tuple(f"CH{k}" for k in range(1, CHANNELS + 1)))
        index = int(name[2:]) - 1
        if not self._record:
            raise ScpiError(-230, "nothing acquired")
        if index not in self._record:
            self._record[index] = self._capture(index, 0.0)
        values = self._record[index]
        if self.format == "ASC":
            return ",".join(f"{value:.7E}" for value in values)
        order = "<" if self.swapped else ">"
        if self.format == "INT,16":
            step = self._front_end(index).volts_per_code / CODES
            codes = np.round((values - self.channels[index].offset_V) / step)
            return format_block(np.clip(codes, -32768, 32767).astype(f"{order}i2").tobytes())
        kind = "f4" if self.format == "REAL,32" else "f8"
        return format_block(values.astype(order + kind).tobytes())
