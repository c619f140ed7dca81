"""What a foreign file states beside its columns: units of the axes, sample steps, and conditions in our names."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence

from darkedge.analysis.captures import Conditions
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.condition_values import CONDITION_NAMES, conditions_from, parse_condition
from darkedge.analysis.files.numbers import is_step
from darkedge.analysis.files.units_written import Dimension, WrittenUnit, read_unit

Settings = Sequence[tuple[int, tuple[str, ...]]]
"""Lines of settings: line number and cells."""

_NUMBER_WITH_UNIT = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*([^\W\d_]*)")
_STEP_WORDS = re.compile(
    r"interval|increment|sampl\w*[ _]*(?:period|time|step)|\bdt\b|x.?incr|time.?step", re.IGNORECASE
)
_RATE_WORDS = re.compile(r"sampl\w*[ _/]*(?:rate|freq)|\brate\b", re.IGNORECASE)


def axis_units(settings: Settings) -> Iterator[tuple[int, WrittenUnit]]:
    """Units that settings give to an axis, with their lines: a key that says so, and units without a number.

    `Vertical Units,V` is one; `Sample rate,1,GHz` is none, nor is `Coupling,A`.
    """
    for line, (key, *rest) in settings:
        units = [read_unit(cell) for cell in rest]
        if not rest or not all(units):
            continue
        for unit in units:
            # Nothing but an axis is in bare hertz or decibels; volts and seconds need the word.
            if unit and ("unit" in key.casefold() or unit.dimension in (Dimension.FREQUENCY, Dimension.LEVEL)):
                yield line, unit


def stated_steps(settings: Settings, *, only_named: bool) -> list[float]:
    """Sample steps in seconds that the settings may be stating, each value once.

    Parameters
    ----------
    settings : sequence
        Lines of cells.
    only_named : bool
        Take only what a key such as `Sample Interval` or `Sample rate` names. Else every number that could be a
        step counts, for a caller that can hold it against the stamps.
    """
    steps: list[float] = []
    for _, cells in settings:
        key = cells[0]
        for number, unit in _numbers(cells):
            if number <= 0 or (unit is not None and unit.dimension not in (Dimension.TIME, Dimension.FREQUENCY)):
                continue
            is_rate = unit.dimension is Dimension.FREQUENCY if unit is not None else bool(_RATE_WORDS.search(key))
            if only_named and not (_RATE_WORDS if is_rate else _STEP_WORDS).search(key):
                continue
            value = number * (unit.scale if unit is not None else 1.0)
            step = 1 / value if is_rate and value > 0 else value
            if is_step(step):
                steps.append(step)
    return list(dict.fromkeys(steps))


def stated_conditions(settings: Settings) -> Conditions:
    """Conditions that lines such as `# bias_V = 12` state in the names of the capture header.

    Raises
    ------
    InputError
        A value that the condition cannot have, or a condition twice.
    """
    values: dict[str, object] = {}
    for line, cells in settings:
        if len(cells) != 2 or cells[0] not in CONDITION_NAMES:
            continue
        name, written = cells
        if name in values:
            raise InputError(f"{name} is there twice", where=f"line {line}")
        try:
            values[name] = parse_condition(name, written)
        except InputError as error:
            raise error.at(f"line {line}, {name}") from error
    return conditions_from(values)


def _numbers(cells: Sequence[str]) -> Iterator[tuple[float, WrittenUnit | None]]:
    """Numbers in the cells, each with the unit behind it or in the next cell."""
    for place, cell in enumerate(cells):
        match = _NUMBER_WITH_UNIT.fullmatch(cell)
        if match is None:
            continue
        following = cells[place + 1] if place + 1 < len(cells) else ""
        written = match[2] or following
        unit = read_unit(written)
        if match[2] and unit is None:
            continue
        yield float(match[1]), unit
