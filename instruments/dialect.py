"""A dialect: how one make of instrument is told what is wanted, and how its answers read. Text in, text out; no socket.

Drivers say what is wanted by the operations of `operations.py`; a dialect turns that into messages and answers into values.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.errors import DialectError, LinkError
from darkedge.instruments.operations import Operation, Section, operation, operations_of

FloatArray = NDArray[np.float64]
INFINITE = 9.9e37
"""SCPI-1999 Volume 1, 7.2.1.4: numbers of this magnitude stand for infinity."""
NOT_A_NUMBER = 9.91e37


@dataclass(frozen=True, slots=True, kw_only=True)
class Mapped:
    """How an operation is done.

    `sends` are the messages that set or do it, `asks` the query that reads it; `{channel}` and `{value}` are put in. What is sent is
    the value times `scale`. `words` says how each of our words is written, the first is sent and any of them is read. `field` is the place
    (from 1) in a comma-separated answer. `done` is the answer that ends waiting, `none` that of an empty error queue.
    """

    sends: tuple[str, ...] = ()
    asks: str | None = None
    scale: float = 1.0
    words: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    field: int | None = None
    counts_from: str = "start"
    done: str = "1"
    none: str = "0"


@dataclass(frozen=True, slots=True, kw_only=True)
class Absent:
    """An operation that the instrument does not have: what follows from it, and the value that holds instead."""

    consequence: str
    value: float | str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Scaling:
    """Fields (from 1) of the answer to the preamble query that turn codes into volts and places into seconds.

    volts = (code - zero_code) * volts_per_code + zero_V; time = start_s + place * step_s. What is `None` is not in the preamble.
    """

    volts_per_code: int | None = None
    zero_code: int | None = None
    zero_V: int | None = None
    step_s: int | None = None
    start_s: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class WaveformReading:
    """How a record is fetched: what is sent before, the preamble query, the query of the data, and what the data are."""

    asks: str
    data: str
    byte_order: str = "big"
    prepares: tuple[str, ...] = ()
    preamble: str | None = None
    separator: str = ","
    scaling: Scaling = field(default_factory=Scaling)
    codes: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Preamble:
    """What the answer to a preamble query says."""

    volts_per_code: float | None = None
    zero_code: float = 0.0
    zero_V: float = 0.0
    step_s: float | None = None
    start_s: float | None = None


DATA_TYPES: Mapping[str, str] = {
    "int8": "i1", "uint8": "u1", "int16": "i2", "uint16": "u2", "float32": "f4", "float64": "f8",
}  # fmt: skip
"""How binary data are called in a dialect file, and what numpy calls them. `ascii` is text."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Dialect:
    """All operations of the sections that the dialect has, each mapped or absent."""

    name: str
    operations: Mapping[Operation, Mapped | Absent]
    waveform: WaveformReading | None = None
    line_end: str = "\n"

    def has(self, section: Section) -> bool:
        """Whether the dialect is for this kind of instrument."""
        return any(known.section is section for known in self.operations)

    def require(self, section: Section, *, where: str) -> None:
        """Refuse a dialect that is not for this kind of instrument.

        Raises
        ------
        DialectError
            Naming the bench file's key in `where`.
        """
        if not self.has(section):
            raise DialectError(
                f"the dialect {self.name} has no section [{section}]",
                where=where,
                mend="name a dialect that has one",
            )

    def mapped(self, what: Operation) -> Mapped | None:
        """How an operation is done; `None` where it is absent."""
        found = self.operations[what]
        return found if isinstance(found, Mapped) else None

    def absent(self, what: Operation) -> Absent | None:
        """What follows where an operation is absent; `None` where it is there."""
        found = self.operations[what]
        return found if isinstance(found, Absent) else None

    def lacking(self) -> Mapping[Operation, Absent]:
        """Everything that this dialect says is absent."""
        return {what: how for what, how in self.operations.items() if isinstance(how, Absent)}

    def messages(self, what: Operation, value: float | str | None = None, *, channel: int = 1) -> tuple[str, ...]:
        """The messages that set or do an operation; none where it is absent."""
        how = self.mapped(what)
        if how is None:
            return ()
        written = "" if value is None else write_value(how, value, channel=channel)
        return tuple(fill(text, channel=channel, value=written) for text in how.sends)

    def question(self, what: Operation, *, channel: int = 1) -> str | None:
        """The query that reads an operation; `None` where there is none."""
        how = self.mapped(what)
        return None if how is None or how.asks is None else fill(how.asks, channel=channel)

    def value(self, what: Operation, answer: str, *, channel: int = 1) -> float | str:
        """Read the answer to a query: a number, or one of our words.

        Raises
        ------
        LinkError
            The answer is neither; `where` is for the caller to add.
        """
        how = self.mapped(what)
        assert how is not None  # nobody asks for what is absent
        text = answer.strip()
        if how.field is not None:
            parts = [part.strip() for part in text.split(",")]
            if len(parts) < how.field:
                raise LinkError(
                    "the answer has too few fields",
                    where=str(what),
                    found=shorten(answer),
                    wanted=f"{how.field} fields",
                )
            text = parts[how.field - 1]
        if what.words:
            return _word(what, how, text, channel)
        return read_number(text, where=str(what)) / how.scale


def fill(text: str, *, channel: int = 1, value: str = "") -> str:
    """Put channel and value into a message."""
    return text.replace("{channel}", str(channel)).replace("{value}", value)


def write_value(how: Mapped, value: float | str, *, channel: int = 1) -> str:
    """Write a value as the instrument reads it: a word of its own, or a number with nine digits."""
    if isinstance(value, str):
        return fill(how.words[value][0], channel=channel)
    scaled = value * how.scale
    if math.isinf(scaled):
        return "INF"
    return f"{scaled:.9G}"


def read_number(text: str, *, where: str) -> float:
    """Read one number of an answer (SCPI-1999 Volume 1, 7.2.1: NR1, NR2, NR3, infinity).

    Raises
    ------
    LinkError
        It is none.
    """
    try:
        number = float(text)
    except ValueError:
        number = math.nan
    if math.isnan(number) or number == NOT_A_NUMBER:
        raise LinkError("the answer is no number", where=where, found=shorten(text), wanted="a number")
    if abs(number) >= INFINITE:
        return math.copysign(math.inf, number)
    return number


def _word(what: Operation, how: Mapped, text: str, channel: int) -> str:
    plain = text.strip('"').upper()
    for word, spellings in how.words.items():
        if plain in [fill(s, channel=channel).strip('"').upper() for s in spellings]:
            return word
    wanted = ", ".join(fill(s, channel=channel) for spellings in how.words.values() for s in spellings)
    raise LinkError(
        "the answer is none of the words of the dialect", where=str(what), found=shorten(text), wanted=wanted
    )


def read_preamble(answer: str, reading: WaveformReading) -> Preamble:
    """Read the fields of a preamble by their places.

    Raises
    ------
    LinkError
        A field is missing or no number.
    """
    parts = [part.strip() for part in answer.strip().split(reading.separator)]
    found: dict[str, float] = {}
    for name in ("volts_per_code", "zero_code", "zero_V", "step_s", "start_s"):
        place = getattr(reading.scaling, name)
        if place is None:
            continue
        where = f"preamble, field {place} ({name})"
        if place > len(parts):
            raise LinkError("the preamble has too few fields", where=where, found=shorten(answer))
        found[name] = read_number(parts[place - 1], where=where)
    if not found.get("volts_per_code", 1.0):
        raise LinkError("the preamble says that a code is worth nothing", where="preamble, volts_per_code")
    return Preamble(**found)


def codes_from_block(payload: bytes, reading: WaveformReading) -> FloatArray:
    """Numbers of a binary block, as they are in the block.

    Raises
    ------
    LinkError
        The block is not a whole number of samples.
    """
    kind = np.dtype(DATA_TYPES[reading.data]).newbyteorder(">" if reading.byte_order == "big" else "<")
    if len(payload) % kind.itemsize:
        raise LinkError(
            "the block is not a whole number of samples", found=f"{len(payload)} bytes", wanted=f"a multiple of {kind.itemsize}",
        )  # fmt: skip
    return np.frombuffer(payload, dtype=kind).astype(np.float64)


def codes_from_text(answer: str, reading: WaveformReading) -> FloatArray:
    """Numbers of a record that came as text.

    Raises
    ------
    LinkError
        One of them is no number.
    """
    parts = [part for part in answer.strip().split(reading.separator) if part.strip()]
    return np.array([read_number(part.strip(), where=f"sample {k}") for k, part in enumerate(parts, 1)])


def volts(codes: FloatArray, preamble: Preamble) -> FloatArray:
    """Codes into volts."""
    return (codes - preamble.zero_code) * (preamble.volts_per_code or 1.0) + preamble.zero_V


def shorten(text: str, most: int = 60) -> str:
    """An answer as it is quoted in a message."""
    shown = repr(text if len(text) <= most else text[:most] + "…")
    return shown if text else "nothing"


SCOPE = {what.name: what for what in operations_of(Section.OSCILLOSCOPE)}
GENERATOR = {what.name: what for what in operations_of(Section.FUNCTION_GENERATOR)}
BIAS = {what.name: what for what in operations_of(Section.BIAS)}
SWITCH = {what.name: what for what in operations_of(Section.SWITCH)}
IDENTIFY, RESET, CLEAR, NEXT_ERROR = (
    operation(Section.COMMON, name) for name in ("identify", "reset", "clear", "next_error")
)
