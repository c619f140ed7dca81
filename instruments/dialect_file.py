"""The dialect file: every operation mapped, or said to be absent with what follows from it."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path
from typing import Literal, TypeVar

from pydantic import Field, model_validator

from darkedge.analysis.errors import DialectError
from darkedge.analysis.files.toml_checks import Checked, check, fault, hold, read_toml
from darkedge.instruments.dialect import DATA_TYPES, Absent, Dialect, Mapped, Scaling, WaveformReading
from darkedge.instruments.operations import Form, Operation, Section, operations_of

FORMAT = "darkedge-dialect 1"
M = TypeVar("M", bound=Checked)


class _How(Checked):
    set: str | list[str] | None = None
    get: str | None = None
    scale: float | int = 1.0
    words: dict[str, str | list[str]] = Field(default_factory=dict)
    field: int | None = Field(default=None, ge=1)
    counts_from: Literal["start", "centre"] = "start"
    done: str = "1"
    none: str = "0"
    absent: str | None = Field(default=None, min_length=1)
    value: float | int | str | None = None

    @model_validator(mode="after")
    def _one_way(self) -> _How:
        said = self.set is not None or self.get is not None
        if said and self.absent is not None:
            raise fault("both mapped and absent", mend="keep one of the two")
        if not said and self.absent is None:
            raise fault("neither mapped nor absent", wanted='set, get, or absent = "what follows from it"')
        if self.value is not None and self.absent is None:
            raise fault("value is for what is absent", mend="take it out")
        if self.scale == 0:
            raise fault("scale is zero")
        return self


class _Scaling(Checked):
    volts_per_code: int | None = Field(default=None, ge=1)
    zero_code: int | None = Field(default=None, ge=1)
    zero_V: int | None = Field(default=None, ge=1)
    step_s: int | None = Field(default=None, ge=1)
    start_s: int | None = Field(default=None, ge=1)


class _Waveform(Checked):
    get: str
    data: Literal["ascii", "int8", "uint8", "int16", "uint16", "float32", "float64"]
    byte_order: Literal["big", "little"] = "big"
    prepare: list[str] = Field(default_factory=list)
    preamble: str | None = None
    separator: str = Field(default=",", min_length=1)
    scaling: _Scaling = Field(default_factory=_Scaling)
    codes: int | None = Field(default=None, ge=2)

    @model_validator(mode="after")
    def _scaled(self) -> _Waveform:
        if self.data in DATA_TYPES and "int" in self.data and self.scaling.volts_per_code is None:
            raise fault("whole codes without a worth", wanted="preamble, and scaling.volts_per_code = its field")
        stated = any(number is not None for number in self.scaling.model_dump().values())
        if stated and self.preamble is None:
            raise fault("scaling without a preamble query", mend='give preamble = "the query"')
        return self


class _Frame(Checked):
    """What stands outside the sections."""

    format: str
    name: str = Field(min_length=1)
    line_end: Literal["\n", "\r\n", "\r"] = "\n"


def read_dialect(name_or_path: str, *, beside: Path | None = None) -> Dialect:
    """Read a dialect by the name of a shipped one, or from a file (relative to the folder `beside`).

    Raises
    ------
    DialectError
        No such dialect; every fault of the file at once: unknown operations or keys, operations neither mapped nor absent, one that cannot be
        absent, words that are missing.
    """
    path = _find(name_or_path, beside)
    table = dict(read_toml(path, DialectError))
    sections = {str(section): table.pop(str(section), None) for section in Section}
    frame = check(table, _Frame, where=str(path), word=FORMAT, error_class=DialectError)
    faults: list[str] = []
    operations: dict[Operation, Mapped | Absent] = {}
    waveform: WaveformReading | None = None
    for section in Section:
        stated = sections[section]
        if stated is None:
            if section is Section.COMMON:
                faults.append("common: missing; every instrument answers who it is")
            continue
        if not isinstance(stated, dict):
            faults.append(f"{section}: not a table of operations")
            continue
        unknown = stated.keys() - {what.name for what in operations_of(section)}
        faults += [f"{section}.{name}: no such operation" for name in sorted(unknown)]
        for what in operations_of(section):
            if what.name not in stated:
                faults.append(f'{what}: neither mapped nor absent; write {what.name} = {{ absent = "what follows" }}')
                continue
            entry = stated[what.name]
            try:
                if what.form is Form.WAVEFORM:
                    waveform = _waveform(entry, what)
                    operations[what] = Mapped(asks=waveform.asks)
                else:
                    operations[what] = _operation(entry, what)
            except DialectError as error:
                faults.append(str(error).removesuffix("."))
    if faults:
        what_is_wrong = faults[0] if len(faults) == 1 else f"{len(faults)} faults\n  " + "\n  ".join(faults)
        raise DialectError(what_is_wrong, where=str(path))
    return Dialect(name=frame.name, operations=operations, waveform=waveform, line_end=frame.line_end)


def shipped_dialects() -> tuple[str, ...]:
    """Names of the dialects that come with darkedge."""
    folder = files("darkedge.instruments") / "dialects"
    return tuple(sorted(entry.name.removesuffix(".toml") for entry in folder.iterdir() if entry.name.endswith(".toml")))


def _find(name_or_path: str, beside: Path | None) -> Path:
    if name_or_path in shipped_dialects():
        return Path(str(files("darkedge.instruments") / "dialects" / f"{name_or_path}.toml"))
    path = Path(name_or_path) if beside is None else beside / name_or_path
    if not path.is_file():
        raise DialectError(
            "no such dialect",
            found=repr(name_or_path),
            wanted=f"a file, or one of those that come with darkedge: {', '.join(shipped_dialects())}",
        )
    return path


def _operation(entry: object, what: Operation) -> Mapped | Absent:
    stated = _checked(entry, _How, what)
    if stated.absent is not None:
        if not what.may_be_absent:
            raise DialectError(f"{what}: cannot be absent; the bench does not work without it")
        return Absent(consequence=stated.absent, value=_instead(stated.value, what))
    sends = (stated.set,) if isinstance(stated.set, str) else tuple(stated.set or ())
    if what.form in (Form.ACTION, Form.SETTING) and not sends:
        raise DialectError(f"{what}: nothing is sent; wanted set")
    if what.form is Form.READING and stated.get is None:
        raise DialectError(f"{what}: nothing is asked; wanted get")
    if what.form is Form.SETTING and not any("{value}" in text for text in sends):
        raise DialectError(f"{what}: {{value}} stands in none of the messages")
    return Mapped(
        sends=sends,
        asks=stated.get,
        scale=float(stated.scale),
        words=_words(stated, what),
        field=stated.field,
        counts_from=stated.counts_from,
        done=stated.done,
        none=stated.none,
    )


def _instead(value: float | str | None, what: Operation) -> float | str | None:
    if what.words:
        if value is not None and value not in what.words:
            raise DialectError(f"{what}.value: not a word of this operation; wanted {', '.join(what.words)}")
        return value
    if isinstance(value, str):
        raise DialectError(f"{what}.value: not a number")
    return None if value is None else float(value)


def _words(stated: _How, what: Operation) -> dict[str, tuple[str, ...]]:
    if stated.words.keys() != set(what.words):
        missing, more = set(what.words) - stated.words.keys(), stated.words.keys() - set(what.words)
        parts = [f"lacks {', '.join(sorted(missing))}"] if missing else []
        parts += [f"does not know {', '.join(sorted(more))}"] if more else []
        raise DialectError(f"{what}.words: {' and '.join(parts)}")
    return {word: (text,) if isinstance(text, str) else tuple(text) for word, text in stated.words.items()}


def _waveform(entry: object, what: Operation) -> WaveformReading:
    if isinstance(entry, dict) and "absent" in entry:
        raise DialectError(f"{what}: cannot be absent; without it there is no capture")
    stated = _checked(entry, _Waveform, what)
    return WaveformReading(
        asks=stated.get,
        data=stated.data,
        byte_order=stated.byte_order,
        prepares=tuple(stated.prepare),
        preamble=stated.preamble,
        separator=stated.separator,
        scaling=Scaling(**stated.scaling.model_dump()),
        codes=stated.codes,
    )


def _checked(entry: object, model: type[M], what: Operation) -> M:
    if not isinstance(entry, dict):
        raise DialectError(f"{what}: not a table", wanted='such as { set = "...", get = "..." }')
    held, faults = hold(entry, model)
    if held is None:
        raise DialectError("\n  ".join(f"{what}: {text}" if " " in text else f"{what}.{text}" for text in faults))
    return held
