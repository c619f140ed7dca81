"""One conversation with one SCPI instrument, in the words of its dialect: set, read back, drain the error queue."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from typing import TypeVar

from darkedge.analysis.errors import BenchError, LinkError, RefusedByInstrument
from darkedge.instruments.dialect import (
    CLEAR,
    IDENTIFY,
    NEXT_ERROR,
    RESET,
    Dialect,
    FloatArray,
    Preamble,
    codes_from_block,
    codes_from_text,
    fill,
    read_preamble,
    shorten,
)
from darkedge.instruments.operations import Operation
from darkedge.instruments.transport import Transport

T = TypeVar("T")
MOST_ERRORS = 100


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """One thing wanted of an instrument."""

    what: Operation
    value: float | str
    channel: int = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Settled:
    """What became of a setting: as read back, as `stated` by the dialect for what is absent, or unknown (`None`)."""

    wanted: float | str
    value: float | str | None
    read_back: bool


class ScpiSession:
    """A conversation with one instrument.

    `name` is what messages call it (`oscilloscope`, `bias` ...), `heard` is told every message that is sent.
    """

    def __init__(
        self, name: str, transport: Transport, dialect: Dialect, *, heard: Callable[[str], None] = lambda _text: None
    ) -> None:
        self.name, self.transport, self.dialect = name, transport, dialect
        self._heard = heard
        self._sent: list[str] = []

    def identify(self) -> str:
        """Who answers.

        Raises
        ------
        LinkError
            Nobody, or not in plain text.
        """
        answer = self.ask(IDENTIFY).strip()
        if not answer or not answer.isprintable():
            raise LinkError("no sensible answer to who it is", where=self.name, found=shorten(answer))
        return answer

    def reset(self) -> None:
        """Defined state, nothing in the error queue."""
        for what in (CLEAR, RESET, CLEAR):
            self._send_all(self.dialect.messages(what))
        self._drain()

    def settle(self, settings: Sequence[Setting]) -> list[Settled]:
        """Make a group of settings, drain the error queue, and read back what the instrument really set.

        Raises
        ------
        RefusedByInstrument
            The instrument queued errors; the message quotes them and what was sent.
        LinkError
            No answer, or one that cannot be read.
        """
        for setting in settings:
            self._send_all(self.dialect.messages(setting.what, setting.value, channel=setting.channel))
        self._drain()
        return [self._read_back(setting) for setting in settings]

    def fire(self, setting: Setting) -> None:
        """Send a setting and listen to nothing: for the way out, where an answer may never come."""
        self._send_all(self.dialect.messages(setting.what, setting.value, channel=setting.channel))

    def act(self, what: Operation, *, channel: int = 1, checked: bool = True) -> None:
        """Do something that has no value; nothing where it is absent."""
        self._send_all(self.dialect.messages(what, channel=channel))
        if checked:
            self._drain()

    def read(self, what: Operation, *, channel: int = 1) -> float | str | None:
        """Read a setting or a reading; the dialect's own value, or `None`, where it is absent or cannot be asked."""
        question = self.dialect.question(what, channel=channel)
        if question is None:
            absent = self.dialect.absent(what)
            return None if absent is None else absent.value
        answer = self._query(question)
        try:
            return self.dialect.value(what, answer, channel=channel)
        except LinkError as error:
            raise self._in_words(error, question) from error

    def read_number(self, what: Operation, *, channel: int = 1) -> float | None:
        """`read` for what is a number."""
        found = self.read(what, channel=channel)
        return found if isinstance(found, float) else None

    def ask(self, what: Operation, *, limit_s: float | None = None) -> str:
        """The bare answer to the query of an operation, empty where it is absent."""
        question = self.dialect.question(what)
        return "" if question is None else self._query(question, limit_s)

    def waveform(self, *, channel: int) -> tuple[FloatArray, Preamble]:
        """Fetch one record: its numbers and what the preamble says of them.

        Raises
        ------
        LinkError
            No record, a short one, or one that cannot be read.
        RefusedByInstrument
            The instrument queued errors.
        """
        reading = self.dialect.waveform
        assert reading is not None  # a dialect with an oscilloscope has it
        self._send_all([fill(text, channel=channel) for text in reading.prepares])
        preamble, asked = Preamble(), ""
        try:
            if reading.preamble is not None:
                asked = fill(reading.preamble, channel=channel)
                preamble = read_preamble(self._query(asked), reading)
            asked = fill(reading.asks, channel=channel)
            if reading.data == "ascii":
                codes = codes_from_text(self._query(asked), reading)
            else:
                self._heard(asked)
                codes = codes_from_block(self.transport.query_block(asked), reading)
        except LinkError as error:
            raise self._why(self._in_words(error, asked)) from error
        self._sent.clear()
        if codes.size < 2:
            raise LinkError("the record is empty", where=self.name, found=f"{codes.size} samples")
        return codes, preamble

    def errors(self) -> list[str]:
        """Take everything out of the error queue."""
        found: list[str] = []
        question = self.dialect.question(NEXT_ERROR)
        how = self.dialect.mapped(NEXT_ERROR)
        if question is None or how is None:
            return found
        for _ in range(MOST_ERRORS):
            answer = self._query(question).strip()
            if _is_none(answer, how.none):
                return found
            found.append(answer)
        raise LinkError(
            "the error queue never ends",
            where=self.name,
            found=shorten(found[-1]),
            wanted=f"an answer that begins with {how.none} when nothing is left",
            mend="correct common.next_error in its dialect",
        )

    def _why(self, error: LinkError) -> BenchError:
        """The instrument's own reason for not answering, where it has one; the link is opened afresh to hear it."""
        try:
            self.transport.reopen()
            queued = self.errors()
        except LinkError:
            return error
        return error if not queued else self._refusal(queued)

    def _read_back(self, setting: Setting) -> Settled:
        found = self.read(setting.what, channel=setting.channel)
        asked = self.dialect.question(setting.what, channel=setting.channel) is not None
        return Settled(wanted=setting.value, value=found, read_back=asked)

    def _send_all(self, messages: Sequence[str]) -> None:
        for message in messages:
            self._heard(message)
            self._sent.append(message)
            self._named(partial(self.transport.write, message))

    def _query(self, message: str, limit_s: float | None = None) -> str:
        self._heard(message)
        return self._named(partial(self.transport.query, message, limit_s=limit_s))

    def _drain(self) -> None:
        queued = self.errors()
        if queued:
            raise self._refusal(queued)
        self._sent.clear()

    def _refusal(self, queued: Sequence[str]) -> RefusedByInstrument:
        sent = "; ".join(self._sent[-6:])
        self._sent.clear()
        return RefusedByInstrument(
            f"the {self.name.replace('_', ' ')} answered {', '.join(queued[:3])}" + (" ..." if len(queued) > 3 else ""),
            where=self.transport.address,
            found=f"after {sent}" if sent else "",
            mend="lower what is asked of it, or correct these commands in its dialect",
        )

    def _in_words(self, error: LinkError, question: str) -> LinkError:
        where = ", ".join(part for part in (self.name, error.where) if part and part != self.transport.address)
        return LinkError(
            error.what, where=where, found=f"{error.found} to {question!r}" if error.found else repr(question),
            wanted=error.wanted, mend=error.mend or "check this operation in its dialect",
        )  # fmt: skip

    def _named(self, exchange: Callable[[], T]) -> T:
        """Run an exchange; what goes wrong names the instrument."""
        try:
            return exchange()
        except LinkError as error:
            name = self.name.replace("_", " ")
            raise error if error.where.startswith(name) else error.at(name) from error


def _is_none(answer: str, none: str) -> bool:
    first = answer.split(",", maxsplit=1)[0].strip()
    return first in (none, f"+{none}") or answer == none
