"""The capture file of darkedge: conditions as `# name = value`, then columns, then numbers."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import Capture, Conditions, FloatArray, Record, TimedRecord
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.condition_values import (
    CONDITION_NAMES,
    conditions_from,
    parse_condition,
    unknown_condition,
)
from darkedge.analysis.files.numbers import Body, Writing, line_of_row, read_numbers, shown
from darkedge.analysis.files.time_axis import TimeAxis, TimeAxisError, time_axis

FORMAT = "darkedge-capture 1"
HEADER_ORDER: tuple[str, ...] = (
    "run", "point", "kind", "device", "lot", "element", "driven_element", "reference", "bias_V", "bias_read_V",
    "load_ohm", "emitter_current_A", "pulse_width_s", "drive_period_s", "temperature_degC", "averages", "coupling",
    "input_ohm", "bandwidth_limit_Hz", "probe_ratio", "volts_per_code", "taken_utc", "darkedge", "device_kind",
    "output_connection",
)  # fmt: skip

_FORMAT_LINE = re.compile(rb"#\s*format\s*=\s*darkedge-")
_HEADER_LINE = re.compile(r"#\s*(?P<name>\w+)\s*=(?P<value>.*)")
_OUTPUT = re.compile(r"output([1-9]\d{0,8})?_V", re.ASCII)
_FEWEST_DIGITS = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class _Head:
    """The lines above the numbers: conditions, column names, and where the numbers begin."""

    conditions: Conditions
    columns: tuple[str, ...]
    start: int
    first_line: int


def is_own(text: bytes) -> bool:
    """Whether a text is a capture file of darkedge, of whatever version."""
    if not text.lstrip().startswith(b"#"):
        return False
    for line in text.lstrip()[:4096].split(b"\n"):
        if not line.startswith(b"#"):
            return False
        if _FORMAT_LINE.match(line):
            return True
    return False


def parse_capture(text: bytes, *, name: str) -> Capture:
    """Read a capture file of darkedge.

    Parameters
    ----------
    text : bytes
        UTF-8, lines ending in LF.
    name : str
        What the capture will be called.

    Raises
    ------
    CaptureError
        The end is missing; another version, an unknown or repeated name, a value that a condition cannot have, a column that is unknown,
        missing or repeated, numbers that are none, time that does not rise. The message says line, name or column.
    """
    if not text.endswith(b"\n"):
        raise _cut_off(text)
    head = _head(text)
    body = Body(
        text=text, start=head.start, first_line=head.first_line, writing=Writing(),
        columns=tuple(range(len(head.columns))), n_cells=len(head.columns),
    )  # fmt: skip
    values = read_numbers(body)
    if not values.size:
        raise CaptureError("no numbers follow the column names", where=f"line {head.first_line}", wanted="samples")
    if bool(np.any(np.isnan(values))):
        row, column = np.argwhere(np.isnan(values))[0]
        raise CaptureError(
            "a sample is missing",
            where=f"line {line_of_row(body, int(row))}, {head.columns[column]}",
            found="nothing or NaN",
            wanted="a number in every cell",
        )
    by_column = dict(zip(head.columns, values.T, strict=True))
    axis = _axis(by_column.pop("time_s"), body)
    drive = by_column.pop("drive_V", None)
    return Capture(
        name=name,
        drive=None if drive is None else axis.record(drive),
        outputs=_outputs(by_column, axis, head.conditions),
        conditions=head.conditions,
        remarks=("uneven_time",) if axis.stamps_s is not None else (),
        read_as=("a capture file of darkedge",),
    )


def print_capture(capture: Capture) -> str:
    """Write a capture as the text of a capture file; `parse_capture` gives the same capture back.

    Raises
    ------
    CaptureError
        The channels do not share their times, or the output is not that of the element in the conditions.
    """
    columns = _columns(capture)
    records = list(columns.values())
    first = records[0]
    for record in records[1:]:
        if record.signal_V.size != first.signal_V.size or not _same_times(record, first):
            raise CaptureError("the channels differ in their times", where=capture.name, wanted="one time axis")
    known = capture.conditions.known()
    lines = [f"# format = {FORMAT}"]
    lines += [
        f"# {name} = {_printed(known[name])}".rstrip() if name in known else f"# {name} =" for name in HEADER_ORDER
    ]
    lines.append(",".join(["time_s", *columns]))
    cells = [_stamps(first), *([repr(value) for value in r.signal_V.tolist()] for r in records)]
    lines += [",".join(row) for row in zip(*cells, strict=True)]
    return "\n".join(lines) + "\n"


def _cut_off(text: bytes) -> CaptureError:
    """A capture file ends its last line; one that does not may have lost digits of its last number."""
    number = text.count(b"\n") + 1
    return CaptureError(
        "the file is cut off: its last line has no end",
        where=f"line {number}",
        found=shown(text[text.rfind(b"\n") + 1 :].decode("utf-8", errors="replace")),
        wanted="a line end behind the last number",
        mend="copy it again; if it is whole, end the last line",
    )


def _head(text: bytes) -> _Head:
    position, number = 0, 0
    values: dict[str, object] = {}
    seen: dict[str, int] = {}
    while position < len(text):
        end = text.find(b"\n", position)
        end = len(text) if end < 0 else end
        line = text[position:end].decode("utf-8").strip()
        position, number = end + 1, number + 1
        if not line:
            continue
        if not line.startswith("#"):
            return _Head(
                conditions=conditions_from(values),
                columns=_column_names(line, number),
                start=min(position, len(text)),
                first_line=number + 1,
            )
        _header_line(line, number, values, seen)
    raise CaptureError("no columns follow the header", where=f"line {number}", wanted="time_s,output_V and samples")


def _header_line(line: str, number: int, values: dict[str, object], seen: dict[str, int]) -> None:
    match = _HEADER_LINE.fullmatch(line)
    if match is None:
        raise CaptureError("not a condition", where=f"line {number}", found=shown(line), wanted="# name = value")
    name, written = match["name"], match["value"].strip()
    if name in seen:
        raise CaptureError(f"{name} is there twice", where=f"line {number}", found=f"also line {seen[name]}")
    seen[name] = number
    if name == "format":
        if written != FORMAT:
            raise CaptureError(
                "another version of the capture file", where=f"line {number}, format", found=written, wanted=FORMAT
            )
        return
    try:
        if name not in CONDITION_NAMES:
            raise unknown_condition(name)
        values[name] = parse_condition(name, written)
    except InputError as error:
        raise CaptureError(
            error.what, where=f"line {number}, {name}", found=error.found, wanted=error.wanted, mend=error.mend
        ) from error


def _column_names(line: str, number: int) -> tuple[str, ...]:
    names = tuple(cell.strip() for cell in line.split(","))
    where = f"line {number}"
    wanted = "time_s, drive_V, output_V, output2_V ..."
    for name in names:
        if name not in ("time_s", "drive_V") and not _OUTPUT.fullmatch(name):
            raise CaptureError("a column that a capture file does not have", where=where, found=name, wanted=wanted)
    if len(set(names)) < len(names) or {"output_V", "output1_V"} <= set(names):
        raise CaptureError("a column is there twice", where=where, found=line, wanted=wanted)
    if "time_s" not in names:
        raise CaptureError("the column time_s is missing", where=where, found=line, wanted=wanted)
    if not any(_OUTPUT.fullmatch(name) for name in names):
        raise CaptureError("no output column", where=where, found=line, wanted=wanted)
    return names


def _axis(stamps_s: FloatArray, body: Body) -> TimeAxis:
    if stamps_s.size < 2:
        raise CaptureError("one sample is no waveform", where=f"line {body.first_line}", wanted="two samples or more")
    try:
        return time_axis(stamps_s)
    except TimeAxisError as fault:
        raise CaptureError(
            fault.what,
            where=f"line {line_of_row(body, fault.row)}, time_s",
            found=fault.found,
            wanted="times that rise from row to row",
            mend="export the capture again",
        ) from fault


def _outputs(by_column: dict[str, FloatArray], axis: TimeAxis, conditions: Conditions) -> dict[int, Record]:
    if list(by_column) == ["output_V"]:
        return {conditions.element or 1: axis.record(by_column["output_V"])}
    outputs = {}
    for column, signal_V in by_column.items():
        match = _OUTPUT.fullmatch(column)
        outputs[int(match[1] or 1) if match else 1] = axis.record(signal_V)
    return dict(sorted(outputs.items()))


def _columns(capture: Capture) -> dict[str, Record]:
    columns = {} if capture.drive is None else {"drive_V": capture.drive}
    element = capture.conditions.element
    if len(capture.outputs) == 1:
        ((number, record),) = capture.outputs.items()
        if element is not None and element != number:
            raise CaptureError(
                "the output is not that of the element in the conditions", where=capture.name,
                found=f"output of element {number}", wanted=f"element {element}",
            )  # fmt: skip
        return columns | {"output_V" if number in (1, element) else f"output{number}_V": record}
    for number, record in sorted(capture.outputs.items()):
        columns["output_V" if number == 1 else f"output{number}_V"] = record
    return columns


def _same_times(one: Record, other: Record) -> bool:
    if isinstance(one, TimedRecord) or isinstance(other, TimedRecord):
        return bool(np.array_equal(one.time_s, other.time_s))
    return one.dt_s == other.dt_s and one.t0_s == other.t0_s


def _printed(value: object) -> str:
    return repr(value) if isinstance(value, float) else str(value).replace("\n", " ").replace("\r", " ")


def _stamps(record: Record) -> Sequence[str]:
    """Times with the fewest digits from which start and step are read back as they are."""
    times = record.time_s.tolist()
    if not isinstance(record, TimedRecord):
        for digits in range(_FEWEST_DIGITS, 16, 3):
            texts = [f"{time:.{digits}g}" for time in times]
            if _reads_back(texts, record.t0_s, record.dt_s):
                return texts
    return [repr(time) for time in times]


def _reads_back(texts: Sequence[str], t0_s: float, dt_s: float) -> bool:
    try:
        axis = time_axis(np.array(texts, dtype=np.float64))
    except TimeAxisError:
        return False
    return axis.stamps_s is None and axis.t0_s == t0_s and axis.dt_s == dt_s
