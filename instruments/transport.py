"""The wire to one instrument, as small as it can be: messages out, answers in."""

from __future__ import annotations

from typing import Protocol

from darkedge.analysis.errors import LinkError


class Transport(Protocol):
    """A link to one instrument. Every failure is a `LinkError` that names the address."""

    address: str

    def write(self, message: str) -> None:
        """Send one message."""

    def query(self, message: str, *, limit_s: float | None = None) -> str:
        """Send one message and read its answer, without the line end; `limit_s` is the time it may take."""

    def query_block(self, message: str) -> bytes:
        """Send one message and read a block of bytes (IEEE 488.2, 8.7.9 and 8.7.10)."""

    def reopen(self) -> None:
        """Close, and open afresh: what was on its way is lost."""

    def close(self) -> None:
        """Close; never raises."""


class ScriptedTransport:
    """Plays a written conversation, and complains at the first line that is not in it: for trying a dialect at a desk.

    `script` holds pairs of a message and its answer, `None` where nothing is answered.
    """

    def __init__(self, script: list[tuple[str, str | bytes | None]], *, address: str = "script") -> None:
        self.address = address
        self.left = list(script)

    def write(self, message: str) -> None:
        """Send one message."""
        self._next(message)

    def query(self, message: str, *, limit_s: float | None = None) -> str:
        """Send one message and give its answer."""
        answer = self._next(message)
        if not isinstance(answer, str):
            raise LinkError("no answer", where=self.address, found=f"nothing to {message!r}")
        return answer

    def query_block(self, message: str) -> bytes:
        """Send one message and give its block."""
        answer = self._next(message)
        if not isinstance(answer, bytes):
            raise LinkError("no block", where=self.address, found=f"nothing to {message!r}")
        return answer

    def reopen(self) -> None:
        """Nothing to open."""

    def close(self) -> None:
        """Nothing to close."""

    def _next(self, message: str) -> str | bytes | None:
        wanted, answer = self.left.pop(0) if self.left else ("nothing more", None)
        if message != wanted:
            raise LinkError("not in the script", where=self.address, found=repr(message), wanted=repr(wanted))
        return answer
