"""Conditions in file names, and captures without any."""

import re

import pytest

from darkedge.analysis.captures import Conditions, Kind
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.names import NamePattern


def read(pattern: str, name: str) -> dict[str, object] | None:
    found = NamePattern(pattern).conditions(name)
    return None if found is None else dict(found.known())


@pytest.mark.parametrize(
    ("pattern", "name", "known"),
    [
        ("{device}_{bias_V}V_{load_ohm}ohm", "SP-2-03_2.5V_470ohm", {"device": "SP-2-03", "bias_V": 2.5, "load_ohm": 470.0}),
        ("{device}_{bias_V}V_{load_ohm}ohm", "SP-2-03_12V_1kohm", {"device": "SP-2-03", "bias_V": 12.0, "load_ohm": 1e3}),
        ("{device}_{bias_V}V_{load_ohm}ohm", "SP_2_03_12V_4.7kohm", {"device": "SP_2_03", "bias_V": 12.0, "load_ohm": 4700.0}),
        ("{bias_V}V", "500mV", {"bias_V": 0.5}),
        ("{bias_V}mV", "500mV", {"bias_V": 0.5}),
        ("{bias_V} V", "5 V", {"bias_V": 5.0}),
        ("{pulse_width_s}us", "10us", {"pulse_width_s": 1e-5}),
        ("w{pulse_width_s}s", "w10us", {"pulse_width_s": 1e-5}),
        ("{load_ohm}Ω", "4.7kΩ", {"load_ohm": 4700.0}),
        ("{load_ohm}Ω", "1MΩ", {"load_ohm": 1e6}),
        ("{bias_V}_{load_ohm}", "500mV_1kohm", {"bias_V": 0.5, "load_ohm": 1000.0}),
        ("{bias_V}_{load_ohm}", "5_1e3", {"bias_V": 5.0, "load_ohm": 1000.0}),
        ("{temperature_degC}degC", "-20degC", {"temperature_degC": -20.0}),
        ("{device}-{element}_{emitter_current_A}mA", "SP-9D-2_5mA", {"device": "SP-9D", "element": 2, "emitter_current_A": 0.005}),
        ("{point}_{kind}", "0007_dark", {"point": "0007", "kind": Kind.DARK}),
        ("{device}_{_}_{bias_V}V", "SP-4_second try_5V", {"device": "SP-4", "bias_V": 5.0}),
        ("{bias_V}Vbias", "5Vbias", {"bias_V": 5.0}),
        ("{device} ({bias_V}V)", "SP-7's (5V)", {"device": "SP-7's", "bias_V": 5.0}),
    ],
)  # fmt: skip
def test_a_number_with_the_unit_that_follows_is_a_quantity(pattern: str, name: str, known: dict[str, object]) -> None:
    found = read(pattern, name)
    assert found == known


@pytest.mark.parametrize("name", ["lot/run/SP-4_5V.csv", "SP-4_5V.CSV", "SP-4_5V.txt", "SP-4_5V.csv.gz", "SP-4_5V"])
def test_folders_and_extension_are_not_looked_at(name: str) -> None:
    assert read("{device}_{bias_V}V", name) == {"device": "SP-4", "bias_V": 5.0}


def test_a_dot_in_a_value_is_no_extension() -> None:
    assert read("{device}_{bias_V}V", "SP-4_1.5V") == {"device": "SP-4", "bias_V": 1.5}


@pytest.mark.parametrize("name", ["notes", "SP-4_V", "SP-4_5", "SP-4_5A", "SP-4_5V_again", "SP-4_fiveV"])
def test_a_name_that_does_not_match_says_nothing(name: str) -> None:
    assert NamePattern("{device}_{bias_V}V").conditions(name) is None


def test_letters_that_a_file_system_decomposed_still_match() -> None:
    """Some file systems store `ü` as `u` and a combining mark; the ohm sign and omega are one letter."""
    assert read("Prüfling {bias_V}V", "Pru\u0308fling 5V") == {"bias_V": 5.0}
    assert read("{load_ohm}\u2126", "50\u03a9") == {"load_ohm": 50.0}


@pytest.mark.parametrize(
    ("pattern", "name", "message"),
    [
        ("{bias_V}V", "2,5V", "file name, {bias_V}: bias_V has a decimal comma; found '2,5V'"),
        ("{bias_V}V", "-5V", "file name, {bias_V}: bias_V is negative; found '-5V'; wanted zero or more. Bias is given as a magnitude, write 5"),
        ("{load_ohm}ohm", "0ohm", "file name, {load_ohm}: load_ohm is not positive"),
        ("{element}", "0", "file name, {element}: element is not a count; found '0'"),
    ],
)  # fmt: skip
def test_a_value_that_the_condition_cannot_have_is_named(pattern: str, name: str, message: str) -> None:
    with pytest.raises(InputError, match=re.escape(message)):
        NamePattern(pattern).conditions(name)


@pytest.mark.parametrize(
    ("pattern", "message"),
    [
        ("{device}_{bias}V", "not a condition that darkedge knows; found bias; wanted run, point"),
        ("{device}_{bias_v}V", "Did you mean bias_V?"),
        ("{device}{lot}", "has nothing between {device} and {lot}"),
        ("{bias_V}V_{bias_V}V", "has {bias_V} twice"),
        ("{device", "cannot be read"),
        ("device}", "cannot be read"),
        ("{bias_V:5}V", "has a field with a format"),
        ("{bias_V!r}V", "has a field with a format"),
        ("{}", "not a condition that darkedge knows"),
        ("SP-2", "names no condition"),
        ("{_}", "names no condition"),
        ("", "names no condition"),
    ],
)
def test_a_pattern_that_makes_no_sense_is_refused(pattern: str, message: str) -> None:
    with pytest.raises(InputError, match=re.escape(message)) as caught:
        NamePattern(pattern)
    assert "--names" in str(caught.value)


def test_a_name_pattern_knows_nothing_that_is_not_written() -> None:
    found = NamePattern("{device}").conditions("SP-2")
    assert found == Conditions(device="SP-2")
