"""What a raw TCP client can do to a virtual instrument; nothing of it may hurt the next one."""

from __future__ import annotations

import socket
import struct
import time
from collections.abc import Iterator

import pytest

from darkedge.instruments.virtual.instrument import Call, ScpiInstrument
from darkedge.instruments.virtual.server import LINE_LIMIT, InstrumentServer


class Store(ScpiInstrument):
    """Keeps a number, and answers at length."""

    def __init__(self) -> None:
        super().__init__(("darkedge", "store", "0", "0"))
        self.kept = "0"
        self.add("KEEP", self._keep)
        self.add("KEEP?", lambda _call: self.kept)
        self.add("LONG?", lambda _call: b"x" * 4_000_000)

    def _keep(self, call: Call) -> None:
        self.kept = call.only()


@pytest.fixture
def server(capfd: pytest.CaptureFixture[str]) -> Iterator[InstrumentServer]:
    """A server that has to be alive, and to have written nothing to stderr, after each test."""
    with InstrumentServer(Store()) as server:
        yield server
        assert ask(server, b"*OPC?\n") == b"1\n"
    assert capfd.readouterr().err == ""


def connect(server: InstrumentServer) -> socket.socket:
    return socket.create_connection(("127.0.0.1", server.port), timeout=5)


def ask(server: InstrumentServer, message: bytes) -> bytes:
    with connect(server) as client, client.makefile("rb") as lines:
        client.sendall(message)
        return lines.readline()


def reset(client: socket.socket) -> None:
    """Go away without a farewell, as a client does whose process was killed."""
    client.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
    client.close()


def test_thousands_of_queries_sent_at_once_are_all_answered_in_order(server: InstrumentServer) -> None:
    with connect(server) as client, client.makefile("rb") as lines:
        for start in range(0, 3000, 500):
            client.sendall(b"".join(b"KEEP %d;KEEP?\n" % k for k in range(start, start + 500)))
            assert [int(lines.readline()) for _ in range(500)] == list(range(start, start + 500))


def test_half_a_message_of_a_client_that_goes_away_is_not_carried_out(server: InstrumentServer) -> None:
    """`KEEP 12` may be the beginning of `KEEP 12E-3`."""
    for leave in (socket.socket.close, reset):
        client = connect(server)
        client.sendall(b"KEEP 7\nKEEP 12")
        time.sleep(0.1)
        leave(client)
        time.sleep(0.1)
        assert ask(server, b"KEEP?\n") == b"7\n"


def test_a_client_that_does_not_read_holds_up_nobody(server: InstrumentServer) -> None:
    with connect(server) as client:
        client.sendall(b"LONG?\n" * 20)
        time.sleep(0.1)
        assert ask(server, b"KEEP?\n") == b"0\n"


def test_a_server_closes_while_a_client_does_not_read(server: InstrumentServer) -> None:
    with InstrumentServer(Store()) as other:
        client = connect(other)
        client.sendall(b"LONG?\n" * 20)
        time.sleep(0.1)
        start = time.monotonic()
    assert time.monotonic() - start < 3
    client.close()


def test_clients_that_go_away_in_the_middle_of_an_answer_leave_no_trace(server: InstrumentServer) -> None:
    for leave in (socket.socket.close, reset) * 3:
        client = connect(server)
        client.sendall(b"LONG?\nLONG?\n")
        assert client.recv(100)
        leave(client)


def test_clients_that_go_away_at_once_leave_no_trace(server: InstrumentServer) -> None:
    for _ in range(50):
        reset(connect(server))


def test_an_overlong_line_is_dropped_whole_and_the_next_one_understood(server: InstrumentServer) -> None:
    with connect(server) as client, client.makefile("rb") as lines:
        client.sendall(b"*CLS\n" + b"KEEP 1;" * (LINE_LIMIT // 3) + b"\nKEEP?;:SYST:ERR?\n")
        assert lines.readline() == b'0;-363,"Input buffer overrun"\n'


def test_a_client_that_goes_away_within_an_overlong_line_leaves_no_trace(server: InstrumentServer) -> None:
    client = connect(server)
    client.sendall(b"A" * (LINE_LIMIT + 1000))
    time.sleep(0.1)
    reset(client)


@pytest.mark.parametrize(
    "rubbish", [bytes(range(256)), b"OUTP" + b"9" * 5000 + b" 1", b"*ESE 1E400", b"*ESE #H" + b"F" * 999]
)
def test_rubbish_is_told_as_an_error_and_ends_no_conversation(server: InstrumentServer, rubbish: bytes) -> None:
    with connect(server) as client, client.makefile("rb") as lines:
        client.sendall(b"*CLS\n" + rubbish + b"\nSYST:ERR:COUN?\n")
        assert int(lines.readline()) >= 1


def test_a_message_comes_byte_by_byte_among_those_of_another_client(server: InstrumentServer) -> None:
    with connect(server) as client, client.makefile("rb") as lines:
        for byte in b"KEEP 5;KEEP?\r\n":
            client.sendall(bytes([byte]))
            assert ask(server, b"*ESE?\r\n") == b"0\n"
        assert lines.readline() == b"5\n"
