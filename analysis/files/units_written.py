"""Units as other programs write them over their columns: in words, in brackets, behind the name."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum


class Dimension(StrEnum):
    """What a unit measures."""

    TIME = "time"
    VOLTAGE = "voltage"
    CURRENT = "current"
    FREQUENCY = "frequency"
    LEVEL = "level"
    COUNT = "count"
    OTHER = "other"


@dataclass(frozen=True, slots=True, kw_only=True)
class WrittenUnit:
    """A unit as written: its dimension, and what one of it is in SI."""

    text: str
    dimension: Dimension
    scale: float = 1.0


_PREFIXES: Mapping[str, float] = {
    "": 1.0, "f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6, "G": 1e9,
}  # fmt: skip
_WORD_PREFIXES: Mapping[str, float] = {
    "": 1.0, "pico": 1e-12, "nano": 1e-9, "micro": 1e-6, "mikro": 1e-6, "milli": 1e-3, "mili": 1e-3, "kilo": 1e3,
    "mega": 1e6, "giga": 1e9,
}  # fmt: skip
_SYMBOLS: Mapping[str, Dimension] = {
    "s": Dimension.TIME, "sec": Dimension.TIME, "V": Dimension.VOLTAGE, "A": Dimension.CURRENT,
    "Hz": Dimension.FREQUENCY, "F": Dimension.OTHER, "W": Dimension.OTHER, "Ohm": Dimension.OTHER,
    "ohm": Dimension.OTHER, "Ω": Dimension.OTHER, "m": Dimension.OTHER, "C": Dimension.OTHER,
}  # fmt: skip
_WORDS: Mapping[str, Dimension] = {
    "second": Dimension.TIME, "seconds": Dimension.TIME, "secs": Dimension.TIME, "sekunde": Dimension.TIME,
    "sekunden": Dimension.TIME, "seconde": Dimension.TIME, "secondes": Dimension.TIME, "segundo": Dimension.TIME,
    "segundos": Dimension.TIME, "secondi": Dimension.TIME, "volt": Dimension.VOLTAGE, "volts": Dimension.VOLTAGE,
    "voltios": Dimension.VOLTAGE, "amp": Dimension.CURRENT, "amps": Dimension.CURRENT, "ampere": Dimension.CURRENT,
    "amperes": Dimension.CURRENT, "hertz": Dimension.FREQUENCY, "watt": Dimension.OTHER, "watts": Dimension.OTHER,
    "farad": Dimension.OTHER, "degree": Dimension.OTHER, "degrees": Dimension.OTHER,
}  # fmt: skip
_WHOLE: Mapping[str, WrittenUnit] = {
    text: WrittenUnit(text=text, dimension=dimension)
    for dimension, texts in {
        Dimension.LEVEL: ("dB", "dBm", "dBV", "dBu", "dBmV", "dBuV", "dBµV", "dBc", "dBFS"),
        Dimension.COUNT: ("counts", "Counts", "count", "LSB", "codes", "ADC", "raw"),
        Dimension.OTHER: ("deg", "°", "rad", "°C", "degC", "%", "Vrms", "nA/cm2", "A/cm2"),
        Dimension.TIME: ("S", "Sec"),
    }.items()
    for text in texts
}
_LETTERS = (Dimension.TIME, Dimension.VOLTAGE)
_UNDERSCORE = re.compile(r"^(?P<name>.+)_(?P<unit>[^\W_]+)$")
_BEHIND = (
    re.compile(r"^(?P<name>.*?)\s*[(\[](?P<unit>[^()\[\]]+)[)\]]\s*$"),
    re.compile(r"^(?P<name>.*?)\bin\s+(?P<unit>\S+)$"),
    re.compile(r"^(?P<name>.*?)\s*/\s*(?P<unit>[^\s/]+)$"),
    _UNDERSCORE,
)


def read_unit(text: str) -> WrittenUnit | None:
    """Read a unit standing alone, brackets allowed; `None` where the text is none that is known.

    A number behind a unit in words (`Volt1`) tells channels apart and is no part of the unit.
    """
    text = text.strip().strip("()[]").strip()
    if text in _WHOLE:
        return _WHOLE[text]
    for symbol, dimension in _SYMBOLS.items():
        prefix = text.removesuffix(symbol)
        if text.endswith(symbol) and prefix in _PREFIXES:
            return WrittenUnit(text=text, dimension=dimension, scale=_PREFIXES[prefix])
    word = re.sub(r"\d+$", "", text.casefold())
    for name, dimension in _WORDS.items():
        if word.endswith(name) and word.removesuffix(name) in _WORD_PREFIXES:
            return WrittenUnit(text=text, dimension=dimension, scale=_WORD_PREFIXES[word.removesuffix(name)])
    return None


def split_unit(cell: str) -> tuple[str, WrittenUnit | None]:
    """Split a column's heading into name and unit: `Time (s)`, `C1 in V`, `U / mV`, `drive_V`, `V`.

    A heading that is a unit and nothing else is both. A lone letter without brackets is a unit only as `s` or `V`:
    channels are called `A`, `C` or `ch_A` too.
    """
    cell = cell.strip()
    alone = read_unit(cell)
    if alone is not None and (len(cell) > 1 or alone.dimension in _LETTERS):
        return cell, alone
    for pattern in _BEHIND:
        match = pattern.match(cell)
        unit = read_unit(match["unit"]) if match is not None else None
        if match is None or unit is None:
            continue
        if pattern is _UNDERSCORE and len(unit.text) == 1 and unit.dimension not in _LETTERS:
            continue
        return match["name"].strip(), unit
    return cell, None
