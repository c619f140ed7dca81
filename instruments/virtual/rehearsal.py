"""What a rehearsal needs: an invented lot on the virtual bench, its plan, fixture and limits, and hands that do what they are asked.

Everything here is invented; nothing is shared with the analysis.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from importlib.resources import files
from pathlib import Path

import numpy as np

from darkedge.analysis.errors import InputError
from darkedge.instruments.virtual.front_end import limit_bandwidth
from darkedge.instruments.virtual.lots import CATALOGUE, MAKER, Fault, PartKind, make_device
from darkedge.instruments.virtual.parts import Device, Emitter
from darkedge.instruments.virtual.scope import Flaws
from darkedge.instruments.virtual.serving import ACTUAL_RATIO, VirtualBench, actual_ohm
from darkedge.instruments.virtual.wiring import Wiring, World

OWN_WORDS_NAME = "own-words.toml"
OWN_WORDS = Path(str(files("darkedge.instruments.virtual") / OWN_WORDS_NAME))
LOT: tuple[Fault, ...] = (Fault.NONE, Fault.NONE, Fault.SLOW, Fault.NONE, Fault.LEAKY, Fault.DEAD)
"""What the devices of a rehearsed lot are, in the order of their numbers."""
BEGUN = datetime(2026, 3, 2, 9, 0, tzinfo=UTC)
STRAY_F, U_STRAY_F = 14.2e-12, 0.4e-12
TEMPERATURE_degC = 23.5
FLAWS = Flaws(noise_ratio=0.003)
NOTICE = f"""Everything in this folder is invented: the maker "{MAKER}", its parts, and every number.
darkedge rehearse made it on its virtual bench. No device was measured.
"""
NOTICE_NAME = "INVENTED.txt"


@dataclass(frozen=True, slots=True, kw_only=True)
class _Job:
    """What is measured on a kind of part, what is held against it, and what is wished of it."""

    axes: str
    dark: str
    limits: tuple[tuple[str, str, str, str], ...]
    pulse_width: str = ""
    rails: str = ""


_DIODE_AXES = """load_ohm = ["1 kohm", "10 kohm"]
load_change = "ask"
bias_V = [1, 2.5, 6, 12, 20]
emitter_current_A = "5 mA"
pulse_width_s = ["1 us", "10 us"]
repeats = 1
"""
_DIODE_DARK = """[dark]
load_ohm = "1 Mohm"
bias_V = [2, 5, 12, 20]
settle_s = 2
duration_s = "200 ms"
"""
_AT_12_V = '{ bias_V = 12, load_ohm = "1 kohm" }'
_SWITCH_AXES = """load_ohm = "4.7 kohm"
load_change = "ask"
element = {elements}
bias_V = 5
emitter_current_A = ["5 mA", "10 mA"]
pulse_width_s = "100 us"
repeats = 2
"""
_SWITCH_DARK = """[dark]
load_ohm = "10 kohm"
bias_V = 5
settle_s = 1
duration_s = "200 ms"
"""
_AT_10_mA = '{ bias_V = 5, emitter_current_A = "10 mA" }'
_SWITCH_LIMITS = (
    ("amplitude_V", "lower", "3 V", _AT_10_mA),
    ("off_time_s", "upper", "{off}", _AT_10_mA),
    ("dark_current_A", "upper", "20 uA", "{ bias_V = 5 }"),
)


def _diode_limits(rise: str) -> tuple[tuple[str, str, str, str], ...]:
    return (
        ("amplitude_V", "lower", "6 mV", _AT_12_V),
        ("rise_time_s", "upper", rise, _AT_12_V),
        ("dark_current_A", "upper", "5 nA", "{ bias_V = 12 }"),
    )


def _switch_job(off: str) -> _Job:
    limits = tuple((q, side, bound.format(off=off), when) for q, side, bound, when in _SWITCH_LIMITS)
    return _Job(axes=_SWITCH_AXES, dark=_SWITCH_DARK, limits=limits)


_JOBS: Mapping[PartKind, _Job] = {
    PartKind.PHOTODIODE: _Job(
        axes=_DIODE_AXES, dark=_DIODE_DARK, limits=_diode_limits("110 ns"), pulse_width="2 us", rails="5 V, 12 V"
    ),
    PartKind.PIN: _Job(
        axes=_DIODE_AXES, dark=_DIODE_DARK, limits=_diode_limits("86 ns"), pulse_width="2 us", rails="5 V, 12 V"
    ),
    PartKind.TRANSISTOR_SWITCH: _switch_job("13 us"),
    PartKind.OPTOCOUPLER: _switch_job("19 us"),
    PartKind.DUAL_OPTOCOUPLER: _switch_job("17 us"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Rehearsal:
    """An invented lot of one kind of part."""

    kind: PartKind
    seed: int = 1
    faults: tuple[Fault, ...] = LOT

    def devices(self) -> list[tuple[Fault, Device]]:
        """The devices in the order they are measured, and what is wrong with each."""
        return [
            (fault, make_device(self.kind, seed=self.seed, number=number, fault=fault))
            for number, fault in enumerate(self.faults, start=1)
        ]

    def bench(self, *, words: str = "scpi-1999") -> VirtualBench:
        """The bench, with the first device in the socket."""
        part = CATALOGUE[self.kind]
        wiring = Wiring(
            load_ohm=actual_ohm(1e3), stray_F=STRAY_F, connection=part.connection, temperature_degC=TEMPERATURE_degC
        )
        return VirtualBench(self.devices()[0][1], wiring=wiring, seed=self.seed, words=words, flaws=FLAWS)

    @property
    def lot(self) -> str:
        """Name of the lot."""
        return CATALOGUE[self.kind].lot

    @property
    def wish(self) -> tuple[str, str] | None:
        """The shortest pulse that is wished, and the rails that exist; `None` where bias and load are not chosen."""
        job = _JOBS[self.kind]
        return (job.pulse_width, job.rails) if job.pulse_width else None

    def plan_toml(self) -> str:
        """The plan."""
        part, job = CATALOGUE[self.kind], _JOBS[self.kind]
        elements = len(part.device.elements)
        transistor = part.connection == "pull_up"
        rating = 'collector_emitter_V = 30\ncollector_current_A = "50 mA"' if transistor else "reverse_bias_V = 32"
        inside = "inside_device" if "optocoupler" in self.kind else "led"
        return (
            'format = "darkedge-plan 1"\n'
            f'title = "Rehearsal: {part.number}, lot {part.lot}, invented"\n\n'
            f'[device]\nkind = "{part.device.kind}"\nelements = {elements}\noutput_connection = "{part.connection}"\n\n'
            f'[ratings]\n{rating}\nemitter_peak_current_A = "100 mA"\nemitter_mean_current_A = "20 mA"\n\n'
            f'[emitter]\nkind = "{inside}"\nwavelength_m = "850 nm"\nseries_ohm = 220\nforward_V = 1.5\nreference = "voltage"\n\n'
            f"[axes]\n{job.axes.replace('{elements}', str(list(range(1, elements + 1))))}\n"
            f"[drive]\nduty = 0.10\nlow_V = 0\n\n{job.dark}\n"
            '[fixture]\nfile = "fixture.toml"\n\n'
            + ("" if transistor else '[expected]\nphotocurrent_ratio = 0.0018\ncapacitance_F = "30 pF"\n')
        )

    def fixture_toml(self) -> str:
        """What was measured of the bench before: loads, stray capacitance, skew, response of emitter and scope."""
        rise, fall = response_s(self.devices()[0][1].elements[0].emitter, 5e-3)
        lines = [
            'format = "darkedge-fixture 1"', f"measured = {BEGUN:%Y-%m-%d}", "valid_days = 90", 'scope_input_ohm = "1 Mohm"',
            'u_scope_input_ohm = "5 kohm"', 'channel_skew_s = "0.4 ns"', 'u_channel_skew_s = "0.1 ns"', "u_gain_ratio = 0.005",
            "u_timebase_ratio = 2e-6", 'offset_V = "0.3 mV"', 'u_offset_V = "0.1 mV"', 'scope_input_bias_A = "0.2 nA"',
            'u_scope_input_bias_A = "20 pA"', "",
        ]  # fmt: skip
        for nominal, ratio in ACTUAL_RATIO.items():
            actual = nominal * ratio
            lines += [
                "[[load]]",
                f"nominal_ohm = {nominal:g}",
                f"actual_ohm = {actual:.6g}",
                f"u_actual_ohm = {actual * 5e-4:.3g}",
            ]
            lines += [f'stray_F = "{STRAY_F * 1e12:g} pF"', f'u_stray_F = "{U_STRAY_F * 1e12:g} pF"', ""]
        lines += ["[response]", f'rise_time_s = "{rise * 1e9:.2f} ns"', f'fall_time_s = "{fall * 1e9:.2f} ns"']
        lines += ['u_rise_time_s = "0.3 ns"', 'u_fall_time_s = "0.5 ns"', 'emitter_current_A = "5 mA"', ""]
        return "\n".join(lines)

    def limits_toml(self) -> str:
        """The limits of the incoming inspection."""
        lines = ['format = "darkedge-limits 1"', "", "[decision]", 'rule = "guarded"', "confidence = 0.95", ""]
        for quantity, side, bound, when in _JOBS[self.kind].limits:
            lines += ["[[limit]]", f'quantity = "{quantity}"', f'{side} = "{bound}"', f"when = {when}", ""]
        return "\n".join(lines)

    def lot_toml(self) -> str:
        """The lot."""
        part = CATALOGUE[self.kind]
        return (
            f'format = "darkedge-lot 1"\nlot = "{part.lot}"\npart = "{part.number} of {MAKER}, invented"\n'
            f"received = {BEGUN:%Y-%m-%d}\nsize = 200\n"
        )


def response_s(emitter: Emitter, current_A: float, flaws: Flaws = FLAWS) -> tuple[float, float]:
    """10-90 % times of emitter and scope together, on and off, as a detector without capacitance would show them.

    The light is stepped and passed through the scope's bandwidth on a fine grid, and the crossings are read off.
    """
    step = 2e-11
    time = np.arange(30_000) * step
    found = []
    for lag in (emitter.lag_s(current_A, rising=True), emitter.lag_s(current_A, rising=False)):
        shown = limit_bandwidth(np.where(time > 0, -np.expm1(-time / lag), 0.0), step, flaws.bandwidth_Hz)
        low, high = (float(np.interp(level, shown, time)) for level in (0.1, 0.9))
        found.append(high - low)
    return found[0], found[1]


@dataclass(slots=True)
class VirtualTime:
    """Time on the virtual bench: waiting costs nothing and is counted, so that a run has the same dates each time."""

    elapsed_s: float = 0.0

    def wait(self, seconds: float) -> None:
        """Let time pass."""
        self.elapsed_s += seconds

    def utc(self) -> datetime:
        """The time of day; each look at it takes a second."""
        self.elapsed_s += 1.0
        return BEGUN + timedelta(seconds=int(self.elapsed_s))


@dataclass(slots=True)
class VirtualHands:
    """Hands at the virtual bench. They note the bias at which they were asked to touch something."""

    world: World
    touched_at_V: list[float] = field(default_factory=list)

    def put_in_load(self, load_ohm: float) -> None:
        """Put a load resistor into the circuit."""
        self.touched_at_V.append(self.world.bias_V)
        self.world.mount(load_ohm=actual_ohm(load_ohm))

    def cover(self) -> None:
        """Keep room light from the device: none gets in here."""
        self.touched_at_V.append(self.world.bias_V)

    def set_rail(self, bias_V: float) -> float:
        """Turn the knob, and read the meter."""
        self.world.rail.by_hand_V = bias_V
        self.world.note_extremes()
        return bias_V

    def mount(self, device: Device) -> None:
        """Put another device into the socket."""
        self.touched_at_V.append(self.world.bias_V)
        self.world.mount(device=device)


def read_kind(text: str) -> PartKind:
    """A kind of part by its name.

    Raises
    ------
    InputError
        There is none of that name.
    """
    try:
        return PartKind(text)
    except ValueError:
        raise InputError("not a kind of part", where="--kind", found=repr(text), wanted=", ".join(PartKind)) from None


def serve_part(kind: str, *, fault: str, seed: int, words: str, port: int) -> VirtualBench:
    """A virtual bench with one part in the socket, on four ports from `port` on, or on any free ones where it is 0.

    Raises
    ------
    InputError
        No such kind, fault or words.
    """
    part = read_kind(kind)
    try:
        wrong = Fault(fault)
    except ValueError:
        raise InputError("not a fault", where="--fault", found=repr(fault), wanted=", ".join(Fault)) from None
    if words not in ("scpi-1999", "own"):
        raise InputError(
            "not words of the virtual bench", where="--words", found=repr(words), wanted="scpi-1999 or own"
        )
    ports = (port, port + 1, port + 2, port + 3) if port else (0, 0, 0, 0)
    wiring = Wiring(
        load_ohm=actual_ohm(1e3),
        stray_F=STRAY_F,
        connection=CATALOGUE[part].connection,
        temperature_degC=TEMPERATURE_degC,
    )
    device = make_device(part, seed=seed, number=1, fault=wrong)
    return VirtualBench(device, wiring=wiring, seed=seed, words=words, flaws=FLAWS, ports=ports)
