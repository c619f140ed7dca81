"""The way in that every command shares: from paths to measurements, with what was refused and why."""

from __future__ import annotations

import multiprocessing
import sys
import threading
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from datetime import date
from pathlib import Path

from darkedge.analysis.captures import Capture, Conditions
from darkedge.analysis.errors import CaptureError, DarkedgeError, FixtureError, InputError
from darkedge.analysis.files.archive import archive_fixtures, is_archive, write_archive
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.cluster import over_cluster
from darkedge.analysis.files.conditions import ConditionsTable, read_conditions
from darkedge.analysis.files.fixture_file import read_fixture
from darkedge.analysis.files.gather import Source, find_captures
from darkedge.analysis.files.joining import SpreadFiles
from darkedge.analysis.files.load import Refusal, load_capture
from darkedge.analysis.files.names import NamePattern
from darkedge.analysis.files.roles import ChannelRoles
from darkedge.analysis.files.runs import RunContext, read_run_context
from darkedge.analysis.files.tables import is_table, read_table
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, CapturedEdge, Fixture
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.measuring import GROUP, StillTrace, finish_measuring, measure_group, refused_measurement
from darkedge.analysis.plan import Plan
from darkedge.analysis.waveform.reference import TEN_FIFTY_NINETY, ReferenceLevels
from darkedge.analysis.waveform.reference_captures import channel_skew, reference_edge

Progress = Callable[[int, int], None]


@dataclass(frozen=True, slots=True, kw_only=True)
class Refused:
    """A file that gave no measurement, with the reason."""

    name: str
    error: DarkedgeError


@dataclass(frozen=True, slots=True, kw_only=True)
class Intake:
    """What the paths held.

    `measurements` has a row for every capture and element, in the order found; a refused file has one row with the
    flag `refused`, and its reason stands in `refusals`. `sources` finds a capture's file again by its name.
    """

    measurements: tuple[Measurement, ...]
    refusals: tuple[Refused, ...] = ()
    sources: Mapping[str, Source] = field(default_factory=dict)
    fixtures: Mapping[str, Fixture] = field(default_factory=dict)
    contexts: tuple[RunContext, ...] = ()
    reread: Callable[[str], Capture] | None = None

    @property
    def exit_status(self) -> int:
        """2 where a file was refused, else 0: a batch does all it can and says so at the end."""
        return 2 if self.refusals else 0

    def fixture_for(self, capture: str) -> Fixture:
        """The fixture that holds for a capture."""
        return self.fixtures.get(capture, UNKNOWN_FIXTURE)


def take_in(
    paths: Sequence[Path],
    *,
    names: str | None = None,
    conditions: Path | None = None,
    fixture: Path | None = None,
    channels: str | None = None,
    today: date,
    jobs: int = 1,
    cluster: str | None = None,
    reference: ReferenceLevels = TEN_FIFTY_NINETY,
    progress: Progress | None = None,
) -> Intake:
    """Read and measure everything under the paths.

    Captures, folders, runs and lots are measured; a saved measurement table is taken as it is. The fixture of a capture is that given
    here, else the one that the plan of its run names.

    Parameters
    ----------
    names, channels : str, optional
        Pattern of the file names, roles of the channels, as the options of the same name.
    conditions, fixture : Path, optional
        Table of conditions; fixture file for all captures.
    today : date
        Tells an expired fixture where a capture does not say when it was taken.
    jobs : int
        Processes that read and measure. The result is the same, in the same order, for any number.
    cluster : str, optional
        Address of a Dask scheduler whose workers read and measure instead.
    reference : ReferenceLevels
        Where the instants of pulses are taken.
    progress : callable, optional
        Called with the captures done and the number of all.

    Raises
    ------
    InputError
        The request as a whole is wrong: a path that is not there, a pattern, table, plan or fixture that is wrong.
    """
    if cluster is not None:
        paths = [path.resolve() for path in paths]  # workers stand in folders of their own
    pattern = None if names is None else NamePattern(names)
    roles = None if channels is None else ChannelRoles.parse(channels)
    stated = None if conditions is None else read_conditions(conditions)
    given = None if fixture is None else read_fixture(fixture, edge_time=_edge_time, skew=_skew)
    tables = [path for path in paths if path.is_file() and is_table(path) and not is_archive(path)]
    rest = [path for path in paths if path not in tables]
    if tables and (pattern or stated):
        raise InputError(
            "a saved table has its conditions already",
            where=str(tables[0]),
            mend="give --names and --conditions with captures, or correct the table",
        )
    rows = [row for table in tables for row in read_table(table)]
    joining = SpreadFiles(roles=roles, names=pattern, conditions=stated)
    reading = _Reading(find_captures(rest, joining) if rest else [], pattern, stated, roles, given, reference)
    reading.check_stated()
    found: list[Measurement | StillTrace] = []
    refused: list[Refused] = []
    for done, taken in enumerate(take_each(reading, jobs=jobs, cluster=cluster), start=1):
        found.extend(taken.rows)
        if taken.refused is not None:
            refused.append(taken.refused)
        if progress is not None:
            progress(done, len(reading.sources))
    measured = finish_measuring(
        found, fixture_for=lambda name: reading.fixtures.get(name, UNKNOWN_FIXTURE), today=today
    )
    rows += measured
    fixtures = dict(reading.fixtures)
    if given is not None:
        fixtures |= {row.capture: given for row in rows}
    return Intake(
        measurements=tuple(rows),
        refusals=tuple(refused),
        sources=reading.sources,
        fixtures=fixtures,
        contexts=tuple(reading.contexts.values()),
        reread=reading.again,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Packed:
    """What went into an archive, and what was refused."""

    count: int
    refusals: tuple[Refused, ...]


def pack(
    paths: Sequence[Path],
    out: Path,
    *,
    names: str | None = None,
    conditions: Path | None = None,
    fixture: Path | None = None,
    channels: str | None = None,
    progress: Progress | None = None,
) -> Packed:
    """Pack everything under the paths into one archive, each capture with its conditions and what is known of its bench.

    Raises
    ------
    InputError
        As `take_in`, or the archive cannot be written.
    """
    pattern = None if names is None else NamePattern(names)
    roles = None if channels is None else ChannelRoles.parse(channels)
    stated = None if conditions is None else read_conditions(conditions)
    given = None if fixture is None else read_fixture(fixture, edge_time=_edge_time, skew=_skew)
    joining = SpreadFiles(roles=roles, names=pattern, conditions=stated)
    reading = _Reading(find_captures(paths, joining), pattern, stated, roles, given)
    reading.check_stated()
    refusals: list[Refused] = []

    def captures() -> Iterator[tuple[Capture, Fixture | None]]:
        for done, name in enumerate(reading.sources, start=1):
            try:
                yield reading.again(name), reading.fixtures.get(name)
            except CaptureError as error:
                refusals.append(Refused(name=name, error=error))
            if progress is not None:
                progress(done, len(reading.sources))

    return Packed(count=write_archive(captures(), out), refusals=tuple(refusals))


@dataclass(frozen=True, slots=True, kw_only=True)
class Taken:
    """What one source gave: its rows, still traces among them, and the reason where it was refused."""

    rows: tuple[Measurement | StillTrace, ...]
    refused: Refused | None = None


def take_each(reading: _Reading, *, jobs: int, cluster: str | None = None) -> Iterator[Taken]:
    """Take the sources in their order, in one process, in several, or on the workers of a cluster.

    Raises
    ------
    InputError
        `jobs` is below 1, or the cluster cannot be used.
    """
    names = list(reading.sources)
    # Of few sources, small groups; whatever `jobs` is, the groups are the same, and so are the results.
    size = min(GROUP, max(1, -(-len(names) // 4)))
    groups = [names[k : k + size] for k in range(0, len(names), size)]
    if jobs < 1:
        raise InputError("jobs is not a number of processes", found=str(jobs), wanted="1 or more")
    if cluster is not None:
        for taken in over_cluster(cluster, _Reading.take, reading, groups):
            yield from taken
        return
    if jobs == 1 or len(groups) < 2:
        for group in groups:
            yield from reading.take(group)
        return
    # Copying this process is quick, but safe only where no other thread runs; else each starts afresh.
    quick = sys.platform == "linux" and threading.active_count() == 1
    context = multiprocessing.get_context("fork" if quick else "spawn")
    with ProcessPoolExecutor(jobs, mp_context=context, initializer=_begin_work, initargs=(reading,)) as pool:
        for taken in pool.map(_take_in_worker, groups):
            yield from taken


_WORK: list[_Reading] = []
"""What a worker process reads with; set once when it starts."""


def _begin_work(reading: _Reading) -> None:
    _WORK[:] = [reading]


def _take_in_worker(names: Sequence[str]) -> list[Taken]:
    return _WORK[0].take(names)


class _Reading:
    """What every source is read with: pattern, table, roles, and the context of its run."""

    def __init__(
        self,
        sources: Sequence[Source],
        pattern: NamePattern | None,
        stated: ConditionsTable | None,
        roles: ChannelRoles | None,
        given: Fixture | None,
        reference: ReferenceLevels = TEN_FIFTY_NINETY,
    ) -> None:
        self.reference = reference
        self.sources = {source.name: source for source in sources}
        self.pattern, self.stated, self.roles, self.given = pattern, stated, roles, given
        self.fixtures: dict[str, Fixture] = {}
        self.contexts: dict[Path, RunContext] = {}
        self._archived: dict[Path, list[Fixture | None]] = {}
        for source in sources:
            folder = source.run_folder
            if folder is not None and folder not in self.contexts:
                self.contexts[folder] = read_run_context(folder, edge_time=_edge_time, skew=_skew)
            fixture = given or self._kept(source) or (None if folder is None else self.contexts[folder].fixture)
            if fixture is not None:
                self.fixtures[source.name] = fixture

    def check_stated(self) -> None:
        """Hold the table of conditions against the sources."""
        if self.stated is not None:
            parts = {name: source.part_names for name, source in self.sources.items()}
            self.stated.check_against(list(self.sources), parts)

    def _kept(self, source: Source) -> Fixture | None:
        """The fixture that an archive keeps with a capture."""
        if source.place is None:
            return None
        if source.path not in self._archived:
            self._archived[source.path] = archive_fixtures(source.path)
        return self._archived[source.path][source.place]

    def take(self, names: Sequence[str]) -> list[Taken]:
        """Read and measure some sources together; never raises for one of them."""
        loaded = [self._loaded(name) for name in names]
        together = [
            (item, self.fixtures.get(item.name, UNKNOWN_FIXTURE)) for item in loaded if isinstance(item, Capture)
        ]
        measured = iter(measure_group(together, self.reference))
        return [
            self._taken(name, next(measured) if isinstance(item, Capture) else item)
            for name, item in zip(names, loaded, strict=True)
        ]

    def _loaded(self, name: str) -> Capture | DarkedgeError:
        item = self._load(self.sources[name])
        if isinstance(item, Refusal):
            return item.error
        try:
            return self._in_its_run(item)
        except DarkedgeError as error:
            return error.at(name)

    @staticmethod
    def _taken(name: str, found: Sequence[Measurement | StillTrace] | DarkedgeError) -> Taken:
        if not isinstance(found, DarkedgeError):
            return Taken(rows=tuple(found))
        error = found if found.where else found.at(name)
        return Taken(rows=(refused_measurement(name),), refused=Refused(name=name, error=error))

    def again(self, name: str) -> Capture:
        """Read one capture again, for a picture of it."""
        item = self._load(self.sources[name])
        if isinstance(item, Refusal):
            raise item.error
        return self._in_its_run(item)

    def _load(self, source: Source) -> Capture | Refusal:
        return load_capture(source, self.pattern, self.stated, self.roles)

    def _in_its_run(self, capture: Capture) -> Capture:
        """Join what the plan and the lot file say with what the capture says."""
        folder = self.sources[capture.name].run_folder
        if folder is None:
            return capture
        context = self.contexts[folder]
        plan, lot = context.plan, context.lot
        beside = Conditions(
            run=None if capture.conditions.run is not None else folder.name,
            lot=None if lot is None else lot.lot,
            device_kind=None if plan is None else plan.device.kind,
            output_connection=None if plan is None else plan.device.output_connection,
        )
        joined = capture.conditions.merged(beside, here=capture.name, there=f"the plan or lot file of {folder.name}")
        return Capture(
            name=capture.name,
            outputs=capture.outputs,
            drive=capture.drive,
            conditions=joined,
            remarks=capture.remarks,
            read_as=capture.read_as,
        )


def fixture_of(plan: Plan) -> Fixture:
    """The fixture that a plan names, read from beside the plan; the unknown one where it names none.

    Raises
    ------
    FixtureError
        It is not there, or wrong.
    """
    if plan.fixture_file is None:
        return UNKNOWN_FIXTURE
    return read_fixture(Path(plan.source).parent / plan.fixture_file, edge_time=_edge_time, skew=_skew)


def _edge_time(path: Path, quantity: str) -> CapturedEdge | None:
    """Measure one edge of a captured reference response."""
    return reference_edge(_reference(path), rising=quantity == "rise_time_s")


def _skew(path: Path) -> tuple[float, float] | None:
    """Measure the skew of a reference capture in which both channels see the same signal."""
    return channel_skew(_reference(path))


def _reference(path: Path) -> Capture:
    try:
        return read_capture(path)
    except CaptureError as error:
        raise FixtureError(
            error.what, where=error.where, found=error.found, wanted=error.wanted, mend=error.mend
        ) from error
