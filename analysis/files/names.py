"""Conditions written in file names: `--names '{device}_{bias_V}V_{load_ohm}ohm'`."""

from __future__ import annotations

import re
import string
import unicodedata
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import PurePosixPath

from darkedge.analysis.captures import Conditions
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.condition_values import (
    CONDITION_NAMES,
    COUNTS,
    TEXTS,
    WORDS,
    conditions_from,
    parse_condition,
    unknown_condition,
)
from darkedge.analysis.quantities import unit_of

SKIP = "_"
"""The field `{_}` matches anything and means nothing."""

_PREFIX = "[fpnuµμmkMGT]"
# A comma is taken along, so that the quantity parser can say what is wrong with it.
_NUMBER = r"[+-]?(?:\d+(?:[.,]\d*)?|\.\d+)(?:[eE][+-]?\d+)?"


@dataclass(frozen=True, slots=True)
class NamePattern:
    """A pattern for file names without their extension.

    Text in braces names a condition, the rest must stand in the file name literally. Where a unit follows a
    number, both together are the quantity: `{load_ohm}ohm` reads 1000 from `1kohm`, `{bias_V}mV` reads 0.5 from
    `500mV`. A number that no unit follows may bring its own: `{bias_V}_` reads `500mV_`. `{_}` skips anything.

    Raises
    ------
    InputError
        A field that is no condition, a field twice, two fields with nothing between them, braces that do not pair.
    """

    pattern: str
    _regex: re.Pattern[str] = field(init=False, repr=False, compare=False)
    _units: dict[str, str] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        pieces = _pieces(self.pattern)
        regex, units = "", {}
        for place, (literal, name) in enumerate(pieces):
            regex += re.escape(_normal(literal))
            if name is None:
                continue
            following = _normal(pieces[place + 1][0]) if place + 1 < len(pieces) else ""
            piece, units[name] = _field_regex(name, following)
            regex += piece if name == SKIP else f"(?P<{name}>{piece})"
        object.__setattr__(self, "_regex", re.compile(regex, re.DOTALL))
        object.__setattr__(self, "_units", units)

    def conditions(self, file_name: str) -> Conditions | None:
        """Read the conditions from a file name; `None` where the pattern does not match.

        Parameters
        ----------
        file_name : str
            Name or path with `/`; folders and extension are not looked at.

        Raises
        ------
        InputError
            The pattern matches, and a value is none that the condition can have.
        """
        match = self._regex.fullmatch(_normal(file_stem(file_name)))
        if match is None:
            return None
        values: dict[str, object] = {}
        for name, text in match.groupdict().items():
            try:
                values[name] = parse_condition(name, text + self._units[name])
            except InputError as error:
                raise error.at(f"file name, {{{name}}}") from error
        return conditions_from(values)


def file_stem(file_name: str) -> str:
    """The file name without folders and without the extension of a capture (`.csv`, `.csv.gz` ...)."""
    name = PurePosixPath(file_name).name
    name = re.sub(r"\.gz$", "", name, flags=re.IGNORECASE)
    return re.sub(r"\.(?:csv|txt|dat|tsv|asc)$", "", name, flags=re.IGNORECASE)


def _normal(text: str) -> str:
    """Composed letters: some file systems store `Ω` and `µ` and accents decomposed."""
    return unicodedata.normalize("NFC", text)


def _pieces(pattern: str) -> list[tuple[str, str | None]]:
    try:
        parsed = list(string.Formatter().parse(pattern))
    except ValueError as error:
        raise _wrong(f"cannot be read: {error}", pattern) from error
    pieces: list[tuple[str, str | None]] = []
    for literal, name, spec, conversion in parsed:
        if spec or conversion:
            raise _wrong("has a field with a format", pattern, mend="write the name of the condition alone in braces")
        pieces.append((literal, name))
    names = [name for _, name in pieces if name is not None]
    for name in names:
        if name not in (*CONDITION_NAMES, SKIP):
            raise unknown_condition(name).at(f"--names {pattern}")
        if name != SKIP and names.count(name) > 1:
            raise _wrong(f"has {{{name}}} twice", pattern)
    if not set(names) - {SKIP}:
        raise _wrong("names no condition", pattern, mend="write conditions in braces, such as {bias_V}V")
    for (_, before), (literal, name) in pairwise(pieces):
        if before is not None and name is not None and not literal:
            raise _wrong(f"has nothing between {{{before}}} and {{{name}}}", pattern)
    return pieces


def _wrong(what: str, pattern: str, mend: str = "") -> InputError:
    return InputError(f"the pattern {what}", where="--names", found=repr(pattern), mend=mend)


def _field_regex(name: str, following: str) -> tuple[str, str]:
    """The regular expression of a field, and the unit that the literal after it supplies."""
    if name == SKIP or name in TEXTS:
        return ".+?", ""
    if name in WORDS:
        return "|".join(re.escape(word.value) for word in WORDS[name]), ""
    if name in COUNTS:
        return r"\d+", ""
    unit = unit_of(name)
    spellings = sorted((_normal(s) for s in unit.spellings), key=len, reverse=True)
    either = "|".join(re.escape(s) for s in spellings)
    if not either:
        return _NUMBER, ""
    prefixed = f"{_PREFIX}?" if unit.prefixed else ""
    literal_unit = re.match(rf"\s?({prefixed})({either})(?![A-Za-z])", following)
    if literal_unit is None:
        return rf"{_NUMBER}(?:\s?{prefixed}(?:{either}))?", ""
    if literal_unit.group(1) or not unit.prefixed:
        return _NUMBER, literal_unit.group(1) + literal_unit.group(2)
    return rf"{_NUMBER}\s?{prefixed}", literal_unit.group(2)
