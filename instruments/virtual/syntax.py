"""Program messages as IEEE 488.2 and SCPI-1999 write them: pure text in, units and values out.

Covers what an instrument must understand: units joined by `;` with the path rules of SCPI-1999 Volume 1,
6.2.4, long and short forms in any case (6.2.1), optional nodes, numeric suffixes (6.2.5), decimal numbers
with unit suffixes, `#H #Q #B`, `MIN MAX DEF`, strings, and arbitrary blocks (IEEE 488.2, 7.7.6).
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import cache

from darkedge.instruments.virtual.errors import ScpiError

MNEMONIC_LIMIT = 12
"""Longest mnemonic a header may have (IEEE 488.2, 7.6.1.4.1)."""

_MULTIPLIERS = {
    "EX": 1e18, "PE": 1e15, "T": 1e12, "G": 1e9, "MA": 1e6, "K": 1e3, "M": 1e-3, "U": 1e-6, "N": 1e-9,
    "P": 1e-12, "F": 1e-15, "A": 1e-18, "": 1.0,
}  # fmt: skip
_MEGA_UNITS = {"MHZ": 1e6, "MOHM": 1e6}  # the two exceptions where M is mega (IEEE 488.2, 7.7.3)
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)(?:\s*[eE]\s*[+-]?(\d+))?", re.ASCII)
_RADIX = {"H": (16, "0123456789ABCDEF"), "Q": (8, "01234567"), "B": (2, "01")}
_NODE = re.compile(r"(\*?[A-Za-z][A-Za-z_]*)(\d*)", re.ASCII)
_WHITE = "".join(chr(code) for code in range(33) if code != 10)  # IEEE 488.2, 7.4.1.2
_HEADER_END = re.compile(f"[{re.escape(_WHITE)}]")
_DIGIT_LIMIT, _EXPONENT_LIMIT = 255, 32000  # IEEE 488.2, 7.7.2.4.1


@dataclass(frozen=True, slots=True, kw_only=True)
class Unit:
    """One message unit: its header as written, whether it asks, and its parameters as text."""

    nodes: tuple[str, ...]
    query: bool
    common: bool
    absolute: bool
    parameters: tuple[str, ...]


def split_units(message: str) -> list[str]:
    """Split a program message at `;`, outside quoted strings and blocks."""
    return _split(message, ";")


def split_parameters(text: str) -> list[str]:
    """Split parameters at `,`, outside quoted strings, blocks and parentheses."""
    return _split(text, ",")


def _split(text: str, mark: str) -> list[str]:
    parts, start, place = [], 0, 0
    while place < len(text):
        letter = text[place]
        if letter in "\"'":
            place = _string_end(text, place)
        elif letter == "#" and _is_number(text[place + 1 : place + 2]):
            place = _block_end(text, place)
        elif letter == "(":
            closing = text.find(")", place)
            if closing < 0:
                raise ScpiError(-102, "missing )")
            place = closing + 1
        elif letter == mark:
            parts.append(text[start:place])
            place += 1
            start = place
        else:
            place += 1
    parts.append(text[start:])
    return parts


def _string_end(text: str, start: int) -> int:
    quote, place = text[start], start + 1
    while place < len(text):
        if text[place] == quote:
            if text[place + 1 : place + 2] != quote:  # a doubled quote stands for itself
                return place + 1
            place += 1
        place += 1
    raise ScpiError(-151, "missing end quote")


def _is_number(text: str) -> bool:
    """Whether a text is decimal digits and nothing else; `²` is a digit for Python only."""
    return text.isascii() and text.isdigit()


def _block_end(text: str, start: int) -> int:
    digits = int(text[start + 1])
    if digits == 0:
        return len(text)
    count = text[start + 2 : start + 2 + digits]
    if len(count) != digits or not _is_number(count):
        raise ScpiError(-161)
    end = start + 2 + digits + int(count)
    if end > len(text):
        raise ScpiError(-161, "block shorter than its count")
    return end


def parse_unit(text: str) -> Unit:
    """Read one message unit.

    Raises
    ------
    ScpiError
        -101, -102 or -112 where the header is no header.
    """
    header, rest = [*_HEADER_END.split(text.strip(_WHITE), maxsplit=1), ""][:2]
    common = header.startswith("*")
    absolute = header.startswith(":")
    body = header[1:] if common or absolute else header
    query = body.endswith("?")
    nodes = tuple((body[:-1] if query else body).split(":"))
    for node in nodes:
        _check_node(node)
    parameters = tuple(p.strip(_WHITE) for p in split_parameters(rest)) if rest.strip(_WHITE) else ()
    if "" in parameters:
        raise ScpiError(-109 if parameters[-1] == "" else -103)
    return Unit(nodes=nodes, query=query, common=common, absolute=absolute, parameters=parameters)


def _check_node(node: str) -> None:
    if not node:
        raise ScpiError(-102, "empty node")
    match = _NODE.fullmatch(node)
    if match is None or node.startswith("*"):
        foreign = any(not (letter.isascii() and (letter.isalnum() or letter in "_?*")) for letter in node)
        raise ScpiError(-101 if foreign else -102, node[:20])
    if len(match[1]) > MNEMONIC_LIMIT:
        raise ScpiError(-112, node[:20])


@dataclass(frozen=True, slots=True, kw_only=True)
class Node:
    """One node of a command's pattern: its two spellings, and whether it may be left out or carry a number."""

    long: str
    short: str
    optional: bool
    numbered: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Pattern:
    """A command's header as manuals print it, such as `[SENSe:]VOLTage#:RANGe`; `#` marks a channel number."""

    nodes: tuple[Node, ...]
    query: bool

    def match(self, written: tuple[str, ...], *, query: bool) -> tuple[int, ...] | None:
        """Channel numbers of the numbered nodes (1 where none is written), `None` where it is another command."""
        return _match(self.nodes, written) if query == self.query else None


def _match(nodes: tuple[Node, ...], written: tuple[str, ...]) -> tuple[int, ...] | None:
    if not nodes:
        return () if not written else None
    first, rest = nodes[0], nodes[1:]
    if written:
        number = _node_number(first, written[0])
        if number is not None:
            tail = _match(rest, written[1:])
            if tail is not None:
                return ((number,) if first.numbered else ()) + tail
    if first.optional:
        tail = _match(rest, written)
        if tail is not None:
            return ((1,) if first.numbered else ()) + tail
    return None


def _node_number(node: Node, written: str) -> int | None:
    match = _NODE.fullmatch(written)
    if match is None or match[1].upper() not in (node.long, node.short):
        return None
    if not match[2]:
        return 1
    return int(match[2].lstrip("0")[:9] or 0) if node.numbered else None  # nine digits are beyond any channel


@cache
def parse_pattern(text: str) -> Pattern:
    """Read a pattern as manuals print it: capitals are the short form, brackets may be left out."""
    query = text.endswith("?")
    nodes = []
    for piece in re.findall(r"\[:?[^\]]+\]|:?[^:\[\]]+", text.removesuffix("?")):
        optional = piece.startswith("[")
        name = piece.strip("[]:")
        numbered = name.endswith("#")
        name = name.removesuffix("#")
        short = "".join(c for c in name if c.isupper() or c == "*" or c.isdigit())
        nodes.append(Node(long=name.upper(), short=short, optional=optional, numbered=numbered))
    return Pattern(nodes=tuple(nodes), query=query)


def short_form(word: str) -> str:
    """Short form of a mnemonic: four letters, or three where the fourth is a vowel (SCPI-1999 Volume 1, 6.2.1)."""
    upper = word.upper()
    if len(upper) <= 4:
        return upper
    return upper[:3] if upper[3] in "AEIOU" else upper[:4]


def parse_number(text: str, *, unit: str = "") -> float:
    """Read a decimal or radix number with an optional suffix of the given unit (`S`, `V`, `HZ` ...).

    Raises
    ------
    ScpiError
        -104 not a number, -121 to -124 a number written wrongly, -131 a suffix of another unit, -138 a suffix
        where none is allowed, -103 something else behind the number, -222 beyond what a number can hold.
    """
    stripped = text.strip(_WHITE)
    if stripped[:1] == "#":
        return _radix_number(stripped)
    named = {"INF": 9.9e37, "INFINITY": 9.9e37, "NINF": -9.9e37, "NAN": 9.91e37}.get(stripped.upper())
    if named is not None:
        return named
    match = _NUMBER.match(stripped)
    if match is None:
        raise ScpiError(-104, stripped[:20])
    if len(match[1].replace(".", "").lstrip("0")) > _DIGIT_LIMIT:
        raise ScpiError(-124)
    exponent = (match[2] or "").lstrip("0")
    if len(exponent) > 5 or int(exponent or 0) > _EXPONENT_LIMIT:
        raise ScpiError(-123, stripped[:20])
    number = float(re.sub(r"\s", "", match[0]))
    behind = stripped[match.end() :]
    suffix = behind.strip(_WHITE).upper()
    if suffix:
        if suffix[0] == ":" or (suffix[0].isdigit() and behind[0] in _WHITE):  # a `;` or `,` was forgotten
            raise ScpiError(-103, stripped[:20])
        if not (suffix[0].isascii() and suffix[0].isalpha()):
            raise ScpiError(-121, stripped[:20])
        number *= _suffix_factor(suffix, unit)
    if not math.isfinite(number):
        raise ScpiError(-222, stripped[:20])
    return number


def _radix_number(text: str) -> float:
    if text[1:2].upper() not in _RADIX:
        raise ScpiError(-104, text[:20])
    base, allowed = _RADIX[text[1].upper()]
    digits = text[2:].upper()
    if not digits or digits.strip(allowed):  # Python's own int() would take signs and underscores too
        raise ScpiError(-121, text[:20])
    try:
        return float(int(digits, base))
    except OverflowError:
        raise ScpiError(-222, text[:20]) from None


def _suffix_factor(suffix: str, unit: str) -> float:
    if not unit:
        raise ScpiError(-138, suffix[:20])
    wanted = unit.upper()
    if suffix in _MEGA_UNITS and suffix[1:] == wanted:
        return _MEGA_UNITS[suffix]
    if suffix.endswith(wanted):
        factor = _MULTIPLIERS.get(suffix.removesuffix(wanted))
        if factor is not None:
            return factor
    raise ScpiError(-131, suffix[:20])


def format_block(payload: bytes) -> bytes:
    """Definite-length arbitrary block response (IEEE 488.2, 8.7.9)."""
    count = str(len(payload)).encode("ascii")
    return b"#" + str(len(count)).encode("ascii") + count + payload
