"""Conditions in a table beside the captures: `--conditions TABLE`."""

from __future__ import annotations

import json
import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from io import StringIO
from pathlib import Path

import pandas as pd

from darkedge.analysis.captures import Conditions
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.condition_values import (
    CONDITION_NAMES,
    conditions_from,
    parse_condition,
    unknown_condition,
)
from darkedge.analysis.files.names import file_stem

KEY = "capture"


@dataclass(frozen=True, slots=True, kw_only=True)
class StatedConditions:
    """What one row of the table states, and which row that is."""

    conditions: Conditions
    row: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionsTable:
    """A table with a row for each capture.

    `rows` maps what stands under `capture` (path relative to the argument, file name, or file name without
    extension) to the row. `name` is what to call the table in a message.
    """

    name: str
    rows: Mapping[str, StatedConditions]

    def for_capture(self, name: str, parts: Sequence[str] = ()) -> list[StatedConditions]:
        """Every row that speaks of the capture of this name, or of one of the files it is spread over; usually one or none."""
        return [self.rows[key] for key in _keys_of(name, *parts) if key in self.rows]

    def check_against(self, names: Sequence[str], parts: Mapping[str, Sequence[str]] | None = None) -> None:
        """Hold the table against the captures that were found.

        Parameters
        ----------
        names : sequence of str
        parts : mapping, optional
            Names of the files of each capture that is spread over several.

        Raises
        ------
        InputError
            A row means two captures, or no row means any.
        """
        meant: dict[str, str] = {}
        for name in names:
            for key in _keys_of(name, *(parts or {}).get(name, ())):
                if key not in self.rows:
                    continue
                if meant.setdefault(key, name) != name:
                    raise InputError(
                        f"{key} means more than one capture",
                        where=self.rows[key].row,
                        found=f"{meant[key]} and {name}",
                        mend="write the path instead of the file name",
                    )
        if names and self.rows and not meant:
            raise InputError(
                "no row means any of the captures",
                where=self.name,
                found=f"{next(iter(self.rows))} under {KEY}",
                wanted=f"names such as {names[0]}",
            )


def read_conditions(path: Path) -> ConditionsTable:
    """Read a table of conditions.

    Parameters
    ----------
    path : Path
        CSV (comma, semicolon or tab) or a JSON array of objects, with a column `capture` and one for each condition,
        named and in units as in a capture's header. An empty cell is not known.

    Raises
    ------
    InputError
        No table; no column `capture`; a column that is no condition; a capture named twice or not at all; a value
        that the condition cannot have. The message says file, row and column.
    """
    where = str(path)
    records = _json_records(path) if path.suffix.lower() == ".json" else _csv_records(path)
    if not records:
        raise InputError("the table of conditions has no rows", where=where)
    rows: dict[str, StatedConditions] = {}
    for place, record in records:
        here = f"{where}, {place}"
        _check_columns(record, here if path.suffix.lower() == ".json" else where)
        key = str(record.get(KEY) or "").strip().replace("\\", "/").removeprefix("./")
        if not key:
            raise InputError(f"nothing stands under {KEY}", where=here, wanted="the name of a capture")
        if key in rows:
            raise InputError(f"{key} is there twice", where=here, found=f"also {rows[key].row}", mend="remove one")
        rows[key] = StatedConditions(conditions=_row_conditions(record, here), row=here)
    return ConditionsTable(name=where, rows=rows)


def _keys_of(*names: str) -> list[str]:
    """Path, path without extension, file name, file name without extension: most particular first, each once."""
    keys: list[str] = []
    for name in names:
        folder, _, file_name = name.rpartition("/")
        stem = file_stem(file_name)
        keys += [name, f"{folder}/{stem}" if folder else stem, file_name, stem]
    return list(dict.fromkeys(keys))


def _row_conditions(record: Mapping[str, object], here: str) -> Conditions:
    values: dict[str, object] = {}
    for column, written in record.items():
        if column == KEY or written is None:
            continue
        if isinstance(written, bool) or not isinstance(written, str | int | float):
            raise InputError("not a single value", where=f"{here}, column {column}", found=repr(written))
        try:
            values[column] = parse_condition(column, written)
        except InputError as error:
            raise error.at(f"{here}, column {column}") from error
    return conditions_from(values)


def _check_columns(record: Mapping[str, object], where: str) -> None:
    if KEY not in record:
        raise InputError(f"the table has no column {KEY}", where=where, found=", ".join(map(str, record)))
    for column in record:
        if column != KEY and column not in CONDITION_NAMES:
            raise unknown_condition(str(column)).at(f"{where}, column {column}")


def _json_records(path: Path) -> list[tuple[str, dict[str, object]]]:
    try:
        loaded = json.loads(_text(path))
    except ValueError as error:
        raise InputError("not JSON", where=str(path), found=str(error)) from error
    if not isinstance(loaded, list) or not all(isinstance(item, dict) for item in loaded):
        raise InputError("not a table", where=str(path), wanted="a JSON array of objects")
    return [(f"row {number}", item) for number, item in enumerate(loaded, start=1)]


def _csv_records(path: Path) -> list[tuple[str, dict[str, object]]]:
    text = _text(path)
    above = len(text) - len(text.lstrip("\r\n"))
    first_line = 1 + text[:above].replace("\r\n", "\n").count("\n")
    text = text[above:]
    header = text.partition("\n")[0]
    separator = max(",;\t", key=header.count)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", pd.errors.ParserWarning)
            frame = pd.read_csv(
                StringIO(text), sep=separator, dtype=str, keep_default_na=False, index_col=False, header=None,
                skip_blank_lines=False, skipinitialspace=True,
            )  # fmt: skip
    except (pd.errors.ParserError, pd.errors.EmptyDataError, pd.errors.ParserWarning) as error:
        raise InputError("not a table", where=str(path), found=str(error).strip()) from error
    return _with_places(frame, first_line, str(path))


def _with_places(frame: pd.DataFrame, first_line: int, where: str) -> list[tuple[str, dict[str, object]]]:
    """Rows under the first line that is not empty, each with its line number; empty columns and lines left out."""
    cells = [[str(cell).strip() for cell in row] for row in frame.fillna("").to_numpy().tolist()]
    filled = [(number, row) for number, row in enumerate(cells, start=first_line) if any(row)]
    if not filled:
        return []
    names = filled[0][1]
    columns = [c for c, name in enumerate(names) if name or any(row[c] for _, row in filled)]
    for c in columns:
        if names.count(names[c]) > 1:
            raise InputError("two columns have the same name", where=where, found=names[c] or "no name")
    return [(f"line {number}", {names[c]: row[c] for c in columns}) for number, row in filled[1:]]


def _text(path: Path) -> str:
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError("the table of conditions cannot be read", where=str(path), found=_reason(error)) from error
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("latin-1")


def _reason(error: OSError) -> str:
    return error.strerror or str(error)
