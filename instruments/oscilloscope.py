"""The oscilloscope as the sweep needs it: channels, ranges, time, trigger, records in volts."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.bench import OscilloscopeLink
from darkedge.analysis.errors import LinkError, RefusedByInstrument
from darkedge.instruments.dialect import SCOPE, FloatArray, volts
from darkedge.instruments.operations import Section
from darkedge.instruments.session import ScpiSession, Setting, Settled

HIGH_INPUT_OHM = 1e6
ANSWER_MARGIN_s = 5.0
_POLL_s = 0.02
_SAME_RATIO = 0.02
OTHER_TRIES = (*(1.25**k for k in range(18)), 0.4, 0.1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Window:
    """Which volts a channel shows, at the probe's tip."""

    range_V: float
    offset_V: float = 0.0

    @property
    def low_V(self) -> float:
        """Lower end."""
        return self.offset_V - self.range_V / 2

    @property
    def high_V(self) -> float:
        """Upper end."""
        return self.offset_V + self.range_V / 2


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelState:
    """What a channel was really set to; `None` is not known."""

    window: Window
    coupling: str | None
    input_ohm: float | None
    bandwidth_limited: bool | None
    probe_ratio: float
    volts_per_code: float | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Traces:
    """Records of one acquisition: volts at the probe's tip by signal, on one even time axis."""

    volts: Mapping[str, FloatArray]
    start_s: float
    step_s: float
    averages: int

    def time_s(self) -> FloatArray:
        """Times of the samples."""
        size = next(iter(self.volts.values())).size
        return self.start_s + self.step_s * np.arange(size, dtype=np.float64)


class OscilloscopeDriver:
    """Says what is wanted; the session's dialect says which commands do it."""

    def __init__(
        self,
        session: ScpiSession,
        link: OscilloscopeLink,
        *,
        wait: Callable[[float], None] = time.sleep,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        session.dialect.require(Section.OSCILLOSCOPE, where="oscilloscope.dialect")
        self.session, self.link = session, link
        self._wait, self._now = wait, now
        self._states: dict[str, ChannelState] = {}
        self._codes = session.dialect.waveform.codes if session.dialect.waveform else None
        self.span_s, self.start_s, self.points, self.averages = math.nan, math.nan, 0, 1

    def prepare(self, signals: Sequence[str]) -> None:
        """DC coupling, high input resistance, no bandwidth limit, the probe's ratio, on every channel in use."""
        self._states.clear()
        for signal in signals:
            channel = self._channel(signal)
            ratio = self.link.probe_ratio.get(signal, 1.0)
            coupling, resistance, limit, told_ratio = self.session.settle(
                [
                    Setting(what=SCOPE["coupling"], value="dc", channel=channel),
                    Setting(what=SCOPE["input_resistance"], value=HIGH_INPUT_OHM, channel=channel),
                    Setting(what=SCOPE["bandwidth_limit"], value="off", channel=channel),
                    Setting(what=SCOPE["probe_ratio"], value=ratio, channel=channel),
                ]
            )
            if coupling.value == "ac":
                raise RefusedByInstrument(
                    "the channel stays AC coupled",
                    where=f"oscilloscope, channel {channel} ({signal})",
                    wanted="DC coupling",
                )
            self._check_ratio(told_ratio, ratio, signal)
            tip_ohm = None if not isinstance(resistance.value, float) else resistance.value * ratio
            self._states[signal] = ChannelState(
                window=Window(range_V=math.nan),
                coupling=None if coupling.value is None else str(coupling.value).upper(),
                input_ohm=tip_ohm,
                bandwidth_limited=None if limit.value is None else limit.value == "on",
                probe_ratio=ratio,
                volts_per_code=None,
            )

    def state(self, signal: str) -> ChannelState:
        """What a channel was really set to."""
        return self._states[signal]

    def show(self, signal: str, window: Window) -> Window:
        """Set the range and offset of a channel; returns what the scope really took.

        A range finer than the scope has, or an offset that it cannot hold there, is refused by some; then a wider one is tried, and a narrower one where it is too wide already.

        Raises
        ------
        RefusedByInstrument
            Nor does it take one up to forty times as wide, nor a tenth.
        """
        own = self._own_ratio(signal)
        if self.session.dialect.absent(SCOPE["channel_offset"]):
            window = Window(range_V=2 * max(abs(window.low_V), abs(window.high_V)))
        refusal: RefusedByInstrument | None = None
        for wider in OTHER_TRIES:
            tried = Window(range_V=wider * window.range_V, offset_V=window.offset_V)
            try:
                taken, offset = self._settle_window(signal, tried, own)
            except RefusedByInstrument as error:
                refusal = refusal or error
                continue
            return self._note_window(signal, tried, taken, offset, own)
        assert refusal is not None  # every try was refused
        raise refusal

    def _settle_window(self, signal: str, window: Window, own: float) -> list[Settled]:
        channel = self._channel(signal)
        return self.session.settle(
            [
                Setting(what=SCOPE["channel_range"], value=window.range_V / own, channel=channel),
                Setting(what=SCOPE["channel_offset"], value=window.offset_V / own, channel=channel),
            ]
        )

    def _note_window(self, signal: str, window: Window, taken: Settled, offset: Settled, own: float) -> Window:
        really = Window(
            range_V=own * _number(taken, window.range_V / own, "channel_range"),
            offset_V=own * _number(offset, window.offset_V / own if taken.read_back and offset.read_back else 0.0, ""),
        )
        before = self._states[signal]
        self._states[signal] = ChannelState(
            window=really,
            coupling=before.coupling,
            input_ohm=before.input_ohm,
            bandwidth_limited=before.bandwidth_limited,
            probe_ratio=before.probe_ratio,
            volts_per_code=really.range_V / self._codes if self._codes else None,
        )
        return really

    def time(self, *, start_s: float, span_s: float, points: int, averages: int) -> None:
        """Set which stretch of time around the trigger is recorded, with how many points, averaged how often.

        Raises
        ------
        RefusedByInstrument
            The stretch that the scope really took does not hold what was asked for.
        """
        how = self.session.dialect.mapped(SCOPE["position"])
        centred = how is not None and how.counts_from == "centre"
        span, count, taken = self.session.settle(
            [
                Setting(what=SCOPE["span"], value=span_s),
                Setting(what=SCOPE["points"], value=float(points)),
                Setting(what=SCOPE["averages"], value=float(averages)),
            ]
        )
        self.span_s = _number(span, span_s, "span")
        self.points = round(_number(count, 0.0, "points"))
        self.averages = max(1, round(_number(taken, 1.0, "averages")))
        shift = self.span_s / 2 if centred else 0.0
        (place,) = self.session.settle([Setting(what=SCOPE["position"], value=start_s + shift)])
        self.start_s = _number(place, start_s + shift, "position") - shift
        room = _SAME_RATIO * span_s
        if self.start_s > start_s + room or self.start_s + self.span_s < start_s + span_s - room:
            raise RefusedByInstrument(
                "the scope does not show the stretch of time that was asked for",
                where="oscilloscope",
                found=f"{self.start_s:g} s to {self.start_s + self.span_s:g} s",
                wanted=f"{start_s:g} s to {start_s + span_s:g} s",
                mend="check span and position in its dialect",
            )

    def trigger(self, signal: str | None, *, level_V: float = 0.0) -> None:
        """Trigger on the rising edge of a signal, or run free where it is `None`."""
        if signal is None:
            self.session.settle([Setting(what=SCOPE["trigger_source"], value="none")])
            return
        channel, own = self._channel(signal), self._own_ratio(signal)
        source, _, slope = self.session.settle(
            [
                Setting(what=SCOPE["trigger_source"], value="channel", channel=channel),
                Setting(what=SCOPE["trigger_level"], value=level_V / own, channel=channel),
                Setting(what=SCOPE["trigger_slope"], value="rising", channel=channel),
            ]
        )
        if (source.read_back and source.value != "channel") or slope.value == "falling":
            raise RefusedByInstrument(
                "the trigger is not what was asked for", where="oscilloscope", found=str(source.value)
            )

    def acquire(self, signals: Sequence[str], *, period_s: float) -> Traces:
        """Arm, wait until the record is whole, and fetch it.

        Parameters
        ----------
        signals : sequence of str
            `drive`, `output` ...
        period_s : float
            Of the trigger: with span and averages it says how long to wait.

        Raises
        ------
        LinkError
            No trigger in time, no record, or one that cannot be read.
        """
        limit_s = self.averages * (self.span_s + 2 * period_s) * 1.5 + ANSWER_MARGIN_s
        self.session.act(SCOPE["arm"], checked=False)
        self._await(limit_s)
        found: dict[str, FloatArray] = {}
        step = start = None
        for signal in signals:
            codes, preamble = self.session.waveform(channel=self._channel(signal))
            found[signal] = volts(codes, preamble) * self._own_ratio(signal)
            if preamble.volts_per_code is not None:
                self._note_code(signal, preamble.volts_per_code * self._own_ratio(signal))
            step, start = preamble.step_s, preamble.start_s
        sizes = {values.size for values in found.values()}
        if len(sizes) > 1 or (self.points and abs(sizes.copy().pop() / self.points - 1) > _SAME_RATIO):
            raise LinkError(
                "the record is not as long as was asked for", where="oscilloscope",
                found=", ".join(f"{size} samples" for size in sorted(sizes)), wanted=f"{self.points}",
                mend="a part was lost; if it happens again, check points and read_waveform in its dialect",
            )  # fmt: skip
        size = sizes.pop()
        return Traces(
            volts=found,
            start_s=self.start_s if start is None else start,
            step_s=self.span_s / size if step is None else step,
            averages=self.averages,
        )

    def stop(self) -> None:
        """Stop whatever runs; never raises."""
        try:
            self.session.act(SCOPE["stop"], checked=False)
        except LinkError:
            return

    def _await(self, limit_s: float) -> None:
        what = SCOPE["wait"]
        how = self.session.dialect.mapped(what)
        if how is None:
            self._wait(limit_s)
            return
        end = self._now() + limit_s
        while True:
            try:
                answer = self.session.ask(what, limit_s=limit_s).strip()
            except LinkError as error:
                self._give_up()
                raise LinkError(
                    "no trigger, or no answer while waiting for one",
                    where="oscilloscope",
                    found=error.found,
                    mend="check that the drive reaches its channel, and the trigger level",
                ) from error
            if answer == how.done:
                return
            if self._now() > end:
                self._give_up()
                raise LinkError(
                    "no trigger in time", where="oscilloscope", found=f"still {answer!r} after {limit_s:.0f} s",
                    wanted=repr(how.done), mend="check that the drive reaches its channel, and the trigger level",
                )  # fmt: skip
            self._wait(_POLL_s)

    def _give_up(self) -> None:
        """After a wait without an answer: a fresh link, and the scope stopped."""
        self.session.transport.reopen()
        self.stop()

    def _channel(self, signal: str) -> int:
        return self.link.channels[signal]

    def _own_ratio(self, signal: str) -> float:
        """What volts must be multiplied by here because the scope does not know the probe."""
        if self.session.dialect.absent(SCOPE["probe_ratio"]):
            return self.link.probe_ratio.get(signal, 1.0)
        return 1.0

    def _note_code(self, signal: str, volts_per_code: float) -> None:
        before = self._states[signal]
        self._states[signal] = ChannelState(
            window=before.window, coupling=before.coupling, input_ohm=before.input_ohm,
            bandwidth_limited=before.bandwidth_limited, probe_ratio=before.probe_ratio, volts_per_code=abs(volts_per_code),
        )  # fmt: skip

    def _check_ratio(self, told: Settled, ratio: float, signal: str) -> None:
        if told.read_back and isinstance(told.value, float) and abs(told.value / ratio - 1) > _SAME_RATIO:
            raise RefusedByInstrument(
                "the scope does not take the probe's ratio", where=f"oscilloscope, {signal}", found=f"{told.value:g}",
                wanted=f"{ratio:g}", mend="correct oscilloscope.probe_ratio in the bench file",
            )  # fmt: skip


def _number(settled: Settled, instead: float, name: str) -> float:
    """What was really set; `instead` where it cannot be asked."""
    value = settled.value
    if value is None:
        return instead
    if not isinstance(value, float) or not math.isfinite(value):
        raise LinkError("not a finite number", where=f"oscilloscope.{name}", found=str(value))
    return value
