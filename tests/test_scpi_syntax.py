"""Program messages as IEEE 488.2 and SCPI-1999 write them."""

import pytest

from darkedge.instruments.virtual.errors import ScpiError, event_bit
from darkedge.instruments.virtual.syntax import (
    format_block,
    parse_number,
    parse_pattern,
    parse_unit,
    short_form,
    split_units,
)


@pytest.mark.parametrize(
    ("word", "short"),
    [
        ("IMMediate", "IMM"), ("DELay", "DEL"), ("FORMat", "FORM"), ("AUTO", "AUTO"), ("SWEep", "SWE"),
        ("LEVel", "LEV"), ("ERRor", "ERR"), ("WIDTh", "WIDT"), ("SLOPe", "SLOP"), ("POINts", "POIN"), ("DCYCle", "DCYC"),
        ("STATe", "STAT"), ("COUPling", "COUP"),
    ],
)  # fmt: skip
def test_the_short_form_is_four_letters_or_three_before_a_vowel(word: str, short: str) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.1."""
    assert short_form(word) == short
    assert parse_pattern(word).nodes[0].short == short


@pytest.mark.parametrize("written", ["sweep", "SWE", "Swe", "SWEEP"])
def test_long_and_short_form_are_accepted_in_any_case(written: str) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.1."""
    assert parse_pattern("SWEep:TIME").match((written, "time"), query=False) == ()


@pytest.mark.parametrize("written", ["SWEE", "SW", "SWEEPS"])
def test_no_form_between_long_and_short_is_accepted(written: str) -> None:
    """Source: SCPI-1999 Volume 1, 6.2.1."""
    assert parse_pattern("SWEep:TIME").match((written, "TIME"), query=False) is None


def test_a_node_in_brackets_may_be_left_out() -> None:
    """Source: SCPI-1999 Volume 1, 6.2.2: default nodes."""
    pattern = parse_pattern("[SENSe:]SWEep:TIME[:VALue]?")
    for written in (("SENS", "SWE", "TIME"), ("SWE", "TIME"), ("SWE", "TIME", "VAL")):
        assert pattern.match(written, query=True) == ()


def test_a_missing_numeric_suffix_means_one() -> None:
    """Source: SCPI-1999 Volume 1, 6.2.5.2."""
    pattern = parse_pattern("OUTPut#[:STATe]")
    assert pattern.match(("OUTP",), query=False) == (1,)
    assert pattern.match(("OUTP2", "STAT"), query=False) == (2,)


def test_units_are_split_outside_strings_and_blocks() -> None:
    """Source: IEEE Std 488.2, 7.3 and 7.7.6."""
    assert split_units('A \'x;y\';B #13a;b;C "p;""q"') == ["A 'x;y'", "B #13a;b", 'C "p;""q"']


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("1", "", 1.0), ("+.5", "", 0.5), ("1.5E-3", "", 1.5e-3), ("10 US", "S", 1e-5), ("5MV", "V", 5e-3),
        ("2MHZ", "HZ", 2e6), ("1 MOHM", "OHM", 1e6), ("3MAHZ", "HZ", 3e6), ("1KOHM", "OHM", 1e3), ("#HA2F", "", 2607.0),
        ("#Q62", "", 50.0), ("#B01011", "", 11.0), ("INF", "", 9.9e37), ("NINF", "", -9.9e37),
    ],
)  # fmt: skip
def test_numbers_are_read_with_their_suffix(text: str, unit: str, value: float) -> None:
    """Source: IEEE Std 488.2, 7.7.2 to 7.7.4; SCPI-1999 Volume 1, 7.2 (MHZ and MOHM are mega)."""
    assert parse_number(text, unit=unit) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "unit", "number"), [("1 V", "S", -131), ("1 V", "", -138), ("volt", "V", -104), ("1..2", "V", -121)]
)
def test_a_wrong_number_has_its_own_error(text: str, unit: str, number: int) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.9."""
    with pytest.raises(ScpiError) as raised:
        parse_number(text, unit=unit)
    assert raised.value.number == number


@pytest.mark.parametrize(
    ("payload", "block"), [(b"12345678", b"#1812345678"), (b"x" * 13, b"#213" + b"x" * 13), (b"", b"#10")]
)
def test_a_definite_block_states_its_byte_count(payload: bytes, block: bytes) -> None:
    """Source: IEEE Std 488.2, 8.7.9."""
    assert format_block(payload) == block


@pytest.mark.parametrize(("number", "bit"), [(-113, 32), (-222, 16), (-350, 8), (-410, 4), (77, 8)])
def test_each_class_of_error_sets_its_bit(number: int, bit: int) -> None:
    """Source: SCPI-1999 Volume 2, 21.8; IEEE Std 488.2, 11.5.1."""
    assert event_bit(number) == bit


@pytest.mark.parametrize(
    ("text", "number"), [("", -102), ("A::B", -102), ("AB§C", -101), ("ABCDEFGHIJKLM", -112), ("A 1,", -109)]
)
def test_a_wrong_header_has_its_own_error(text: str, number: int) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.9; IEEE Std 488.2, 7.6.1."""
    with pytest.raises(ScpiError) as raised:
        parse_unit(text)
    assert raised.value.number == number
