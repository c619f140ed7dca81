"""One condition from text, the same for the capture header, `--names` and `--conditions`."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import fields
from datetime import datetime
from enum import StrEnum

from darkedge.analysis.captures import Conditions, DeviceKind, Kind, OutputConnection, Reference
from darkedge.analysis.errors import InputError
from darkedge.analysis.quantities import parse_quantity

CONDITION_NAMES: tuple[str, ...] = tuple(field.name for field in fields(Conditions))
WORDS: Mapping[str, type[StrEnum]] = {
    "kind": Kind,
    "reference": Reference,
    "device_kind": DeviceKind,
    "output_connection": OutputConnection,
}
TEXTS = ("run", "point", "device", "lot", "coupling", "taken_utc", "darkedge")
COUNTS = ("element", "driven_element", "averages")
_POSITIVE = ("load_ohm", "pulse_width_s", "drive_period_s", "input_ohm", "bandwidth_limit_Hz", "probe_ratio")
_SMALLEST, _LARGEST = 1e-30, 1e30
"""Magnitudes that a quantity of a bench may have; beyond them arithmetic fails before any instrument does."""
_NOT_NEGATIVE = ("bias_V", "emitter_current_A", "volts_per_code")


def parse_condition(name: str, written: str | float | int) -> object:
    """Read the value of one condition.

    Parameters
    ----------
    name : str
        A field of `Conditions`; its ending says the unit.
    written : str or number
        A quantity (`12`, `"500 mV"`), a count, a word or free text, as the condition demands.

    Returns
    -------
    object
        The value as `Conditions` holds it; `None` where nothing is written, and where `volts_per_code` is 0.

    Raises
    ------
    InputError
        An unknown name, or a value that the condition cannot have. The message quotes the name.
    """
    if name not in CONDITION_NAMES:
        raise unknown_condition(name)
    if isinstance(written, str):
        written = written.strip()
        if not written:
            return None
    if name in WORDS:
        return _word(name, str(written))
    if name in TEXTS:
        return _text(name, str(written))
    if name in COUNTS:
        return _count(name, written)
    return _quantity(name, written)


def conditions_from(values: Mapping[str, object]) -> Conditions:
    """Conditions from values that `parse_condition` gave, by name."""
    return Conditions(**values)  # type: ignore[arg-type]


def unknown_condition(name: str) -> InputError:
    """The error for a name that is no condition, with the name that was probably meant."""
    near = difflib.get_close_matches(name, CONDITION_NAMES, n=1)
    mend = f"did you mean {near[0]}?" if near else ""
    return InputError("not a condition that darkedge knows", found=name, wanted=", ".join(CONDITION_NAMES), mend=mend)


def _word(name: str, written: str) -> StrEnum:
    try:
        return WORDS[name](written)
    except ValueError:
        wanted = ", ".join(word.value for word in WORDS[name])
        raise InputError(f"{name} is not one of its words", found=repr(written), wanted=wanted) from None


def _text(name: str, written: str) -> str:
    if name == "taken_utc":
        try:
            datetime.fromisoformat(written)
        except ValueError:
            wanted = "a date and time such as 2026-03-03T09:14:02Z"
            raise InputError("taken_utc is not a date and time", found=repr(written), wanted=wanted) from None
    return written


def _count(name: str, written: str | float | int) -> int:
    number = parse_quantity(written, name)
    if number != int(number) or number < 1:
        raise InputError(f"{name} is not a count", found=repr(written), wanted="a whole number, 1 or more")
    return int(number)


def _quantity(name: str, written: str | float | int) -> float | None:
    number = parse_quantity(written, name)
    if name == "volts_per_code" and number == 0:
        return None
    tiny = name in (*_POSITIVE, *_NOT_NEGATIVE) and 0 < abs(number) < _SMALLEST
    if tiny or abs(number) > _LARGEST:
        wanted = f"zero, or a magnitude from {_SMALLEST:g} to {_LARGEST:g}"
        raise InputError(f"{name} is beyond what any bench has", found=repr(written), wanted=wanted)
    if name in _POSITIVE and number <= 0:
        raise InputError(f"{name} is not positive", found=repr(written), wanted="a value above zero")
    if name in _NOT_NEGATIVE and number < 0:
        mend = f"bias is given as a magnitude, write {-number:g}" if name == "bias_V" else ""
        raise InputError(f"{name} is negative", found=repr(written), wanted="zero or more", mend=mend)
    return number
