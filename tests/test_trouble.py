"""Instruments that do not do what they should: silent, talking rubbish, breaking off, never running out of errors."""

import socketserver
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import pytest
from bench_for_tests import Desk, desk, plan_text

from darkedge.analysis.errors import BenchError, LinkError, RefusedByInstrument
from darkedge.instruments.dialect import SCOPE
from darkedge.instruments.dialect_file import read_dialect
from darkedge.instruments.session import ScpiSession, Setting
from darkedge.instruments.visa import VisaTransport

Answer = Callable[[str], bytes | None]
BREAK_OFF = b"break off"


@contextmanager
def speaking(answer: Answer) -> Iterator[str]:
    """Something on a port that answers each line as `answer` says; `None` is silence."""

    class Handler(socketserver.StreamRequestHandler):
        def handle(self) -> None:
            for line in self.rfile:
                found = answer(line.decode("latin-1").strip())
                if found == BREAK_OFF:
                    return
                if found is not None:
                    self.wfile.write(found)

    class Server(socketserver.ThreadingTCPServer):
        daemon_threads = True
        allow_reuse_address = True

    with Server(("127.0.0.1", 0), Handler) as server:
        threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True).start()
        yield f"TCPIP::127.0.0.1::{server.server_address[1]}::SOCKET"
        server.shutdown()


@pytest.fixture(autouse=True)
def impatient(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("darkedge.instruments.visa.ANSWER_LIMIT_s", 0.4)


@contextmanager
def scope(answer: Answer) -> Iterator[ScpiSession]:
    with speaking(answer) as address:
        transport = VisaTransport(address)
        try:
            yield ScpiSession("oscilloscope", transport, read_dialect("scpi-1999"))
        finally:
            transport.close()


def answers(text: str, **known: bytes | None) -> bytes | None:
    """Sensible answers but for those given by the beginning of the message."""
    for start, reply in known.items():
        if "?" in text and text.replace(":", "_").replace("?", "").startswith(start):
            return reply
    return b'0,"No error"\n' if text == "SYST:ERR?" else None if "?" not in text else b"1\n"


def test_one_that_never_answers_is_a_time_out_with_what_was_asked() -> None:
    with scope(lambda _text: None) as session, pytest.raises(LinkError, match=r"no answer in time(.|\n)*\*IDN\?"):
        session.identify()


@pytest.mark.parametrize("rubbish", [b"\x00\xff\xfe\n", b"\n", b"   \n", b"\x1b[2J\n"])
def test_rubbish_for_an_identity_is_told(rubbish: bytes) -> None:
    with scope(lambda _text: rubbish) as session, pytest.raises(LinkError, match="oscilloscope"):
        session.identify()


@pytest.mark.parametrize(
    ("block", "words"),
    [
        (b"#3800" + b"x" * 100, "no answer in time, or a part of one"),
        (b"#", "no answer in time, or a part of one"),
        (b"#9\n", "no answer in time|not what was asked for"),
        (b"hello there\n", "not what was asked for|no answer in time"),
        (b"#17abcdefg\n", r"not a whole number of samples; found 7 bytes"),
        (b"#14abcd\n", "the record is empty"),
        (b"#0" + b"", "no answer in time|not what was asked for|the record is empty"),
        (BREAK_OFF, "gone|failed|no answer"),
    ],
)  # fmt: skip
def test_a_block_that_is_none_is_told_and_nothing_hangs(block: bytes, words: str) -> None:
    begun = time.monotonic()
    with scope(lambda text: answers(text, TRAC=block)) as session, pytest.raises(LinkError, match=words):
        session.waveform(channel=1)
    assert time.monotonic() - begun < 5


def test_an_error_queue_that_never_ends_ends() -> None:
    with (
        scope(lambda text: b'-113,"Undefined header"\n' if "ERR" in text else None) as session,
        pytest.raises(LinkError, match="the error queue never ends"),
    ):
        session.settle([Setting(what=SCOPE["span"], value=1e-3)])


def test_errors_behind_a_record_that_does_not_come_are_heard() -> None:
    queue = [b'-230,"Data corrupt or stale"\n', b'0,"No error"\n']
    with (
        scope(lambda text: queue.pop(0) if "ERR" in text else None) as session,
        pytest.raises(RefusedByInstrument, match=r'answered -230,"Data corrupt or stale"'),
    ):
        session.waveform(channel=1)


def test_a_setting_that_reads_back_as_rubbish_is_told() -> None:
    with (
        scope(lambda text: answers(text, SENS_SWE_TIME=b"many\n")) as session,
        pytest.raises(
            LinkError,
            match=r"oscilloscope, oscilloscope\.span: the answer is no number; found 'many' to 'SENS:SWE:TIME\?'",
        ),
    ):
        session.settle([Setting(what=SCOPE["span"], value=1e-3)])


@pytest.mark.parametrize("role", ["oscilloscope", "function_generator", "bias"])
@pytest.mark.parametrize("manner", ["silent", "rubbish", "breaks off"])
def test_a_bench_with_such_an_instrument_drives_nothing_and_leaves_nothing_on(
    tmp_path: Path, role: str, manner: str
) -> None:
    replies: dict[str, bytes | None] = {"silent": None, "rubbish": b"\x02\x03\n", "breaks off": BREAK_OFF}
    with desk(tmp_path) as table, speaking(lambda _text: replies[manner]) as address:
        with pytest.raises(BenchError):
            table.run(table.plan(plan_text()), bench=_with(table, role, address))
        assert table.everything_is_off()
        assert table.virtual.world.extremes.emitter_current_A == 0.0
        assert not (table.folder / "SP-2-01").exists()


def _with(table: Desk, role: str, address: str) -> object:
    bench = table.bench()
    return replace(bench, **{role: replace(getattr(bench, role), address=address)})


def test_an_answer_to_the_question_before_is_noticed() -> None:
    """Stale answers shift everything by one; a word where a number belongs gives it away."""
    late = ["DC"]

    def shifted(text: str) -> bytes | None:
        if "?" not in text:
            return None
        if "ERR" in text:
            return b'0,"No error"\n'
        late.append("1E-3")
        return f"{late.pop(0)}\n".encode()

    with scope(shifted) as session, pytest.raises(LinkError, match="the answer is no number; found 'DC'"):
        session.settle([Setting(what=SCOPE["span"], value=1e-3)])
