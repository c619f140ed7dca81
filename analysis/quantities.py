"""Quantities as people write them: one parser and one printer for files, options, headers and names.

A bare number is in the unit that the key's name ends in; a string may carry a unit of that dimension.
Prefixes are case-sensitive (`mV` is not `MV`), a decimal comma is an error, `u` and `µ` are the same.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from quantiphy import Quantity

from darkedge.analysis.errors import InputError

_NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?")
_PREFIXES = "fpnuµμmkMGT"


@dataclass(frozen=True, slots=True, kw_only=True)
class Unit:
    """A unit of a key: its name ending, how it is written, and which spellings are read."""

    suffix: str
    symbol: str
    spellings: tuple[str, ...]
    prefixed: bool = True


_UNITS = (
    Unit(suffix="_A_per_W", symbol="A/W", spellings=("A/W",)),
    Unit(suffix="_V_per_s", symbol="V/s", spellings=("V/s",)),
    Unit(suffix="_ratio", symbol="", spellings=("%",), prefixed=False),
    Unit(suffix="_degC", symbol="°C", spellings=("degC", "°C"), prefixed=False),
    Unit(suffix="_days", symbol="d", spellings=("d", "days"), prefixed=False),
    Unit(suffix="_ohm", symbol="Ω", spellings=("ohm", "Ohm", "Ω", "Ω")),
    Unit(suffix="_Hz", symbol="Hz", spellings=("Hz",)),
    Unit(suffix="_m2", symbol="m²", spellings=("m2", "m²"), prefixed=False),
    Unit(suffix="_V", symbol="V", spellings=("V",)),
    Unit(suffix="_A", symbol="A", spellings=("A",)),
    Unit(suffix="_W", symbol="W", spellings=("W",)),
    Unit(suffix="_F", symbol="F", spellings=("F",)),
    Unit(suffix="_s", symbol="s", spellings=("s",)),
    Unit(suffix="_m", symbol="m", spellings=("m",)),
)
# Keys of the contract whose names carry no unit: pure numbers, and duties, which people write in per cent.
_DUTY = Unit(suffix="", symbol="", spellings=("%",), prefixed=False)
_PURE = Unit(suffix="", symbol="", spellings=(), prefixed=False)
_DECORATION = ("_lo95", "_hi95")


def unit_of(key: str) -> Unit:
    """Return the unit that a key's name ends in; a pure number where it names none.

    `u_rise_time_s` and `c_j0_F_lo95` have the unit of the quantity itself.
    """
    for decoration in _DECORATION:
        key = key.removesuffix(decoration)
    # full_depletion_V and c_j0_F end in their unit; duty, grading and n_pulses do not.
    for unit in _UNITS:
        if key.endswith(unit.suffix) or key == unit.suffix[1:]:
            return unit
    if key.startswith(("duty", "u_duty", "distortion", "confidence")):
        return _DUTY
    return _PURE


def parse_quantity(value: str | float | int, key: str) -> float:
    """Read one value in the unit of `key`.

    Parameters
    ----------
    value : str or number
        `12`, `"12"`, `"12 V"`, `"500 mV"`; `"10 %"` under a ratio.
    key : str
        The key or option the value stands under; its ending says the unit.

    Returns
    -------
    float
        SI (degrees Celsius under `temperature_degC`), finite.

    Raises
    ------
    InputError
        Not a number, not finite, a decimal comma, a unit of another dimension. The message quotes the key.
    """
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise _wrong("is not a quantity", key, repr(value))
    if not isinstance(value, str):
        return _finite(float(value), key, repr(value))
    text = value.strip().replace("−", "-")
    match = _NUMBER.match(text)
    if match is None:
        raise _wrong("is not a number", key, repr(value))
    rest = text[match.end() :].strip()
    if rest.startswith(",") or "," in rest:
        raise _wrong("has a decimal comma", key, repr(value), mend="write a decimal point")
    number = _finite(float(match.group()), key, repr(value))
    if not rest:
        return number
    return _with_unit(match.group(), rest, key, repr(value))


def parse_list(text: str, key: str) -> tuple[float, ...]:
    """Read several quantities separated by commas, such as `5 V, 12 V`; none for an empty text.

    Raises
    ------
    InputError
        As `parse_quantity`; a decimal comma shows as a number without its unit, so each but bare numbers wants its unit.
    """
    return tuple(parse_quantity(part, key) for part in text.split(",") if part.strip())


def _with_unit(number: str, written: str, key: str, found: str) -> float:
    unit = unit_of(key)
    if written in unit.spellings:
        return float(number) / 100 if written == "%" else float(number)
    bare = written[1:]
    if unit.prefixed and written[0] in _PREFIXES and bare in unit.spellings:
        return float(Quantity(f"{number} {written}"))
    wanted = f"a number{f' in {unit.symbol}' if unit.symbol else ''}"
    if unit.prefixed and written in _PREFIXES:
        raise _wrong("has a prefix and no unit", key, found, mend=f"write {number} {written}{unit.spellings[0]}")
    raise _wrong("has the wrong unit", key, found, wanted=wanted)


def _finite(number: float, key: str, found: str) -> float:
    if not math.isfinite(number):
        raise _wrong("is not a finite number", key, found)
    return number


def _wrong(what: str, key: str, found: str, *, wanted: str = "", mend: str = "") -> InputError:
    unit = unit_of(key)
    example = f"12 {unit.symbol}".rstrip() if unit.symbol else "0.5"
    return InputError(f"{key} {what}", found=found, wanted=wanted or f"a quantity such as {example}", mend=mend)


def format_quantity(value: float | None, unit: str, *, u: float | None = None) -> str:
    """Write a value for people: prefix and unit, rounded to its uncertainty.

    The uncertainty is given to two digits in brackets, which count the last digits of the value
    (the concise form of GUM 7.2.2): `12.35(21) ns`. Without `u` four digits are shown. `None` is a dash.
    Pure numbers (`unit` empty) carry no prefix; °C carries none either.
    """
    if value is None or not math.isfinite(value):
        return "–"
    prefix, scale = _prefix(max(abs(value), u or 0.0), unit)
    scaled = value / scale
    tail = f" {prefix}{unit}".rstrip()
    if u is None or not math.isfinite(u) or u <= 0:
        return f"{scaled:.4g}{tail}" if abs(scaled) < 1e4 else f"{scaled:.0f}{tail}"
    u_scaled = u / scale
    two_digits = float(f"{u_scaled:.1e}")  # rounded first: 0.0996 counts as 0.10
    decimals = max(0, 1 - math.floor(math.log10(two_digits)))
    bracket = f"{two_digits:.{decimals}f}" if two_digits >= 1 else f"{round(two_digits * 10**decimals)}"
    return f"{scaled:.{decimals}f}({bracket}){tail}"


def _prefix(magnitude: float, unit: str) -> tuple[str, float]:
    if unit in ("", "°C", "%", "d", "m²") or magnitude == 0:
        return "", 1.0
    for exponent, prefix in (
        (9, "G"),
        (6, "M"),
        (3, "k"),
        (0, ""),
        (-3, "m"),
        (-6, "µ"),
        (-9, "n"),
        (-12, "p"),
    ):
        if magnitude >= 0.9995 * 10.0**exponent:
            return prefix, 10.0**exponent
    return "f", 1e-15
