"""Status, error queue and path rules of the virtual instruments, over the parser and over a raw socket."""

import socket

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from darkedge.instruments.virtual.errors import STANDARD_TEXTS, ScpiError
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
        self.add("LAMP#:LEVel?", lambda call: str(call.channel(2)))
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


def first_error(lamp: Lamp) -> int:
    return int(lamp.carry_out("SYST:ERR?").split(b",")[0])


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("TRIG&:LEV 1", -101), ("~TRIG:LEV 1", -101), ("TRIG:LEV??", -102), (":*IDN?", -102), ("TRIG:*IDN?", -102),
        ("TRIG:LEV (1", -102), ("TRIG:LEV 1:OUTP ON", -103), ("TRIG:LEV 1 2", -103), ("TRIG:LEV ,1", -103),
        ("TRIG:SLOP 'POS'", -104), ("TRIG:LEV 'x'", -104), ("TRIG:LEV #13abc", -104), ("*IDN:FOO?", -113),
        ("TRIG:LEV2 1", -113), ("LAMP3:LEV?", -114), ("LAMP0:LEV?", -114), ("LAMP" + "1" * 5000 + ":LEV?", -114),
        ("TRIG:LEV 1@", -121), ("TRIG:LEV #H-1", -121), ("TRIG:LEV #H1_0", -121), ("TRIG:LEV #B12", -121),
        ("TRIG:LEV #Q8", -121), ("TRIG:LEV #H", -121), ("TRIG:LEV 1E32001", -123), ("TRIG:LEV " + "1" * 256, -124),
        ("TRIG:SLOP 5", -128), ("*ESE 1 V", -138), ("TRIG:SLOP PO!S", -141), ("TRIG:SLOP 'POS", -151),
        ("TRIG:LEV #13ab", -161), ("TRIG:LEV #9123", -161), ("TRIG:LEV? 5", -224),
    ],
)  # fmt: skip
def test_each_common_mistake_has_its_own_number(lamp: Lamp, message: str, number: int) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.9: the most exact number that describes the mistake."""
    assert lamp.carry_out(message) == b""
    assert first_error(lamp) == number
    assert first_error(lamp) == 0


@pytest.mark.parametrize("number", ["1E999", "-1E999", "#H" + "F" * 400, "NAN", "INF", "NINF"])
@pytest.mark.parametrize("header", ["TRIG:LEV", "OUTP", "*ESE", "*SRE", "STAT:OPER:ENAB"])
def test_no_setting_takes_a_number_that_is_not_finite(lamp: Lamp, header: str, number: str) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.10: -222; a source is not switched on by `NAN`."""
    lamp.carry_out(f"{header} {number}")
    assert first_error(lamp) == -222
    assert not lamp.on


@pytest.mark.parametrize(("written", "answer"), [("LAMP", b"1\n"), ("LAMP2", b"2\n"), ("LAMP000000000002", b"2\n")])
def test_a_numeric_suffix_is_a_number(lamp: Lamp, written: str, answer: bytes) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.5.2: a missing one is 1."""
    assert lamp.carry_out(f"{written}:LEV?") == answer


@pytest.mark.parametrize("space", ["\t", "\x00", "\x0b", "  \t "])
def test_white_space_is_every_control_character_but_newline(lamp: Lamp, space: str) -> None:
    """Source: IEEE Std 488.2, 7.4.1.2."""
    assert lamp.carry_out(f"{space}TRIG:LEV{space}2{space}V;{space}LEV?{space}") == b"2\n"


def test_a_query_behind_the_identity_is_unterminated_after_indefinite_response(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 8.7.11 and 10.14: `*IDN?` answers in arbitrary ASCII and is the last query of its message."""
    assert lamp.carry_out("*ESE?;*IDN?;*SRE?") == b"0;darkedge,lamp,0,0\n"
    assert first_error(lamp) == -440
    assert lamp.carry_out("*ESR?") == b"4\n"
    lamp.carry_out("*IDN?;*ESE 3")
    assert lamp.carry_out("*ESE?;:SYST:ERR?") == b'3;0,"No error"\n'


def test_an_answer_that_waits_shows_in_the_status_byte(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 11.2.1.2: message available is 16, and asks for service where enabled."""
    assert lamp.carry_out("*STB?") == b"0\n"
    assert lamp.carry_out("*SRE 16;*ESE?;*STB?") == b"0;80\n"


@pytest.mark.parametrize(("name", "bit"), [("operation", 128), ("questionable", 8)])
def test_an_enabled_event_of_a_scpi_register_shows_until_it_is_read_or_preset(lamp: Lamp, name: str, bit: int) -> None:
    """Source: SCPI-1999 Volume 1, 9; Volume 2, 20: events latch, reading clears them, PRESet disables their summary."""
    getattr(lamp.status, name).set_condition(2)
    short = name[:4].upper()
    lamp.carry_out(f"STAT:{short}:ENAB 65535")
    assert lamp.carry_out(f"*STB?;:STAT:{short}:ENAB?") == f"{bit};32767\n".encode()
    assert lamp.carry_out(f"STAT:PRES;:STAT:{short}:ENAB?;*STB?") == b"0;16\n"
    assert lamp.carry_out(f"STAT:{short}?;{short}?;{short}:COND?") == b"2;0;2\n"


@pytest.mark.parametrize("mask", ["*ESE", "*SRE"])
def test_a_mask_is_a_byte(lamp: Lamp, mask: str) -> None:
    """Source: IEEE Std 488.2, 10.10 and 10.34: 0 to 255, and bit 6 of the service enable is not used."""
    assert lamp.carry_out(f"{mask} 255;{mask}?") == (b"255\n" if mask == "*ESE" else b"191\n")
    lamp.carry_out(f"{mask} 4;{mask} 256")
    assert lamp.carry_out(f"{mask}?") == b"4\n"
    assert first_error(lamp) == -222


def test_device_errors_set_their_bit(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 11.5.1: device dependent error is 8."""
    lamp.status.report(ScpiError(-363))
    assert lamp.carry_out("*ESR?") == b"8\n"


def test_errors_come_out_in_the_order_they_came_in(lamp: Lamp) -> None:
    """Source: SCPI-1999 Volume 2, 21.8: first in, first out."""
    for message in ("TRIG:LEV 99", "NONSENSE", "TRIG:LEV"):
        lamp.carry_out(message)
    assert lamp.carry_out("SYST:ERR:COUN?") == b"3\n"
    assert [first_error(lamp) for _ in range(4)] == [-222, -113, -109, 0]


def test_nothing_behind_a_mistake_is_carried_out(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 6.1.4: what stood before it is."""
    assert lamp.carry_out("TRIG:LEV 2;NONSENSE;LEV 3") == b""
    assert lamp.carry_out("TRIG:LEV?") == b"2\n"


def test_a_quote_within_an_error_is_doubled(lamp: Lamp) -> None:
    """Source: IEEE Std 488.2, 8.7.8."""
    lamp.carry_out('TRIG:LEV "\x07é"')
    assert lamp.carry_out("SYST:ERR?") == b'-104,"Data type error;""??"""\n'


WORDS = st.sampled_from(
    ["TRIG", ":", "LEV", ";", "?", " ", ",", "*", "ESE", "#H", "#1", "#0", "F" * 300, "1E", "999", "OUTP", "SLOP", "LAMP",
     "7" * 4500, "NAN", "INF", "'", '"', "(", ")", "@", "-", ".", "²", "٣", "\x00", "\n", "V", "MHZ", "IDN"]
)  # fmt: skip


@settings(max_examples=150, deadline=None)
@given(st.one_of(st.text(max_size=60), st.lists(WORDS, max_size=12).map("".join)))
def test_no_text_at_all_breaks_the_exchange_and_only_standard_errors_are_told(message: str) -> None:
    """Source: SCPI-1999 Volume 2, 21.8: every number has its standard text."""
    lamp = Lamp()
    lamp.carry_out("*CLS;" + message)
    while number := first_error(lamp):
        assert number in STANDARD_TEXTS
