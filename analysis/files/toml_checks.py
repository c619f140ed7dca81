"""TOML files held against a model: every fault at once, each with its address, what stands there and the mend."""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, TypeVar

from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError, ValidationInfo
from pydantic_core import PydanticCustomError

from darkedge.analysis.errors import InputError
from darkedge.analysis.quantities import parse_quantity

Table = dict[str, object]


class Checked(BaseModel):
    """A table of a TOML file: no unknown keys, nothing converted behind the writer's back."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)


M = TypeVar("M", bound=Checked)


def _read_quantity(value: object, info: ValidationInfo) -> float:
    try:
        return parse_quantity(value, info.field_name or "")  # type: ignore[arg-type]
    except InputError as error:
        raise _fault(error.what, error.found, error.wanted, error.mend) from error


def _positive(value: object, info: ValidationInfo) -> float:
    number = _read_quantity(value, info)
    if number <= 0:
        raise _fault(f"{info.field_name} is not positive", repr(value), "a value above zero")
    return number


def _not_negative(value: object, info: ValidationInfo) -> float:
    number = _read_quantity(value, info)
    if number < 0:
        raise _fault(f"{info.field_name} is negative", repr(value), "zero or more")
    return number


Number = Annotated[float, BeforeValidator(_read_quantity)]
"""A quantity in the unit that its key ends in."""
Positive = Annotated[float, BeforeValidator(_positive)]
NotNegative = Annotated[float, BeforeValidator(_not_negative)]


def _fault(what: str, found: str = "", wanted: str = "", mend: str = "") -> PydanticCustomError:
    text = str(InputError(what, found=found, wanted=wanted, mend=mend)).removesuffix(".")
    return PydanticCustomError("darkedge", "{text}", {"text": text})


def fault(what: str, *, found: str = "", wanted: str = "", mend: str = "") -> PydanticCustomError:
    """A fault for a model's own check to raise."""
    return _fault(what, found, wanted, mend)


def read_toml(path: Path, error_class: type[InputError]) -> Table:
    """Read a TOML file.

    Raises
    ------
    InputError
        As `error_class`: not there, not text, not TOML (with the line).
    """
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise error_class("no such file", where=str(path), mend="check the path") from None
    except (OSError, UnicodeDecodeError) as error:
        found = getattr(error, "strerror", None) or "bytes that are no UTF-8 text"
        raise error_class("the file cannot be read", where=str(path), found=found) from error
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise error_class("not valid TOML", where=str(path), found=str(error)) from error


def check(table: Mapping[str, object], model: type[M], *, where: str, word: str, error_class: type[InputError]) -> M:
    """Hold a table against a model.

    Parameters
    ----------
    table : mapping
        What `read_toml` returned.
    model : type
        The model; its key `format` must read `word` (such as `darkedge-plan 1`).

    Raises
    ------
    InputError
        As `error_class`, naming every fault.
    """
    stated = table.get("format")
    if stated != word:
        raise error_class(
            "the format line is missing" if stated is None else "not a format that this version reads",
            where=where,
            found="" if stated is None else repr(stated),
            wanted=f'format = "{word}" on the first line',
        )
    held, faults = hold(table, model)
    if held is not None:
        return held
    what = faults[0] if len(faults) == 1 else f"{len(faults)} faults\n  " + "\n  ".join(faults)
    raise error_class(what, where=where)


def hold(table: Mapping[str, object], model: type[M]) -> tuple[M | None, list[str]]:
    """Hold a part of a file against a model: the model, or every fault in words with its address in the part."""
    try:
        return model.model_validate(dict(table)), []
    except ValidationError as error:
        return None, [_words(entry, model) for entry in error.errors(include_url=False)]


def _words(entry: Any, model: type[BaseModel]) -> str:  # noqa: ANN401 - pydantic's own typed dict, private
    address = _address(entry["loc"])
    kind, found = entry["type"], entry.get("input")
    if kind == "extra_forbidden":
        near = difflib.get_close_matches(str(entry["loc"][-1]), _keys(model, entry["loc"][:-1]), n=1)
        return f"{address}: unknown key" + (f"; did you mean {near[0]}?" if near else "")
    if kind == "missing":
        return f"{address}: missing"
    if kind == "darkedge":
        return f"{address}: {entry['msg']}" if address else str(entry["msg"])
    message = str(entry["msg"])
    return f"{address}: {message[0].lower()}{message[1:]}; found {found!r}"


def _address(location: tuple[int | str, ...]) -> str:
    out = ""
    for part in location:
        if isinstance(part, int):
            out += f"[{part}]"
        elif not part.startswith(("function-", "list[", "float", "constrained")):
            out += f".{part}" if out else part
    return out


def _keys(model: type[BaseModel], location: tuple[int | str, ...]) -> list[str]:
    """Keys that the model knows at a location."""
    here: type[BaseModel] | None = model
    for part in location:
        if isinstance(part, str) and here is not None and part in here.model_fields:
            here = _model_in(here.model_fields[part].annotation)
    return [] if here is None else [field.alias or name for name, field in here.model_fields.items()]


def _model_in(annotation: object) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for inner in getattr(annotation, "__args__", ()):
        found = _model_in(inner)
        if found is not None:
            return found
    return None
