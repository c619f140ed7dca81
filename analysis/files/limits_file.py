"""The limit file: bounds on quantities under stated conditions, and the decision rule."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Literal

from pydantic import Field, model_validator

from darkedge.analysis.columns import ALL_QUANTITIES, CONDITIONS, IDENTITY
from darkedge.analysis.decide.results import Limit, Limits, Rule
from darkedge.analysis.errors import InputError, LimitError
from darkedge.analysis.files.toml_checks import Checked, NotNegative, Number, check, fault, read_toml
from darkedge.analysis.quantities import parse_quantity

FORMAT = "darkedge-limits 1"
NAME = "limits.toml"
WHEN_TEXT = ("kind", "device", "lot", "reference", "run")
WHEN_NUMBER = (*CONDITIONS, "element", "driven_element")
assert set(WHEN_TEXT) <= set(IDENTITY)


class _Decision(Checked):
    rule: Literal["simple", "guarded"] = "guarded"
    confidence: Number = 0.95

    @model_validator(mode="after")
    def _sensible(self) -> _Decision:
        if not 0.5 < self.confidence < 1:
            raise fault("confidence is not between 0.5 and 1", found=f"{self.confidence:g}", wanted="such as 0.95")
        return self


class _Limit(Checked):
    quantity: str
    lower: float | str | int | None = None
    upper: float | str | int | None = None
    when: dict[str, float | int | str] = Field(default_factory=dict)
    tolerance_ratio: NotNegative = 0.02

    @model_validator(mode="after")
    def _sensible(self) -> _Limit:
        if self.quantity not in ALL_QUANTITIES:
            raise fault(
                "not a quantity of the measurement table", found=repr(self.quantity), wanted=_near(self.quantity)
            )
        if self.lower is None and self.upper is None:
            raise fault("a limit without a bound", wanted="lower, upper, or both")
        low, high = _bound(self.lower, self.quantity), _bound(self.upper, self.quantity)
        if low is not None and high is not None and low >= high:
            raise fault("lower is not below upper", found=f"{low:g} and {high:g}")
        for key, value in self.when.items():
            _condition(key, value)
        return self


class _Limits(Checked):
    format: str
    decision: _Decision = _Decision()
    limit: list[_Limit] = Field(min_length=1)


def read_limits(path: Path) -> Limits:
    """Read a limit file.

    Raises
    ------
    LimitError
        Every fault of the file at once.
    """
    stated = check(read_toml(path, LimitError), _Limits, where=str(path), word=FORMAT, error_class=LimitError)
    return Limits(
        limits=tuple(
            Limit(
                quantity=limit.quantity,
                lower=_bound(limit.lower, limit.quantity),
                upper=_bound(limit.upper, limit.quantity),
                when={key: _condition(key, value) for key, value in limit.when.items()},
                tolerance_ratio=limit.tolerance_ratio,
            )
            for limit in stated.limit
        ),
        rule=Rule(stated.decision.rule),
        confidence=stated.decision.confidence,
    )


def find_limits(paths: Sequence[Path]) -> Path | None:
    """Return the `limits.toml` in the first of the folders that has one, or beside it (a lot's limits), else `None`."""
    for path in paths:
        for folder in (path, path.parent) if path.is_dir() else (path.parent,):
            if (folder / NAME).is_file():
                return folder / NAME
    return None


def _bound(value: float | str | int | None, quantity: str) -> float | None:
    return None if value is None else _quantity(value, quantity)


def _condition(key: str, value: float | int | str) -> float | str:
    if key in WHEN_TEXT:
        return str(value)
    if key not in WHEN_NUMBER:
        raise fault("not a condition", found=repr(key), wanted=", ".join((*WHEN_NUMBER, *WHEN_TEXT)))
    return _quantity(value, key)


def _quantity(value: float | str | int, key: str) -> float:
    try:
        return parse_quantity(value, key)
    except InputError as error:
        raise fault(error.what, found=error.found, wanted=error.wanted, mend=error.mend) from error


def _near(name: str) -> str:
    import difflib

    near = difflib.get_close_matches(name, ALL_QUANTITIES, n=1, cutoff=0.4)
    return near[0] if near else ", ".join(ALL_QUANTITIES)
