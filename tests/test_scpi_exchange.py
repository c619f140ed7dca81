"""Status, error queue and path rules of the virtual instruments, over the parser and over a raw socket."""

import socket

import pytest

from darkedge.instruments.virtual.instrument import Call, Range, ScpiInstrument, read_boolean, read_choice
from darkedge.instruments.virtual.server import InstrumentServer
from darkedge.instruments.virtual.status import QUEUE_LENGTH


class Lamp(ScpiInstrument):
    """A made-up instrument with a tree deep enough for the path rules."""

    def __init__(self) -> None:
        super().__init__(("darkedge", "lamp", "0", "0"))
        self.level = Range(low=-5, high=5, default=1, unit="V")
        self.level_V, self.slope, self.on = 1.0, "POS", False
        self.add("TRIGger:LEVel", self._level)
        self.add("TRIGger:LEVel?", lambda call: self.level.answer(self.level_V, call.parameters))
        self.add("TRIGger:SLOPe", self._slope)
        self.add("TRIGger:SLOPe?", lambda _call: self.slope)
        self.add("OUTPut[:STATe]", self._output)
        self.add("OUTPut[:STATe]?", lambda _call: str(int(self.on)))

    def _level(self, call: Call) -> None:
        self.level_V = self.level.read(call.only())

    def _slope(self, call: Call) -> None:
        self.slope = read_choice(call.only(), ("POSitive", "NEGative"))

    def _output(self, call: Call) -> None:
        self.on = read_boolean(call.only())


@pytest.fixture
def lamp() -> Lamp:
    lamp = Lamp()
    lamp.carry_out("*CLS")
    return lamp


def test_the_next_header_is_read_among_the_siblings_of_the_last(lamp: Lamp) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.4."""
    assert lamp.carry_out("TRIG:LEV 2;SLOP NEG;LEV?;SLOP?") == b"2;NEG\n"


def test_a_leading_colon_goes_back_to_the_root(lamp: Lamp) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.4."""
    assert lamp.carry_out("TRIG:LEV 2;:OUTP ON;:OUTP?") == b"1\n"
    lamp.carry_out("TRIG:LEV 2;OUTP OFF")
    assert lamp.carry_out("SYST:ERR?").startswith(b"-113,")


def test_common_commands_do_not_move_the_path(lamp: Lamp) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.4; IEEE Std 488.2, A.1.1."""
    assert lamp.carry_out("TRIG:LEV 3;*ESE 4;SLOP NEG;*ESE?;SLOP?") == b"4;NEG\n"


def test_several_queries_answer_in_one_line(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 8.4: response units are joined by `;` and end in one newline."""
    assert lamp.carry_out("*ESE?;*SRE?;TRIG:SLOP?") == b"0;0;POS\n"


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("TRIG:SLOP BLUE", -224), ("TRIG:LEV", -109), ("TRIG:LEV 1,2", -108), ("TRIG:LEV 99", -222),
        ("TRIG:LEVE 1", -113), ("TRIG:LEV 1 S", -131), ("*IDN", -113), ("OUTP:STAT BLUE", -104),
    ],
)  # fmt: skip
def test_a_mistake_puts_its_number_into_the_queue(lamp: Lamp, message: str, number: int) -> None:
    """Source: SCPI-1999 Volume 2, 21.8."""
    lamp.carry_out(message)
    assert lamp.carry_out("SYST:ERR?").startswith(f"{number},".encode())


def test_event_bits_add_up_and_reading_clears_them(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 11.5.1: command error 32, operation complete 1."""
    lamp.carry_out("NONSENSE")
    lamp.carry_out("*OPC")
    assert lamp.carry_out("*ESR?") == b"33\n"
    assert lamp.carry_out("*ESR?") == b"0\n"


def test_an_overflowing_queue_ends_in_queue_overflow(lamp: Lamp) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.1: the newest entry gives way to -350."""
    for _ in range(QUEUE_LENGTH + 3):
        lamp.carry_out("NONSENSE")
    answers = [lamp.carry_out("SYST:ERR?") for _ in range(QUEUE_LENGTH + 1)]
    assert answers[QUEUE_LENGTH - 1] == b'-350,"Queue overflow"\n'
    assert answers[QUEUE_LENGTH] == b'0,"No error"\n'


def test_cls_clears_events_and_queue_but_not_the_enables(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 10.3."""
    lamp.carry_out("*ESE 36;*SRE 32")
    lamp.carry_out("NONSENSE")
    lamp.carry_out("*CLS")
    assert lamp.carry_out("*ESR?;*ESE?;*SRE?;:SYST:ERR?") == b'0;36;32;0,"No error"\n'


def test_the_status_byte_sums_up(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 11.2: event summary 32 and, enabled, master summary 64; SCPI-1999: error queue 4."""
    lamp.carry_out("*ESE 32;*SRE 32")
    lamp.carry_out("NONSENSE")
    assert lamp.carry_out("*STB?") == b"100\n"


@pytest.mark.parametrize(("word", "value"), [("MIN", b"-5\n"), ("MAX", b"5\n"), ("DEF", b"1\n")])
def test_min_max_and_def_name_the_limits(lamp: Lamp, word: str, value: bytes) -> None:
    """Source: SCPI-1999 Volume 1, 7.2.1.2."""
    assert lamp.carry_out(f"TRIG:LEV? {word}") == value
    lamp.carry_out(f"TRIG:LEV {word}")
    assert lamp.carry_out("TRIG:LEV?") == value


def test_identity_has_four_fields(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 10.14."""
    assert lamp.carry_out("*IDN?").count(b",") == 3


def test_a_plain_tcp_client_gets_sensible_answers() -> None:
    with (
        InstrumentServer(Lamp()) as server,
        socket.create_connection(("127.0.0.1", server.port), timeout=5) as client,
        client.makefile("rwb") as lines,
    ):
        lines.write(b"*CLS\nTRIG:LEV 2.5 V\r\nTRIG:LEV?\nJUNK\nSYST:ERR?\n")
        lines.flush()
        assert lines.readline() == b"2.5\n"
        assert lines.readline().startswith(b'-113,"Undefined header')
