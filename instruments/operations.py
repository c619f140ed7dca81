"""What an instrument can be asked to do, by section of a dialect file: the operations that every dialect maps or says are absent."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Section(StrEnum):
    """Sections of a dialect file, in the words of the bench file."""

    COMMON = "common"
    OSCILLOSCOPE = "oscilloscope"
    FUNCTION_GENERATOR = "function_generator"
    BIAS = "bias"
    SWITCH = "switch"


class Form(StrEnum):
    """What an operation is."""

    ACTION = "action"
    """Sent, nothing comes back."""
    SETTING = "setting"
    """Sent with a value, and read back."""
    READING = "reading"
    """Asked for."""
    WAVEFORM = "waveform"
    """Asked for and scaled."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Operation:
    """One operation: its section and name, its form, the words its value can be, and whether it may be absent.

    `words` are ours; the dialect says how the instrument writes them. Without words the value is a number.
    """

    section: Section
    name: str
    form: Form
    words: tuple[str, ...] = ()
    per_channel: bool = False
    may_be_absent: bool = True

    def __str__(self) -> str:
        return f"{self.section}.{self.name}"


def _settings(
    section: Section, names: tuple[str, ...], *, per_channel: bool = False, may_be_absent: bool = True
) -> list[Operation]:
    return [
        Operation(section=section, name=name, form=Form.SETTING, per_channel=per_channel, may_be_absent=may_be_absent)
        for name in names
    ]


_C, _O, _G, _B, _S = Section
ON_OFF = ("off", "on")

OPERATIONS: tuple[Operation, ...] = (
    Operation(section=_C, name="identify", form=Form.READING, may_be_absent=False),
    Operation(section=_C, name="reset", form=Form.ACTION),
    Operation(section=_C, name="clear", form=Form.ACTION),
    Operation(section=_C, name="next_error", form=Form.READING),
    *_settings(_O, ("channel_range",), per_channel=True, may_be_absent=False),
    *_settings(_O, ("channel_offset", "input_resistance", "probe_ratio"), per_channel=True),
    Operation(section=_O, name="coupling", form=Form.SETTING, words=("dc", "ac"), per_channel=True),
    Operation(section=_O, name="bandwidth_limit", form=Form.SETTING, words=ON_OFF, per_channel=True),
    *_settings(_O, ("span", "position"), may_be_absent=False),
    *_settings(_O, ("points", "averages")),
    Operation(
        section=_O, name="trigger_source", form=Form.SETTING, words=("channel", "none"), per_channel=True,
        may_be_absent=False,
    ),
    *_settings(_O, ("trigger_level",), per_channel=True, may_be_absent=False),
    Operation(section=_O, name="trigger_slope", form=Form.SETTING, words=("rising", "falling"), per_channel=True),
    Operation(section=_O, name="arm", form=Form.ACTION, may_be_absent=False),
    Operation(section=_O, name="wait", form=Form.READING),
    Operation(section=_O, name="stop", form=Form.ACTION),
    Operation(section=_O, name="read_waveform", form=Form.WAVEFORM, per_channel=True, may_be_absent=False),
    Operation(section=_G, name="shape", form=Form.SETTING, words=("pulse", "dc"), per_channel=True),
    *_settings(_G, ("pulse_width", "period", "high", "low"), per_channel=True, may_be_absent=False),
    *_settings(_G, ("load_impedance", "dc_level"), per_channel=True),
    Operation(section=_G, name="output", form=Form.SETTING, words=ON_OFF, per_channel=True, may_be_absent=False),
    *_settings(_B, ("level",), may_be_absent=False),
    *_settings(_B, ("compliance",)),
    Operation(section=_B, name="output", form=Form.SETTING, words=ON_OFF),
    Operation(section=_B, name="read_voltage", form=Form.READING),
    Operation(section=_B, name="read_current", form=Form.READING),
    Operation(section=_S, name="close", form=Form.ACTION, per_channel=True, may_be_absent=False),
    Operation(section=_S, name="open", form=Form.ACTION, per_channel=True, may_be_absent=False),
)  # fmt: skip


def operations_of(section: Section) -> tuple[Operation, ...]:
    """All operations of a section."""
    return tuple(operation for operation in OPERATIONS if operation.section is section)


def operation(section: Section, name: str) -> Operation:
    """The operation of that name; a `KeyError` is a mistake in darkedge."""
    for known in operations_of(section):
        if known.name == name:
            return known
    raise KeyError(f"{section}.{name}")
