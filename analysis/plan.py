"""The plan as values: what to drive and at which points. A plan that exists is a valid plan."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from enum import StrEnum
from itertools import product

from darkedge.analysis.captures import DeviceKind, Kind, OutputConnection, Reference


class EmitterKind(StrEnum):
    """What gives the light."""

    LED = "led"
    LASER = "laser"
    INSIDE_DEVICE = "inside_device"


class LoadChange(StrEnum):
    """How one load takes the place of another."""

    FIXED = "fixed"
    ASK = "ask"
    SWITCHED = "switched"


@dataclass(frozen=True, slots=True, kw_only=True)
class DeviceSpec:
    """The device as the plan needs to know it."""

    kind: DeviceKind
    elements: int = 1
    output_connection: OutputConnection = OutputConnection.LOAD_TO_GROUND


@dataclass(frozen=True, slots=True, kw_only=True)
class Ratings:
    """What must never be exceeded; `None` is not stated, and a plan that needs it is refused.

    `bias_above_60_V` is the explicit word without which no bias above 60 V DC is set.
    """

    reverse_bias_V: float | None = None
    emitter_peak_current_A: float | None = None
    emitter_mean_current_A: float | None = None
    emitter_reverse_V: float | None = None
    collector_emitter_V: float | None = None
    collector_current_A: float | None = None
    dissipation_W: float | None = None
    bias_above_60_V: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Emitter:
    """The light source with its series resistor; `reference` is what the drive channel shows."""

    kind: EmitterKind
    wavelength_m: float
    series_ohm: float
    forward_V: float
    reference: Reference = Reference.VOLTAGE


@dataclass(frozen=True, slots=True, kw_only=True)
class Axes:
    """The values of each axis, outermost first."""

    load_ohm: tuple[float, ...]
    bias_V: tuple[float, ...]
    emitter_current_A: tuple[float, ...]
    pulse_width_s: tuple[float, ...]
    element: tuple[int, ...] = (1,)
    repeats: int = 1
    load_change: LoadChange = LoadChange.FIXED


@dataclass(frozen=True, slots=True, kw_only=True)
class Drive:
    """How the pulses repeat: at a duty, or with a fixed period. Exactly one of the two is set."""

    duty: float | None = None
    period_s: float | None = None
    low_V: float = 0.0

    def period_for(self, width_s: float) -> float:
        """Period of the drive at a pulse width."""
        if self.period_s is not None:
            return self.period_s
        assert self.duty is not None  # one of the two is set
        return width_s / self.duty


@dataclass(frozen=True, slots=True, kw_only=True)
class DarkPlan:
    """The dark points: sense resistor, biases, settling and length of each trace."""

    load_ohm: float
    bias_V: tuple[float, ...]
    settle_s: float
    duration_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One combination of the axes."""

    load_ohm: float
    element: int
    bias_V: float
    emitter_current_A: float
    pulse_width_s: float
    repeat: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """One thing that the sweep takes: a pulse point, or a dark or offset trace. `number` is its place in the plan, from 1."""

    number: int
    kind: Kind
    load_ohm: float
    bias_V: float
    element: int | None = None
    emitter_current_A: float | None = None
    pulse_width_s: float | None = None
    repeat: int = 1

    @property
    def name(self) -> str:
        """How the point is called in captures and journal."""
        return f"{self.number:04d}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """What to drive and at which points.

    `expected_photocurrent_ratio` (photocurrent over emitter current) and `expected_capacitance_F` are roughly known beforehand, or
    `None`; nothing but the outlook on the plan uses them.
    """

    device: DeviceSpec
    ratings: Ratings
    emitter: Emitter
    axes: Axes
    drive: Drive
    title: str = ""
    dark: DarkPlan | None = None
    fixture_file: str | None = None
    expected_photocurrent_ratio: float | None = None
    expected_capacitance_F: float | None = None
    source: str = field(default="", compare=False)

    def points(self) -> Iterator[Point]:
        """All pulse points in the order they are driven: hand work least often."""
        axes = self.axes
        for load, element, bias, current, width, repeat in product(
            axes.load_ohm, axes.element, axes.bias_V, axes.emitter_current_A, axes.pulse_width_s,
            range(1, axes.repeats + 1),
        ):  # fmt: skip
            yield Point(
                load_ohm=load,
                element=element,
                bias_V=bias,
                emitter_current_A=current,
                pulse_width_s=width,
                repeat=repeat,
            )

    @property
    def has_transistor(self) -> bool:
        """Whether the output is that of a transistor, so that the bias is its collector supply."""
        return self.device.output_connection is not OutputConnection.LOAD_TO_GROUND

    @property
    def bias_rating_V(self) -> float:
        """The rating that no bias may exceed; a plan that exists states it."""
        ratings = self.ratings
        rating = ratings.collector_emitter_V if self.has_transistor else ratings.reverse_bias_V
        assert rating is not None  # a plan without it is refused
        return rating

    def steps(self) -> tuple[Step, ...]:
        """Everything that the sweep takes, in order: the pulse points, then the dark traces with offset traces between.

        Offset traces at zero bias stand before, between and after the dark traces, with the same load.
        """
        steps = [
            Step(
                number=number,
                kind=Kind.PULSE,
                load_ohm=point.load_ohm,
                bias_V=point.bias_V,
                element=point.element,
                emitter_current_A=point.emitter_current_A,
                pulse_width_s=point.pulse_width_s,
                repeat=point.repeat,
            )
            for number, point in enumerate(self.points(), start=1)
        ]
        if self.dark is None:
            return tuple(steps)
        series = [(Kind.OFFSET, 0.0)]
        for bias in self.dark.bias_V:
            series += [(Kind.DARK, bias), (Kind.OFFSET, 0.0)]
        element = 1 if self.device.elements == 1 else None
        steps += [
            Step(number=number, kind=kind, load_ohm=self.dark.load_ohm, bias_V=bias, element=element)
            for number, (kind, bias) in enumerate(series, start=len(steps) + 1)
        ]
        return tuple(steps)
