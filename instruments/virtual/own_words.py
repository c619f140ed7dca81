"""Virtual instruments that speak a dialect of their own: other words, whole codes scaled by a preamble, and no way to read the current.

They prove that a dialect file can describe an instrument which knows none of SCPI-1999's device commands. The words are made up.
"""

from __future__ import annotations

import numpy as np

from darkedge.instruments.virtual.errors import ScpiError
from darkedge.instruments.virtual.front_end import CODES
from darkedge.instruments.virtual.instrument import Call, Range, Reply, read_choice
from darkedge.instruments.virtual.scope import CHANNELS, MEMORY, Flaws, Oscilloscope, hardware_range
from darkedge.instruments.virtual.sources import BiasSupply, FunctionGenerator
from darkedge.instruments.virtual.syntax import format_block
from darkedge.instruments.virtual.wiring import World

PARTS = 10
"""The made-up scope states its range as a tenth of the full height, and its record by the middle."""


class WordyScope(Oscilloscope):
    """The oscilloscope in other words: heights by tenths, the record by its middle, whole codes with a preamble."""

    def __init__(self, world: World, *, seed: int, flaws: Flaws | None = None) -> None:
        super().__init__(world, seed=seed, flaws=flaws)
        self.forget_own_commands()
        self._height("TRACk#:TENTh", Range(low=0.8e-3, high=4.0, default=0.8, round_to=_tenth), "range_V", PARTS)
        self._height("TRACk#:MIDDle", Range(low=-40, high=40, default=0), "offset_V", 1)
        self._height("TRACk#:OHMS", Range(low=50, high=1e6, default=1e6, round_to=_input), "impedance_ohm", 1)
        self._height("TRACk#:PROBe:TIMes", Range(low=1, high=100, default=1), "attenuation", 1)
        self._word("TRACk#:PASS", ("DIRect", "BLOCked"), "coupling", {"DIR": "DC", "BLOC": "AC"})
        self._clock("CLOCk:LENGth", Range(low=20e-9, high=10, default=1e-3), "span_s")
        self._clock("CLOCk:COUNt", Range(low=100, high=MEMORY, default=1000, round_to=_whole), "points")
        self.add("CLOCk:CENTre", self._set_centre)
        self.add("CLOCk:CENTre?", lambda _call: f"{self.timing.start_s + self.timing.span_s / 2:.9G}")
        self._clock("REPeats", Range(low=1, high=1024, default=1, round_to=_whole), "averages")
        self._clock("EVENt:HEIGht", Range(low=-40, high=40, default=0), "level_V")
        self.add("EVENt:TRACk", self._set_event)
        self.add("EVENt:TRACk?", lambda _call: "0" if self.timing.source == "IMM" else self.timing.source[3:])
        self.add("EVENt:EDGE", self._set_edge)
        self.add("EVENt:EDGE?", lambda _call: "UP" if self.timing.slope == "POS" else "DOWN")
        self.add("GO", self._go)
        self.add("HALT", self._abort)
        self.add("READy?", lambda _call: "NO" if self._waiting else "YES")
        self.add("GIVE#:HEAD?", self._head)
        self.add("GIVE#:CODEs?", self._codes)

    def _height(self, pattern: str, setting: Range, name: str, parts: float) -> None:
        def put(call: Call) -> Reply:
            setattr(self._channel(call), name, setting.read(call.only()) * parts)
            self._tell_input()
            return None

        self.add(pattern, put)
        self.add(
            f"{pattern}?", lambda call: setting.answer(getattr(self._channel(call), name) / parts, call.parameters)
        )

    def _word(self, pattern: str, choices: tuple[str, ...], name: str, means: dict[str, str]) -> None:
        def put(call: Call) -> Reply:
            setattr(self._channel(call), name, means[read_choice(call.only(), choices)])
            return None

        told = {value: word for word, value in means.items()}
        self.add(pattern, put)
        self.add(f"{pattern}?", lambda call: told[getattr(self._channel(call), name)])

    def _clock(self, pattern: str, setting: Range, name: str) -> None:
        kind = int if name in ("points", "averages") else float

        def put(call: Call) -> Reply:
            setattr(self.timing, name, kind(setting.read(call.only())))
            return None

        self.add(pattern, put)
        self.add(f"{pattern}?", lambda call: setting.answer(getattr(self.timing, name), call.parameters))

    def _set_centre(self, call: Call) -> Reply:
        self.timing.start_s = Range(low=-10, high=10, default=0).read(call.only()) - self.timing.span_s / 2
        return None

    def _set_event(self, call: Call) -> Reply:
        track = round(Range(low=0, high=CHANNELS, default=1).read(call.only()))
        self.timing.source = f"INT{track}" if track else "IMM"
        return None

    def _set_edge(self, call: Call) -> Reply:
        self.timing.slope = "POS" if read_choice(call.only(), ("UP", "DOWN")) == "UP" else "NEG"
        return None

    def _go(self, call: Call) -> Reply:
        self.timing.averaging = self.timing.averages > 1
        return self._acquire(call)

    def _step(self, index: int) -> float:
        """Volts of one of the 65536 codes over the range: averaging gives more than eight bits."""
        return self._front_end(index).volts_per_code / CODES

    def _head(self, call: Call) -> Reply:
        """Samples, bytes a sample, code of zero height, volts a code, volts at that code, first time, time step."""
        index = call.channel(CHANNELS) - 1
        timing = self.timing
        fields = (timing.points, 2, 32768, self._step(index), self.channels[index].offset_V, timing.start_s)
        return ";".join(f"{value:.12G}" for value in (*fields, timing.span_s / timing.points))

    def _codes(self, call: Call) -> Reply:
        index = call.channel(CHANNELS) - 1
        if not self._record:
            raise ScpiError(-230, "nothing acquired")
        values = self._record.get(index, np.zeros(self.timing.points))
        codes = np.round((values - self.channels[index].offset_V) / self._step(index)) + 32768
        return format_block(np.clip(codes, 0, 65535).astype("<u2").tobytes())


class WordyGenerator(FunctionGenerator):
    """The generator in other words; it always states its levels into 50 ohm."""

    def __init__(self, world: World) -> None:
        super().__init__(world)
        self.forget_own_commands()
        for pattern, setting, name in (
            ("LAMP#:TOP", Range(low=-20, high=20, default=0, round_to=_millivolt), "high_V"),
            ("LAMP#:FLOor", Range(low=-20, high=20, default=0, round_to=_millivolt), "low_V"),
            ("LAMP#:LIT", Range(low=20e-9, high=1, default=1e-4), "width_s"),
            ("LAMP#:EVERy", Range(low=100e-9, high=10, default=1e-3), "period_s"),
        ):
            self._setting(pattern, setting, name)
        self.add("LAMP#:GATE", self._gate)
        self.add("LAMP#:GATE?", lambda call: "OPEN" if self._drive(call).on else "SHUT")

    def _setting(self, pattern: str, setting: Range, name: str) -> None:
        def put(call: Call) -> Reply:
            self._change(call, name, setting.read(call.only()))
            return None

        self.add(pattern, put)
        self.add(f"{pattern}?", lambda call: setting.answer(getattr(self._drive(call), name), call.parameters))

    def _gate(self, call: Call) -> Reply:
        self._drive(call).on = read_choice(call.only(), ("OPEN", "SHUT")) == "OPEN"
        self.world.note_extremes()
        return None


class WordySupply(BiasSupply):
    """The supply in other words, in millivolts; it cannot tell its current."""

    def __init__(self, world: World) -> None:
        super().__init__(world)
        self.forget_own_commands()
        level = Range(low=0, high=120e3, default=0, round_to=lambda x: float(round(x)))
        compliance = Range(low=1e-3, high=500, default=100)
        self.add("RAIL:MILLivolt", lambda call: self._put("level_V", level.read(call.only()) / 1e3))
        self.add("RAIL:MILLivolt?", lambda call: level.answer(self.world.rail.level_V * 1e3, call.parameters))
        self.add("RAIL:CEILing", lambda call: self._put("compliance_A", compliance.read(call.only()) / 1e3))
        self.add("RAIL:CEILing?", lambda call: compliance.answer(self.world.rail.compliance_A * 1e3, call.parameters))
        self.add("RAIL:FEED", lambda call: self._put("on", read_choice(call.only(), ("YES", "NO")) == "YES"))
        self.add("RAIL:FEED?", lambda _call: "YES" if self.world.rail.on else "NO")
        self.add("RAIL:METEr?", lambda call: self._reading(call, self.world.bias_V * 1.0002e3))

    def _put(self, name: str, value: float | bool) -> Reply:
        setattr(self.world.rail, name, value)
        self.world.note_extremes()
        return None


def _tenth(value: float) -> float:
    return hardware_range(PARTS * value) / PARTS


def _whole(value: float) -> float:
    return float(round(value))


def _input(value: float) -> float:
    return 50.0 if value < 1e3 else 1e6


def _millivolt(value: float) -> float:
    return round(value, 3)
