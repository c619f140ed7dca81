"""The run folder while it is written: plan and bench as they were, captures, and a journal with a line for each point that is safe."""

from __future__ import annotations

import contextlib
import csv
import io
import json
import os
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, fields
from pathlib import Path

from darkedge.analysis.captures import Capture, Kind
from darkedge.analysis.errors import FixtureError, InputError, PlanError
from darkedge.analysis.files.atomic import make_folder, write_atomic
from darkedge.analysis.files.captures import write_capture
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.plan import Plan

PLAN, BENCH, JOURNAL, CAPTURES, FIXTURE = "plan.toml", "bench.json", "journal.csv", "captures", "fixture.toml"


@dataclass(frozen=True, slots=True, kw_only=True)
class JournalRow:
    """One point that is safe on disk. `capture` names its files, joined by `;`."""

    point: str
    capture: str
    kind: Kind
    element: int | None = None
    driven_element: int | None = None
    load_ohm: float
    bias_V: float
    emitter_current_A: float | None = None
    pulse_width_s: float | None = None
    repeat: int = 1
    taken_utc: str = ""
    attempts: int = 1
    range_V: float | None = None
    range_offset_V: float | None = None
    remark: str = ""


COLUMNS = tuple(f.name for f in fields(JournalRow))
_WHOLE = ("element", "driven_element", "repeat", "attempts")
_NUMBERS = ("load_ohm", "bias_V", "emitter_current_A", "pulse_width_s", "range_V", "range_offset_V")


class RunFolder:
    """A run folder that is being filled."""

    def __init__(self, folder: Path, rows: Sequence[JournalRow] = ()) -> None:
        self.folder, self.rows = folder, list(rows)

    @staticmethod
    def check_new(folder: Path, plan: Plan) -> None:
        """Make sure that a run can be begun here, before any instrument is opened.

        Raises
        ------
        InputError, FixtureError
            As `create`.
        """
        if (folder / JOURNAL).exists() or (folder / PLAN).exists():
            raise InputError(
                "there is a run in this folder already", where=str(folder),
                mend="go on with it (--resume), or give another --device or --into",
            )  # fmt: skip
        _fixture_files(plan)

    @classmethod
    def create(cls, folder: Path, plan: Plan, bench: Mapping[str, object]) -> RunFolder:
        """Make a run folder: plan and bench as they are, the fixture that the plan names beside them.

        Raises
        ------
        InputError
            There is a run already, or the folder cannot be written.
        FixtureError
            The fixture that the plan names is not there, or its reference captures cannot go with it.
        """
        cls.check_new(folder, plan)
        copies = _fixture_files(plan)
        make_folder(folder / CAPTURES)
        for source, name in copies:
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            write_atomic(folder / name, source.read_bytes())
        write_atomic(folder / PLAN, Path(plan.source).read_bytes())
        run = cls(folder)
        run.note_bench(bench)
        write_atomic(folder / JOURNAL, ",".join(COLUMNS) + "\n")
        return run

    @classmethod
    def go_on(cls, folder: Path, plan: Plan) -> RunFolder:
        """Open a run that stopped; half-written files are cleared away.

        Raises
        ------
        InputError
            There is no run here.
        PlanError
            It is the run of another plan.
        """
        if not (folder / PLAN).is_file():
            raise InputError("there is no run to go on with", where=str(folder), mend="leave --resume out to begin one")
        if read_plan(folder / PLAN) != plan:
            raise PlanError(
                "the run in this folder is of another plan", where=str(folder), found=str(folder / PLAN), wanted=plan.source,
                mend="give the plan it was begun with, or begin another run",
            )  # fmt: skip
        for half in (folder / CAPTURES).glob(".*.part"):
            half.unlink(missing_ok=True)
        rows = read_journal(folder / JOURNAL)
        run = cls(
            folder, [row for row in rows if all((folder / CAPTURES / n).is_file() for n in row.capture.split(";"))]
        )
        write_atomic(folder / JOURNAL, _text(run.rows))
        return run

    def note_bench(self, bench: Mapping[str, object]) -> None:
        """Keep what the bench was."""
        write_atomic(self.folder / BENCH, json.dumps(bench, indent=1, ensure_ascii=False) + "\n")

    def keep(self, captures: Sequence[Capture], row: JournalRow) -> None:
        """Put the captures of a point on disk, then its line into the journal.

        Raises
        ------
        InputError
            The disk is full or cannot be written; nothing that was there is lost.
        """
        for capture in captures:
            write_capture(capture, self.folder / CAPTURES / capture.name)
        path = self.folder / JOURNAL
        try:
            with path.open("a", encoding="utf-8", newline="") as stream:
                stream.write(_line(row))
                stream.flush()
                os.fsync(stream.fileno())
        except OSError as error:
            raise InputError(
                "the journal cannot be written",
                where=str(path),
                found=error.strerror or "",
                mend="check space and permission",
            ) from error
        self.rows.append(row)


@contextlib.contextmanager
def alone_in(folder: Path) -> Iterator[None]:
    """Keep a second sweep out of a run folder while one is under way.

    A note with the number of the process stands beside the folder; one that a dead process left behind does not count.

    Raises
    ------
    InputError
        Another sweep is under way there, or the folder cannot be written.
    """
    note = folder.parent / f".{folder.name}.sweeping"
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        holder = _process_in(note)
        if holder is not None:
            raise InputError(
                "another sweep is under way in this folder", where=str(folder), found=f"process {holder}",
                mend=f"wait for it, or end it; if there is none, delete {note}",
            )  # fmt: skip
        note.write_text(str(os.getpid()), encoding="ascii")
    except OSError as error:
        raise InputError(
            "the folder cannot be written", where=str(folder.parent), found=error.strerror or ""
        ) from error
    try:
        yield
    finally:
        note.unlink(missing_ok=True)


def _process_in(note: Path) -> int | None:
    """The living process that a note names, `None` where there is no note or nobody alive."""
    try:
        number = int(note.read_text("ascii"))
        if os.name != "nt":  # where asking whether a process lives would end it
            os.kill(number, 0)
    except (FileNotFoundError, ValueError, ProcessLookupError):
        return None
    except PermissionError:
        return number
    return None if number == os.getpid() else number


def read_journal(path: Path) -> list[JournalRow]:
    """Read a journal; a last line that was cut off is left out.

    Raises
    ------
    InputError
        Not there, or no journal of this version.
    """
    try:
        text = path.read_bytes().decode("utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError("the journal cannot be read", where=str(path), found=str(error)) from error
    whole = text[: text.rfind("\n") + 1]
    rows = []
    for number, stated in enumerate(csv.DictReader(io.StringIO(whole, newline="")), start=2):
        try:
            rows.append(_row(stated))
        except (KeyError, ValueError, TypeError) as error:
            raise InputError(
                "not a line of a journal", where=f"{path}, line {number}", found=str(error),
                mend="take the line out; its point will be taken again",
            ) from error  # fmt: skip
    return rows


def _row(stated: Mapping[str, str | None]) -> JournalRow:
    values: dict[str, object] = {}
    for name in COLUMNS:
        text = stated.get(name)
        if text is None or text == "":
            if name in ("point", "capture", "kind", "load_ohm", "bias_V"):
                raise KeyError(f"{name} is missing")
            continue
        values[name] = int(text) if name in _WHOLE else float(text) if name in _NUMBERS else text
    values["kind"] = Kind(str(values["kind"]))
    return JournalRow(**values)  # type: ignore[arg-type]


def _line(row: JournalRow) -> str:
    out = io.StringIO(newline="")
    cells = ["" if v is None else repr(v) if isinstance(v, float) else str(v) for v in asdict(row).values()]
    csv.writer(out, lineterminator="\n").writerow(cells)
    return out.getvalue()


def _text(rows: Sequence[JournalRow]) -> str:
    return ",".join(COLUMNS) + "\n" + "".join(_line(row) for row in rows)


def _fixture_files(plan: Plan) -> list[tuple[Path, str]]:
    """The fixture of a plan and the captures that it names: where they are, and what they are called in the run."""
    if plan.fixture_file is None:
        return []
    path = Path(plan.source).parent / plan.fixture_file
    if not path.is_file():
        raise FixtureError(
            "the plan names a fixture file that is not there", where=f"{plan.source}, fixture.file", found=plan.fixture_file,
            mend="put it there, correct the path (it is relative to the plan), or leave [fixture] out",
        )  # fmt: skip
    try:
        response = tomllib.loads(path.read_text("utf-8-sig")).get("response", {})
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise FixtureError("the fixture file cannot be read", where=str(path), found=str(error)) from error
    found = [(path, FIXTURE)]
    for key in ("rise_capture", "fall_capture"):
        name = response.get(key) if isinstance(response, dict) else None
        if not isinstance(name, str):
            continue
        if Path(name).is_absolute() or ".." in Path(name).parts or not (path.parent / name).is_file():
            raise FixtureError(
                "a reference capture cannot go with the run", where=f"{path}, response.{key}", found=name,
                wanted="a file that is there, beside the fixture or in a folder below it",
            )  # fmt: skip
        found.append((path.parent / name, name))
    return found
