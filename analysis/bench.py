"""The bench file as values: which instruments there are, and what is wired to what."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum


class BiasSource(StrEnum):
    """Where the bias comes from."""

    SUPPLY = "supply"
    GENERATOR = "generator"
    BY_HAND = "by_hand"


@dataclass(frozen=True, slots=True, kw_only=True)
class OscilloscopeLink:
    """The oscilloscope: `channels` maps a signal (`drive`, `output`, `output2` ...) to a scope channel.

    `points` and `averages` are what each record is asked for with.
    """

    address: str
    dialect: str
    channels: Mapping[str, int]
    probe_ratio: Mapping[str, float] = field(default_factory=dict)
    points: int = 2000
    averages: int = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class GeneratorLink:
    """The function generator: one channel for the emitter of each element, behind `source_ohm`."""

    address: str
    dialect: str
    emitter_channels: tuple[int, ...] = (1,)
    source_ohm: float = 50.0


@dataclass(frozen=True, slots=True, kw_only=True)
class BiasLink:
    """The bias source. `address` and `dialect` are set for a supply, `channel` for a generator channel."""

    source: BiasSource
    address: str | None = None
    dialect: str | None = None
    channel: int | None = None
    source_ohm: float = 0.0
    decoupling_F: float = 0.0
    compliance_A: float | None = None
    ramp_V_per_s: float = 20.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SwitchLink:
    """A switch that puts loads (or devices) into the circuit: which path stands for which load."""

    address: str
    dialect: str
    loads: Mapping[float, int] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Bench:
    """Oscilloscope, function generator, bias source, and a switch where there is one."""

    oscilloscope: OscilloscopeLink
    function_generator: GeneratorLink
    bias: BiasLink
    switch: SwitchLink | None = None
    visa: str = "@py"
