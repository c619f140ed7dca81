"""Dialect files: every operation mapped or absent, values written and answers read; no socket."""

from pathlib import Path

import numpy as np
import pytest

from darkedge.analysis.errors import DialectError, LinkError
from darkedge.instruments.dialect import (
    BIAS,
    GENERATOR,
    NEXT_ERROR,
    SCOPE,
    Preamble,
    WaveformReading,
    codes_from_block,
    codes_from_text,
    read_number,
    read_preamble,
    volts,
)
from darkedge.instruments.dialect_file import read_dialect, shipped_dialects
from darkedge.instruments.operations import OPERATIONS, Section, operation
from darkedge.instruments.session import ScpiSession, Setting
from darkedge.instruments.transport import ScriptedTransport
from darkedge.instruments.virtual.rehearsal import OWN_WORDS

SHIPPED = read_dialect("scpi-1999")
OWN = read_dialect(str(OWN_WORDS))
SHIPPED_TEXT = (Path(__file__).resolve().parents[1] / "instruments" / "dialects" / "scpi-1999.toml").read_text("utf-8")


def changed(folder: Path, old: str, new: str) -> str:
    assert old in SHIPPED_TEXT
    (folder / "mine.toml").write_text(SHIPPED_TEXT.replace(old, new, 1), encoding="utf-8")
    return str(folder / "mine.toml")


def test_only_the_standards_own_dialect_is_shipped() -> None:
    assert shipped_dialects() == ("scpi-1999",)


@pytest.mark.parametrize("dialect", [SHIPPED], ids=["scpi-1999"])
def test_the_shipped_dialect_maps_every_operation(dialect: object) -> None:
    assert set(dialect.operations) == set(OPERATIONS)
    assert not dialect.lacking()


def test_the_operations_are_those_of_the_design() -> None:
    names = {str(what) for what in OPERATIONS}
    scope = (
        "channel_range", "channel_offset", "coupling", "input_resistance", "bandwidth_limit", "probe_ratio", "span", "position",
        "points", "averages", "trigger_source", "trigger_level", "trigger_slope", "arm", "wait", "stop", "read_waveform",
    )  # fmt: skip
    wanted = {f"oscilloscope.{name}" for name in scope}
    wanted |= {f"common.{name}" for name in ("identify", "reset", "clear", "next_error")}
    wanted |= {
        f"function_generator.{name}"
        for name in ("pulse_width", "period", "high", "low", "load_impedance", "output", "shape", "dc_level")
    }
    wanted |= {f"bias.{name}" for name in ("level", "compliance", "output", "read_voltage", "read_current")}
    assert names == wanted | {"switch.close", "switch.open"}


def test_channel_and_value_are_put_into_the_message() -> None:
    assert SHIPPED.messages(SCOPE["channel_range"], 0.02, channel=3) == ("SENS3:VOLT:RANG:PTP 0.02",)
    assert SHIPPED.question(SCOPE["channel_range"], channel=3) == "SENS3:VOLT:RANG:PTP?"
    assert SHIPPED.messages(SCOPE["averages"], 16.0) == ("SENS:AVER:COUN 16", "SENS:AVER:STAT ON")


def test_words_of_ours_become_words_of_the_instrument_and_back() -> None:
    assert SHIPPED.messages(SCOPE["trigger_source"], "channel", channel=2) == ("TRIG:SOUR INT2",)
    assert SHIPPED.value(SCOPE["trigger_source"], "INT2\n", channel=2) == "channel"
    assert SHIPPED.value(GENERATOR["output"], "1") == SHIPPED.value(GENERATOR["output"], "on") == "on"


def test_a_scale_is_applied_on_the_way_out_and_taken_off_on_the_way_in() -> None:
    assert OWN.messages(BIAS["level"], 5.0) == ("RAIL:MILL 5000",)
    assert OWN.value(BIAS["level"], "5000") == 5.0
    assert OWN.messages(SCOPE["channel_range"], 0.08, channel=1) == ("TRAC1:TENT 0.008",)


@pytest.mark.parametrize("answer", ["ON", "", "1,2", "nan", "9.91E37", "DC LEVEL"])
def test_an_answer_that_is_no_number_is_refused(answer: str) -> None:
    """SCPI-1999 Volume 1, 7.2.1.5: 9.91E37 is not a number."""
    with pytest.raises(LinkError, match=r"bias\.level: the answer is no number"):
        SHIPPED.value(BIAS["level"], answer)


def test_a_number_as_large_as_infinity_is_infinite() -> None:
    """SCPI-1999 Volume 1, 7.2.1.4: 9.9E37."""
    assert read_number("9.9E37", where="x") == np.inf
    assert read_number("-9.9E+37", where="x") == -np.inf


def test_an_answer_that_is_none_of_the_words_is_refused_and_the_words_are_said() -> None:
    with pytest.raises(LinkError, match=r"none of the words of the dialect; found 'GND'; wanted DC, AC"):
        SHIPPED.value(SCOPE["coupling"], "GND")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('format = "darkedge-dialect 1"', 'format = "darkedge-dialect 2"', "not a format that this version reads"),
        ('arm = { set = "INIT" }', "", r"oscilloscope\.arm: neither mapped nor absent; write arm = \{ absent"),
        ('arm = { set = "INIT" }', 'arm = { absent = "no" }', r"oscilloscope\.arm: cannot be absent"),
        ('arm = { set = "INIT" }', 'arm = { set = "INIT", absent = "no" }', "both mapped and absent"),
        ('arm = { set = "INIT" }', "arm = { }", "neither mapped nor absent"),
        ('arm = { set = "INIT" }', 'arm = { get = "INIT?" }', "nothing is sent"),
        ('arm = { set = "INIT" }', 'arm = { sett = "INIT" }', "unknown key; did you mean set?"),
        (
            'arm = { set = "INIT" }',
            'arm = { set = "INIT" }\nlaunch = { set = "X" }',
            r"oscilloscope\.launch: no such operation",
        ),
        ('arm = { set = "INIT" }', "arm = 5", r"oscilloscope\.arm: not a table"),
        ("SENS:SWE:TIME {value}", "SENS:SWE:TIME", "{value} stands in none of the messages"),
        ('words = { dc = "DC", ac = "AC" }', 'words = { dc = "DC" }', "lacks ac"),
        ('words = { dc = "DC", ac = "AC" }', 'words = { dc = "D", ac = "A", gnd = "G" }', "does not know gnd"),
        ('data = "float32"', 'data = "int16"', "whole codes without a worth"),
        ('data = "float32"', 'data = "float16"', "data"),
        ('wait = { get = "*OPC?", done = "1" }', 'wait = { set = "*OPC" }', "nothing is asked"),
        ("[common]", "[commun]", "commun: unknown key"),
    ],
)
def test_what_is_wrong_in_a_dialect_file_is_named(tmp_path: Path, old: str, new: str, words: str) -> None:
    with pytest.raises(DialectError, match=words):
        read_dialect(changed(tmp_path, old, new))


def test_all_faults_of_a_dialect_are_told_at_once(tmp_path: Path) -> None:
    path = changed(tmp_path, 'arm = { set = "INIT" }', "")
    text = Path(path).read_text("utf-8").replace('stop = { set = "ABOR" }', "")
    Path(path).write_text(text, encoding="utf-8")
    with pytest.raises(DialectError, match=r"2 faults(.|\n)*arm(.|\n)*stop"):
        read_dialect(path)


def test_a_dialect_that_is_not_there_is_refused_with_those_that_are() -> None:
    with pytest.raises(DialectError, match=r"no such dialect; found 'mine'; wanted a file, or .* scpi-1999"):
        read_dialect("mine")


def test_a_dialect_may_leave_out_the_instruments_it_is_not_for(tmp_path: Path) -> None:
    cut = SHIPPED_TEXT[: SHIPPED_TEXT.index("[oscilloscope]")] + SHIPPED_TEXT[SHIPPED_TEXT.index("[bias]") :]
    (tmp_path / "supply.toml").write_text(cut, encoding="utf-8")
    dialect = read_dialect("supply.toml", beside=tmp_path)
    assert dialect.has(Section.BIAS)
    with pytest.raises(
        DialectError, match=r"oscilloscope\.dialect: the dialect scpi-1999 has no section \[oscilloscope\]"
    ):
        dialect.require(Section.OSCILLOSCOPE, where="oscilloscope.dialect")


def test_codes_are_scaled_by_the_places_of_the_preamble() -> None:
    """volts = (code - zero_code) * volts_per_code + zero_V, as the dialect file states it."""
    assert OWN.waveform is not None
    preamble = read_preamble("3;2;32768;0.001;0.5;-1E-06;1E-09\n", OWN.waveform)
    assert preamble == Preamble(volts_per_code=1e-3, zero_code=32768, zero_V=0.5, step_s=1e-9, start_s=-1e-6)
    codes = codes_from_block(np.array([32768, 33768, 31768], dtype="<u2").tobytes(), OWN.waveform)
    assert volts(codes, preamble) == pytest.approx([0.5, 1.5, -0.5])


@pytest.mark.parametrize(
    ("answer", "words"),
    [
        ("1;2;3", r"preamble, field 4 \(volts_per_code\): the preamble has too few fields"),
        ("1;2;0;x;0;0;1", r"field 4 \(volts_per_code\): the answer is no number; found 'x'"),
        ("1;2;0;0;0;0;1", "a code is worth nothing"),
    ],
)
def test_a_preamble_that_cannot_be_read_is_refused(answer: str, words: str) -> None:
    assert OWN.waveform is not None
    with pytest.raises(LinkError, match=words):
        read_preamble(answer, OWN.waveform)


@pytest.mark.parametrize("data", ["int8", "uint8", "int16", "uint16", "float32", "float64"])
@pytest.mark.parametrize("order", ["big", "little"])
def test_blocks_of_every_kind_and_byte_order_are_read(data: str, order: str) -> None:
    """Byte orders as in SCPI-1999 Volume 2, FORMat:BORDer."""
    kind = np.dtype({"f": "f", "i": "i", "u": "u"}[data[0]] + str(int("".join(c for c in data if c.isdigit())) // 8))
    payload = np.array([1, 2, 100], dtype=kind.newbyteorder(">" if order == "big" else "<")).tobytes()
    reading = WaveformReading(asks="X?", data=data, byte_order=order)
    assert codes_from_block(payload, reading).tolist() == [1.0, 2.0, 100.0]


def test_a_block_that_ends_inside_a_sample_is_refused() -> None:
    with pytest.raises(LinkError, match=r"not a whole number of samples; found 7 bytes; wanted a multiple of 2"):
        codes_from_block(b"1234567", WaveformReading(asks="X?", data="int16"))


def test_a_record_in_text_is_read() -> None:
    assert codes_from_text("1.5, -2E-3,3\n", WaveformReading(asks="X?", data="ascii")).tolist() == [1.5, -0.002, 3.0]
    with pytest.raises(LinkError, match="sample 2: the answer is no number; found 'x'"):
        codes_from_text("1,x", WaveformReading(asks="X?", data="ascii"))


def session(*script: tuple[str, str | bytes | None]) -> ScpiSession:
    return ScpiSession("bias", ScriptedTransport(list(script)), SHIPPED)


def test_a_group_of_settings_is_sent_then_the_queue_drained_then_read_back() -> None:
    talk = session(
        ("SOUR:VOLT 5", None), ("SOUR:CURR 0.001", None), ("SYST:ERR?", '0,"No error"'), ("SOUR:VOLT?", "5.000"), ("SOUR:CURR?", "1E-3")
    )  # fmt: skip
    level, compliance = talk.settle(
        [Setting(what=BIAS["level"], value=5.0), Setting(what=BIAS["compliance"], value=1e-3)]
    )
    assert (level.value, compliance.value) == (5.0, 1e-3)
    assert not talk.transport.left


def test_queued_errors_are_quoted_with_what_was_sent() -> None:
    talk = session(
        ("SOUR:VOLT 500", None), ("SYST:ERR?", '-222,"Data out of range"'), ("SYST:ERR?", '+0,"No error"')
    )  # fmt: skip
    with pytest.raises(
        Exception, match=r'script: the bias answered -222,"Data out of range"; found after SOUR:VOLT 500'
    ):
        talk.settle([Setting(what=BIAS["level"], value=500.0)])


def test_an_error_queue_that_never_ends_is_no_endless_loop() -> None:
    talk = session(*[("SYST:ERR?", '-100,"Command error"')] * 200)
    with pytest.raises(LinkError, match=r"the error queue never ends(.|\n)*Correct common\.next_error"):
        talk.errors()


def test_a_line_that_is_not_in_the_script_is_told() -> None:
    with pytest.raises(LinkError, match=r"not in the script; found 'SOUR:VOLT 5'; wanted 'OUTP ON'"):
        session(("OUTP ON", None)).settle([Setting(what=BIAS["level"], value=5.0)])


def test_an_identity_that_is_rubbish_is_refused() -> None:
    with pytest.raises(LinkError, match="no sensible answer to who it is"):
        session(("*IDN?", "\x00\x01")).identify()


def test_next_error_is_an_operation_of_every_instrument() -> None:
    assert operation(Section.COMMON, "next_error") is NEXT_ERROR
    with pytest.raises(KeyError, match=r"bias\.made_up"):
        operation(Section.BIAS, "made_up")
