"""Who answers on a bench, and whether each kind of setting is made and read back, with every output off."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from darkedge.analysis.bench import Bench
from darkedge.analysis.errors import BenchError, DarkedgeError
from darkedge.analysis.quantities import format_quantity
from darkedge.instruments.dialect import BIAS, GENERATOR, SCOPE, Absent
from darkedge.instruments.dialect_file import read_dialect
from darkedge.instruments.live_bench import OpenLink, open_visa, roles
from darkedge.instruments.operations import Operation
from darkedge.instruments.oscilloscope import HIGH_INPUT_OHM, OscilloscopeDriver, Window
from darkedge.instruments.session import ScpiSession, Setting

CLOSE_RATIO = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class Answered:
    """Who answers at an address; `trouble` says why nobody does."""

    role: str
    address: str
    identity: str = ""
    trouble: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckLine:
    """One operation tried: `state` is ok, coerced, absent or fault."""

    role: str
    operation: str
    state: str
    words: str

    def as_row(self) -> dict[str, str]:
        """For JSON."""
        return {"role": self.role, "operation": self.operation, "state": self.state, "words": self.words}


def who_answers(bench: Bench, *, folder: Path | None = None, open_link: OpenLink = open_visa) -> tuple[Answered, ...]:
    """Ask every address of a bench file who it is; never raises for one that is silent.

    Raises
    ------
    BenchFileError, DialectError
        The bench file or a dialect is wrong.
    """
    found = []
    for role, (address, name) in roles(bench).items():
        try:
            with _session(role, address, bench, name, folder, open_link) as session:
                found.append(Answered(role=role, address=address, identity=session.identify()))
        except BenchError as error:
            found.append(
                Answered(role=role, address=address, trouble=error.what + (f" ({error.found})" if error.found else ""))
            )
    return tuple(found)


def check_bench(bench: Bench, *, folder: Path | None = None, open_link: OpenLink = open_visa) -> list[CheckLine]:
    """Try every operation of every instrument, outputs off; one line for each, faults among them, never raised.

    Raises
    ------
    BenchFileError, DialectError
        The bench file or a dialect is wrong; nothing was opened.
    """
    links = roles(bench)
    for _, name in links.values():
        read_dialect(name, beside=folder)
    lines: list[CheckLine] = []
    for role, (address, name) in links.items():
        try:
            with _session(role, address, bench, name, folder, open_link) as session:
                lines.append(CheckLine(role=role, operation="identify", state="ok", words=session.identify()))
                lines += _try_role(role, session, bench)
        except BenchError as error:
            lines.append(CheckLine(role=role, operation="identify", state="fault", words=str(error)))
    return lines


@contextlib.contextmanager
def _session(
    role: str, address: str, bench: Bench, name: str, folder: Path | None, open_link: OpenLink
) -> Iterator[ScpiSession]:
    dialect = read_dialect(name, beside=folder)
    transport = open_link(address, bench.visa, dialect.line_end)
    try:
        yield ScpiSession(role, transport, dialect)
    finally:
        transport.close()


def _try_role(role: str, session: ScpiSession, bench: Bench) -> list[CheckLine]:
    session.reset()
    if role == "oscilloscope":
        return _try_scope(session, bench)
    if role == "function_generator":
        lines: list[CheckLine] = []
        for channel in bench.function_generator.emitter_channels:
            lines += _try_settings(role, session, channel, _GENERATOR_TRIES)
        return lines
    if role == "bias":
        tries = [*_BIAS_TRIES, *([(BIAS["compliance"], bench.bias.compliance_A)] if bench.bias.compliance_A else [])]
        lines = _try_settings(role, session, 1, tries)
        session.settle([Setting(what=BIAS["level"], value=0.0)])
        return lines + [
            _try_reading(role, session, BIAS[name], unit)
            for name, unit in (("read_voltage", "V"), ("read_current", "A"))
        ]
    return []


_GENERATOR_TRIES: tuple[tuple[Operation, float | str], ...] = (
    (GENERATOR["output"], "off"),
    (GENERATOR["shape"], "pulse"),
    (GENERATOR["period"], 1e-3),
    (GENERATOR["pulse_width"], 1e-5),
    (GENERATOR["period"], 1e-4),
    (GENERATOR["high"], 1.0),
    (GENERATOR["low"], 0.0),
    (GENERATOR["load_impedance"], 50.0),
)
_BIAS_TRIES: tuple[tuple[Operation, float | str], ...] = ((BIAS["output"], "off"), (BIAS["level"], 1.0))


def _try_scope(session: ScpiSession, bench: Bench) -> list[CheckLine]:
    lines: list[CheckLine] = []
    for signal, channel in bench.oscilloscope.channels.items():
        tries: list[tuple[Operation, float | str]] = [
            (SCOPE["coupling"], "dc"),
            (SCOPE["input_resistance"], HIGH_INPUT_OHM),
            (SCOPE["bandwidth_limit"], "off"),
            (SCOPE["probe_ratio"], bench.oscilloscope.probe_ratio.get(signal, 1.0)),
            (SCOPE["channel_range"], 1.0),
            (SCOPE["channel_offset"], 0.1),
        ]
        lines += _try_settings(f"oscilloscope, {signal}", session, channel, tries)
    first = bench.oscilloscope.channels["drive"]
    tries = [
        (SCOPE["span"], 1e-3), (SCOPE["points"], float(bench.oscilloscope.points)),
        (SCOPE["averages"], float(bench.oscilloscope.averages)), (SCOPE["position"], 0.0),
        (SCOPE["trigger_source"], "channel"), (SCOPE["trigger_level"], 0.1), (SCOPE["trigger_slope"], "rising"),
        (SCOPE["trigger_source"], "none"), (SCOPE["averages"], 1.0),
    ]  # fmt: skip
    lines += _try_settings("oscilloscope", session, first, tries)
    return [*lines, _try("oscilloscope", "read_waveform", lambda: _record(session, bench))]


def _record(session: ScpiSession, bench: Bench) -> str:
    scope = OscilloscopeDriver(session, bench.oscilloscope)
    scope.prepare(["output"])
    scope.show("output", Window(range_V=1.0))
    scope.trigger(None)
    scope.time(start_s=0.0, span_s=1e-3, points=bench.oscilloscope.points, averages=1)
    traces = scope.acquire(["output"], period_s=1e-3)
    values = traces.volts["output"]
    return (
        f"{values.size} samples, {format_quantity(float(values.min()), 'V')} to {format_quantity(float(values.max()), 'V')}, "
        f"every {format_quantity(traces.step_s, 's')}"
    )


def _try_settings(
    role: str,
    session: ScpiSession,
    channel: int,
    tries: tuple[tuple[Operation, float | str], ...] | list[tuple[Operation, float | str]],
) -> list[CheckLine]:
    return [_try_setting(role, session, channel, what, value) for what, value in tries]


def _try_setting(role: str, session: ScpiSession, channel: int, what: Operation, value: float | str) -> CheckLine:
    how = session.dialect.operations[what]
    name = what.name
    if isinstance(how, Absent):
        return CheckLine(role=role, operation=name, state="absent", words=how.consequence)
    try:
        (settled,) = session.settle([Setting(what=what, value=value, channel=channel)])
    except DarkedgeError as error:
        return CheckLine(role=role, operation=name, state="fault", words=str(error))
    if not settled.read_back:
        return CheckLine(role=role, operation=name, state="ok", words=f"set to {value}; it cannot be read back")
    found = settled.value
    if isinstance(value, str) or isinstance(found, str) or found is None:
        state = "ok" if found == value else "fault"
        return CheckLine(role=role, operation=name, state=state, words=f"{value} was set, {found} came back")
    same = found == value or abs(found - value) <= CLOSE_RATIO * abs(value) + 1e-9
    return CheckLine(
        role=role, operation=name, state="ok" if same else "coerced", words=f"{value:g} was set, {found:g} came back"
    )


def _try_reading(role: str, session: ScpiSession, what: Operation, unit: str) -> CheckLine:
    how = session.dialect.operations[what]
    if isinstance(how, Absent):
        return CheckLine(role=role, operation=what.name, state="absent", words=how.consequence)

    def read() -> str:
        return format_quantity(session.read_number(what), unit)

    return _try(role, what.name, read)


def _try(role: str, name: str, make: Callable[[], str]) -> CheckLine:
    try:
        return CheckLine(role=role, operation=name, state="ok", words=make())
    except DarkedgeError as error:
        return CheckLine(role=role, operation=name, state="fault", words=str(error))
