"""Other programs' files: every shape is told by its structure, and gives the times and volts that stand in it.

The shapes are those that saved oscilloscope captures come in; makers, settings and numbers are invented.
"""

import gzip
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from darkedge.analysis.captures import Capture, Kind, TimedRecord, Waveform
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.roles import ChannelRoles

N = 400
T0_S, DT_S = -4e-7, 4e-9
TIME_S = T0_S + DT_S * np.arange(N)
DRIVE_V = np.where((TIME_S >= 0) & (TIME_S < 6e-7), 3.3, 0.02)
OUTPUT_V = np.round(0.4 * (1 - np.exp(-np.clip(TIME_S, 0, None) / 9e-8)) - 0.004, 6)
ROWS = list(zip(TIME_S.tolist(), DRIVE_V.tolist(), OUTPUT_V.tolist(), strict=True))

SETTINGS = [
    ("Record Length", "400"), ("Sample Interval", "4.000000e-09"), ("Trigger Point", "1.0e+02"), ("", ""), ("", ""),
    ("", ""), ("Source", "IN2"), ("Vertical Units", "V"), ("Vertical Scale", "1.000000e-01"),
    ("Vertical Offset", "0.000000e+00"), ("Horizontal Units", "s"), ("Horizontal Scale", "2.000000e-07"),
    ("Pt Fmt", "Y"), ("Yzero", "0.000000e+00"), ("Probe Atten", "1.0e+01"), ("Model", "invented"),
    ("Serial", "000017"), ("Firmware", "1.04"),
]  # fmt: skip


def read(tmp_path: Path, text: str | bytes, *, name: str = "trace.csv", channels: str | None = None) -> Capture:
    path = tmp_path / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return read_capture(path, channels=ChannelRoles.parse(channels) if channels else None)


def assert_even(capture: Capture, *, t0_s: float = T0_S, drive: bool = False, n: int = N) -> None:
    """Output (and drive) stand in the capture with their times; 1e-12 is the rounding of decimal stamps."""
    output = capture.outputs[1]
    assert isinstance(output, Waveform)
    assert output.dt_s == pytest.approx(DT_S, rel=1e-9)
    assert output.t0_s == pytest.approx(t0_s, rel=1e-9, abs=1e-20)
    assert output.signal_V == pytest.approx(OUTPUT_V[:n], abs=1e-12)
    assert (capture.drive is not None) == drive
    if capture.drive is not None:
        assert capture.drive.signal_V == pytest.approx(DRIVE_V[:n], abs=1e-12)
        assert capture.drive.t0_s == pytest.approx(t0_s, rel=1e-9, abs=1e-20)


def columns(row: Callable[[float, float, float], str], *, end: str = "\n") -> str:
    return "".join(row(*values) + end for values in ROWS)


def threes(value: float) -> str:
    """Exponents in multiples of three and an explicit sign: `-880.000E-09`."""
    exponent = 0 if value == 0 else int(np.floor(np.log10(abs(value)) / 3)) * 3
    return f"{value / 10.0**exponent:+.10f}E{exponent:+03d}"


def three_digit_exponent(value: float) -> str:
    mantissa, exponent = f"{value:.12e}".split("e")
    return f"{mantissa}e{exponent[0]}{int(exponent[1:]):03d}"


def beside(rows: list[tuple[float, float]], *, settings: list[tuple[str, ...]], width: int = 2) -> list[str]:
    """Settings in the first columns of the first rows, then a blank column, then padded time and volts."""
    lines = []
    for place, (t, v) in enumerate(rows):
        cells = settings[place] if place < len(settings) else ("",) * width
        stamp = f"{t:.12f}" if t < 0 else f"0{t:.12f}"
        lines.append(",".join([*cells, "", f" {stamp}", f"  {v:.6f}", ""]))
    return lines


class TestSettingsBesideTheNumbers:
    def test_numbers_that_begin_in_the_first_row_beside_settings(self, tmp_path: Path) -> None:
        text = "\n".join(beside([(t, o) for t, _, o in ROWS], settings=SETTINGS)) + "\n"
        assert_even(read(tmp_path, text))

    def test_a_row_of_headings_put_above_by_hand(self, tmp_path: Path) -> None:
        text = ",,,time,volt,\n" + "\n".join(beside([(t, o) for t, _, o in ROWS], settings=SETTINGS)) + "\n"
        assert_even(read(tmp_path, text))

    def test_two_blocks_with_a_third_column_for_units(self, tmp_path: Path) -> None:
        three = [(*pair, "Points" if place == 0 else "") for place, pair in enumerate(SETTINGS)]
        lines = []
        for place, (t, d, o) in enumerate(ROWS):
            cells = ",".join(three[place] if place < len(three) else ("", "", ""))
            lines.append(f"{cells},{threes(t)},{threes(d)},,{cells},{threes(t)},{threes(o)}")
        assert_even(read(tmp_path, "\r\n".join(lines) + "\r\n"), drive=True)


class TestPreambleAbove:
    PREAMBLE = (
        "Model,invented\nFirmware Version,1.04\n\nWaveform Type,ANALOG,,,\nPoint Format,Y,,\nHorizontal Units,s\n"
        "Horizontal Scale,2E-07\nHorizontal Delay,0\nSample Interval,4E-09\nRecord Length,400\n,,,\nGating,0.0% to "
        "100.0%,,\nProbe Attenuation,10,,10\nVertical Units,V,,V\nVertical Offset,0,,0\nVertical Scale,1,,0.1\n\n\nLabel,,\n"
    )

    @pytest.mark.parametrize("end", ["\n", "\r\n"])
    def test_keys_and_values_then_headings(self, tmp_path: Path, end: str) -> None:
        text = self.PREAMBLE + "TIME,CH1,CH2\n" + columns(lambda t, d, o: f"{t:.12g},{d:.6g},{o:.6g}")
        assert_even(read(tmp_path, text.replace("\n", end)), drive=True)

    def test_each_channel_twice_is_a_minimum_maximum_record(self, tmp_path: Path) -> None:
        text = self.PREAMBLE + "TIME,CH1,CH1 Peak Detect,CH2,CH2 Peak Detect\n"
        text += columns(lambda t, d, o: f"{t:.12g},{d:.6g},{d + 0.01:.6g},{o:.6g},{o + 0.004:.6g}")
        capture = read(tmp_path, text)
        assert_even(capture, drive=True)
        assert capture.remarks == ("min_max_record",)

    def test_a_marker_line_then_times_and_volts(self, tmp_path: Path) -> None:
        text = "Memory Length,400,\nSampling Period,4.000000e-09,\nVertical Scale,0.1,\nFile ID,17,\nWaveform Data,\n"
        assert_even(read(tmp_path, text + columns(lambda t, _d, o: f"{t:.12e},{o:.6e},")))

    def test_comment_lines_then_headings_with_rounding_noise_in_the_times(self, tmp_path: Path) -> None:
        text = "#Device: invented bench box\n#Date Time: 2026-03-03 09:14\n#Sample rate: 250000000Hz\n#Samples: 400\n\n"
        text += "Time (s),Channel 1 (V),Channel 2 (V)\n" + columns(lambda t, d, o: f"{t:.17g},{d:.17g},{o:.17g}")
        assert_even(read(tmp_path, text), drive=True)

    def test_title_then_names_with_units_in_brackets_and_decimal_commas(self, tmp_path: Path) -> None:
        text = "03.03.2026 09:14:02;Prüfling 3\nZeit [µs];Ansteuerung [V];Prüfling [mV]\n"
        text += columns(lambda t, d, o: f"{t * 1e6:.6f};{d:.6f};{o * 1e3:.6f}").replace(".", ",")
        for encoding in ("utf-8", "utf-8-sig", "latin-1", "utf-16", "utf-16-le", "utf-16-be"):
            assert_even(read(tmp_path, text.replace("03,03,2026", "03.03.2026").encode(encoding)), drive=True)

    def test_title_lines_and_trailing_empty_columns_without_headings(self, tmp_path: Path) -> None:
        text = "Window;1;;;;;;\nTrace;1;;;;;;\n"
        text += columns(lambda t, _d, o: f"{t:.9f};{o:.6f};;;;;;").replace(".", ",")
        assert_even(read(tmp_path, text))


class TestHeadings:
    def test_names_only(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "TIME,CH2\n" + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}")))

    def test_lines_that_end_in_carriage_returns(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "TIME,CH2\r" + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}", end="\r")))

    def test_an_empty_row_between_headings_and_numbers(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "TIME,CH2\r\n\r\n" + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}", end="\r\n")))

    def test_channel_numbers_over_units_with_a_computed_trace_last(self, tmp_path: Path) -> None:
        text = "x-axis,1,3,F1\nsecond,Volt,Volt,Volt\n"
        text += columns(lambda t, d, o: f"{threes(t)},{threes(d)},{threes(o)},{threes(d - o)}")
        assert_even(read(tmp_path, text), drive=True)

    def test_unit_words_that_were_edited(self, tmp_path: Path) -> None:
        text = "x-axis,2,4\nsecond,Volt1,Volt2\n" + columns(lambda t, d, o: f"{threes(t)},{threes(d)},{threes(o)}")
        assert_even(read(tmp_path, text), drive=True)

    def test_one_channel_a_file_with_three_digit_exponents_and_padded_positive_values(self, tmp_path: Path) -> None:
        text = "x-axis,3\nsecond,Volt\n"
        for t, _, o in ROWS:
            volts = three_digit_exponent(o)
            text += f"{three_digit_exponent(t)},{volts if volts.startswith('-') else f' {volts}'}\n"
        assert_even(read(tmp_path, text.rstrip("\n")))

    def test_a_current_in_the_second_channel_can_be_the_drive_when_the_user_says_so(self, tmp_path: Path) -> None:
        text = "x-axis,1,2\nsecond,Volt,Ampere\n" + columns(lambda t, d, o: f"{t:.12g},{o:.6g},{d:.6g}")
        assert_even(read(tmp_path, text, channels="drive=2,output=1"), drive=True)

    @pytest.mark.parametrize("first", ["", "\n"])
    @pytest.mark.parametrize("number", ["{}", "{}.0"])
    def test_sample_numbers_with_start_and_increment_in_the_row_of_units(
        self, tmp_path: Path, first: str, number: str
    ) -> None:
        text = f"{first}X,CH1,CH2,Start,Increment,\r\nSequence,Volt,Volt,{T0_S:.6e},{DT_S:.6e}\r\n"
        text += "".join(f"{number.format(i)},{d:.6g},{o:.6g},\r\n" for i, (_, d, o) in enumerate(ROWS))
        assert_even(read(tmp_path, text), drive=True)

    def test_start_and_increment_in_the_other_order_are_told_by_their_names(self, tmp_path: Path) -> None:
        text = f"X,CH1,Increment,Start\nSequence,Volt,{DT_S:.6e},{T0_S:.6e}\n"
        text += "".join(f"{i},{o:.6g}\n" for i, (_, _, o) in enumerate(ROWS))
        assert_even(read(tmp_path, text))

    def test_trailing_commas_in_the_headings_only(self, tmp_path: Path) -> None:
        text = "Time,X(CH1),\nSecond,Volt,\n" + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}")
        assert_even(read(tmp_path, text))

    def test_units_in_words(self, tmp_path: Path) -> None:
        text = "in s,C1 in V,C2 in V\n" + columns(lambda t, d, o: f"{t:.12E},{d:.5E},{o:.5E}")
        assert_even(read(tmp_path, text), drive=True)

    @pytest.mark.parametrize(
        ("heading", "scale_t", "scale_v"),
        [
            ("tiempo,tension", 1, 1),
            ("x,y", 1, 1),
            ("Time [s],Dbg10", 1, 1),
            ("time (ms),PD (mV)", 1e3, 1e3),
            ("t/us,U/mV", 1e6, 1e3),
            ("time_ns,signal_V", 1e9, 1),
            ("Microseconds,Millivolts", 1e6, 1e3),
            ("in ns,C1 in uV", 1e9, 1e6),
        ],
    )
    def test_units_in_the_names_scale_the_numbers(
        self, tmp_path: Path, heading: str, scale_t: float, scale_v: float
    ) -> None:
        text = heading + "\n" + columns(lambda t, _d, o: f"{t * scale_t:.12g},{o * scale_v:.12g}")
        assert_even(read(tmp_path, text))

    def test_units_in_brackets_in_a_row_of_their_own_above_an_empty_line(self, tmp_path: Path) -> None:
        text = "Time,Channel A,Channel B\n(us),(mV),(mV)\n\n"
        text += columns(lambda t, d, o: f"{t * 1e6:.9f},{d * 1e3:.6f},{o * 1e3:.6f}")
        assert_even(read(tmp_path, text), drive=True)

    def test_a_row_of_units_that_has_a_word_for_the_volts(self, tmp_path: Path) -> None:
        text = "Vertical Units,CH1:V CH2:V\nSource,CH1,CH2\nSecond,Value,Value\n"
        assert_even(read(tmp_path, text + columns(lambda t, d, o: f"{t:.9f},{d:.6f},{o:.6f}")), drive=True)

    @pytest.mark.parametrize("cell", ["03.03.2026", "09:14:02", "ok", "x7", "2026-03-03"])
    def test_a_column_of_text_is_left_aside(self, tmp_path: Path, cell: str) -> None:
        text = "Time (s),note,CH1 (V)\n" + columns(lambda t, _d, o: f"{t:.12g},{cell},{o:.6g}")
        assert_even(read(tmp_path, text))

    def test_a_percent_sign_within_a_heading_begins_no_comment(self, tmp_path: Path) -> None:
        text = "Time (s),Humidity (%),CH1 (V)\n" + columns(lambda t, d, o: f"{t:.12g},{40 + d:.6g},{o:.6g}")
        assert_even(read(tmp_path, text))

    def test_a_sample_number_beside_the_time_is_no_channel(self, tmp_path: Path) -> None:
        text = ",Time,CH1\n" + "".join(f"{i},{t:.12g},{o:.6g}\n" for i, (t, _, o) in enumerate(ROWS))
        assert_even(read(tmp_path, text))

    def test_uneven_simulated_steps_in_which_every_column_rises(self, tmp_path: Path) -> None:
        times = np.sort(np.random.default_rng(4).uniform(-1e-7, 3e-7, 300))
        rise, step = 1 / (1 + np.exp(-times / 2e-8)), 5.0 * (times > 0)
        rows = zip(times.tolist(), rise.tolist(), step.tolist(), strict=True)
        capture = read(tmp_path, "time\tV(out)\tV(in)\n" + "".join(f"{t!r}\t{v!r}\t{d!r}\n" for t, v, d in rows))
        assert np.array_equal(capture.outputs[1].time_s, times)
        assert capture.drive is not None
        assert np.array_equal(capture.drive.signal_V, step)

    def test_quoted_headings_and_quoted_decimal_commas(self, tmp_path: Path) -> None:
        rows = columns(lambda t, _d, o: f'"{t * 1e6:.6f}";"{o:.6f}"').replace(".", ",").replace(";", ",")
        assert_even(read(tmp_path, '"time (us)","out (V)"\n' + rows))

    def test_times_in_the_second_column(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "out (V),time (s)\n" + columns(lambda t, _d, o: f"{o:.6g},{t:.12g}")))


class TestBlanksAndTabs:
    def test_pairs_in_tabs_under_a_heading_set_with_blanks(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "t   V\r\n" + columns(lambda t, _d, o: f"{t:.9f}\t{o:.6f}", end="\r\n")))

    def test_pairs_in_tabs_without_headings(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, columns(lambda t, _d, o: f"{t:.12g}\t{o:.6g}"), name="trace"))

    def test_columns_aligned_with_blanks(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, columns(lambda t, d, o: f"  {t:.9e}   {d:10.6f}  {o:10.6f}")), drive=True)

    def test_commas_without_headings(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, columns(lambda t, d, o: f"{t:.12g},{d:.6g},{o:.6g}")), drive=True)

    def test_pairs_of_sample_number_and_volts_in_tabs_with_a_stated_interval(self, tmp_path: Path) -> None:
        text = "Sample interval\t4 ns\nTime - Plot 0\tAmplitude - Plot 0\tTime - Plot 1\tAmplitude - Plot 1\t\n"
        text += "".join(f"{i}\t{d:.6f}\t{i}\t{o:.6f}\t\n" for i, (_, d, o) in enumerate(ROWS))
        assert_even(read(tmp_path, text), drive=True, t0_s=0.0)

    def test_a_column_of_volts_under_a_stated_sample_interval(self, tmp_path: Path) -> None:
        text = "Memory Length,400,\nSampling Period,4.000000e-09,\nWaveform Data,\n"
        assert_even(read(tmp_path, text + columns(lambda _t, _d, o: f"{o:.6e},")), t0_s=0.0)


class TestBlankCells:
    def test_a_channel_that_ends_earlier_is_a_shorter_record(self, tmp_path: Path) -> None:
        text = "Time (s),Channel 1 (V),Channel 2 (V)\n"
        for place, (t, d, o) in enumerate(ROWS):
            text += f"{t:.12g},{d:.6g},{f'{o:.6g}' if place < 250 else ''}\n"
        capture = read(tmp_path, text)
        assert capture.outputs[1].signal_V == pytest.approx(OUTPUT_V[:250], abs=1e-12)
        assert capture.drive is not None
        assert capture.drive.signal_V.size == N

    def test_missing_samples_at_the_start_move_the_start_of_that_channel(self, tmp_path: Path) -> None:
        text = "Time (s),Channel 1 (V),Channel 2 (V)\n"
        for place, (t, d, o) in enumerate(ROWS):
            text += f"{t:.12g},{d:.6g},{f'{o:.6g}' if place >= 3 else 'NaN'}\n"
        capture = read(tmp_path, text)
        assert capture.outputs[1].signal_V == pytest.approx(OUTPUT_V[3:], abs=1e-12)
        assert capture.outputs[1].t0_s == pytest.approx(TIME_S[3], rel=1e-9)

    def test_rows_of_bare_separators_are_blank_rows(self, tmp_path: Path) -> None:
        text = "TIME,CH1\n" + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}") + ",\n,\n\n"
        assert_even(read(tmp_path, text))


class TestTimes:
    def test_stamps_rounded_on_export_use_the_stated_interval(self, tmp_path: Path) -> None:
        """Stamps with three digits repeat; the interval in the preamble puts every one within its rounding."""
        text = "Sample Interval,4.0E-09\nRecord Length,400\n\nTIME,CH1\n"
        capture = read(tmp_path, text + columns(lambda t, _d, o: f"{t:.8f},{o:.6g}"))
        output = capture.outputs[1]
        assert isinstance(output, Waveform)
        assert output.dt_s == 4e-9
        assert output.t0_s == pytest.approx(T0_S, abs=0.5e-8)  # half the last digit of the stamps
        assert capture.remarks == ()

    def test_a_stated_rate_serves_as_well(self, tmp_path: Path) -> None:
        text = "#Sample rate: 250 MHz\n\nTime (s),Channel 1 (V)\n"
        assert read(tmp_path, text + columns(lambda t, _d, o: f"{t:.8f},{o:.6g}")).outputs[1].dt_s == 4e-9

    def test_a_stated_interval_that_contradicts_the_stamps_is_not_used(self, tmp_path: Path) -> None:
        text = "Sample Interval,5.0E-09\n\nTIME,CH1\n"
        with pytest.raises(Exception, match="the time stands still"):
            read(tmp_path, text + columns(lambda t, _d, o: f"{t:.8f},{o:.6g}"))

    def test_uneven_times_are_kept_as_they_are_and_remarked(self, tmp_path: Path) -> None:
        times = TIME_S + 1e-9 * np.sin(np.arange(N))
        text = "time (s),v (V)\n" + "".join(
            f"{t!r},{o!r}\n" for t, o in zip(times.tolist(), OUTPUT_V.tolist(), strict=True)
        )
        capture = read(tmp_path, text)
        output = capture.outputs[1]
        assert isinstance(output, TimedRecord)
        assert np.array_equal(output.time_s, times)
        assert capture.remarks == ("uneven_time",)

    def test_a_gap_makes_the_record_uneven(self, tmp_path: Path) -> None:
        rows = [f"{t:.12g},{o:.6g}\n" for t, _, o in ROWS]
        assert read(tmp_path, "time (s),v (V)\n" + "".join(rows[:200] + rows[203:])).remarks == ("uneven_time",)

    def test_steps_within_one_per_cent_of_their_median_are_even(self, tmp_path: Path) -> None:
        times = TIME_S + 1.5e-11 * (np.arange(N) % 2)
        text = "time (s),v (V)\n" + "".join(
            f"{t!r},{o!r}\n" for t, o in zip(times.tolist(), OUTPUT_V.tolist(), strict=True)
        )
        assert isinstance(read(tmp_path, text).outputs[1], Waveform)


class TestRoles:
    def test_a_lone_channel_is_the_output_of_element_1(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "TIME,CH4\n" + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}")))

    def test_of_two_channels_the_first_is_the_drive(self, tmp_path: Path) -> None:
        assert_even(read(tmp_path, "TIME,A,B\n" + columns(lambda t, d, o: f"{t:.12g},{d:.6g},{o:.6g}")), drive=True)

    @pytest.mark.parametrize("heading", ["Time,Detector,Generator", "t,out,in", "t,V(out),V(in)", "t,PD,LED current"])
    def test_words_in_the_names_go_before_the_order(self, tmp_path: Path, heading: str) -> None:
        assert_even(read(tmp_path, heading + "\n" + columns(lambda t, d, o: f"{t:.12g},{o:.6g},{d:.6g}")), drive=True)

    def test_numbered_outputs_are_elements(self, tmp_path: Path) -> None:
        text = "time,drive,output 1,output 2\n" + columns(lambda t, d, o: f"{t:.12g},{d:.6g},{o:.6g},{o / 2:.6g}")
        assert sorted(read(tmp_path, text).outputs) == [1, 2]

    @pytest.mark.parametrize("stated", ["drive=4,output=2", "drive=CH4,output=CH2", "drive=ch4,output1=ch2"])
    def test_what_the_user_states_goes_before_everything(self, tmp_path: Path, stated: str) -> None:
        text = "TIME,CH1,CH2,CH3,CH4\n" + columns(lambda t, d, o: f"{t:.12g},{-o:.6g},{o:.6g},{-d:.6g},{d:.6g}")
        assert_even(read(tmp_path, text, channels=stated), drive=True)

    def test_a_number_counts_the_channels_where_none_is_numbered(self, tmp_path: Path) -> None:
        text = "t,alpha,beta,gamma\n" + columns(lambda t, d, o: f"{t:.12g},{o:.6g},{d:.6g},{-o:.6g}")
        assert_even(read(tmp_path, text, channels="drive=2,output=1"), drive=True)

    def test_two_outputs_stated(self, tmp_path: Path) -> None:
        text = "TIME,CH1,CH2,CH3\n" + columns(lambda t, d, o: f"{t:.12g},{d:.6g},{o:.6g},{o / 2:.6g}")
        capture = read(tmp_path, text, channels="drive=1,output=2,output2=3")
        assert capture.outputs[2].signal_V == pytest.approx(OUTPUT_V / 2, abs=1e-6)  # as printed


class TestTheFileItself:
    def test_gzip_is_unpacked(self, tmp_path: Path) -> None:
        text = columns(lambda t, _d, o: f"{t:.12g},{o:.6g}").encode()
        assert_even(read(tmp_path, gzip.compress(text), name="trace.csv.gz"))

    def test_conditions_in_our_names_are_read_wherever_they_stand_as_comments(self, tmp_path: Path) -> None:
        text = "# bias_V = 500 mV\n# kind: dark\n# operator: invented\nTIME,CH1\n"
        known = read(tmp_path, text + columns(lambda t, _d, o: f"{t:.12g},{o:.6g}")).conditions.known()
        assert known == {"bias_V": 0.5, "kind": Kind.DARK}

    def test_nothing_is_taken_from_a_preamble_in_other_words(self, tmp_path: Path) -> None:
        text = TestPreambleAbove.PREAMBLE + "TIME,CH1,CH2\n" + columns(lambda t, d, o: f"{t:.12g},{d:.6g},{o:.6g}")
        assert not read(tmp_path, text).conditions.known()

    def test_130_000_rows(self, tmp_path: Path) -> None:
        rng = np.random.default_rng(3)
        signal = rng.normal(size=130_000)
        text = "in s,C1 in V\n" + "".join(f"{2e-9 * i:.9E},{v:.5E}\n" for i, v in enumerate(signal.tolist()))
        output = read(tmp_path, text).outputs[1]
        assert output.signal_V == pytest.approx(signal, abs=1e-5)  # as printed
        assert output.dt_s == 2e-9
