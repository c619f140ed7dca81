"""A raw SCPI socket: one instrument on a loopback TCP port, one message a line."""

from __future__ import annotations

import contextlib
import socket
import socketserver
import threading
from types import TracebackType

from darkedge.instruments.virtual.errors import ScpiError
from darkedge.instruments.virtual.instrument import ScpiInstrument

LINE_LIMIT = 1 << 20
"""Longest program message taken; a longer one is dropped with -363."""


class _Handler(socketserver.StreamRequestHandler):
    server: _Server

    def handle(self) -> None:
        self.server.clients.add(self.request)
        try:
            self._converse()
        except OSError:
            return  # the client is gone; whoever it was, nobody waits for an answer
        finally:
            self.server.clients.discard(self.request)

    def _converse(self) -> None:
        self.request.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        while line := self.rfile.readline(LINE_LIMIT):
            if not line.endswith(b"\n"):
                if len(line) < LINE_LIMIT:
                    return  # broken off: the first half of a message may say something else than the whole
                self._drop_rest()
                with self.server.turn:
                    self.server.instrument.status.report(ScpiError(-363))
                continue
            with self.server.turn:
                reply = self.server.instrument.carry_out(line.decode("latin-1").strip("\r\n"))
            self.wfile.write(reply)

    def _drop_rest(self) -> None:
        while True:
            more = self.rfile.readline(LINE_LIMIT)
            if not more or more.endswith(b"\n"):
                return


class _Server(socketserver.ThreadingTCPServer):
    allow_reuse_address = True
    request_queue_size = 64  # with five, a client that comes in a crowd waits seconds for its connection
    daemon_threads = True

    def __init__(self, instrument: ScpiInstrument, port: int) -> None:
        self.instrument = instrument
        self.turn = threading.Lock()
        self.clients: set[socket.socket] = set()
        super().__init__(("127.0.0.1", port), _Handler)


class InstrumentServer:
    """Serves one instrument on loopback until it is closed; a context manager.

    Messages of several clients are carried out one at a time.
    """

    def __init__(self, instrument: ScpiInstrument, *, port: int = 0) -> None:
        self.instrument = instrument
        self._server = _Server(instrument, port)
        self._thread = threading.Thread(target=self._server.serve_forever, kwargs={"poll_interval": 0.05}, daemon=True)
        self._thread.start()

    @property
    def port(self) -> int:
        """TCP port on 127.0.0.1."""
        return int(self._server.server_address[1])

    @property
    def address(self) -> str:
        """VISA resource name of the socket."""
        return f"TCPIP::127.0.0.1::{self.port}::SOCKET"

    def close(self) -> None:
        """Stop serving, and drop whoever is connected."""
        self._server.shutdown()
        for client in tuple(self._server.clients):
            with contextlib.suppress(OSError):
                client.shutdown(socket.SHUT_RDWR)
        self._server.server_close()
        self._thread.join(timeout=2)

    def __enter__(self) -> InstrumentServer:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
