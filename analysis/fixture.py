"""What is true of the bench and not of the device: load values, stray capacitance, skew, response."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, timedelta

from darkedge.analysis.errors import FixtureError
from darkedge.analysis.measurement import Estimate

LOAD_MATCH_RATIO = 0.02
"""A nominal load within 2 % of the one asked for is that load (common practice, no source)."""


CURRENT_MATCH_RATIO = 0.1
"""Difference of emitter current from that of the bench response that is still taken for the same (common practice, no source)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CapturedEdge:
    """A reference edge as measured from a capture: its 10-90 % time, and the part of it before the 50 % point."""

    time_s: float
    u_time_s: float
    share: float | None = None
    u_share: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Load:
    """One load resistor as measured, with the capacitance in parallel with it: scope input, probe, cable, socket."""

    nominal_ohm: float
    actual_ohm: float
    u_actual_ohm: float = 0.0
    stray_F: float | None = None
    u_stray_F: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Response:
    """Emitter and scope together: 10-90 % times of the on and the off edge, and where they hold.

    `rise_share` and `fall_share` are the parts of those times before the 50 % point, where captured edges told them.
    """

    rise_time_s: float
    fall_time_s: float
    u_rise_time_s: float = 0.0
    u_fall_time_s: float = 0.0
    emitter_current_A: float | None = None
    rise_share: float | None = None
    fall_share: float | None = None
    u_rise_share: float = 0.0
    u_fall_share: float = 0.0

    def holds_at(self, emitter_current_A: float | None) -> bool:
        """Whether it holds at an emitter current; where either is not known, it is taken to."""
        if self.emitter_current_A is None or emitter_current_A is None:
            return True
        return abs(emitter_current_A / self.emitter_current_A - 1) <= CURRENT_MATCH_RATIO


@dataclass(frozen=True, slots=True, kw_only=True)
class Fixture:
    """The fixture file as values. `None` is not known."""

    measured: date | None = None
    valid_days: float | None = None
    scope_input_ohm: float | None = None
    u_scope_input_ohm: float = 0.0
    channel_skew_s: float = 0.0
    u_channel_skew_s: float = 0.0
    trigger_jitter_s: float = 0.0
    u_gain_ratio: float = 0.0
    u_timebase_ratio: float = 0.0
    offset_V: float = 0.0
    u_offset_V: float = 0.0
    scope_input_bias_A: float = 0.0
    u_scope_input_bias_A: float = 0.0
    loads: tuple[Load, ...] = ()
    response: Response | None = None

    def expired(self, today: date) -> bool:
        """Whether the fixture is older than it says it may be."""
        if self.measured is None or self.valid_days is None:
            return False
        return today > self.measured + timedelta(days=self.valid_days)

    def load(self, nominal_ohm: float) -> Load | None:
        """Return the load of that nominal value, `None` where the fixture does not know it."""
        near = [x for x in self.loads if abs(x.nominal_ohm / nominal_ohm - 1) <= LOAD_MATCH_RATIO]
        return min(near, key=lambda x: abs(x.nominal_ohm - nominal_ohm)) if near else None

    def effective_load(self, nominal_ohm: float, input_ohm: float | None = None) -> Estimate:
        """Resistance in which the current is seen: the load as measured with the scope's input across it.

        `input_ohm` is what the capture says of the scope's input (the fixture's value is used where it
        agrees within 10 % or the capture says nothing). Without either the load alone is returned.

        Raises
        ------
        FixtureError
            A resistance that is not positive.
        """
        known = self.load(nominal_ohm)
        load, u_load = (known.actual_ohm, known.u_actual_ohm) if known else (nominal_ohm, 0.0)
        scope, u_scope = self._input(input_ohm)
        if load <= 0 or (scope is not None and scope <= 0):
            raise FixtureError("a resistance is not positive", found=f"load {load} ohm, input {scope} ohm")
        if scope is None:
            return Estimate(value=load, u=u_load)
        both = load * scope / (load + scope)
        u_both = ((both / load) ** 4 * u_load**2 + (both / scope) ** 4 * u_scope**2) ** 0.5
        return Estimate(value=both, u=u_both)

    def _input(self, input_ohm: float | None) -> tuple[float | None, float]:
        if self.scope_input_ohm is None or (input_ohm is not None and abs(self.scope_input_ohm / input_ohm - 1) > 0.1):
            return input_ohm, 0.0
        return self.scope_input_ohm, self.u_scope_input_ohm


UNKNOWN_FIXTURE = Fixture()
