"""Rules of IEEE Std 488.2 and SCPI-1999, each held against the virtual instruments themselves, by a raw TCP client."""

from __future__ import annotations

import socket
import struct
import threading
from collections.abc import Iterator

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from darkedge.instruments.virtual.lots import PartKind, make_device
from darkedge.instruments.virtual.serving import ROLES, VirtualBench
from darkedge.instruments.virtual.sources import BiasSupply
from darkedge.instruments.virtual.wiring import World


class Client:
    """A line-by-line TCP client that knows nothing of instruments."""

    def __init__(self, port: int) -> None:
        self.wire = socket.create_connection(("127.0.0.1", port), timeout=5)
        self.file = self.wire.makefile("rb")

    def send(self, message: str | bytes) -> None:
        self.wire.sendall(message.encode("latin-1") + b"\n" if isinstance(message, str) else message)

    def ask(self, message: str) -> str:
        self.send(message)
        return self.file.readline().decode("latin-1").rstrip("\n")

    def errors(self) -> list[int]:
        found = []
        while (answer := self.ask("SYST:ERR?")) and not answer.startswith("0,"):
            found.append(int(answer.split(",")[0]))
        return found

    def close(self) -> None:
        self.file.close()
        self.wire.close()


@pytest.fixture(scope="module")
def served() -> Iterator[VirtualBench]:
    with VirtualBench(make_device(PartKind.PHOTODIODE, seed=1, number=1)) as bench:
        yield bench


@pytest.fixture
def clients(served: VirtualBench) -> Iterator[dict[str, Client]]:
    found = {role: Client(served.servers[role].port) for role in ROLES}
    for client in found.values():
        client.send("*RST;*CLS;*ESE 0;*SRE 0")
    yield found
    for client in found.values():
        client.close()


@pytest.fixture
def scope(clients: dict[str, Client]) -> Client:
    return clients["oscilloscope"]


@pytest.mark.parametrize("role", ROLES)
def test_every_instrument_has_the_mandatory_commands(clients: dict[str, Client], role: str) -> None:
    """IEEE 488.2, 4.10 and 10; SCPI-1999 Volume 1, 4.2.1."""
    client = clients[role]
    for query in (
        "*ESE?",
        "*ESR?",
        "*OPC?",
        "*SRE?",
        "*STB?",
        "*TST?",
        "STAT:OPER?",
        "STAT:OPER:COND?",
        "STAT:QUES:ENAB?",
    ):
        assert client.ask(query).lstrip("+").isdigit(), query
    for command in ("*CLS", "*ESE 0", "*OPC", "*RST", "*SRE 0", "*WAI", "STAT:PRES"):
        client.send(command)
    assert client.errors() == []
    assert client.ask("SYST:VERS?") == "1999.0"
    assert client.ask("*TST?") == "0"


@pytest.mark.parametrize("role", ROLES)
def test_the_identity_has_four_fields_and_at_most_72_characters(clients: dict[str, Client], role: str) -> None:
    """IEEE 488.2, 10.14."""
    identity = clients[role].ask("*IDN?")
    assert len(identity.split(",")) == 4
    assert len(identity) <= 72
    assert all(32 <= ord(c) < 127 for c in identity)


def test_an_instrument_that_was_just_switched_on_says_so() -> None:
    """IEEE 488.2, 11.5.1: power on is bit 7 of the event status."""
    supply = BiasSupply(World(device=make_device(PartKind.PHOTODIODE, seed=1, number=1)))
    assert supply.carry_out("*ESR?") == b"128\n"
    assert supply.carry_out("*ESR?") == b"0\n"


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("SENS:SWE:TIMES 1", -113), ("SWEE:TIME 1", -113), ("TRIG:LEVE 1", -113), ("BOGUS?", -113),
        ("SWE:TIME", -109), ("SWE:TIME 1,2", -108), ("*IDN? 5", -108), ("SWE:TIME 1 V", -131), ("SWE:POIN 1 S", -138),
        ("SWE:TIME bogus", -104), ("SWE:TIME 1E3", -222), ("SWE:TIME -1", -222), ("INP1:COUP GND", -224),
        ("SENS7:VOLT:RANG:PTP 1", -114), ("TRAC? CH1", -230), ("TRIG:SLOP BOTH", -224), ("FORM REAL,7", -224),
        ("FORM REAL,32,9", -108), ("TRIG:SOUR? 1", -108), ("INP1:COUP? 1", -108), ("FORM:BORD? 1", -108),
    ],
)  # fmt: skip
def test_each_mistake_has_its_number(scope: Client, message: str, number: int) -> None:
    """SCPI-1999 Volume 2, 21.8."""
    scope.send(message)
    found = scope.errors()
    assert found, message
    assert found[0] == number or (found[0], number) in {(-121, -104), (-141, -104), (-128, -104), (-131, -138)}, found


@pytest.mark.parametrize(("message", "bit"), [("BOGUS", 32), ("SWE:TIME 1E3", 16), ("SWE:TIME", 32)])
def test_each_class_of_error_sets_its_bit_and_reading_clears_it(scope: Client, message: str, bit: int) -> None:
    """IEEE 488.2, 11.5.1: command error 32, execution error 16."""
    scope.send(message)
    assert int(scope.ask("*ESR?")) & (32 | 16) == bit
    assert scope.ask("*ESR?") == "0"


def test_event_status_is_summed_up_in_the_status_byte(scope: Client) -> None:
    """IEEE 488.2, 11.2: event summary is bit 5, master summary bit 6; SCPI-1999: the error queue is bit 2."""
    scope.send("*ESE 32;*SRE 32;BOGUS")
    byte = int(scope.ask("*STB?"))
    assert byte & (4 | 32 | 64) == 4 | 32 | 64
    scope.send("*CLS")
    assert int(scope.ask("*STB?")) & (4 | 32 | 64) == 0


def test_reset_touches_neither_masks_nor_queue(scope: Client) -> None:
    """IEEE 488.2, 10.32: *RST does not affect the enables, the event status or the error queue."""
    scope.send("*ESE 32;*SRE 16")
    scope.send("BOGUS")
    scope.send("*RST")
    assert (scope.ask("*ESE?"), scope.ask("*SRE?")) == ("32", "16")
    assert scope.errors() == [-113]


def test_a_full_queue_ends_in_queue_overflow_and_keeps_the_oldest(scope: Client) -> None:
    """SCPI-1999 Volume 2, 21.8.1."""
    scope.send("SWE:TIME 1E3")
    for _ in range(200):
        scope.send("BOGUS")
    found = scope.errors()
    assert found[0] == -222
    assert found[-1] == -350


@pytest.mark.parametrize(
    "header", ["SENSE:SWEEP:TIME", "SENS:SWE:TIME", "sens:swe:time", "Sweep:Time", "SWE:TIME", ":SWE:TIME"]
)
def test_long_and_short_forms_optional_nodes_and_case(scope: Client, header: str) -> None:
    """SCPI-1999 Volume 1, 6.2.1 and 6.2.5."""
    scope.send(f"{header} 2E-3")
    assert float(scope.ask(f"{header}?")) == 2e-3
    assert scope.errors() == []


def test_a_chain_goes_on_among_the_siblings_and_a_colon_goes_to_the_root(scope: Client) -> None:
    """SCPI-1999 Volume 1, 6.2.4: TRIG:LEV 1;SLOP NEG sets TRIG:SLOP; *CLS between does not move the path."""
    scope.send("TRIG:LEV 0.5;*CLS;SLOP NEG;:SWE:POIN 500")
    assert scope.ask("TRIG:SLOP?;LEV?;:SWE:POIN?") == "NEG;0.5;500"
    scope.send("TRIG:LEV 0.1;SWE:POIN 600")  # TRIG:SWE:POIN does not exist
    assert scope.errors() == [-113]


@pytest.mark.parametrize(
    ("written", "value"),
    [("20 US", 2e-5), ("2e-5", 2e-5), ("0.02MS", 2e-5), ("#H1", 1.0), ("MIN", 2e-8), ("MAX", 10.0), ("DEF", 1e-3)],
)
def test_numbers_units_and_named_values(scope: Client, written: str, value: float) -> None:
    """SCPI-1999 Volume 1, 7.2 and 7.3; IEEE 488.2, 7.7.2 to 7.7.4."""
    scope.send(f"SWE:TIME {written}")
    assert float(scope.ask("SWE:TIME?")) == pytest.approx(value)
    assert scope.errors() == []


@pytest.mark.parametrize(("written", "answer"), [("ON", "1"), ("OFF", "0"), ("1", "1"), ("0", "0"), ("7", "1")])
def test_a_boolean_goes_in_as_word_or_number_and_comes_out_as_a_digit(
    clients: dict[str, Client], written: str, answer: str
) -> None:
    """SCPI-1999 Volume 1, 7.3."""
    generator = clients["function_generator"]
    generator.send(f"OUTP2 {written}")
    assert generator.ask("OUTP2?") == answer
    generator.send("OUTP2 OFF")


@pytest.mark.parametrize(("form", "size", "code"), [("REAL,32", 4, ">f"), ("REAL,64", 8, ">d"), ("INT,16", 2, ">h")])
def test_records_come_as_definite_blocks_that_state_their_bytes(scope: Client, form: str, size: int, code: str) -> None:
    """IEEE 488.2, 8.7.9: `#`, a digit n, n digits of byte count, the bytes, then the message ends."""
    scope.send(f"FORM {form};:FORM:BORD NORM;:TRIG:SOUR IMM;:SWE:POIN 100;:INIT")
    assert scope.ask("*OPC?") == "1"
    scope.send("TRAC? CH1")
    assert scope.file.read(1) == b"#"
    digits = int(scope.file.read(1))
    count = int(scope.file.read(digits))
    assert count == 100 * size
    values = struct.iter_unpack(code, scope.file.read(count))
    assert len(list(values)) == 100
    assert scope.file.read(1) == b"\n"


def test_swapped_bytes_are_swapped(scope: Client) -> None:
    """SCPI-1999 Volume 2, FORMat:BORDer: NORMal is most significant byte first."""
    scope.send("FORM REAL,64;:TRIG:SOUR IMM;:SWE:POIN 100;:INIT")
    blocks = []
    for border in ("NORM", "SWAP"):
        scope.send(f"FORM:BORD {border}")
        scope.send("TRAC? CH1")
        scope.file.read(2)
        scope.file.read(3)
        blocks.append(scope.file.read(800))
        scope.file.readline()
    assert struct.unpack(">100d", blocks[0]) == struct.unpack("<100d", blocks[1])


def test_settings_are_what_hardware_could_do_and_are_read_back_so(clients: dict[str, Client]) -> None:
    """Common practice, no source: steps of 1, 2, 5 a division, averages by powers of two."""
    scope = clients["oscilloscope"]
    scope.send("SENS2:VOLT:RANG:PTP 0.033;:AVER:COUN 15")
    assert float(scope.ask("SENS2:VOLT:RANG:PTP?")) == pytest.approx(0.04)
    assert scope.ask("AVER:COUN?") == "16"


def test_after_reset_every_output_is_off(clients: dict[str, Client]) -> None:
    """SCPI-1999 Volume 2, OUTPut:STATe is OFF after *RST."""
    clients["bias"].send("VOLT 5;:OUTP ON")
    clients["function_generator"].send("OUTP1 ON")
    for role in ("bias", "function_generator"):
        clients[role].send("*RST")
    assert (clients["bias"].ask("OUTP?"), clients["bias"].ask("VOLT?")) == ("0", "0")
    assert clients["function_generator"].ask("OUTP1?") == "0"


# The socket


def test_a_message_in_pieces_and_two_in_one_packet_are_both_understood(scope: Client) -> None:
    for piece in (b"*ID", b"N", b"?\n"):
        scope.send(piece)
    assert scope.file.readline().startswith(b"darkedge,")
    scope.send(b"SWE:POIN 300\r\nSWE:POIN?\r\n*OPC?\n")
    assert scope.file.readline().strip() == b"300"
    assert scope.file.readline().strip() == b"1"


def test_two_clients_are_served_one_message_at_a_time(served: VirtualBench) -> None:
    port, answers = served.servers["bias"].port, []

    def talk() -> None:
        client = Client(port)
        answers.extend(client.ask("*IDN?") for _ in range(200))
        client.close()

    threads = [threading.Thread(target=talk) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=20)
    assert len(answers) == 800
    assert set(answers) == {"darkedge,virtual bias supply,0,0"}


@pytest.mark.parametrize(
    "rubbish",
    [
        b"#\xb2\n",
        b"SWE:TIME \xb2\n",
        b"*ESE \xb9\n",
        b"\x00\xff\xfe\x80\n",
        b"\n\n\n",
        b";;;:;\n",
        b"*\n",
        b"?\n",
        b'"open\n',
        b"#9\n",
        b"#5abc\n",
        b"(@\n",
    ],
)
def test_rubbish_leaves_the_instrument_alive(scope: Client, rubbish: bytes) -> None:
    scope.send(rubbish)
    scope.errors()
    assert scope.ask("*IDN?").startswith("darkedge,")


def test_a_line_without_end_is_dropped_with_input_buffer_overrun(scope: Client) -> None:
    """SCPI-1999 Volume 2, 21.8: -363."""
    scope.send(b"A" * (1 << 20) + b"BBBB\n")
    assert -363 in scope.errors()
    assert scope.ask("*OPC?") == "1"


def test_a_client_that_goes_away_in_the_middle_hurts_nobody(served: VirtualBench, scope: Client) -> None:
    for _ in range(5):
        other = Client(served.servers["oscilloscope"].port)
        other.send("TRIG:SOUR IMM;:SWE:POIN 10000;:INIT;:FORM REAL,64")
        other.send("TRAC? CH1")
        other.wire.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
        other.close()
    assert scope.ask("*IDN?").startswith("darkedge,")


SUPPLY = BiasSupply(World(device=make_device(PartKind.PHOTODIODE, seed=1, number=1)))


@settings(max_examples=300, deadline=None)
@given(st.text(st.characters(codec="latin-1"), max_size=60))
def test_no_message_breaks_the_parser_and_every_error_is_a_standard_number(message: str) -> None:
    SUPPLY.carry_out("*CLS")
    SUPPLY.carry_out(message)
    number = int(SUPPLY.carry_out("SYST:ERR?").split(b",")[0])
    assert number == 0 or -499 <= number <= -100
