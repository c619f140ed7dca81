"""What the device behind the virtual instruments is made of. Invented parts; nothing here is shared with the analysis."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

THERMAL_V = 0.02585
"""kT/q near 300 K."""
BOLTZMANN_eV_per_K = 8.617333262e-5
REFERENCE_degC = 25.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Emitter:
    """A light source: its light lags its current by a delay and a first-order response, unequal on and off.

    More current makes both faster, by the power `speed_exponent` of the ratio to `nominal_current_A`.
    """

    delay_s: float = 3e-9
    on_s: float = 4e-9
    off_s: float = 7e-9
    nominal_current_A: float = 5e-3
    forward_V: float = 1.5
    speed_exponent: float = 0.25

    def lag_s(self, current_A: float, *, rising: bool) -> float:
        """Time constant of the light at a drive current."""
        share = max(current_A, 1e-6) / self.nominal_current_A
        return (self.on_s if rising else self.off_s) * float(share**-self.speed_exponent)


@dataclass(frozen=True, slots=True, kw_only=True)
class Junction:
    """A photodiode: capacitance that follows its instantaneous reverse voltage, carriers, dark current.

    `coupling_ratio` is photocurrent over emitter current. `full_depletion_V` is set for a PIN: beyond it the capacitance
    stays what it is there. `tail_ratio` is the share of carriers from undepleted material at zero bias; it shrinks as the
    junction depletes, and arrives with the time constant `tail_s`.
    """

    c_j0_F: float
    v_bi_V: float
    grading: float
    full_depletion_V: float | None = None
    coupling_ratio: float = 0.004
    transit_s: float = 0.5e-9
    tail_ratio: float = 0.0
    tail_s: float = 200e-9
    saturation_A: float = 5e-11
    generation_A: float = 4e-10
    shunt_ohm: float = 5e10
    activation_eV: float = 0.6
    noise_A: float = 0.0
    reversed_in_socket: bool = False

    def capacitance_F(self, reverse_V: float) -> float:
        """Junction capacitance at an instantaneous reverse voltage; a little forward voltage is allowed for."""
        v = reverse_V if self.full_depletion_V is None else min(reverse_V, self.full_depletion_V)
        return self.c_j0_F * float(max(1.0 + v / self.v_bi_V, 0.1) ** -self.grading)

    def dark_A(self, reverse_V: float, temperature_degC: float = REFERENCE_degC) -> float:
        """Current with no light, positive in reverse: diffusion, generation in the depleted width, shunt."""
        ratio = self._heat(temperature_degC)
        shunt = reverse_V / self.shunt_ohm
        if reverse_V < 0:
            return shunt - self.saturation_A * ratio * math.expm1(min(-reverse_V / THERMAL_V, 60.0))
        v = reverse_V if self.full_depletion_V is None else min(reverse_V, self.full_depletion_V)
        width = float((1.0 + v / self.v_bi_V) ** self.grading) - 1.0
        settled = -math.expm1(-reverse_V / THERMAL_V)
        return shunt + ratio * (self.saturation_A * settled + self.generation_A * width)

    def tail_share(self, reverse_V: float) -> float:
        """Share of the carriers that diffuse in, at a reverse voltage."""
        return self.tail_ratio * float((1.0 + max(reverse_V, 0.0) / self.v_bi_V) ** -self.grading)

    def _heat(self, temperature_degC: float) -> float:
        cold, hot = REFERENCE_degC + 273.15, temperature_degC + 273.15
        return math.exp(self.activation_eV / BOLTZMANN_eV_per_K * (1 / cold - 1 / hot))


@dataclass(frozen=True, slots=True, kw_only=True)
class Transistor:
    """An NPN as its charges: transport current, gain each way, transit times each way, junction capacitances.

    `reverse_transit_s` times `reverse_gain` sets how long the charge of saturation lasts.
    """

    gain: float = 200.0
    transport_A: float = 1e-14
    reverse_gain: float = 2.0
    forward_transit_s: float = 0.6e-9
    reverse_transit_s: float = 1.0e-6
    emitter_F: float = 8e-12
    collector_F: float = 5e-12
    base_resistor_ohm: float = 1e6


@dataclass(frozen=True, slots=True, kw_only=True)
class Element:
    """One emitter and detector of a device, with the transistors behind the diode: none, one, or a compound pair."""

    junction: Junction
    emitter: Emitter = field(default_factory=Emitter)
    transistors: tuple[Transistor, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Device:
    """A part: its kind in the words of the plan, its elements, and how much light leaks from one to another."""

    kind: str
    elements: tuple[Element, ...]
    crosstalk_ratio: float = 0.0
    name: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Socket:
    """What the device is plugged into: supply, load, stray capacitance and the scope's input across the load.

    `connection` is where the output is seen: `load_to_ground`, `pull_up` or `emitter_resistor`.
    """

    bias_V: float
    load_ohm: float
    stray_F: float = 14e-12
    input_ohm: float = 1e6
    temperature_degC: float = REFERENCE_degC
    connection: str = "load_to_ground"


@dataclass(frozen=True, slots=True, kw_only=True)
class Train:
    """Emitter current in time: `high_A` for `width_s` from 0 on, once each `period_s`, else `low_A`."""

    high_A: float
    width_s: float
    period_s: float
    low_A: float = 0.0
