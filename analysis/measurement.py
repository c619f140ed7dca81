"""The measurement: the quantities taken from one capture and element, each with its uncertainty."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from darkedge.analysis.captures import Conditions
from darkedge.analysis.columns import ALL_QUANTITIES
from darkedge.analysis.flags import join_flags


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """A value with its standard uncertainty, or, where only a bound is known, that bound.

    Either `value` and `u` are both given (finite, u >= 0), or both are `None` and `lo95` or `hi95` says
    what is known with 95 % confidence. `parts` are the standard uncertainties that `u` was put together from, in the same
    unit and by name, where somebody asked for them.
    """

    value: float | None = None
    u: float | None = None
    lo95: float | None = None
    hi95: float | None = None
    parts: Mapping[str, float] | None = field(default=None, compare=False)

    def __post_init__(self) -> None:
        if (self.value is None) != (self.u is None):
            msg = "a value comes with its uncertainty, and a bound with neither"
            raise ValueError(msg)
        if self.value is None and self.lo95 is None and self.hi95 is None:
            msg = "an estimate says something: a value or a bound"
            raise ValueError(msg)
        for number in (self.value, self.u, self.lo95, self.hi95):
            if number is not None and not math.isfinite(number):
                msg = f"an estimate is finite, not {number}"
                raise ValueError(msg)
        if self.u is not None and self.u < 0:
            msg = f"a standard uncertainty is not negative, {self.u}"
            raise ValueError(msg)


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement:
    """One row of the measurement table.

    `quantities` holds only what could be had, by column name; `flags` say why the rest is missing and
    what the numbers are worth. `element` is the element whose output was measured. `run` and the other
    conditions are those of the capture.
    """

    capture: str
    element: int | None
    conditions: Conditions
    quantities: Mapping[str, Estimate] = field(default_factory=dict)
    flags: tuple[str, ...] = ()
    levels: str | None = None
    estimator: str | None = None
    n_pulses: int | None = None
    trigger_s: float | None = field(default=None, compare=False)
    """When the drive's first edge passed half of its way on the record's own time; no column: captures of a run are compared by it."""

    def __post_init__(self) -> None:
        unknown = self.quantities.keys() - set(ALL_QUANTITIES)
        if unknown:
            msg = f"not columns of the measurement table: {sorted(unknown)}"
            raise ValueError(msg)
        object.__setattr__(self, "flags", join_flags(self.flags))

    def value(self, quantity: str) -> float | None:
        """Return the value of a quantity, `None` where it could not be had or only a bound is known."""
        estimate = self.quantities.get(quantity)
        return None if estimate is None else estimate.value
