"""The function generator as the sweep needs it: pulses of light for each element."""

from __future__ import annotations

import math
from dataclasses import dataclass

from darkedge.analysis.bench import GeneratorLink
from darkedge.analysis.errors import LinkError, RatingError, RefusedByInstrument
from darkedge.analysis.plan import Plan
from darkedge.instruments.dialect import GENERATOR
from darkedge.instruments.operations import Section
from darkedge.instruments.session import ScpiSession, Setting

HIGH_IMPEDANCE_OHM = math.inf
_SAME_RATIO = 0.02
_OVER_RATIO = 1.01
_OVER_V = 0.01
"""What is read back may be coarser than what was asked for by this much before it counts as something else."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Pulses:
    """What the emitter really gets, worked out from what the generator says it set."""

    emitter_current_A: float
    pulse_width_s: float
    period_s: float
    high_V: float
    low_V: float


class GeneratorDriver:
    """Drives the emitter of one element after another; levels are always those without a load, behind `source_ohm`."""

    def __init__(self, session: ScpiSession, link: GeneratorLink) -> None:
        session.dialect.require(Section.FUNCTION_GENERATOR, where="function_generator.dialect")
        self.session, self.link = session, link
        self.may_be_on = False

    def channel(self, element: int) -> int:
        """Generator channel of an element's emitter."""
        return self.link.emitter_channels[element - 1]

    def open_level_V(self, current_A: float, plan: Plan) -> float:
        """Level without a load that drives a current through source, series resistor and emitter."""
        return plan.emitter.forward_V + current_A * (plan.emitter.series_ohm + self.link.source_ohm)

    def stated_ratio(self, channel: int) -> float:
        """What a level without a load is multiplied by to be stated: asked of the generator after it was told.

        Raises
        ------
        RefusedByInstrument
            The generator does not take the load impedance it is told: levels would be wrong by up to a factor of two.
        """
        absent = self.session.dialect.absent(GENERATOR["load_impedance"])
        if absent is not None:
            if not isinstance(absent.value, float):
                raise RefusedByInstrument(
                    "nobody says into which load the generator states its levels", where="function generator",
                    wanted="load_impedance in its dialect, or absent with value = the load in ohm",
                )  # fmt: skip
            return self._ratio(absent.value)
        wanted = [HIGH_IMPEDANCE_OHM, self.link.source_ohm]
        found: list[str] = []
        for load_ohm in wanted:
            try:
                (told,) = self.session.settle(
                    [Setting(what=GENERATOR["load_impedance"], value=load_ohm, channel=channel)]
                )
            except RefusedByInstrument as error:
                found.append(error.what)
                continue
            real = told.value if isinstance(told.value, float) else load_ohm
            if (math.isinf(load_ohm) and real > 1e3 * self.link.source_ohm) or abs(real / load_ohm - 1) < _SAME_RATIO:
                return self._ratio(real)
            found.append(f"{real:g} ohm after {load_ohm:g}")
        raise RefusedByInstrument(
            "the generator does not take the load impedance; its levels would be wrong by up to a factor of two",
            where=f"function generator, channel {channel}",
            found=", ".join(found),
            wanted="a high impedance, or its own source resistance",
            mend="correct load_impedance in its dialect, or function_generator.source_ohm in the bench file",
        )

    def _ratio(self, load_ohm: float) -> float:
        return 1.0 if math.isinf(load_ohm) else load_ohm / (load_ohm + self.link.source_ohm)

    def pulse(self, *, element: int, current_A: float, width_s: float, period_s: float, plan: Plan) -> Pulses:
        """Drive an element's emitter with pulses, the other emitters off; returns what it really gets.

        Raises
        ------
        RatingError
            What is asked for, or what the generator says it set, is beyond a rating of the plan; the output is off.
        """
        self.off()
        channel = self.channel(element)
        ratio = self.stated_ratio(channel)
        high_V, low_V = self.open_level_V(current_A, plan), plan.drive.low_V
        self._guard(high_V, low_V, width_s / period_s, plan)
        self.session.settle([Setting(what=GENERATOR["shape"], value="pulse", channel=channel)])
        self.set_time(channel, width_s, period_s)
        self.set_levels(channel, high_V * ratio, low_V * ratio)
        real = self._read(channel, ratio, plan)
        self._guard(real.high_V, real.low_V, real.pulse_width_s / real.period_s, plan)
        self._as_asked(real, high_V, width_s, period_s)
        self.may_be_on = True
        (output,) = self.session.settle([Setting(what=GENERATOR["output"], value="on", channel=channel)])
        if output.value == "off":
            raise RefusedByInstrument("the output does not switch on", where=f"function generator, channel {channel}")
        return real

    def off(self) -> None:
        """Switch off every channel that drives an emitter.

        Raises
        ------
        RefusedByInstrument, LinkError
            It cannot be said that all are off.
        """
        channels = self.link.emitter_channels
        settings = [Setting(what=GENERATOR["output"], value="off", channel=c) for c in channels]
        for setting in settings:
            self.session.fire(setting)
        found = self.session.settle(settings)
        still_on = [str(channel) for channel, output in zip(channels, found, strict=True) if output.value == "on"]
        if still_on:
            raise RefusedByInstrument(
                f"the function generator says that output {', '.join(still_on)} is on", where=self.session.transport.address,
                wanted="off",
            )  # fmt: skip
        self.may_be_on = False

    def set_time(self, channel: int, width_s: float, period_s: float) -> None:
        """Width and period in the order that never makes the pulse longer than the period."""
        now = self.session.read_number(GENERATOR["period"], channel=channel)
        width = Setting(what=GENERATOR["pulse_width"], value=width_s, channel=channel)
        period = Setting(what=GENERATOR["period"], value=period_s, channel=channel)
        self.session.settle([period, width] if now is None or period_s >= now else [width, period])

    def set_levels(self, channel: int, high_V: float, low_V: float) -> None:
        """Both levels in the order that never puts the high one below the low one."""
        now = self.session.read_number(GENERATOR["low"], channel=channel)
        high = Setting(what=GENERATOR["high"], value=high_V, channel=channel)
        low = Setting(what=GENERATOR["low"], value=low_V, channel=channel)
        self.session.settle([high, low] if now is None or high_V > now else [low, high])

    def _read(self, channel: int, ratio: float, plan: Plan) -> Pulses:
        values: dict[str, float] = {}
        for name in ("high", "low", "pulse_width", "period"):
            found = self.session.read_number(GENERATOR[name], channel=channel)
            if found is None or not math.isfinite(found):
                raise LinkError(
                    "what was set cannot be read back", where=f"function generator, channel {channel}, {name}",
                    mend=f"give {name} a get in its dialect: ratings are held against what is read back",
                )  # fmt: skip
            values[name] = found
        high_V, low_V = values["high"] / ratio, values["low"] / ratio
        emitter = plan.emitter
        current = (high_V - emitter.forward_V) / (emitter.series_ohm + self.link.source_ohm)
        return Pulses(
            emitter_current_A=max(current, 0.0),
            pulse_width_s=values["pulse_width"],
            period_s=values["period"],
            high_V=high_V,
            low_V=low_V,
        )

    def _guard(self, high_V: float, low_V: float, duty: float, plan: Plan) -> None:
        emitter, ratings = plan.emitter, plan.ratings
        current = (high_V - emitter.forward_V) / (emitter.series_ohm + self.link.source_ohm)
        for what, found, rating, unit in (
            ("peak current of the emitter", current, ratings.emitter_peak_current_A, "A"),
            ("mean current of the emitter", current * duty, ratings.emitter_mean_current_A, "A"),
            ("reverse voltage of the emitter", -low_V, ratings.emitter_reverse_V, "V"),
        ):
            beyond = rating is not None and found > rating * _OVER_RATIO + (0 if unit == "A" else _OVER_V)
            if beyond or (rating is None and unit == "V" and found > _OVER_V):
                raise RatingError(
                    f"the {what} would be beyond its rating", where="function generator", found=f"{found:.4g} {unit}",
                    wanted="a rating in the plan" if rating is None else f"at most {rating:g} {unit}",
                )  # fmt: skip

    @staticmethod
    def _as_asked(real: Pulses, high_V: float, width_s: float, period_s: float) -> None:
        """A pulse that is not the one of the plan is not measured."""
        for name, found, wanted, room in (
            ("level", real.high_V, high_V, _SAME_RATIO * abs(high_V) + _OVER_V),
            ("pulse width", real.pulse_width_s, width_s, _SAME_RATIO * width_s),
            ("period", real.period_s, period_s, _SAME_RATIO * period_s),
        ):
            if abs(found - wanted) > room:
                raise RefusedByInstrument(
                    f"the generator set another {name} than asked for", where="function generator", found=f"{found:.6g}",
                    wanted=f"{wanted:.6g}", mend="choose points that it can drive, or check its dialect",
                )  # fmt: skip
