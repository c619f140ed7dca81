"""A SCPI instrument: commands by pattern, the common commands, and the message exchange."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from darkedge.instruments.virtual.errors import ScpiError
from darkedge.instruments.virtual.status import EventRegister, Status
from darkedge.instruments.virtual.syntax import (
    Pattern,
    Unit,
    parse_number,
    parse_pattern,
    parse_unit,
    split_units,
)

Reply = str | bytes | None
NOT_FINITE = 9.9e37
"""Numbers from here on stand for infinity or for not a number (SCPI-1999 Volume 1, 7.2.1.4 and 7.2.1.5)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Call:
    """One command or query as its handler sees it: channel numbers of the header, and the parameters as text."""

    channels: tuple[int, ...]
    parameters: tuple[str, ...]

    def channel(self, highest: int) -> int:
        """First channel number; -114 beyond what the instrument has."""
        number = self.channels[0] if self.channels else 1
        if not 1 <= number <= highest:
            raise ScpiError(-114, f"channel {number}")
        return number

    def only(self) -> str:
        """The one parameter; -109 where it is missing, -108 where there are more."""
        if not self.parameters:
            raise ScpiError(-109)
        if len(self.parameters) > 1:
            raise ScpiError(-108, self.parameters[1][:20])
        return self.parameters[0]

    def none(self) -> None:
        """No parameter is allowed (-108)."""
        if self.parameters:
            raise ScpiError(-108, self.parameters[0][:20])


Handler = Callable[[Call], Reply]


class NeverDone(Exception):  # noqa: N818 - not an error: the answer simply never comes
    """Pending work will not end by itself; a client that waits for it gets no answer."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Command:
    """A command or query and what carries it out."""

    pattern: Pattern
    handler: Handler


@dataclass(frozen=True, slots=True, kw_only=True)
class Range:
    """What a numeric setting may be: limits, default, unit of its suffix, and how hardware rounds it."""

    low: float
    high: float
    default: float
    unit: str = ""
    round_to: Callable[[float], float] = float

    def read(self, text: str) -> float:
        """Take a parameter: `MIN`, `MAX`, `DEF` or a number; -222 beyond the limits."""
        word = text.strip().upper()
        if word in ("MIN", "MINIMUM"):
            return self.low
        if word in ("MAX", "MAXIMUM"):
            return self.high
        if word in ("DEF", "DEFAULT"):
            return self.default
        value = parse_number(text, unit=self.unit)
        if not self.low <= value <= self.high:
            raise ScpiError(-222, f"{text[:20]} not in {self.low:g} to {self.high:g}")
        return self.round_to(value)

    def answer(self, value: float, parameters: Sequence[str]) -> str:
        """Answer a query: the value, or with `MIN`, `MAX`, `DEF` that limit."""
        if len(parameters) > 1:
            raise ScpiError(-108, parameters[1][:20])
        if parameters:
            named = parameters[0].strip().upper()
            if named not in ("MIN", "MINIMUM", "MAX", "MAXIMUM", "DEF", "DEFAULT"):
                raise ScpiError(-224, parameters[0][:20])
            value = self.read(named)
        return f"{value:.9G}"


def read_boolean(text: str) -> bool:
    """`ON`, `OFF`, or a number that is rounded to an integer: zero is off (SCPI-1999 Volume 1, 7.3).

    `NAN` and the infinities say neither, and must not switch anything on (-222).
    """
    word = text.strip().upper()
    if word in ("ON", "OFF"):
        return word == "ON"
    value = parse_number(text)
    if abs(value) >= NOT_FINITE:
        raise ScpiError(-222, text[:20])
    return round(value) != 0


def read_choice(text: str, choices: Sequence[str]) -> str:
    """One of the words of a pattern such as `POSitive`, in either form; the short form comes back.

    Raises
    ------
    ScpiError
        -224 another word, -141 a word with a letter that no word has, -128 a number, -104 other data.
    """
    word = text.strip().upper()
    for choice in choices:
        short = "".join(c for c in choice if c.isupper() or c.isdigit())
        if word in (choice.upper(), short):
            return short
    if word[:1] in tuple("\"'#("):
        raise ScpiError(-104, text[:20])
    if word[:1] in tuple("+-.0123456789"):
        raise ScpiError(-128, text[:20])
    if not (word.isascii() and word.replace("_", "").isalnum()):
        raise ScpiError(-141, text[:20])
    raise ScpiError(-224, text[:20])


class ScpiInstrument:
    """What every SCPI instrument does: the common commands, status, and the rules of the message exchange.

    A subclass adds its commands with `add` in its constructor, and says in `reset` what `*RST` does.
    `identity` is the answer to `*IDN?`: maker, model, serial number, firmware.
    """

    def __init__(self, identity: tuple[str, str, str, str]) -> None:
        self.status = Status()
        self.identity = identity
        self._commands: list[Command] = []
        for pattern, handler in (
            ("*IDN?", self._identify),
            ("*RST", lambda call: self._plain(call, self.reset)),
            ("*CLS", lambda call: self._plain(call, self.status.clear)),
            ("*ESR?", lambda call: self._number(call, self.status.read_event_status)),
            ("*ESE", self._set_event_enable),
            ("*ESE?", lambda call: self._number(call, lambda: self.status.event_enable)),
            ("*SRE", self._set_service_enable),
            ("*SRE?", lambda call: self._number(call, lambda: self.status.service_enable)),
            ("*STB?", lambda call: self._number(call, self.status.status_byte)),
            ("*OPC", lambda call: self._plain(call, self._complete)),
            ("*OPC?", self._wait_and_answer),
            ("*WAI", lambda call: self._plain(call, self.finish)),
            ("*TST?", lambda call: self._number(call, lambda: 0)),
            ("SYSTem:ERRor[:NEXT]?", lambda call: self._text(call, self.status.next_error)),
            ("SYSTem:ERRor:COUNt?", lambda call: self._number(call, self.status.error_count)),
            ("SYSTem:VERSion?", lambda call: self._text(call, lambda: "1999.0")),
            ("STATus:PRESet", lambda call: self._plain(call, self.status.preset)),
        ):
            self.add(pattern, handler)
        self._add_register("OPERation", self.status.operation)
        self._add_register("QUEStionable", self.status.questionable)
        self._common = len(self._commands)

    def _add_register(self, name: str, register: EventRegister) -> None:
        def set_enable(call: Call) -> Reply:
            value = round(parse_number(call.only()))
            if not 0 <= value <= 65535:
                raise ScpiError(-222, call.parameters[0][:20])
            register.enable = value & 0x7FFF
            return None

        self.add(f"STATus:{name}[:EVENt]?", lambda call: self._number(call, register.read_event))
        self.add(f"STATus:{name}:CONDition?", lambda call: self._number(call, lambda: register.condition))
        self.add(f"STATus:{name}:ENABle?", lambda call: self._number(call, lambda: register.enable))
        self.add(f"STATus:{name}:ENABle", set_enable)

    def add(self, pattern: str, handler: Handler) -> None:
        """Add a command or query by its pattern."""
        self._commands.append(Command(pattern=parse_pattern(pattern), handler=handler))

    def forget_own_commands(self) -> None:
        """Keep the commands that every instrument has, for a subclass that says the rest in other words."""
        del self._commands[self._common :]

    def reset(self) -> None:
        """Take the defined state of `*RST`."""

    def finish(self) -> None:
        """Wait until all pending work is done."""

    def carry_out(self, message: str) -> bytes:
        """Carry out one program message and return the response message, empty where nothing was asked.

        A unit that is wrong goes into the error queue, and the rest of its message is not carried out
        (IEEE 488.2, 6.1.4: the parser resynchronises at the message terminator).
        """
        replies: list[bytes] = []
        path: tuple[str, ...] = ()
        indefinite = False
        try:
            for text in split_units(message):
                if not text.strip():
                    continue
                unit = parse_unit(text)
                if unit.query and indefinite:
                    raise ScpiError(-440)
                path = self._carry_out_unit(unit, path, replies)
                # the identity is arbitrary ASCII, which only the end of the message ends (IEEE 488.2, 8.7.11, 10.14)
                indefinite = indefinite or (unit.common and unit.query and unit.nodes[0].upper() == "IDN")
        except ScpiError as error:
            self.status.report(error)
        except NeverDone:
            replies.clear()
        self.status.message_available = False
        return b";".join(replies) + b"\n" if replies else b""

    def _carry_out_unit(self, unit: Unit, path: tuple[str, ...], replies: list[bytes]) -> tuple[str, ...]:
        """Find and run one unit; returns the path that the next unit is read from (SCPI-1999 Volume 1, 6.2.4)."""
        if unit.common:
            reply = self._run(("*" + unit.nodes[0], *unit.nodes[1:]), unit)
        else:
            written = unit.nodes if unit.absolute else (*path, *unit.nodes)
            reply = self._run(written, unit)
            path = written[:-1]
        if reply is not None:
            replies.append(reply.encode("ascii", "replace") if isinstance(reply, str) else reply)
            self.status.message_available = True
        return path

    def _run(self, written: tuple[str, ...], unit: Unit) -> Reply:
        for command in self._commands:
            channels = command.pattern.match(written, query=unit.query)
            if channels is not None:
                return command.handler(Call(channels=channels, parameters=unit.parameters))
        raise ScpiError(-113, ":".join(written)[:60])

    def _identify(self, call: Call) -> Reply:
        call.none()
        return ",".join(self.identity)

    def _set_event_enable(self, call: Call) -> Reply:
        self.status.event_enable = _byte(call.only())
        return None

    def _set_service_enable(self, call: Call) -> Reply:
        self.status.service_enable = _byte(call.only()) & ~64
        return None

    def _wait_and_answer(self, call: Call) -> Reply:
        call.none()
        self.finish()
        return "1"

    def _complete(self) -> None:
        self.finish()
        self.status.operation_complete()

    @staticmethod
    def _plain(call: Call, action: Callable[[], None]) -> Reply:
        call.none()
        action()
        return None

    @staticmethod
    def _number(call: Call, value: Callable[[], int]) -> Reply:
        call.none()
        return str(value())

    @staticmethod
    def _text(call: Call, value: Callable[[], str]) -> Reply:
        call.none()
        return value()


def _byte(text: str) -> int:
    value = round(parse_number(text))
    if not 0 <= value <= 255:
        raise ScpiError(-222, text[:20])
    return value
