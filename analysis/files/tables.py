"""The measurement table in and out: CSV, JSON and Parquet, by way of pandas."""

from __future__ import annotations

import io
import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path

import pandas as pd

from darkedge.analysis.captures import Conditions, DeviceKind, Kind, OutputConnection, Reference
from darkedge.analysis.columns import (
    ALL_QUANTITIES,
    CONDITIONS,
    DEVICE,
    IDENTITY,
    KEY,
    OPTIONAL_QUANTITIES,
    TEXT,
    WHOLE,
    table_columns,
    twins,
)
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.atomic import write_atomic
from darkedge.analysis.flags import REGISTRY
from darkedge.analysis.measurement import Estimate, Measurement

_FORMS = (".csv", ".json", ".parquet")
_FROM_CONDITIONS = tuple(c for c in (*IDENTITY, *CONDITIONS, *DEVICE) if c not in ("capture", "element"))
_WORDS = {"kind": Kind, "reference": Reference, "device_kind": DeviceKind, "output_connection": OutputConnection}


def measurements_to_frame(measurements: Sequence[Measurement]) -> pd.DataFrame:
    """Return the measurement table: one row a measurement, all columns in order, `flags` as lists.

    Columns of the optional quantities are left out where no row has a value for them.
    """
    frame = pd.DataFrame([_row(m) for m in measurements], columns=list(table_columns()))
    for name in WHOLE:
        frame[name] = frame[name].astype("Int64")
    absent = [q for q in OPTIONAL_QUANTITIES if not any(q in m.quantities for m in measurements)]
    return frame.drop(columns=[name for q in absent for name in (q, *twins(q))])


def write_table(measurements: Sequence[Measurement], path: Path) -> None:
    """Save the table in the form that the path's ending names: `.csv`, `.json` or `.parquet`.

    Raises
    ------
    InputError
        Another ending, or the file cannot be written.
    """
    form = path.suffix.lower()
    if form not in _FORMS:
        raise InputError("not a form of table", where=str(path), found=form or "no ending", wanted=", ".join(_FORMS))
    if form == ".csv":
        write_atomic(path, table_csv(measurements))
    elif form == ".json":
        write_atomic(path, table_json(measurements) + "\n")
    else:
        frame = measurements_to_frame(measurements)
        frame["flags"] = frame["flags"].map(";".join)
        stream = io.BytesIO()
        _typed(frame).to_parquet(stream, index=False)
        write_atomic(path, stream.getvalue())


def table_csv(measurements: Sequence[Measurement]) -> str:
    """The table as CSV: full precision, nothing where a value is missing, flags joined by `;`."""
    frame = measurements_to_frame(measurements)
    frame["flags"] = frame["flags"].map(";".join)
    return frame.to_csv(index=False, lineterminator="\n")


def table_json(measurements: Sequence[Measurement]) -> str:
    """The table as JSON: one array, `null` for what is missing, flags as a list."""
    frame = measurements_to_frame(measurements)
    rows = [{name: _plain(value) for name, value in row.items()} for row in frame.to_dict("records")]
    return json.dumps(rows, indent=1, allow_nan=False, ensure_ascii=False)


def is_table(path: Path) -> bool:
    """Whether a file is a saved measurement table, told by its columns and not by its name."""
    form = path.suffix.lower()
    try:
        if form == ".parquet":
            with path.open("rb") as stream:
                return stream.read(4) == b"PAR1"
        with path.open("rb") as stream:
            start = stream.read(65536)
    except OSError:
        return False
    if form == ".json":
        return all(f'"{name}"'.encode() in start for name in KEY)
    header = start.removeprefix(b"\xef\xbb\xbf").split(b"\n")[0].decode("utf-8", "replace").strip()
    return set(KEY) <= set(header.split(","))


def read_table(path: Path) -> list[Measurement]:
    """Read a saved measurement table back.

    Raises
    ------
    InputError
        Not a table, unknown columns, or a value that is none; the message names row and column.
    """
    rows = _records(path)
    known = set(table_columns())
    for name in dict.fromkeys(name for row in rows for name in row):
        if name not in known:
            raise InputError(
                "unknown column", where=str(path), found=repr(name), wanted="the columns of a measurement table"
            )
    return [_measurement(row, f"{path}, row {place}") for place, row in enumerate(rows, start=1)]


def _row(m: Measurement) -> dict[str, object]:
    row: dict[str, object] = {name: getattr(m.conditions, name) for name in _FROM_CONDITIONS}
    for name in _WORDS:
        row[name] = None if row[name] is None else str(row[name])
    row |= {"capture": m.capture, "element": m.element, "levels": m.levels, "estimator": m.estimator}
    row |= {"n_pulses": m.n_pulses, "flags": list(m.flags)}
    for quantity, estimate in m.quantities.items():
        u, low, high = twins(quantity)
        row |= {quantity: estimate.value, u: estimate.u, low: estimate.lo95, high: estimate.hi95}
    return row


def _typed(frame: pd.DataFrame) -> pd.DataFrame:
    """Columns with one type each, so that an empty column is still a column of numbers or of text."""
    numbers = [c for c in frame.columns if c not in TEXT and c not in WHOLE]
    text = [c for c in frame.columns if c in TEXT]
    return frame.astype(dict.fromkeys(numbers, "float64") | dict.fromkeys(text, "string"))


def _plain(value: object) -> object:
    if value is None or value is pd.NA or (isinstance(value, float) and math.isnan(value)):
        return None
    item = getattr(value, "item", None)
    return item() if callable(item) else value


def _records(path: Path) -> list[dict[str, object]]:
    try:
        if path.suffix.lower() == ".parquet":
            frame = pd.read_parquet(path)
        elif path.suffix.lower() == ".json":
            loaded = json.loads(path.read_text(encoding="utf-8"))
            if not isinstance(loaded, list) or not all(isinstance(row, dict) for row in loaded):
                raise InputError("not a table", where=str(path), wanted="one array of objects")
            return loaded
        else:
            frame = pd.read_csv(path, dtype=str, keep_default_na=False, encoding="utf-8-sig")
    except (OSError, ValueError) as error:
        found = getattr(error, "strerror", None) or str(error).splitlines()[0]
        raise InputError("the table cannot be read", where=str(path), found=found) from error
    return [{str(name): value for name, value in row.items()} for row in frame.to_dict("records")]


def _measurement(row: Mapping[str, object], where: str) -> Measurement:
    cells = {name: _cell(value) for name, value in row.items()}
    flags = cells.get("flags") or []
    codes = [code for code in flags.split(";") if code] if isinstance(flags, str) else list(flags)  # type: ignore[call-overload]
    for code in codes:
        if code not in REGISTRY:
            raise InputError("unknown flag", where=f"{where}, flags", found=repr(code))
    conditions = {name: _condition(name, cells.get(name), where) for name in _FROM_CONDITIONS}
    capture = cells.get("capture")
    if capture is None:
        raise InputError("a row without a capture", where=where)
    return Measurement(
        capture=str(capture),
        element=_whole("element", cells.get("element"), where),
        conditions=Conditions(**conditions),  # type: ignore[arg-type]
        quantities=_quantities(cells, where),
        flags=tuple(codes),
        levels=_text(cells.get("levels")),
        estimator=_text(cells.get("estimator")),
        n_pulses=_whole("n_pulses", cells.get("n_pulses"), where),
    )


def _cell(value: object) -> object:
    if isinstance(value, str):
        return value if value.strip() else None
    return _plain(value)


def _text(value: object) -> str | None:
    return None if value is None else str(value)


def _condition(name: str, value: object, where: str) -> object:
    if value is None:
        return None
    if name in _WORDS:
        try:
            return _WORDS[name](str(value))
        except ValueError:
            wanted = ", ".join(_WORDS[name])
            raise InputError("unknown word", where=f"{where}, {name}", found=repr(value), wanted=wanted) from None
    if name in TEXT:
        return str(value)
    number = _whole(name, value, where) if name in WHOLE else _number(name, value, where)
    if number is not None and (number < 0 or (number == 0 and name == "load_ohm")) and name != "temperature_degC":
        raise InputError(
            "not a possible condition", where=f"{where}, {name}", found=repr(value), wanted="a value above zero"
        )
    return number


def _quantities(cells: Mapping[str, object], where: str) -> dict[str, Estimate]:
    found = {}
    for quantity in ALL_QUANTITIES:
        names = (quantity, *twins(quantity))
        value, u, low, high = (_number(name, cells.get(name), where) for name in names)
        if value is None and u is None and low is None and high is None:
            continue
        try:
            found[quantity] = Estimate(value=value, u=u, lo95=low, hi95=high)
        except ValueError as error:
            raise InputError(str(error), where=f"{where}, {quantity}", found=f"{value}, u {u}") from error
    return found


def _number(name: str, value: object, where: str) -> float | None:
    if value is None:
        return None
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        number = math.nan
    if not math.isfinite(number) or isinstance(value, bool):
        raise InputError("not a number", where=f"{where}, {name}", found=repr(value))
    return number


def _whole(name: str, value: object, where: str) -> int | None:
    number = _number(name, value, where)
    if number is None:
        return None
    if number != int(number):
        raise InputError("not a whole number", where=f"{where}, {name}", found=repr(value))
    return int(number)
