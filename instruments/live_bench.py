"""The bench in use: links opened, instruments identified, drivers made, and everything switched off on the way out."""

from __future__ import annotations

import contextlib
import signal
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from darkedge.analysis.bench import Bench, BiasLink, BiasSource
from darkedge.analysis.errors import BenchError, BenchFileError, DarkedgeError, LinkError
from darkedge.analysis.plan import Plan
from darkedge.instruments.bias_source import BiasByHand, GeneratorBias, SupplyBias
from darkedge.instruments.bias_source import BiasSource as BiasDriver
from darkedge.instruments.dialect_file import read_dialect
from darkedge.instruments.function_generator import GeneratorDriver
from darkedge.instruments.hands import Hands
from darkedge.instruments.load_switch import LoadSwitchDriver
from darkedge.instruments.oscilloscope import OscilloscopeDriver
from darkedge.instruments.session import ScpiSession
from darkedge.instruments.transport import Transport
from darkedge.instruments.visa import VisaTransport

OpenLink = Callable[[str, str, str], Transport]
"""Opens a link: address, VISA library, line end."""


def open_visa(address: str, visa: str, line_end: str) -> Transport:
    """Open a link through VISA."""
    return VisaTransport(address, visa=visa, line_end=line_end)


@dataclass(frozen=True, slots=True, kw_only=True)
class Time:
    """The clock of a sweep: waiting, and the monotonic time. A rehearsal passes one that does not wait."""

    wait: Callable[[float], None] = time.sleep
    now: Callable[[], float] = time.monotonic


@dataclass(frozen=True, slots=True, kw_only=True)
class Identity:
    """Which instrument answered, and in which dialect it is spoken to."""

    role: str
    address: str
    identity: str
    dialect: str


@dataclass(slots=True, kw_only=True)
class LiveBench:
    """The drivers of one bench, for one plan."""

    bench: Bench
    oscilloscope: OscilloscopeDriver
    generator: GeneratorDriver
    bias: BiasDriver
    switch: LoadSwitchDriver | None
    sessions: dict[str, ScpiSession]
    identities: tuple[Identity, ...]
    off_for_sure: bool = False

    def make_safe(self) -> list[str]:
        """Switch off everything that can be, each by itself, by a fresh link where the old one is gone; never raises.

        Returns
        -------
        list of str
            What could not be switched off, in words for the person at the bench. `off_for_sure` says whether everything that can be
            switched is known to be off.
        """
        left_on: list[str] = []
        for name, session, off in (
            ("the emitter drive", self.generator.session, self.generator.off),
            ("the bias", self.sessions.get("bias", self.generator.session), self.bias.off),
        ):
            trouble = _try_off(session, off)
            if trouble:
                where = session.transport.address
                left_on.append(f"{name} ({where}) may still be on ({trouble}): switch it off by hand, and check")
        self.off_for_sure = not left_on
        if not self.bias.switchable:
            left_on.append("the rail is set by hand: switch it off, and check it with a meter")
        self.oscilloscope.stop()
        return left_on

    def close(self) -> None:
        """Close all links."""
        for session in self.sessions.values():
            session.transport.close()


def _try_off(session: ScpiSession, off: Callable[[], None]) -> str:
    for attempt in (1, 2):
        try:
            off()
        except DarkedgeError as error:
            trouble = error.what
            if attempt == 1:
                with contextlib.suppress(LinkError):
                    session.transport.reopen()
        else:
            return ""
    return trouble


@contextlib.contextmanager
def open_bench(
    bench: Bench,
    plan: Plan,
    *,
    hands: Hands,
    folder: Path | None = None,
    clock: Time | None = None,
    open_link: OpenLink = open_visa,
    heard: Callable[[str, str], None] = lambda _role, _text: None,
    left_on: Callable[[Sequence[str]], None] = lambda _words: None,
) -> Iterator[LiveBench]:
    """Open a bench for a plan; on the way out everything that can be switched off is off, however it ends.

    Parameters
    ----------
    folder : Path, optional
        Where dialect files named in the bench file stand.
    heard : callable
        Told every message, with the role of the instrument.
    left_on : callable
        Told on the way out what could not be switched off, in words; an empty list where all is off.

    Raises
    ------
    BenchFileError, DialectError
        The bench file does not fit the plan, or a dialect is wrong; nothing was opened.
    LinkError
        An instrument does not answer.
    BenchError
        All went well, but at the end an output could not be said to be off.
    """
    clock = clock or Time()
    check_fit(bench, plan)
    dialects = {role: read_dialect(name, beside=folder) for role, (_, name) in roles(bench).items()}
    sessions: dict[str, ScpiSession] = {}
    live: LiveBench | None = None
    try:
        for role, (address, _) in roles(bench).items():
            transport = open_link(address, bench.visa, dialects[role].line_end)
            sessions[role] = ScpiSession(
                role,
                transport,
                dialects[role],
                heard=lambda text, role=role: heard(role, text),  # type: ignore[misc]
            )
        identities = tuple(
            Identity(role=role, address=s.transport.address, identity=s.identify(), dialect=s.dialect.name)
            for role, s in sessions.items()
        )
        live = _drivers(bench, plan, sessions, identities, hands, clock)
        for session in sessions.values():
            session.reset()
        yield live
    finally:
        with uninterrupted():
            if live is not None:
                left_on(live.make_safe())
            for session in sessions.values():
                session.transport.close()
    if live is not None and not live.off_for_sure:
        raise BenchError(
            "an output may still be on", where="bench", mend="switch it off by hand; what was taken is safe"
        )


def roles(bench: Bench) -> dict[str, tuple[str, str]]:
    """Every instrument of a bench file: its role, address and dialect. Outputs come first, so that they are reached first."""
    found = {
        "function_generator": (bench.function_generator.address, bench.function_generator.dialect),
        "oscilloscope": (bench.oscilloscope.address, bench.oscilloscope.dialect),
    }
    if bench.bias.source is BiasSource.SUPPLY and bench.bias.address is not None:
        found = {"bias": (bench.bias.address, bench.bias.dialect or "scpi-1999"), **found}
    if bench.switch is not None:
        found["switch"] = (bench.switch.address, bench.switch.dialect)
    return found


def check_fit(bench: Bench, plan: Plan) -> None:
    """Hold a bench file against a plan, before anything is opened.

    Raises
    ------
    BenchFileError
        A signal, an emitter channel or a switch that the plan needs and the bench lacks.
    """
    for signal_name in signals(plan)[1:]:
        if signal_name not in bench.oscilloscope.channels:
            raise BenchFileError(
                f"the device has {plan.device.elements} elements, and {signal_name} has no scope channel",
                where="oscilloscope.channels",
                mend=f"write {signal_name} = 3, or whichever channel it is on",
            )
    if max(plan.axes.element) > len(bench.function_generator.emitter_channels):
        raise BenchFileError(
            "an element has no generator channel for its emitter", where="function_generator.emitter_channels",
            found=str(list(bench.function_generator.emitter_channels)), wanted="one for each element of the plan",
        )  # fmt: skip
    if plan.axes.load_change == "switched":
        if bench.switch is None:
            raise BenchFileError("the plan switches loads, and there is no [switch]", where="switch")
        for load_ohm in {step.load_ohm for step in plan.steps()}:
            if not any(abs(known / load_ohm - 1) <= 0.02 for known in bench.switch.loads):
                raise BenchFileError("the switch has no such load", where="switch.loads", found=f"{load_ohm:g} ohm")


def signals(plan: Plan) -> tuple[str, ...]:
    """Signals of the scope that a plan needs: drive, then the output of each element."""
    outputs = ("output" if element == 1 else f"output{element}" for element in range(1, plan.device.elements + 1))
    return ("drive", *outputs)


def _drivers(
    bench: Bench,
    plan: Plan,
    sessions: dict[str, ScpiSession],
    identities: tuple[Identity, ...],
    hands: Hands,
    clock: Time,
) -> LiveBench:
    generator = GeneratorDriver(sessions["function_generator"], bench.function_generator)
    return LiveBench(
        bench=bench,
        oscilloscope=OscilloscopeDriver(sessions["oscilloscope"], bench.oscilloscope, wait=clock.wait, now=clock.now),
        generator=generator,
        bias=_bias(bench.bias, plan, sessions, generator, hands, clock),
        switch=None if bench.switch is None else LoadSwitchDriver(sessions["switch"], bench.switch),
        sessions=sessions,
        identities=identities,
    )


def _bias(
    link: BiasLink,
    plan: Plan,
    sessions: dict[str, ScpiSession],
    generator: GeneratorDriver,
    hands: Hands,
    clock: Time,
) -> BiasDriver:
    rating_V = plan.bias_rating_V
    if link.source is BiasSource.BY_HAND:
        return BiasByHand(hands, rating_V=rating_V)
    if link.source is BiasSource.GENERATOR:
        return GeneratorBias(generator, link, rating_V=rating_V, wait=clock.wait)
    return SupplyBias(sessions["bias"], link, rating_V=rating_V, wait=clock.wait)


@contextlib.contextmanager
def uninterrupted() -> Iterator[None]:
    """Let a second Ctrl-C wait until what is being switched off is off."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.signal(number, signal.SIG_IGN) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


@contextlib.contextmanager
def ends_on_terminate() -> Iterator[None]:
    """Let SIGTERM end a run the way Ctrl-C does, so that the way out is taken."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def end(_number: int, _frame: object) -> None:
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
