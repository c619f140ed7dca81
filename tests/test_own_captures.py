"""The capture file of darkedge: what is written is read back, and what is wrong is named."""

import os
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from darkedge.analysis.captures import (
    Capture,
    Conditions,
    DeviceKind,
    Kind,
    OutputConnection,
    Record,
    Reference,
    TimedRecord,
    Waveform,
)
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.captures import read_capture, write_capture
from darkedge.analysis.files.own_capture import HEADER_ORDER, parse_capture, print_capture

FULL = Conditions(
    run="photodiode", point="0007", kind=Kind.PULSE, device="SP-2-03", lot="K-0417", element=1, driven_element=1,
    reference=Reference.VOLTAGE, bias_V=12.0, bias_read_V=11.998, load_ohm=1000.0, emitter_current_A=0.005,
    pulse_width_s=1e-5, drive_period_s=1e-4, temperature_degC=23.5, averages=16, coupling="DC", input_ohm=1e6,
    bandwidth_limit_Hz=2e7, probe_ratio=1.0, volts_per_code=0.0025, taken_utc="2026-03-03T09:14:02Z", darkedge="0.1.0",
    device_kind=DeviceKind.PHOTODIODE, output_connection=OutputConnection.LOAD_TO_GROUND,
)  # fmt: skip

TEXT = """\
# format = darkedge-capture 1
# run = photodiode
# point = 0007
# kind = pulse
# device = SP-2-03
# element = 1
# bias_V = 12
# load_ohm = 1 kohm
# pulse_width_s = 10 us
# bandwidth_limit_Hz =
# volts_per_code = 0
# device_kind = photodiode
# output_connection = load_to_ground
time_s,drive_V,output_V
-1e-06,0.0012,0.0003
-9.98e-07,0.0012,0.0004
-9.96e-07,0.0013,0.0002
"""


def same(one: Record | None, other: Record | None) -> bool:
    """Whether two records are the same to the last bit."""
    if one is None or other is None:
        return one is other
    if type(one) is not type(other):
        return False
    same_step = not isinstance(one, Waveform) or (one.dt_s, one.t0_s) == (other.dt_s, other.t0_s)
    return same_step and np.array_equal(one.time_s, other.time_s) and np.array_equal(one.signal_V, other.signal_V)


def assert_same(one: Capture, other: Capture) -> None:
    assert one.conditions == other.conditions
    assert one.outputs.keys() == other.outputs.keys()
    assert same(one.drive, other.drive)
    assert all(same(one.outputs[element], other.outputs[element]) for element in one.outputs)


def wave(values: list[float], *, t0_s: float = -1e-6, dt_s: float = 2e-9) -> Waveform:
    return Waveform(signal_V=np.array(values), t0_s=t0_s, dt_s=dt_s)


def read_text(tmp_path: Path, text: str | bytes) -> Capture:
    path = tmp_path / "0007_pulse.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_capture(path)


class TestReading:
    def test_conditions_columns_and_times_are_those_of_the_file(self, tmp_path: Path) -> None:
        capture = read_text(tmp_path, TEXT)
        assert capture.name == "0007_pulse.csv"
        assert capture.conditions == Conditions(
            run="photodiode", point="0007", kind=Kind.PULSE, device="SP-2-03", element=1, bias_V=12.0, load_ohm=1000.0,
            pulse_width_s=1e-5, device_kind=DeviceKind.PHOTODIODE, output_connection=OutputConnection.LOAD_TO_GROUND,
        )  # fmt: skip
        output = capture.outputs[1]
        assert (output.t0_s, output.dt_s) == (-1e-6, 2e-9)
        assert output.signal_V.tolist() == [0.0003, 0.0004, 0.0002]
        assert capture.drive is not None
        assert capture.drive.signal_V.tolist() == [0.0012, 0.0012, 0.0013]
        assert capture.remarks == ()

    @pytest.mark.parametrize("end", ["\r\n", "\r"])
    def test_line_ends_and_byte_order_mark_do_not_matter(self, tmp_path: Path, end: str) -> None:
        text = "\ufeff" + TEXT.replace("\n", end)
        assert_same(read_text(tmp_path, text), read_text(tmp_path, TEXT))

    def test_zero_volts_per_code_is_not_known(self, tmp_path: Path) -> None:
        assert read_text(tmp_path, TEXT).conditions.volts_per_code is None

    def test_a_lone_output_is_that_of_the_element_named(self, tmp_path: Path) -> None:
        assert list(read_text(tmp_path, TEXT.replace("# element = 1", "# element = 2")).outputs) == [2]

    def test_several_outputs_are_numbered_by_their_columns(self, tmp_path: Path) -> None:
        text = TEXT.replace("time_s,drive_V,output_V", "time_s,output_V,output2_V").replace("# element = 1\n", "")
        capture = read_text(tmp_path, text)
        assert list(capture.outputs) == [1, 2]
        assert capture.drive is None
        assert capture.outputs[2].signal_V.tolist() == [0.0003, 0.0004, 0.0002]

    def test_uneven_times_are_kept_and_remarked(self, tmp_path: Path) -> None:
        capture = read_text(tmp_path, TEXT.replace("-9.98e-07", "-9.99e-07"))
        assert isinstance(capture.outputs[1], TimedRecord)
        assert capture.remarks == ("uneven_time",)


class TestRefusing:
    @pytest.mark.parametrize(
        ("old", "new", "message"),
        [
            ("capture 1", "capture 2", "line 1, format: another version of the capture file; found darkedge-capture 2; wanted darkedge-capture 1"),
            ("darkedge-capture 1", "darkedge-lot 1", "line 1, format: another version of the capture file; found darkedge-lot 1"),
            ("# bias_V", "# bias", "line 7, bias: not a condition that darkedge knows; found bias; wanted run"),
            ("# bias_V", "# bias_v", "Did you mean bias_V?"),
            ("# bias_V = 12", "# bias_V = 5 mA", "line 7, bias_V: bias_V has the wrong unit; found '5 mA'; wanted a number in V"),
            ("# bias_V = 12", "# bias_V = 1,5", "bias_V has a decimal comma; found '1,5'"),
            ("# bias_V = 12", "# bias_V = -5", "bias_V is negative; found '-5'; wanted zero or more. Bias is given as a magnitude, write 5"),
            ("# bias_V = 12", "# bias_V = nan", "bias_V is not a number; found 'nan'"),
            ("# bias_V = 12", "# bias_V 12", "line 7: not a condition; found '# bias_V 12'; wanted # name = value"),
            ("# bias_V = 12", "# bias_V = 12\n# bias_V = 12", "line 8: bias_V is there twice; found also line 7"),
            ("# bias_V = 12", "# bias_V = 1e308", "line 7, bias_V: bias_V is beyond what any bench has; found '1e308'; wanted zero, or"),
            ("1 kohm", "1e-320", "load_ohm is beyond what any bench has; found '1e-320'; wanted zero, or a magnitude from 1e-30 to 1e+30"),
            ("1 kohm", "0", "load_ohm is not positive; found '0'"),
            ("= pulse", "= pulses", "kind is not one of its words; found 'pulses'; wanted pulse, dark, offset, reference"),
            ("= photodiode\n# output", "= diode\n# output", "device_kind is not one of its words; found 'diode'; wanted photodiode, pin"),
            ("# element = 1", "# element = 1.5", "element is not a count; found '1.5'; wanted a whole number, 1 or more"),
            ("# element = 1", "# element = 0", "element is not a count; found '0'"),
            ("# element = 1", "# taken_utc = yesterday", "taken_utc is not a date and time; found 'yesterday'"),
            ("time_s", "time_ms", "line 14: a column that a capture file does not have; found time_ms; wanted time_s, drive_V"),
            ("time_s,drive_V,", "drive_V,output2_V,", "line 14: the column time_s is missing"),
            ("drive_V,output_V", "output_V,output_V", "line 14: a column is there twice"),
            ("drive_V,output_V", "drive_V", "line 14: no output column; found time_s,drive_V"),
            ("0.0004", "0.00x4", "line 16: text among the numbers; found '0.00x4'; wanted a number"),
            ("0.0004", "", "line 16, output_V: a sample is missing; found nothing or NaN"),
            ("0.0004", "nan", "line 16, output_V: a sample is missing"),
            ("0.0004", "inf", "line 16: a value is infinite: the signal left the range; found inf"),
            (",0.0004", "", "line 16: the row has another number of values than the others; found 2 in '-9.98e-07,0.0012'; wanted 3"),
            ("0.0004", "0.0004,7", "line 16: the row has another number of values"),
            ("-9.98e-07,", "-9.98e-06,", "line 16, time_s: the time goes back; found -9.98e-06 s after -1e-06 s"),
            ("-9.98e-07,", "-1e-06,", "line 16, time_s: the time stands still"),
            (TEXT[TEXT.index("-1e-06") :], "", "line 15: no numbers follow the column names"),
            (TEXT[TEXT.index("-9.98e-07") :], "", "line 15: one sample is no waveform; wanted two samples or more"),
            (TEXT[TEXT.index("time_s") :], "", "no columns follow the header"),
            (TEXT[TEXT.index("-9.96e-07") :], "-9.96e-07,0.00", "line 17: the file is cut off: its last line has no end; found '-9.96e-07,0.00'"),
        ],
    )  # fmt: skip
    def test_what_is_wrong_is_named(self, tmp_path: Path, old: str, new: str, message: str) -> None:
        assert old in TEXT
        with pytest.raises(CaptureError, match=re.escape(message)) as caught:
            read_text(tmp_path, TEXT.replace(old, new, 1))
        assert str(caught.value).startswith(str(tmp_path / "0007_pulse.csv"))


class TestWriting:
    @pytest.mark.parametrize("n_outputs", [1, 2, 3])
    @pytest.mark.parametrize("drive", [True, False])
    def test_what_is_written_is_read_back(self, tmp_path: Path, n_outputs: int, drive: bool) -> None:
        rng = np.random.default_rng(1)
        outputs = {k + 1: wave(rng.normal(size=50).tolist()) for k in range(n_outputs)}
        capture = Capture(
            name="0007_pulse.csv", outputs=outputs, drive=wave([0.1] * 50) if drive else None, conditions=FULL
        )
        path = tmp_path / "0007_pulse.csv"
        write_capture(capture, path)
        assert_same(read_capture(path), capture)

    def test_a_lone_output_of_another_element_keeps_its_number(self) -> None:
        for conditions in (Conditions(), Conditions(element=2)):
            capture = Capture(name="x", outputs={2: wave([1.0, 2.0])}, conditions=conditions)
            assert_same(parse_capture(print_capture(capture).encode(), name="x"), capture)

    def test_the_header_has_every_name_in_the_agreed_order_and_unknown_values_empty(self) -> None:
        text = print_capture(Capture(name="x", outputs={1: wave([1.0, 2.0])}))
        names = [line.split("=")[0].strip("# ") for line in text.splitlines() if line.startswith("#")]
        assert names == ["format", *HEADER_ORDER]
        assert "# bias_V =\n" in text

    def test_times_are_written_as_short_as_their_steps_allow(self) -> None:
        text = print_capture(Capture(name="x", outputs={1: wave([0.1, 0.2, 0.3])}))
        assert text.splitlines()[-3:] == ["-1e-06,0.1", "-9.98e-07,0.2", "-9.96e-07,0.3"]

    def test_uneven_times_come_back_to_the_last_bit(self) -> None:
        times = np.array([0.0, 1e-9, 5e-9, 1.7e-8])
        record = TimedRecord(signal_V=np.array([0.1, 0.2, 0.3, 0.1]), time_s=times)
        capture = Capture(name="x", outputs={1: record}, drive=record, remarks=("uneven_time",))
        assert_same(parse_capture(print_capture(capture).encode(), name="x"), capture)

    def test_nothing_is_left_beside_the_file(self, tmp_path: Path) -> None:
        write_capture(Capture(name="x", outputs={1: wave([0.1, 0.2])}), tmp_path / "x.csv")
        assert [path.name for path in tmp_path.iterdir()] == ["x.csv"]

    def test_a_file_that_stands_there_is_replaced_whole(self, tmp_path: Path) -> None:
        path = tmp_path / "x.csv"
        write_capture(Capture(name="x", outputs={1: wave([0.1] * 100)}), path)
        write_capture(Capture(name="x", outputs={1: wave([0.2, 0.3])}), path)
        assert read_capture(path).outputs[1].signal_V.tolist() == [0.2, 0.3]

    def test_a_failed_write_leaves_the_old_file_and_no_part_of_the_new(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        path = tmp_path / "x.csv"
        write_capture(Capture(name="x", outputs={1: wave([0.1, 0.2])}), path)
        before = path.read_bytes()

        def full(_descriptor: int) -> None:
            raise OSError(28, "No space left on device")

        monkeypatch.setattr(os, "fsync", full)
        with pytest.raises(InputError, match=r"x\.csv: the file cannot be written; found No space left on device"):
            write_capture(Capture(name="x", outputs={1: wave([0.3, 0.4])}), path)
        assert path.read_bytes() == before
        assert [file.name for file in tmp_path.iterdir()] == ["x.csv"]

    def test_a_folder_that_is_not_there(self, tmp_path: Path) -> None:
        with pytest.raises(InputError, match=r"the file cannot be written; found No such file"):
            write_capture(Capture(name="x", outputs={1: wave([0.1, 0.2])}), tmp_path / "none" / "x.csv")

    def test_channels_with_different_times_are_refused(self) -> None:
        capture = Capture(name="x", outputs={1: wave([0.1, 0.2])}, drive=wave([0.1, 0.2], t0_s=0.0))
        with pytest.raises(CaptureError, match="x: the channels differ in their times; wanted one time axis"):
            print_capture(capture)

    def test_an_output_that_is_not_the_element_of_the_conditions_is_refused(self) -> None:
        capture = Capture(name="x", outputs={1: wave([0.1, 0.2])}, conditions=Conditions(element=2))
        with pytest.raises(CaptureError, match="found output of element 1; wanted element 2"):
            print_capture(capture)


VOLTS = st.floats(min_value=-1e3, max_value=1e3, allow_nan=False)
TEXTS = (
    st.text(st.characters(codec="utf-8", exclude_categories=["Cc", "Cs", "Zl", "Zp"]), min_size=1)
    .map(str.strip)
    .filter(bool)
)
POSITIVE = st.floats(min_value=1e-12, max_value=1e12, allow_nan=False)


@st.composite
def captures(draw: st.DrawFn) -> Capture:
    n = draw(st.integers(2, 40))
    dt_s = draw(st.one_of(st.sampled_from([1e-9, 4e-10, 2.5e-8, 1e-5]), st.floats(1e-12, 1e-3)))
    t0_s = dt_s * draw(st.integers(-50, 50)) + draw(st.sampled_from([0.0, 1e-7]))

    def record() -> Waveform:
        return wave(draw(st.lists(VOLTS, min_size=n, max_size=n)), t0_s=t0_s, dt_s=dt_s)

    outputs = {element + 1: record() for element in range(draw(st.integers(1, 3)))}
    conditions = Conditions(
        device=draw(st.none() | TEXTS), point=draw(st.none() | TEXTS), bias_V=draw(st.none() | POSITIVE),
        load_ohm=draw(st.none() | POSITIVE), averages=draw(st.none() | st.integers(1, 10**9)),
        kind=draw(st.none() | st.sampled_from(Kind)), temperature_degC=draw(st.none() | VOLTS),
    )  # fmt: skip
    drive = record() if draw(st.booleans()) else None
    return Capture(name="x.csv", outputs=outputs, drive=drive, conditions=conditions)


@given(captures())
def test_parse_of_print_is_the_same_capture(capture: Capture) -> None:
    """Volts, conditions and times come back to the last bit; the step of many samples too."""
    again = parse_capture(print_capture(capture).encode(), name="x.csv")
    assert again.conditions == capture.conditions
    assert np.array_equal(again.outputs[1].time_s, capture.outputs[1].time_s)
    for element, record in capture.outputs.items():
        assert np.array_equal(again.outputs[element].signal_V, record.signal_V)
    assert (again.drive is None) == (capture.drive is None)


def test_a_line_end_in_a_text_condition_does_not_break_the_header() -> None:
    capture = Capture(name="x", outputs={1: wave([0.1, 0.2])}, conditions=replace(FULL, device="a\nb"))
    assert parse_capture(print_capture(capture).encode(), name="x").conditions.device == "a b"
