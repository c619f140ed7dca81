"""Invented parts for the virtual bench: a maker's lot with its spread, and parts that are bad in a named way.

The maker, the parts and every number are invented.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from enum import StrEnum

import numpy as np

from darkedge.instruments.virtual.parts import Device, Element, Emitter, Junction, Transistor

MAKER = "Tarn & Vale Pick-ups"


class Fault(StrEnum):
    """Ways in which a part is bad."""

    NONE = "none"
    SLOW = "slow"
    LEAKY = "leaky"
    REVERSED = "reversed"
    DEAD = "dead"
    NOISY = "noisy"


class PartKind(StrEnum):
    """Kinds of part that can be mounted."""

    PHOTODIODE = "photodiode"
    PIN = "pin"
    TRANSISTOR_SWITCH = "transistor_switch"
    OPTOCOUPLER = "optocoupler"
    DUAL_OPTOCOUPLER = "dual_optocoupler"


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """A part of the catalogue: its number, and one good example of it."""

    number: str
    lot: str
    device: Device
    connection: str = "load_to_ground"


_EMITTER = Emitter(delay_s=3e-9, on_s=4e-9, off_s=7e-9)
_DIODE = Junction(c_j0_F=96e-12, v_bi_V=0.62, grading=0.43, coupling_ratio=0.0018, generation_A=4e-10, shunt_ohm=4e10)
_PIN = Junction(
    c_j0_F=62e-12, v_bi_V=0.7, grading=0.46, full_depletion_V=9.0, coupling_ratio=0.0018, generation_A=1.5e-10, shunt_ohm=8e10,
)  # fmt: skip
_SWITCH_DIODE = Junction(c_j0_F=30e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=0.002, generation_A=5e-11)


def _device(kind: str, *elements: tuple[Junction, tuple[Transistor, ...]], crosstalk: float = 0.0) -> Device:
    made = tuple(Element(junction=j, emitter=_EMITTER, transistors=t) for j, t in elements)
    return Device(kind=kind, elements=made, crosstalk_ratio=crosstalk)


CATALOGUE: Mapping[PartKind, Part] = {
    PartKind.PHOTODIODE: Part(number="SP-2", lot="K-0417", device=_device("photodiode", (_DIODE, ()))),
    PartKind.PIN: Part(number="SP-4", lot="K-0422", device=_device("pin", (_PIN, ()))),
    PartKind.TRANSISTOR_SWITCH: Part(
        number="SP-7", lot="K-0431", connection="pull_up",
        device=_device("transistor_switch", (_SWITCH_DIODE, (Transistor(),))),
    ),
    PartKind.OPTOCOUPLER: Part(
        number="SP-9", lot="K-0440", connection="pull_up",
        device=_device("optocoupler", (_SWITCH_DIODE, (Transistor(gain=260, reverse_transit_s=1.6e-6),))),
    ),
    PartKind.DUAL_OPTOCOUPLER: Part(
        number="SP-9D", lot="K-0446", connection="pull_up",
        device=_device(
            "optocoupler",
            (_SWITCH_DIODE, (Transistor(gain=240, reverse_transit_s=1.4e-6),)),
            (replace(_SWITCH_DIODE, c_j0_F=34e-12), (Transistor(gain=220, reverse_transit_s=1.5e-6),)),
            crosstalk=0.004,
        ),
    ),
}  # fmt: skip


def make_device(kind: PartKind, *, seed: int, number: int, fault: Fault = Fault.NONE) -> Device:
    """Make one part of a lot: the catalogue's example, each value spread by a per cent or so, and bad where `fault` says so.

    The same kind, seed and number give the same part.
    """
    random = np.random.default_rng([seed, number, list(PartKind).index(kind)])
    part = CATALOGUE[kind]
    elements = tuple(_spoil(_spread(element, random), fault) for element in part.device.elements)
    return replace(part.device, elements=elements, name=f"{part.number}-{number:02d}")


def _spread(element: Element, random: np.random.Generator) -> Element:
    def about(value: float, ratio: float) -> float:
        return value * float(1 + ratio * np.clip(random.normal(), -2.5, 2.5))

    junction = element.junction
    junction = replace(
        junction,
        c_j0_F=about(junction.c_j0_F, 0.015),
        v_bi_V=about(junction.v_bi_V, 0.01),
        full_depletion_V=None if junction.full_depletion_V is None else about(junction.full_depletion_V, 0.03),
        coupling_ratio=about(junction.coupling_ratio, 0.03),
        generation_A=about(junction.generation_A, 0.1),
    )
    transistors = tuple(
        replace(t, gain=about(t.gain, 0.04), reverse_transit_s=about(t.reverse_transit_s, 0.03))
        for t in element.transistors
    )
    return replace(element, junction=junction, transistors=transistors)


def _slow(element: Element) -> Element:
    """Too much capacitance, or, behind a transistor, too much stored charge."""
    junction = replace(element.junction, c_j0_F=1.5 * element.junction.c_j0_F)
    transistors = tuple(replace(t, reverse_transit_s=3.0 * t.reverse_transit_s) for t in element.transistors)
    return replace(element, junction=junction, transistors=transistors)


def _leaky(element: Element) -> Element:
    shunt = 4e6 if element.transistors else 1e9
    return replace(element, junction=replace(element.junction, shunt_ohm=shunt))


def _reversed(element: Element) -> Element:
    return replace(element, junction=replace(element.junction, reversed_in_socket=True))


def _dead(element: Element) -> Element:
    """No light arrives: an open emitter, or a detector that has lost its bond."""
    return replace(element, junction=replace(element.junction, coupling_ratio=0.0))


def _noisy(element: Element) -> Element:
    return replace(element, junction=replace(element.junction, noise_A=2e-6))


_SPOILED: Mapping[Fault, Callable[[Element], Element]] = {
    Fault.SLOW: _slow,
    Fault.LEAKY: _leaky,
    Fault.REVERSED: _reversed,
    Fault.DEAD: _dead,
    Fault.NOISY: _noisy,
}


def _spoil(element: Element, fault: Fault) -> Element:
    return element if fault is Fault.NONE else _SPOILED[fault](element)
