"""The only module that speaks VISA: pyvisa, by default with pyvisa-py, and its errors turned into ours."""

from __future__ import annotations

import contextlib
import socket
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from importlib.util import find_spec
from typing import TYPE_CHECKING, Any

import pyvisa
from pyvisa.constants import StatusCode
from pyvisa.errors import Error as VisaError
from pyvisa.errors import LibraryError, VisaIOError
from pyvisa.resources import MessageBasedResource

from darkedge.analysis.errors import BenchFileError, LinkError

if TYPE_CHECKING:
    from pyvisa import ResourceManager

OPEN_LIMIT_s = 5.0
ANSWER_LIMIT_s = 5.0
PURE_PYTHON = "@py"
_CHUNK_BYTES = 1 << 20


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """What a VISA library lists, or why it lists nothing."""

    resources: tuple[str, ...]
    trouble: str = ""


def open_library(visa: str) -> ResourceManager:
    """Open a VISA library by the words of the bench file: `@py`, or whatever pyvisa knows.

    Raises
    ------
    BenchFileError
        pyvisa knows no such library here.
    """
    if visa == PURE_PYTHON and find_spec("pyvisa_py") is None:
        raise BenchFileError("pyvisa-py is not installed", where="visa", found=visa, mend="pip install pyvisa-py")
    try:
        return pyvisa.ResourceManager(visa)
    except (OSError, ValueError, LibraryError, VisaIOError, ImportError) as error:
        raise BenchFileError(
            "no such VISA library here",
            where="visa",
            found=f"{visa!r} ({_first_line(error)})",
            wanted='"@py", or the path of an installed VISA library',
        ) from error


def list_resources(visa: str) -> Found:
    """List what a VISA library can find by itself. Raw sockets cannot be found that way."""
    manager = open_library(visa)
    try:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            resources = tuple(manager.list_resources("?*"))
        return Found(
            resources=resources,
            trouble="; ".join(
                dict.fromkeys(str(w.message) for w in caught if not issubclass(w.category, ResourceWarning))
            ),
        )
    except (VisaIOError, OSError, ValueError) as error:
        return Found(resources=(), trouble=_first_line(error))
    finally:
        with contextlib.suppress(VisaError, OSError):
            manager.close()


class VisaTransport:
    """A link to one VISA resource.

    Raises
    ------
    LinkError
        The resource cannot be opened.
    """

    def __init__(self, address: str, *, visa: str = PURE_PYTHON, line_end: str = "\n") -> None:
        self.address, self._line_end = address, line_end
        self._manager = open_library(visa)
        self._resource: MessageBasedResource | None = None
        self._open()

    def _open(self) -> None:
        try:
            resource = self._manager.open_resource(
                self.address,
                open_timeout=int(OPEN_LIMIT_s * 1e3),
                timeout=ANSWER_LIMIT_s * 1e3,
                read_termination="\n",
                write_termination=self._line_end,
            )
        except Exception as error:
            raise self._unreachable(error) from error
        if not isinstance(resource, MessageBasedResource):
            raise LinkError("not an instrument that takes messages", where=self.address)
        resource.chunk_size = _CHUNK_BYTES
        if (wire := _socket_of(self._manager, resource)) is not None:
            try:
                _ready(wire)
            except OSError as error:
                resource.close()
                raise self._unreachable(error) from error
        self._resource = resource

    def _unreachable(self, error: Exception) -> LinkError:
        return LinkError(
            "the instrument cannot be reached",
            where=self.address,
            found=_first_line(error),
            mend="check power, cable and address; darkedge bench list --bench FILE shows who answers",
        )

    def write(self, message: str) -> None:
        """Send one message."""
        with self._told(message) as resource:
            resource.write(message)

    def query(self, message: str, *, limit_s: float | None = None) -> str:
        """Send one message and read its answer."""
        with self._told(message, limit_s) as resource:
            return str(resource.query(message)).rstrip("\r\n")

    def query_block(self, message: str) -> bytes:
        """Send one message and read a block; a short one runs into the time limit."""
        with self._told(message) as resource:
            return bytes(resource.query_binary_values(message, datatype="B", container=bytes, header_fmt="ieee"))

    def reopen(self) -> None:
        """Close, and open afresh."""
        self._shut()
        self._open()

    def close(self) -> None:
        """Close link and library session."""
        self._shut()
        with contextlib.suppress(VisaError, OSError):
            self._manager.close()

    def _shut(self) -> None:
        if self._resource is not None:
            with contextlib.suppress(VisaError, OSError):
                self._resource.close()
        self._resource = None

    @contextlib.contextmanager
    def _told(self, message: str, limit_s: float | None = None) -> Iterator[Any]:
        """Run an exchange, and tell its failure in our words."""
        resource = self._resource
        if resource is None:
            raise LinkError("the link is closed", where=self.address)
        try:
            resource.timeout = (ANSWER_LIMIT_s if limit_s is None else limit_s) * 1e3
            with warnings.catch_warnings():  # an answer without its line end is read all the same
                warnings.filterwarnings(
                    "ignore", message="read string doesn't end with termination", category=UserWarning
                )
                yield resource
        except VisaIOError as error:
            late = error.error_code == StatusCode.error_timeout
            what = "no answer in time, or a part of one" if late else "the link failed"
            raise LinkError(
                what,
                where=self.address,
                found=f"{message!r}, then {_first_line(error)}",
                mend="check that the instrument is on and the link up, and that its dialect knows this message"
                if late
                else "",
            ) from error
        except (ValueError, UnicodeDecodeError) as error:
            raise LinkError(
                "the answer is not what was asked for",
                where=self.address,
                found=f"{message!r}, then {_first_line(error)}",
                wanted="a block with its length, or plain text",
                mend="check the waveform query of the dialect",
            ) from error
        except (VisaError, OSError) as error:
            raise LinkError(
                "the connection is gone", where=self.address, found=f"{message!r}, then {_first_line(error)}"
            ) from error


def _socket_of(manager: ResourceManager, resource: MessageBasedResource) -> socket.socket | None:
    """The raw socket behind a resource of pyvisa-py; `None` for other links and libraries, which look after theirs."""
    sessions = getattr(manager.visalib, "sessions", {})
    interface = getattr(sessions.get(resource.session), "interface", None)
    return interface if isinstance(interface, socket.socket) else None


def _ready(wire: socket.socket) -> None:
    """Make sure that somebody is at the other end, and send messages at once.

    pyvisa-py (as of 0.8.1) opens a raw socket without noticing a refusal. Nagle's delay costs 40 ms where two messages follow each
    other and a query follows them; pyvisa-py's own way to switch it off raises.

    Raises
    ------
    OSError
        Nobody is there.
    """
    wire.getpeername()
    wire.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)


def _first_line(error: BaseException) -> str:
    text = str(error).strip() or type(error).__name__
    return text.splitlines()[0][:160].rstrip(". ")
