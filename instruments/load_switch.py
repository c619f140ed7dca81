"""The switch that puts one of several loads into the circuit."""

from __future__ import annotations

from darkedge.analysis.bench import SwitchLink
from darkedge.analysis.errors import BenchFileError
from darkedge.analysis.fixture import LOAD_MATCH_RATIO
from darkedge.instruments.dialect import SWITCH
from darkedge.instruments.operations import Section
from darkedge.instruments.session import ScpiSession


class LoadSwitchDriver:
    """Closes the path of one load and opens all others."""

    def __init__(self, session: ScpiSession, link: SwitchLink) -> None:
        session.dialect.require(Section.SWITCH, where="switch.dialect")
        self.session, self.link = session, link

    def put_in_load(self, load_ohm: float) -> None:
        """Put a load in.

        Raises
        ------
        BenchFileError
            The bench file names no path for it.
        """
        path = self.path(load_ohm)
        for other in sorted(set(self.link.loads.values()) - {path}):
            self.session.act(SWITCH["open"], channel=other)
        self.session.act(SWITCH["close"], channel=path)

    def path(self, load_ohm: float) -> int:
        """Path of a load."""
        for known, path in self.link.loads.items():
            if abs(known / load_ohm - 1) <= LOAD_MATCH_RATIO:
                return path
        raise BenchFileError(
            "the switch has no such load",
            where="switch.loads",
            found=f"{load_ohm:g} ohm",
            wanted=", ".join(f"{known:g}" for known in self.link.loads),
        )
