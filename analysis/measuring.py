"""From captures to measurements: each kind of capture to the part that measures it."""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import date, datetime

from darkedge.analysis.captures import Capture, Conditions, Kind
from darkedge.analysis.dark.current import dark_current
from darkedge.analysis.dark.traces import TraceSummary, summarise_trace
from darkedge.analysis.errors import DarkedgeError
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.waveform.jitter import flag_jittered
from darkedge.analysis.waveform.measure import measure_pulse_capture, measure_pulse_captures
from darkedge.analysis.waveform.reference import TEN_FIFTY_NINETY, ReferenceLevels

FixtureFor = Callable[[str], Fixture]
"""Gives the fixture that holds for a capture, by the capture's name."""


GROUP = 48
"""Captures that are read and measured together."""

MOST_SAMPLES = 2_000_000
"""Samples of outputs beyond which a group is measured in parts, so that memory stays that of a few captures."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """A capture that was read and could not be measured, with the reason."""

    capture: str
    error: DarkedgeError


@dataclass(frozen=True, slots=True, kw_only=True)
class StillTrace:
    """A dark or offset trace, kept as its summary until all offset traces of the run are known."""

    name: str
    element: int
    conditions: Conditions
    summary: TraceSummary
    remarks: tuple[str, ...]

    @property
    def bench_place(self) -> tuple[object, ...]:
        """What a dark trace and its offset traces have in common."""
        known = self.conditions
        folder = self.name.rpartition("/")[0]
        return folder, known.run, known.lot, known.device, self.element, known.load_ohm, known.volts_per_code

    @property
    def order(self) -> tuple[str, str]:
        """Order in which the traces of a run were taken."""
        return (self.conditions.point or "").zfill(9), self.name


def refused_measurement(name: str) -> Measurement:
    """The row of a file that was refused: its name, empty quantities, and the flag."""
    return Measurement(capture=name, element=None, conditions=Conditions(), flags=("refused",))


def measure_captures(
    captures: Iterable[Capture],
    *,
    fixture_for: FixtureFor = lambda _name: UNKNOWN_FIXTURE,
    today: date | None = None,
    reference: ReferenceLevels = TEN_FIFTY_NINETY,
) -> tuple[list[Measurement], list[Failure]]:
    """Measure many captures; never raises for one of them.

    Pulse and reference captures (and captures that do not say their kind) are measured as pulses. A dark
    trace is held against the offset traces taken just before and just after it in the same run, with the
    same device, element, load and range. Waveforms are not kept: memory stays that of one capture.

    Parameters
    ----------
    captures : iterable of Capture
        Read one at a time.
    fixture_for : callable
        The fixture that holds for a capture, by name.
    today : date, optional
        A fixture that had expired when a capture was taken is flagged; this day stands in for captures that do not say
        when they were taken.
    reference : ReferenceLevels
        Where the instants of pulses are taken.

    Returns
    -------
    list of Measurement
        One for each capture and element, in the order of the captures. A capture that could not be
        measured has one row with the flag `refused`.
    list of Failure
        The reasons for those.
    """
    found: list[Measurement | StillTrace] = []
    failures: list[Failure] = []
    for group in _in_groups(captures):
        measured = measure_group([(capture, fixture_for(capture.name)) for capture in group], reference)
        for capture, result in zip(group, measured, strict=True):
            if isinstance(result, DarkedgeError):
                failures.append(Failure(capture=capture.name, error=result))
                found.append(refused_measurement(capture.name))
            else:
                found.extend(result)
    return finish_measuring(found, fixture_for=fixture_for, today=today), failures


def _in_groups(captures: Iterable[Capture]) -> Iterator[list[Capture]]:
    group: list[Capture] = []
    for capture in captures:
        group.append(capture)
        if len(group) == GROUP:
            yield group
            group = []
    if group:
        yield group


def measure_one(
    capture: Capture, fixture: Fixture, reference: ReferenceLevels = TEN_FIFTY_NINETY
) -> Sequence[Measurement | StillTrace]:
    """Measure one capture as far as it goes by itself: a still trace waits for the offset traces of its run.

    Raises
    ------
    DarkedgeError
        The capture cannot be measured.
    """
    (found,) = measure_group([(capture, fixture)], reference)
    if isinstance(found, DarkedgeError):
        raise found
    return found


def measure_group(
    captures: Sequence[tuple[Capture, Fixture]], reference: ReferenceLevels = TEN_FIFTY_NINETY
) -> list[Sequence[Measurement | StillTrace] | DarkedgeError]:
    """Measure a few captures together, as far as they go by themselves; one that cannot be measured has its error in its place.

    Captures are taken together as long as they hold less than two million samples.
    """
    found: list[Sequence[Measurement | StillTrace] | DarkedgeError] = [()] * len(captures)
    pulses: list[int] = []
    held = 0
    for place, (capture, _) in enumerate(captures):
        if capture.conditions.kind in (Kind.DARK, Kind.OFFSET):
            found[place] = _summaries_or_error(capture)
            continue
        pulses.append(place)
        held += sum(record.signal_V.size for record in capture.outputs.values())
        if held > MOST_SAMPLES:
            _measure_pulses(captures, pulses, reference, found)
            pulses, held = [], 0
    _measure_pulses(captures, pulses, reference, found)
    return found


def _measure_pulses(
    captures: Sequence[tuple[Capture, Fixture]],
    places: Sequence[int],
    reference: ReferenceLevels,
    found: list[Sequence[Measurement | StillTrace] | DarkedgeError],
) -> None:
    """Measure the pulse captures at some places; where one of them raises, each by itself."""
    try:
        for place, rows in zip(
            places, measure_pulse_captures([captures[k] for k in places], reference=reference), strict=True
        ):
            found[place] = rows
    except DarkedgeError:
        for place in places:
            capture, fixture = captures[place]
            try:
                found[place] = measure_pulse_capture(capture, fixture=fixture, reference=reference)
            except DarkedgeError as error:
                found[place] = error


def _summaries_or_error(capture: Capture) -> Sequence[StillTrace] | DarkedgeError:
    try:
        return _summaries(capture)
    except DarkedgeError as error:
        return error


def finish_measuring(
    found: Sequence[Measurement | StillTrace], *, fixture_for: FixtureFor, today: date | None = None
) -> list[Measurement]:
    """Measure the still traces, now that all are known, and flag what was taken with an expired fixture; the order stays."""
    rows: list[Measurement] = [refused_measurement("")] * len(found)
    still = [(place, item) for place, item in enumerate(found) if isinstance(item, StillTrace)]
    for place, item in enumerate(found):
        if isinstance(item, Measurement):
            rows[place] = item
    for (place, _), row in zip(still, _still_measurements([trace for _, trace in still], fixture_for), strict=True):
        rows[place] = row
    return flag_jittered([_with_expiry(row, fixture_for(row.capture), today) for row in rows])


def _with_expiry(row: Measurement, fixture: Fixture, today: date | None) -> Measurement:
    day = _taken_on(row.conditions) or today
    if day is None or not fixture.expired(day) or "refused" in row.flags:
        return row
    return replace(row, flags=(*row.flags, "fixture_expired"))


def _taken_on(conditions: Conditions) -> date | None:
    """The day a capture was taken, `None` where it does not say."""
    try:
        return None if conditions.taken_utc is None else datetime.fromisoformat(conditions.taken_utc).date()
    except ValueError:
        return None


def _summaries(capture: Capture) -> list[StillTrace]:
    known = capture.conditions
    return [
        StillTrace(
            name=capture.name,
            element=known.element if known.element is not None and len(capture.outputs) == 1 else element,
            conditions=known,
            summary=summarise_trace(record, known),
            remarks=capture.remarks,
        )
        for element, record in sorted(capture.outputs.items())
    ]


def _still_measurements(still: Sequence[StillTrace], fixture_for: FixtureFor) -> Iterable[Measurement]:
    offsets: dict[tuple[object, ...], list[StillTrace]] = {}
    for trace in sorted(still, key=lambda t: t.order):
        if trace.conditions.kind is Kind.OFFSET:
            offsets.setdefault(trace.bench_place, []).append(trace)
    for trace in still:
        quantities: dict[str, Estimate] = {}
        flags: tuple[str, ...] = trace.summary.flags
        if trace.conditions.kind is Kind.DARK:
            current, flags = dark_current(
                trace.summary,
                [o.summary for o in _around(trace, offsets.get(trace.bench_place, []))],
                conditions=trace.conditions,
                fixture=fixture_for(trace.name),
            )
            if current is not None:
                quantities["dark_current_A"] = current
        yield Measurement(
            capture=trace.name,
            element=trace.element,
            conditions=trace.conditions,
            quantities=quantities,
            flags=(*trace.remarks, *flags),
            levels="mean",
            estimator="offset subtracted" if quantities else None,
        )


def _around(trace: StillTrace, offsets: Sequence[StillTrace]) -> Sequence[StillTrace]:
    """The offset traces taken just before and just after."""
    after = bisect_left(offsets, trace.order, key=lambda o: o.order)
    return offsets[max(0, after - 1) : after + 1]
