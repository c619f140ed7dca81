"""Quantities, errors, flags and cautions: the words that everything else uses."""

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from darkedge.analysis import errors
from darkedge.analysis.cautions import REGISTER, Setting, cautions_for
from darkedge.analysis.columns import table_columns
from darkedge.analysis.errors import BenchError, DarkedgeError, InputError, PlanError
from darkedge.analysis.flags import REGISTRY, join_flags
from darkedge.analysis.quantities import format_quantity, parse_list, parse_quantity, unit_of


@pytest.mark.parametrize(
    ("written", "key", "value"),
    [
        ("500 mV", "bias_V", 0.5), ("12", "bias_V", 12.0), (12, "bias_V", 12.0), ("1 kohm", "load_ohm", 1e3),
        ("4.7kΩ", "load_ohm", 4.7e3), ("1 Mohm", "load_ohm", 1e6), ("10 us", "pulse_width_s", 1e-5),
        ("10 µs", "pulse_width_s", 1e-5), ("10 μs", "pulse_width_s", 1e-5), ("1 m", "wavelength_m", 1.0),
        ("850 nm", "wavelength_m", 8.5e-7), ("10 %", "duty", 0.1), ("2 %", "tolerance_ratio", 0.02),
        ("14.2 pF", "c_j0_F", 14.2e-12), ("1e3 ohm", "load_ohm", 1e3), ("−5 mV", "offset_V", -5e-3),
        ("23.5 degC", "temperature_degC", 23.5), ("0.3 ns", "u_rise_time_s", 3e-10), ("90", "valid_days", 90.0),
    ],
)  # fmt: skip
def test_quantities_are_read_as_people_write_them(written: object, key: str, value: float) -> None:
    assert parse_quantity(written, key) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("written", "key", "words"),
    [
        ("5 mA", "bias_V", "bias_V has the wrong unit; found '5 mA'"),
        ("1,5 V", "bias_V", "decimal comma.*[Ww]rite a decimal point"),
        ("1k", "load_ohm", "prefix and no unit.*Write 1 kohm"),
        ("1 Kohm", "load_ohm", "wrong unit"),
        ("5 MV", "pulse_width_s", "wrong unit"),
        ("nan", "bias_V", "not a number"),
        (float("inf"), "bias_V", "not a finite number"),
        (True, "bias_V", "not a quantity"),
        ("", "bias_V", "not a number"),
        ("10 %", "bias_V", "wrong unit"),
        ("1 mm2", "bias_V", "wrong unit"),
    ],
)
def test_what_is_no_quantity_of_this_key_is_refused_by_name(written: object, key: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        parse_quantity(written, key)


def test_prefixes_are_case_sensitive() -> None:
    assert parse_quantity("1 mohm", "load_ohm") == 1e-3
    assert parse_quantity("1 Mohm", "load_ohm") == 1e6


def test_a_list_is_split_at_commas() -> None:
    assert parse_list("5 V, 12 V", "rails_V") == (5.0, 12.0)


@given(st.floats(1e-14, 1e11), st.sampled_from(["bias_V", "load_ohm", "rise_time_s", "c_j0_F"]))
def test_a_printed_quantity_is_read_back(value: float, key: str) -> None:
    printed = format_quantity(value, unit_of(key).symbol)
    assert parse_quantity(printed, key) == pytest.approx(value, rel=6e-4)  # half a unit of four digits


@pytest.mark.parametrize(
    ("value", "u", "unit", "words"),
    [
        (1.2345e-8, 2.1e-10, "s", "12.35(21) ns"), (123.45e-12, 2e-12, "F", "123.5(2.0) pF"),
        (1e-9, 9.96e-11, "A", "1.00(10) nA"), (12.0, 15.0, "V", "12(15) V"), (0.0, 1e-9, "s", "0.0(1.0) ns"),
        (1.234e-6, 2e-7, "s", "1.23(20) µs"), (None, None, "V", "–"), (5e-9, None, "A", "5 nA"),
    ],
)  # fmt: skip
def test_values_are_rounded_to_their_uncertainty(value: float, u: float, unit: str, words: str) -> None:
    """Source: JCGM 100:2008, 7.2.2 and 7.2.6: two digits of uncertainty, in brackets."""
    assert format_quantity(value, unit, u=u) == words


@pytest.mark.parametrize("key", ["grading", "n_pulses", "element", "flags"])
def test_keys_without_a_unit_are_pure_numbers(key: str) -> None:
    assert unit_of(key).symbol == ""


def test_every_quantity_column_names_its_unit_or_is_a_ratio() -> None:
    bare = {c for c in table_columns() if unit_of(c).suffix == "" and c.startswith("u_")}
    assert bare == {"u_duty_in", "u_duty_out", "u_duty_cycle_distortion"}


def test_an_error_says_what_where_found_wanted_and_the_mend() -> None:
    error = PlanError("negative bias", where="plan.toml", found="-5", wanted="a magnitude", mend="write 5")
    assert str(error) == "plan.toml: negative bias; found -5; wanted a magnitude. Write 5."
    assert error.at("run").where == "run, plan.toml"


@pytest.mark.parametrize("name", [n for n in dir(errors) if isinstance(getattr(errors, n), type)])
def test_every_error_has_its_exit_status_and_survives_another_process(name: str) -> None:
    kind = getattr(errors, name)
    if not issubclass(kind, DarkedgeError):
        return
    assert kind.exit_status == (3 if issubclass(kind, BenchError) else 2)
    copy = pickle.loads(pickle.dumps(kind("what", where="where", mend="mend")))
    assert (type(copy), copy.what, copy.where, copy.mend) == (kind, "what", "where", "mend")


@pytest.mark.parametrize("flag", REGISTRY.values(), ids=list(REGISTRY))
def test_every_flag_has_a_sentence_and_a_mend(flag: object) -> None:
    assert flag.sentence.endswith(".")
    assert flag.mend.endswith(".")


def test_flags_are_joined_in_order_without_repeats_and_unknown_ones_are_a_mistake() -> None:
    assert join_flags(["ringing", "clipped", "ringing"]) == ("clipped", "ringing")
    with pytest.raises(KeyError, match="made_up"):
        join_flags(["made_up"])


@pytest.mark.parametrize(
    ("setting", "codes"),
    [
        (Setting(bias_V=60.0), set()),
        (Setting(bias_V=60.1), {"high_bias"}),
        (Setting(wavelength_m=850e-9, emitter_kind="led"), {"invisible_light"}),
        (Setting(wavelength_m=365e-9), {"ultraviolet_light"}),
        (Setting(wavelength_m=650e-9, emitter_kind="laser"), {"laser"}),
        (Setting(generator_low_V=-1.0), {"generator_low"}),
        (Setting(supply_by_hand=True), {"bias_by_hand"}),
        (Setting(bias_V=100.0, decoupling_F=1e-6), {"high_bias", "stored_charge"}),
    ],
)
def test_each_caution_has_its_trigger(setting: Setting, codes: set[str]) -> None:
    """60 V DC is the touchable limit in dry use (IEC 60598-1:2008, 8.2.3)."""
    assert {c.code for c in cautions_for(setting)} == codes


def test_cautions_on_light_and_voltage_defer_to_local_rules() -> None:
    for caution in REGISTER:
        if caution.code in ("high_bias", "invisible_light", "ultraviolet_light", "laser"):
            assert "local rules" in caution.text
