"""The whole virtual bench on loopback: instruments, their addresses, and the bench file that reaches them."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import ExitStack
from types import TracebackType

from darkedge.instruments.virtual.instrument import ScpiInstrument
from darkedge.instruments.virtual.own_words import WordyGenerator, WordyScope, WordySupply
from darkedge.instruments.virtual.parts import Device
from darkedge.instruments.virtual.scope import Flaws, Oscilloscope
from darkedge.instruments.virtual.server import InstrumentServer
from darkedge.instruments.virtual.sources import BiasSupply, FunctionGenerator, LoadSwitch
from darkedge.instruments.virtual.wiring import Wiring, World

ROLES = ("oscilloscope", "function_generator", "bias", "switch")
ACTUAL_RATIO: Mapping[float, float] = {1e3: 0.9987, 2.2e3: 1.0014, 4.7e3: 0.9987, 1e4: 1.0012, 1e5: 0.9994, 1e6: 0.9983}
"""What each nominal load of the virtual bench really is, as a ratio."""
SWITCHED_OHM = (1e3, 1e4, 1e5, 1e6)


def actual_ohm(nominal_ohm: float) -> float:
    """What a nominal load of the virtual bench really is."""
    return nominal_ohm * ACTUAL_RATIO.get(nominal_ohm, 1.0)


def _written(load_ohm: float) -> str:
    """A load as people write it."""
    return f"{load_ohm / 1e6:g} Mohm" if load_ohm >= 1e6 else f"{load_ohm / 1e3:g} kohm"


class VirtualBench:
    """An oscilloscope, a two-channel generator, a supply and a load switch, each behind a socket of its own; a context manager.

    Parameters
    ----------
    device : Device
        What is in the socket at first.
    wiring : Wiring
        Series resistor, load, stray capacitance, how the output is connected.
    seed : int
        The same seed gives the same noise.
    words : str
        `scpi-1999`, or `own` for instruments that speak a dialect of their own.
    ports : sequence of int
        One for each instrument; zero is any free one.
    """

    def __init__(
        self,
        device: Device,
        *,
        wiring: Wiring | None = None,
        seed: int = 1,
        words: str = "scpi-1999",
        flaws: Flaws | None = None,
        ports: tuple[int, int, int, int] = (0, 0, 0, 0),
    ) -> None:
        self.world = World(device=device, wiring=wiring or Wiring())
        self.words = words
        loads = tuple(actual_ohm(load) for load in SWITCHED_OHM)
        instruments: tuple[ScpiInstrument, ...]
        if words == "own":
            instruments = (
                WordyScope(self.world, seed=seed, flaws=flaws),
                WordyGenerator(self.world),
                WordySupply(self.world),
                LoadSwitch(self.world, loads),
            )
        else:
            instruments = (
                Oscilloscope(self.world, seed=seed, flaws=flaws),
                FunctionGenerator(self.world),
                BiasSupply(self.world),
                LoadSwitch(self.world, loads),
            )
        self.instruments = dict(zip(ROLES, instruments, strict=True))
        self.servers: dict[str, InstrumentServer] = {}
        self._ports = dict(zip(ROLES, ports, strict=True))
        self._stack = ExitStack()

    def __enter__(self) -> VirtualBench:
        with ExitStack() as stack:
            for role, instrument in self.instruments.items():
                self.servers[role] = stack.enter_context(InstrumentServer(instrument, port=self._ports[role]))
            self._stack = stack.pop_all()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stack.close()

    def addresses(self) -> dict[str, str]:
        """VISA address of each instrument."""
        return {role: server.address for role, server in self.servers.items()}

    def bench_toml(
        self, *, dialects: Mapping[str, str] | None = None, averages: int = 16, switched: bool = False
    ) -> str:
        """A bench file that reaches these instruments."""
        where, speaks = self.addresses(), dialects or {}

        def link(role: str) -> list[str]:
            return [f'address = "{where[role]}"', f'dialect = "{speaks.get(role, "scpi-1999")}"']

        elements = len(self.world.device.elements)
        lines = [
            'format = "darkedge-bench 1"', 'visa = "@py"', "",
            "[oscilloscope]", *link("oscilloscope"), "points = 2000", f"averages = {averages}", "[oscilloscope.channels]",
            "drive = 1", "output = 2", *(["output2 = 3"] if elements > 1 else []), "",
            "[function_generator]", *link("function_generator"), f"emitter_channels = {list(range(1, elements + 1))}",
            "source_ohm = 50", "",
            "[bias]", 'source = "supply"', *link("bias"), "source_ohm = 0", 'decoupling_F = "100 nF"',
            'compliance_A = "10 mA"', "",
        ]  # fmt: skip
        if switched:
            lines += ["[switch]", *link("switch"), "[switch.loads]"]
            lines += [f'"{_written(load)}" = {place}' for place, load in enumerate(SWITCHED_OHM, start=1)] + [""]
        return "\n".join(lines)
