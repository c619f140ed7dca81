"""What dark traces say: points of current against bias, and the model through them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from darkedge.analysis.measurement import Estimate


@dataclass(frozen=True, slots=True, kw_only=True)
class DarkPoint:
    """Dark current at one bias; `bias_V` is that across the junction, the drop of the resistor taken off."""

    bias_V: float
    current_A: Estimate
    temperature_degC: float | None = None
    capture: str = ""
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class DarkFit:
    """Dark current against bias of one device and element.

    `model` names the terms kept ("saturation", "generation", "shunt", joined by "+"), empty where too few
    points carry a value. `parameters`: `saturation_A`, `generation_A` (at one volt), `shunt_ohm`, those kept.
    """

    device: str | None
    element: int | None
    points: tuple[DarkPoint, ...]
    model: str = ""
    parameters: Mapping[str, Estimate] = field(default_factory=dict)
    chi2_per_dof: float | None = None
    notes: tuple[str, ...] = ()
