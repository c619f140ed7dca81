"""What dark traces say: points of current against bias, and the model through them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.measurement import Estimate


@dataclass(frozen=True, slots=True, kw_only=True)
class Depletion:
    """How the depleted width grows with bias: (1 + V/V_bi)^m, no further once fully depleted.

    m is 1/2 for an abrupt and 1/3 for a linearly graded junction (S. M. Sze, Physics of Semiconductor Devices).
    """

    v_bi_V: float
    grading: float
    full_depletion_V: float | None = None

    def width_ratio(self, bias_V: FloatArray) -> FloatArray:
        """Width over that at zero bias, of any shape."""
        reached = np.clip(bias_V, 0.0, self.full_depletion_V)
        return np.asarray((1 + reached / self.v_bi_V) ** self.grading, dtype=np.float64)


ASSUMED = Depletion(v_bi_V=0.6, grading=0.5)
"""An abrupt junction, where no junction fit says better; named in the notes of a fit."""


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
    points carry a value. `parameters`: `saturation_A` (what does not grow with bias), `generation_A` (what the growing depletion
    width has added at one volt), `shunt_ohm`, those kept.
    `depletion` is what generation was taken to follow.
    """

    device: str | None
    element: int | None
    points: tuple[DarkPoint, ...]
    model: str = ""
    parameters: Mapping[str, Estimate] = field(default_factory=dict)
    chi2_per_dof: float | None = None
    depletion: Depletion = ASSUMED
    notes: tuple[str, ...] = ()
