"""Limits, verdicts and choices as types."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from enum import StrEnum

from darkedge.analysis.errors import InputError
from darkedge.analysis.measurement import Estimate


class Verdict(StrEnum):
    """Three states: a limit inside the uncertainty is neither pass nor fail (JCGM 106:2012)."""

    PASS = "pass"
    FAIL = "fail"
    UNDECIDED = "undecided"

    @classmethod
    def worst(cls, verdicts: list[Verdict]) -> Verdict:
        """Fail where one fails, undecided where one is undecided or there is none, else pass."""
        if cls.FAIL in verdicts:
            return cls.FAIL
        return cls.PASS if verdicts and all(v is cls.PASS for v in verdicts) else cls.UNDECIDED


class Rule(StrEnum):
    """Decision rules: simple acceptance, or a guard band so that the stated confidence is kept."""

    SIMPLE = "simple"
    GUARDED = "guarded"


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """A bound on a quantity of the measurement table under stated conditions; at least one of the two bounds."""

    quantity: str
    lower: float | None = None
    upper: float | None = None
    when: Mapping[str, float | str] = field(default_factory=dict)
    tolerance_ratio: float = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """The limit file as values."""

    limits: tuple[Limit, ...]
    rule: Rule = Rule.GUARDED
    confidence: float = 0.95


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitVerdict:
    """One limit held against one device and element. `reason` says in words why it is not a pass."""

    limit: Limit
    verdict: Verdict
    estimate: Estimate | None
    probability_conforming: float | None
    captures: tuple[str, ...] = ()
    reason: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class DeviceVerdict:
    """All limits of one device and element."""

    lot: str | None
    device: str | None
    element: int | None
    verdict: Verdict
    limits: tuple[LimitVerdict, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class LotVerdict:
    """One lot (or the devices without a lot, `lot=None`): counts and the verdict that follows."""

    lot: str | None
    verdict: Verdict
    passed: int
    failed: int
    undecided: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Screening:
    """The result of a screen: device by device, lot by lot, and the whole."""

    devices: tuple[DeviceVerdict, ...]
    lots: tuple[LotVerdict, ...]
    verdict: Verdict
    rule: Rule
    confidence: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Wish:
    """What is wanted of a bias and load. `None` means no such wish.

    Raises
    ------
    InputError
        A wish that is not positive, or a ratio outside 0 to 1.
    """

    pulse_width_s: float
    distortion_ratio: float = 0.1
    amplitude_ratio: float = 0.9
    dark_current_A: float | None = None
    rails_V: tuple[float, ...] = ()
    loads_ohm: tuple[float, ...] = ()
    max_bias_V: float | None = None
    board_stray_F: float | None = None
    emitter_current_A: float | None = None
    min_signal_V: float | None = None

    def __post_init__(self) -> None:
        for name in ("pulse_width_s", "dark_current_A", "max_bias_V", "emitter_current_A", "min_signal_V"):
            self._check(name, getattr(self, name), lambda x: x > 0, "a value above zero")
        self._check("board_stray_F", self.board_stray_F, lambda x: x >= 0, "zero or more")
        for name in ("distortion_ratio", "amplitude_ratio"):
            self._check(name, getattr(self, name), lambda x: 0 < x < 1, "a ratio between 0 and 1, such as 10 %")
        for name, values in (("rails_V", self.rails_V), ("loads_ohm", self.loads_ohm)):
            for value in values:
                self._check(name, value, lambda x: x > 0, "values above zero")
        object.__setattr__(self, "rails_V", tuple(dict.fromkeys(self.rails_V)))
        object.__setattr__(self, "loads_ohm", tuple(dict.fromkeys(self.loads_ohm)))

    @staticmethod
    def _check(name: str, value: float | None, allowed: Callable[[float], bool], wanted: str) -> None:
        if value is not None and not allowed(value):
            raise InputError(f"{name} cannot be wished", found=f"{value:g}", wanted=wanted)


@dataclass(frozen=True, slots=True, kw_only=True)
class OperatingPoint:
    """One bias and load, with what is predicted there. `misses` is empty where every wish is met.

    `signal_V` is the settled amplitude predicted from the measured photocurrent times the load.
    """

    bias_V: float
    load_ohm: float
    signal_V: Estimate | None
    rise_time_s: Estimate
    shortest_pulse_s: Estimate
    dark_current_A: Estimate | None
    misses: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """All candidates, the best of the feasible (`None`: none is), and the nearest miss where none is."""

    device: str | None
    element: int | None
    wish: Wish
    candidates: tuple[OperatingPoint, ...]
    best: OperatingPoint | None
    nearest: OperatingPoint | None
    notes: tuple[str, ...] = ()
