"""How the virtual bench is wired: one physical world that all the virtual instruments look at and act on.

Generator channel k drives the emitter of element k through the series resistor; the supply feeds the bias rail; the load in the
socket is one of several, chosen by hand (`mount`) or by the switch. The world keeps count of what its terminals saw, so that a
test can ask whether a rating was exceeded.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import TypeVar

import numpy as np

from darkedge.instruments.virtual.equations import Answer, FloatArray, respond, rest
from darkedge.instruments.virtual.parts import Device, Emitter, Socket, Train

K = TypeVar("K")
V = TypeVar("V")

GENERATOR_OHM = 50.0
GENERATOR_EDGE_s = 5e-9
FORWARD_V = 0.6
"""Drop of a junction that is the wrong way round."""
LIGHT_V_per_A = 40.0
"""Reference detector: volts at the scope for each ampere in the emitter."""


@dataclass(slots=True)
class Drive:
    """One generator channel as set: levels as stated into `load_ohm`, width, period, output."""

    high_V: float = 0.1
    low_V: float = 0.0
    width_s: float = 1e-4
    period_s: float = 1e-3
    load_ohm: float = 50.0
    on: bool = False
    shape: str = "PULS"
    dc_V: float = 0.0

    @property
    def pulsing(self) -> bool:
        """Whether pulses come out."""
        return self.on and self.shape == "PULS"

    def open_V(self, stated_V: float) -> float:
        """Open-circuit voltage behind 50 ohm that gives the stated level into the stated load."""
        return stated_V * (1 + GENERATOR_OHM / self.load_ohm)


@dataclass(slots=True)
class Rail:
    """The bias as set: level, compliance, output of the supply; `by_hand_V` where somebody turns a knob."""

    level_V: float = 0.0
    compliance_A: float = 0.1
    on: bool = False
    by_hand_V: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Wiring:
    """What stands between instruments and device."""

    series_ohm: float = 220.0
    load_ohm: float = 1000.0
    stray_F: float = 14e-12
    connection: str = "load_to_ground"
    temperature_degC: float = 25.0
    reference: str = "voltage"


@dataclass(slots=True)
class Extremes:
    """The most that the device's terminals have seen."""

    reverse_bias_V: float = 0.0
    emitter_current_A: float = 0.0
    emitter_reverse_V: float = 0.0
    emitter_mean_A: float = 0.0


@dataclass(slots=True)
class World:
    """Device, wiring and settings; answers what a node shows."""

    device: Device
    wiring: Wiring = field(default_factory=Wiring)
    drives: list[Drive] = field(default_factory=lambda: [Drive(), Drive()])
    rail: Rail = field(default_factory=Rail)
    extremes: Extremes = field(default_factory=Extremes)
    bias_from: str = "supply"
    scope_input_ohm: float = 1e6
    mains_Hz: float = 50.0
    light_leak_A: float = 0.0
    _answers: dict[object, Answer] = field(default_factory=dict)
    _rests: dict[object, float] = field(default_factory=dict)

    def mount(self, *, device: Device | None = None, load_ohm: float | None = None) -> None:
        """What an operator does by hand: another part, another load."""
        if device is not None:
            self.device = device
        if load_ohm is not None:
            self.wiring = replace(self.wiring, load_ohm=load_ohm)

    def note_extremes(self) -> None:
        """Remember the most that the terminals see with the present settings; called after every change."""
        self.extremes.reverse_bias_V = max(self.extremes.reverse_bias_V, self.bias_V)
        for index in range(len(self.device.elements)):
            current, low_V = self.emitter_A(index), self.drives[index].open_V(self.drives[index].low_V)
            if not self.drives[index].pulsing:
                continue
            duty = self.drives[index].width_s / self.drives[index].period_s
            self.extremes.emitter_current_A = max(self.extremes.emitter_current_A, current)
            self.extremes.emitter_mean_A = max(self.extremes.emitter_mean_A, current * min(duty, 1.0))
            self.extremes.emitter_reverse_V = max(self.extremes.emitter_reverse_V, -low_V)

    @property
    def bias_V(self) -> float:
        """Voltage on the bias rail: as set, or as far down as the compliance pulls it where a device conducts."""
        if self.bias_from == "hand":
            return self.rail.by_hand_V
        if self.bias_from == "generator":
            drive = self.drives[1]
            return drive.open_V(drive.dc_V) if drive.on and drive.shape == "DC" else 0.0
        level = self.rail.level_V if self.rail.on else 0.0
        conducting = sum(e.junction.reversed_in_socket and not e.transistors for e in self.device.elements)
        if conducting == 0:
            return level
        return min(level, FORWARD_V + self.rail.compliance_A * self.wiring.load_ohm / conducting)

    def emitter_A(self, index: int) -> float:
        """Peak current of an emitter: open voltage less its forward drop, through 50 ohm and the series resistor."""
        drive = self.drives[index]
        if not drive.pulsing:
            return 0.0
        emitter = self.device.elements[index].emitter
        return self._through(drive.open_V(drive.high_V), emitter)

    def _through(self, open_V: float, emitter: Emitter) -> float:
        return max(0.0, (open_V - emitter.forward_V) / (GENERATOR_OHM + self.wiring.series_ohm))

    def drive_V(self, index: int, *, high: bool) -> float:
        """Voltage at the generator's terminal with the emitter connected."""
        drive = self.drives[index]
        open_V = drive.open_V(drive.high_V if high else drive.low_V) if drive.pulsing else 0.0
        current = self._through(open_V, self.device.elements[index].emitter)
        return open_V - GENERATOR_OHM * current

    def period_s(self) -> float:
        """Period after which everything repeats: that of the first channel that is on."""
        return next((drive.period_s for drive in self.drives if drive.pulsing), 1e-3)

    def drive_signal(self, time_s: FloatArray) -> FloatArray:
        """What the reference channel shows, time from the start of a pulse: the drive of the first channel that is on."""
        index = next((k for k, drive in enumerate(self.drives[: len(self.device.elements)]) if drive.pulsing), 0)
        drive = self.drives[index]
        if self.wiring.reference == "light":
            light = self._lit(index)
            return np.zeros_like(time_s) if light is None else LIGHT_V_per_A * light.light_at(time_s)
        low, high = (self.drive_V(index, high=False), self.drive_V(index, high=True))
        if self.wiring.reference == "current":
            low, high = 0.0, self.emitter_A(index) * self.wiring.series_ohm
        phase = np.mod(time_s + GENERATOR_EDGE_s / 2, drive.period_s)
        up = np.clip(phase / GENERATOR_EDGE_s, 0.0, 1.0)
        down = np.clip((phase - drive.width_s) / GENERATOR_EDGE_s, 0.0, 1.0)
        return low + (high - low) * (up - down)

    def output_signal(self, index: int, time_s: FloatArray) -> FloatArray:
        """What the output of an element shows, its own light and what leaks over from the others."""
        if index >= len(self.device.elements):
            return np.zeros_like(time_s)
        own = self._lit(index)
        signal = np.full_like(time_s, self.resting_V(index)) if own is None else own.output_at(time_s)
        for other in range(len(self.device.elements)):
            leaked = None if other == index else self._lit(index, by=other)
            if leaked is not None:
                signal = signal + leaked.output_at(time_s) - self.resting_V(index)
        return signal

    def _lit(self, index: int, by: int | None = None) -> Answer | None:
        """Answer of an element to an emitter, its own where `by` is `None`; `None` where no light arrives."""
        source = index if by is None else by
        ratio = 1.0 if source == index else self.device.crosstalk_ratio
        current = self.emitter_A(source)
        if current <= 0 or ratio <= 0:
            return None
        return self._answer(index, current, self.drives[source], ratio)

    def resting_V(self, index: int) -> float:
        """What the output shows with no light."""
        element, socket = self.device.elements[index], self._socket()
        return _remembered(self._rests, (element, socket), lambda: rest(element, socket))

    def rail_current_A(self) -> float:
        """Mean current out of the supply."""
        socket = self._socket()
        total = 0.0
        for index, element in enumerate(self.device.elements):
            if element.transistors:
                total += max(socket.bias_V - self.resting_V(index), 0.0) / socket.load_ohm
            elif element.junction.reversed_in_socket:
                total += max(socket.bias_V - FORWARD_V, 0.0) / socket.load_ohm
            else:
                total += element.junction.dark_A(socket.bias_V, socket.temperature_degC)
        return total

    def _socket(self) -> Socket:
        return Socket(
            bias_V=self.bias_V,
            load_ohm=self.wiring.load_ohm,
            stray_F=self.wiring.stray_F,
            input_ohm=self.scope_input_ohm,
            temperature_degC=self.wiring.temperature_degC,
            connection=self.wiring.connection,
        )

    def _answer(self, index: int, current_A: float, drive: Drive, ratio: float) -> Answer:
        element, socket = self.device.elements[index], self._socket()
        train = Train(high_A=current_A, width_s=min(drive.width_s, 0.999 * drive.period_s), period_s=drive.period_s)
        key = (element, socket, train, ratio)
        return _remembered(self._answers, key, lambda: respond(element, train, socket, light_ratio=ratio))


def _remembered(store: dict[K, V], key: K, make: Callable[[], V]) -> V:
    if key not in store:
        if len(store) > 200:
            store.clear()
        store[key] = make()
    return store[key]
