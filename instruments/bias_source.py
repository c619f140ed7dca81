"""The bias: from a supply, from a channel of the generator, or by hand; ramped, read back, and never beyond its rating."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from typing import Protocol

from darkedge.analysis.bench import BiasLink
from darkedge.analysis.errors import InputError, LinkError, RatingError, RefusedByInstrument
from darkedge.instruments.dialect import BIAS, GENERATOR
from darkedge.instruments.function_generator import GeneratorDriver
from darkedge.instruments.hands import DISCHARGED_V, Hands
from darkedge.instruments.operations import Operation, Section
from darkedge.instruments.session import ScpiSession, Setting

STEPS_PER_s = 20.0
SETTLE_TIME_CONSTANTS = 7.0
SETTLE_LEAST_s = 0.05
DISCHARGE_LIMIT_s = 30.0
DISCHARGE_BLIND_s = 5.0
"""How long is waited before hands may touch where the rail cannot be read (common practice, no source)."""
READ_RATIO, READ_ROOM_V = 0.02, 0.05
"""How far the rail may read from what was set: 2 % and 50 mV (common practice, no source)."""
OVER_RATIO = 1.005
IN_COMPLIANCE_RATIO = 0.97

Wait = Callable[[float], None]


class BiasSource(Protocol):
    """A source of bias. `bias_V` is always the magnitude of the reverse bias."""

    switchable: bool
    read_V: float | None

    def prepare(self) -> None:
        """Compliance set, level zero, output on where it is switched."""

    def go_to(self, bias_V: float) -> float:
        """Ramp to a bias and let it settle; returns the level that was really set."""

    def discharge(self) -> None:
        """Down to where hands may touch, and no sooner back."""

    def off(self) -> None:
        """Switch off; raises where it cannot be said to be off."""


class SwitchedBias:
    """A bias that instruments set: ramped in steps, settled, read back, held against the rating."""

    switchable = True

    def __init__(self, link: BiasLink, *, rating_V: float, wait: Wait = time.sleep) -> None:
        self.link, self.rating_V, self._wait = link, rating_V, wait
        self.read_V: float | None = None
        self.level_V = 0.0

    def go_to(self, bias_V: float) -> float:
        """Ramp to a bias and let it settle.

        Raises
        ------
        RatingError
            Asked for, set or read beyond the rating; the ramp stops there, and the way out switches off.
        RefusedByInstrument
            The rail does not reach the bias: in compliance, or not connected.
        """
        self._hold_against_rating(bias_V, "asked for")
        for level in self._ramp(bias_V):
            self.level_V = self._set(level)
            self._hold_against_rating(self.level_V, "set")
            self._wait(1 / STEPS_PER_s)
        self._settle()
        self.read_V = self._read_voltage()
        if self.read_V is not None:
            self._hold_against_rating(self.read_V, "read back")
            if abs(self.read_V - bias_V) > READ_RATIO * bias_V + READ_ROOM_V:
                raise self._not_reached(bias_V)
        return self.level_V

    def discharge(self) -> None:
        """Down to zero, then wait until it reads below 2 V, or for five seconds where it cannot be read.

        Raises
        ------
        RefusedByInstrument
            It still reads 2 V or more after half a minute.
        """
        for level in self._ramp(0.0):
            self.level_V = self._set(level)
            self._wait(1 / STEPS_PER_s)
        self._settle()
        waited = 0.0
        while True:
            self.read_V = self._read_voltage()
            if self.read_V is None:
                self._wait(DISCHARGE_BLIND_s)
                return
            if abs(self.read_V) < DISCHARGED_V:
                return
            if waited >= DISCHARGE_LIMIT_s:
                raise RefusedByInstrument(
                    "the bias does not go down", where="bias", found=f"{self.read_V:.3g} V after {waited:.0f} s",
                    wanted=f"below {DISCHARGED_V:g} V", mend="switch off and discharge before touching anything",
                )  # fmt: skip
            self._wait(0.5)
            waited += 0.5

    def _ramp(self, target_V: float) -> list[float]:
        step = self.link.ramp_V_per_s / STEPS_PER_s
        count = max(1, math.ceil(abs(target_V - self.level_V) / step))
        start = self.level_V
        return [start + (target_V - start) * k / count for k in range(1, count)] + [target_V]

    def _settle(self) -> None:
        self._wait(max(SETTLE_TIME_CONSTANTS * self.link.source_ohm * self.link.decoupling_F, SETTLE_LEAST_s))

    def _hold_against_rating(self, bias_V: float, how: str) -> None:
        if bias_V > self.rating_V * OVER_RATIO + (READ_ROOM_V if how == "read back" else 0.0):
            raise RatingError(
                f"the bias {how} is beyond its rating",
                where="bias",
                found=f"{bias_V:.4g} V",
                wanted=f"at most {self.rating_V:g} V",
            )

    def _not_reached(self, bias_V: float) -> RefusedByInstrument:
        current = self._read_current()
        limit = self.link.compliance_A
        limited = current is not None and limit is not None and current >= IN_COMPLIANCE_RATIO * limit
        return RefusedByInstrument(
            "the rail does not reach its bias" + (": the supply is in compliance" if limited else ""),
            where="bias",
            found=f"{self.read_V:.3g} V" + ("" if current is None else f" at {current:.3g} A"),
            wanted=f"{bias_V:g} V",
            mend="look for a reversed or shorted device, or for a load on the rail"
            if limited
            else "check the wiring, and level and read_voltage in its dialect",
        )

    def _set(self, level_V: float) -> float:
        raise NotImplementedError

    def _read_voltage(self) -> float | None:
        raise NotImplementedError

    def _read_current(self) -> float | None:
        raise NotImplementedError


class SupplyBias(SwitchedBias):
    """Bias from a supply with an output, a compliance and a meter, as far as its dialect has them."""

    def __init__(self, session: ScpiSession, link: BiasLink, *, rating_V: float, wait: Wait = time.sleep) -> None:
        super().__init__(link, rating_V=rating_V, wait=wait)
        session.dialect.require(Section.BIAS, where="bias.dialect")
        self.session = session

    def prepare(self) -> None:
        """Output off, level zero, compliance, then on."""
        self.session.settle([Setting(what=BIAS["output"], value="off")])
        self.level_V = self._set(0.0)
        if self.link.compliance_A is not None:
            (compliance,) = self.session.settle([Setting(what=BIAS["compliance"], value=self.link.compliance_A)])
            if isinstance(compliance.value, float) and compliance.value > self.link.compliance_A * 1.05:
                raise RefusedByInstrument(
                    "the supply does not take the compliance", where="bias", found=f"{compliance.value:g} A",
                    wanted=f"{self.link.compliance_A:g} A", mend="state a compliance that it can hold in the bench file",
                )  # fmt: skip
        self.session.settle([Setting(what=BIAS["output"], value="on")])

    def off(self) -> None:
        """Level zero and output off.

        Raises
        ------
        RefusedByInstrument, LinkError
            It cannot be said to be off.
        """
        off, zero = Setting(what=BIAS["output"], value="off"), Setting(what=BIAS["level"], value=0.0)
        self.session.fire(off)
        self.session.fire(zero)
        output, level = self.session.settle([off, zero])
        self.level_V = 0.0
        still_up = isinstance(level.value, float) and level.value >= DISCHARGED_V
        if output.value == "on" or (still_up and output.value is None):
            raise RefusedByInstrument(
                "the supply says that its output is on", where=self.session.transport.address, wanted="output off"
            )

    def _set(self, level_V: float) -> float:
        return _really(self.session, BIAS["level"], level_V, 1)

    def _read_voltage(self) -> float | None:
        return _magnitude(self.session.read_number(BIAS["read_voltage"]))

    def _read_current(self) -> float | None:
        return _magnitude(self.session.read_number(BIAS["read_current"]))


class GeneratorBias(SwitchedBias):
    """Bias from a second channel of the generator, as a DC level; there is no meter, so nothing is read back but the level."""

    def __init__(self, generator: GeneratorDriver, link: BiasLink, *, rating_V: float, wait: Wait = time.sleep) -> None:
        super().__init__(link, rating_V=rating_V, wait=wait)
        self.generator, self.channel = generator, link.channel or 0
        self._ratio = 1.0
        if self.channel in generator.link.emitter_channels:
            raise InputError(
                "one channel cannot drive the emitter and give the bias", where="bias.channel", found=str(self.channel)
            )

    def prepare(self) -> None:
        """DC at zero, then on."""
        session = self.generator.session
        if session.dialect.absent(GENERATOR["dc_level"]):
            raise InputError("its dialect has no dc_level", where="bias.source", found="generator")
        self._switch("off")
        self._ratio = self.generator.stated_ratio(self.channel)
        session.settle([Setting(what=GENERATOR["shape"], value="dc", channel=self.channel)])
        self.level_V = self._set(0.0)
        self._switch("on")

    def off(self) -> None:
        """Output off and level zero."""
        self.generator.session.fire(Setting(what=GENERATOR["output"], value="off", channel=self.channel))
        self._switch("off")
        self.level_V = self._set(0.0)

    def _switch(self, to: str) -> None:
        setting = Setting(what=GENERATOR["output"], value=to, channel=self.channel)
        (output,) = self.generator.session.settle([setting])
        if output.value is not None and output.value != to:
            raise RefusedByInstrument(
                f"the bias channel does not switch {to}", where=f"function generator, channel {self.channel}"
            )

    def _set(self, level_V: float) -> float:
        stated = level_V * self._ratio
        return _really(self.generator.session, GENERATOR["dc_level"], stated, self.channel) / self._ratio

    def _read_voltage(self) -> float | None:
        return None

    def _read_current(self) -> float | None:
        return None


class BiasByHand:
    """A rail that somebody sets: asked for, read off a meter, never claimed to be off."""

    switchable = False

    def __init__(self, hands: Hands, *, rating_V: float) -> None:
        self.hands, self.rating_V = hands, rating_V
        self.read_V: float | None = None

    def prepare(self) -> None:
        """Nothing can be set from here."""

    def go_to(self, bias_V: float) -> float:
        """Ask for a bias, and hold what the meter reads against plan and rating."""
        if bias_V > self.rating_V * OVER_RATIO:
            raise RatingError(
                "the bias asked for is beyond its rating",
                where="bias",
                found=f"{bias_V:g} V",
                wanted=f"at most {self.rating_V:g} V",
            )
        read = self.hands.set_rail(bias_V)
        if read > self.rating_V * OVER_RATIO + READ_ROOM_V:
            raise RatingError(
                "the bias read is beyond its rating", where="bias", found=f"{read:g} V", wanted=f"at most {self.rating_V:g} V",
                mend="switch the rail off now",
            )  # fmt: skip
        if abs(read - bias_V) > READ_RATIO * bias_V + READ_ROOM_V:
            raise InputError(
                "the rail is not at the bias of the point", where="bias", found=f"{read:g} V", wanted=f"{bias_V:g} V",
                mend="set it and go on with --resume",
            )  # fmt: skip
        self.read_V = read
        return bias_V

    def discharge(self) -> None:
        """Ask for zero, and believe the meter only."""
        read = self.hands.set_rail(0.0)
        if abs(read) >= DISCHARGED_V:
            raise InputError(
                "the rail is still up", where="bias", found=f"{read:g} V", wanted=f"below {DISCHARGED_V:g} V"
            )
        self.read_V = read

    def off(self) -> None:
        """Nothing can be switched off from here; that is said by whoever ends the run."""


def _really(session: ScpiSession, what: Operation, level_V: float, channel: int) -> float:
    (level,) = session.settle([Setting(what=what, value=level_V, channel=channel)])
    if level.value is None:
        return level_V
    if not isinstance(level.value, float) or not math.isfinite(level.value):
        raise LinkError("the level cannot be read back", where=str(what), found=str(level.value))
    if abs(level.value - level_V) > READ_RATIO * abs(level_V) + READ_ROOM_V:
        raise RefusedByInstrument(
            "another level was set than asked for", where=f"{session.transport.address}, {what}", found=f"{level.value:g} V",
            wanted=f"{level_V:g} V", mend="check the limits of the source, and scale and get of this operation in its dialect",
        )  # fmt: skip
    return level.value


def _magnitude(reading: float | None) -> float | None:
    return None if reading is None or not math.isfinite(reading) else abs(reading)
