"""Many captures in one Parquet file: a row each, samples as 32-bit floats, conditions as columns, units in the names.

Schema, version 1 (`darkedge-archive 1` in the file's metadata):

| column | type | meaning |
| --- | --- | --- |
| `capture` | string | its name |
| every name of the capture header | double, int64 or string | its conditions, null where not known |
| `t0_s`, `dt_s` | double | first sample and step of an even record; `dt_s` is null for an uneven one |
| `time_s` | list of double | times of an uneven record, else null |
| `drive_V` | list of float | the drive, null where there is none |
| `elements` | list of int32 | numbers of the elements whose outputs follow |
| `outputs_V` | list of list of float | the output of each |
| `remarks` | list of string | flags that the reader could tell from the file alone |
| `fixture` | string | what was known of the bench, as JSON of the fixture's keys, null where nothing was |
"""

from __future__ import annotations

import contextlib
import json
from collections.abc import Iterable
from dataclasses import asdict, fields
from datetime import date
from functools import lru_cache
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from darkedge.analysis.captures import (
    Capture,
    Conditions,
    DeviceKind,
    FloatArray,
    Kind,
    OutputConnection,
    Record,
    Reference,
    TimedRecord,
    Waveform,
)
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.fixture import Fixture, Load, Response

FORMAT = "darkedge-archive 1"
ENDING = ".parquet"
_MARK = b"darkedge"
_IN_A_GROUP = 64
_WORDS = {"kind": Kind, "reference": Reference, "device_kind": DeviceKind, "output_connection": OutputConnection}
_WHOLE = ("element", "driven_element", "averages")
_TEXT = ("run", "point", "device", "lot", "coupling", "taken_utc", "darkedge", *_WORDS)
_CONDITIONS = tuple(f.name for f in fields(Conditions))


def _type_of(name: str) -> pa.DataType:
    return pa.string() if name in _TEXT else pa.int64() if name in _WHOLE else pa.float64()


_SCHEMA = pa.schema(
    [
        pa.field("capture", pa.string(), nullable=False),
        *(pa.field(name, _type_of(name)) for name in _CONDITIONS),
        pa.field("t0_s", pa.float64()),
        pa.field("dt_s", pa.float64()),
        pa.field("time_s", pa.list_(pa.float64())),
        pa.field("drive_V", pa.list_(pa.float32())),
        pa.field("elements", pa.list_(pa.int32()), nullable=False),
        pa.field("outputs_V", pa.list_(pa.list_(pa.float32())), nullable=False),
        pa.field("remarks", pa.list_(pa.string())),
        pa.field("fixture", pa.string()),
    ],
    metadata={_MARK: FORMAT.encode()},
)


def write_archive(captures: Iterable[tuple[Capture, Fixture | None]], path: Path) -> int:
    """Write captures, each with what was known of its bench, into one file; whole or not at all.

    Returns
    -------
    int
        How many there were.

    Raises
    ------
    InputError
        Another ending than `.parquet`, no capture at all, or the file cannot be written.
    CaptureError
        The channels of a capture do not share their times.
    """
    if path.suffix.lower() != ENDING:
        raise InputError("not a form of archive", where=str(path), found=path.suffix or "no ending", wanted=ENDING)
    beside = path.with_name(f".{path.name}.part")
    count = 0
    try:
        with pq.ParquetWriter(beside, _SCHEMA, compression="zstd", use_dictionary=["fixture"]) as writer:
            group: list[dict[str, object]] = []
            for capture, fixture in captures:
                group.append(_row(capture, fixture))
                count += 1
                if len(group) == _IN_A_GROUP:
                    writer.write_table(pa.Table.from_pylist(group, schema=_SCHEMA))
                    group = []
            if group:
                writer.write_table(pa.Table.from_pylist(group, schema=_SCHEMA))
        if count == 0:
            raise InputError("there is no capture to pack", where=str(path))
        beside.replace(path)
    except OSError as error:
        raise InputError(
            "the archive cannot be written", where=str(path), found=error.strerror or str(error),
            mend="check folder, permission and space",
        ) from error  # fmt: skip
    finally:
        with contextlib.suppress(OSError):
            beside.unlink(missing_ok=True)
    return count


def is_archive(path: Path) -> bool:
    """Whether a file is an archive of captures, told by its metadata."""
    if path.suffix.lower() != ENDING:
        return False
    try:
        return _MARK in (pq.read_schema(path).metadata or {})
    except (OSError, pa.ArrowException):
        return False


def archive_names(path: Path) -> list[str]:
    """Names of the captures in an archive, in order.

    Raises
    ------
    InputError
        It cannot be read, or is of another version.
    """
    table = _columns(path, ["capture"])
    return [str(name) for name in table.column("capture").to_pylist()]


def archive_fixtures(path: Path) -> list[Fixture | None]:
    """What was known of the bench of each capture, in order."""
    known: dict[str, Fixture] = {}
    out: list[Fixture | None] = []
    for text in _columns(path, ["fixture"]).column("fixture").to_pylist():
        if text is not None and text not in known:
            known[text] = _fixture(text, path)
        out.append(None if text is None else known[text])
    return out


def read_archived(path: Path, place: int) -> Capture:
    """Read the capture at a place (from 0) of an archive.

    Raises
    ------
    CaptureError
        The row is not that of a capture, or the file cannot be read.
    """
    group, inside = divmod(place, _IN_A_GROUP)
    try:
        table = _group(path, path.stat().st_mtime_ns, group)
        row = table.slice(inside, 1)
        return _capture(row)
    except (OSError, pa.ArrowException, IndexError, KeyError, ValueError, TypeError) as error:
        raise CaptureError(
            "the row is not that of a capture", where=f"{path}, row {place + 1}", found=str(error).splitlines()[0][:120]
        ) from error


@lru_cache(maxsize=2)
def _group(path: Path, _changed_ns: int, group: int) -> pa.Table:
    """One group of rows, kept because its rows are asked for one after another."""
    with pq.ParquetFile(path) as file:
        return file.read_row_group(group)


def _columns(path: Path, names: list[str]) -> pa.Table:
    try:
        stated = (pq.read_schema(path).metadata or {}).get(_MARK, b"").decode("utf-8", "replace")
        if stated != FORMAT:
            raise InputError("another version of the archive", where=str(path), found=repr(stated), wanted=FORMAT)
        return pq.read_table(path, columns=names)
    except (OSError, pa.ArrowException) as error:
        raise InputError(
            "the archive cannot be read", where=str(path), found=str(error).splitlines()[0][:120]
        ) from error


def _row(capture: Capture, fixture: Fixture | None) -> dict[str, object]:
    records: list[Record] = [*([capture.drive] if capture.drive else []), *capture.outputs.values()]
    first = records[0]
    for record in records[1:]:
        same = record.signal_V.size == first.signal_V.size and _times_agree(record, first)
        if not same:
            raise CaptureError("the channels differ in their times", where=capture.name, wanted="one time axis")
    known = capture.conditions.known()
    uneven = isinstance(first, TimedRecord)
    return {
        "capture": capture.name,
        **{name: str(value) if name in _TEXT else value for name, value in known.items()},
        "t0_s": first.t0_s,
        "dt_s": None if uneven else first.dt_s,
        "time_s": first.time_s if uneven else None,
        "drive_V": None if capture.drive is None else capture.drive.signal_V.astype(np.float32),
        "elements": sorted(capture.outputs),
        "outputs_V": [capture.outputs[k].signal_V.astype(np.float32) for k in sorted(capture.outputs)],
        "remarks": list(capture.remarks),
        "fixture": None if fixture is None else json.dumps(asdict(fixture), default=str, sort_keys=True),
    }


def _times_agree(one: Record, other: Record) -> bool:
    if isinstance(one, TimedRecord) or isinstance(other, TimedRecord):
        return bool(np.array_equal(one.time_s, other.time_s))
    return one.dt_s == other.dt_s and one.t0_s == other.t0_s


def _capture(row: pa.Table) -> Capture:
    values = {
        name: row.column(name)[0].as_py() for name in ("capture", "t0_s", "dt_s", "elements", "remarks", *_CONDITIONS)
    }
    time = row.column("time_s")[0]
    time_s = None if not time.is_valid else _floats(time.values)
    drive = row.column("drive_V")[0]
    outputs = row.column("outputs_V")[0].values

    def record(signal_V: FloatArray) -> Record:
        if time_s is not None:
            return TimedRecord(signal_V=signal_V, time_s=time_s)
        return Waveform(signal_V=signal_V, dt_s=values["dt_s"], t0_s=values["t0_s"])

    stated = {name: values[name] for name in _CONDITIONS if values[name] is not None}
    for name, kind in _WORDS.items():
        if name in stated:
            stated[name] = kind(stated[name])
    return Capture(
        name=values["capture"],
        outputs={element: record(_floats(outputs[k].values)) for k, element in enumerate(values["elements"])},
        drive=record(_floats(drive.values)) if drive.is_valid else None,
        conditions=Conditions(**stated),
        remarks=tuple(values["remarks"] or ()),
    )


def _floats(values: pa.Array) -> FloatArray:
    return np.asarray(values.to_numpy(zero_copy_only=False), dtype=np.float64)


def _fixture(text: str, path: Path) -> Fixture:
    try:
        stated = json.loads(text)
        stated["measured"] = None if stated["measured"] is None else date.fromisoformat(stated["measured"])
        stated["loads"] = tuple(Load(**load) for load in stated["loads"])
        stated["response"] = None if stated["response"] is None else Response(**stated["response"])
        return Fixture(**stated)
    except (ValueError, TypeError, KeyError) as error:
        raise InputError("a fixture in the archive cannot be read", where=str(path), found=str(error)[:120]) from error
