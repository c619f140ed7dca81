"""What a junction fit says: parameters with intervals, C(V), shortest pulse, and the data it rests on."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from darkedge.analysis.measurement import Estimate

PARAMETERS: tuple[str, ...] = ("c_j0_F", "v_bi_V", "grading", "c_stray_F", "full_depletion_V", "transit_s")


@dataclass(frozen=True, slots=True, kw_only=True)
class CapacitancePoint:
    """Junction and stray capacitance together at one bias that was measured."""

    bias_V: float
    c_F: float
    u_c_F: float


@dataclass(frozen=True, slots=True, kw_only=True)
class EdgePoint:
    """One edge time that entered the fit, and what the model says of it. `quantity` is a column name."""

    capture: str
    quantity: str
    bias_V: float
    load_ohm: float
    measured_s: float
    u_s: float
    model_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ShortestPulse:
    """Shortest pulse that keeps its amplitude and width at one bias and load, and the rate that follows.

    `shortest_pulse_s.hi95` alone: even the shortest pulse tried came through. `lo95` alone: none did.
    """

    bias_V: float | None
    load_ohm: float | None
    shortest_pulse_s: Estimate
    highest_rate_Hz: Estimate


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseWidthPoint:
    """What one input width gave: output width over input width, and amplitude over the settled one."""

    bias_V: float | None
    load_ohm: float | None
    width_in_s: float
    width_ratio: float
    amplitude_ratio: float


@dataclass(frozen=True, slots=True, kw_only=True)
class JunctionFit:
    """The fit of one device and element.

    `model` is "abrupt", "graded" (free m) or "full_depletion" (PIN). `parameters` holds those of `PARAMETERS`
    that the model has, each with `value`, `u`, `lo95`, `hi95`. `fixed` names the parameters that were given
    (stray from the fixture), not fitted. `extra_rise_s`, `extra_fall_s` are the 10-90 % times of what does not
    depend on the load (emitter, transit, scope), `None` where the fit has none. `chi2_per_dof` judges the fit.
    `curve` holds the numbers that draw C(V), those whose interval does not close among them: for drawing and
    predicting between the biases measured, not for quoting.
    """

    device: str | None
    element: int | None
    model: str
    parameters: Mapping[str, Estimate]
    correlation: Mapping[tuple[str, str], float] = field(default_factory=dict)
    fixed: tuple[str, ...] = ()
    extra_rise_s: Estimate | None = None
    extra_fall_s: Estimate | None = None
    capacitance: tuple[CapacitancePoint, ...] = ()
    edges: tuple[EdgePoint, ...] = ()
    chi2_per_dof: float | None = None
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    curve: Mapping[str, float] = field(default_factory=dict)
