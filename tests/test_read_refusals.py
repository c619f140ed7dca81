"""What is no waveform, or cannot be decided, is refused: file, line, what was found, what was wanted, the mend."""

import gzip
import io
import os
import re
import zipfile
from collections.abc import Callable
from pathlib import Path
from time import process_time

import numpy as np
import pytest

from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.roles import ChannelRoles

N = 200
TIME_S = (-1e-7 + 1e-9 * np.arange(N)).tolist()
RNG = np.random.default_rng(7)
VOLT = np.round(0.4 / (1 + np.exp(-np.array(TIME_S) / 5e-9)) + RNG.normal(0, 2e-3, N), 6).tolist()


def good_rows(row: Callable[[float, float], str] = lambda t, v: f"{t:.6g},{v:.6f}") -> list[str]:
    return [row(t, v) for t, v in zip(TIME_S, VOLT, strict=True)]


def good_lines() -> list[str]:
    """A header and N rows: row k is line k + 2, counted from row 0 and line 1."""
    return ["time (s),out (V)", *good_rows()]


def refuse(tmp_path: Path, text: str | bytes, *words: str, channels: str | None = None) -> str:
    """The file is refused, and each of the words stands in the message."""
    path = tmp_path / "trace.csv"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    with pytest.raises(CaptureError) as caught:
        read_capture(path, channels=ChannelRoles.parse(channels) if channels else None)
    message = str(caught.value)
    for word in (str(path), *words):
        assert word in message
    return message


class TestNoText:
    def test_a_missing_file(self, tmp_path: Path) -> None:
        with pytest.raises(CaptureError, match=r"nothing\.csv: no such file\. Check the path"):
            read_capture(tmp_path / "nothing.csv")

    def test_a_folder(self, tmp_path: Path) -> None:
        with pytest.raises(CaptureError, match=re.escape(str(tmp_path))):
            read_capture(tmp_path)

    @pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="permissions do not bind here")
    def test_a_file_without_permission(self, tmp_path: Path) -> None:
        path = tmp_path / "trace.csv"
        path.write_text("1,2\n", encoding="utf-8")
        path.chmod(0)
        with pytest.raises(CaptureError, match="cannot be read; found Permission denied"):
            read_capture(path)

    @pytest.mark.parametrize("text", [b"", b"\n\n \t\n", b"\xef\xbb\xbf", b"\xff\xfe"])
    def test_an_empty_file(self, tmp_path: Path, text: bytes) -> None:
        refuse(tmp_path, text, "the file is empty", "wanted a capture", "Export it again")

    def test_an_image(self, tmp_path: Path) -> None:
        refuse(tmp_path, b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR" + bytes(64), "not a text file; found a PNG image")

    def test_a_zip_archive_or_workbook(self, tmp_path: Path) -> None:
        buffer = io.BytesIO()
        with zipfile.ZipFile(buffer, "w") as archive:
            archive.writestr("sheet.xml", "<x/>")
        refuse(tmp_path, buffer.getvalue(), "not a text file; found a zip archive or workbook", "Export the capture")

    def test_random_bytes(self, tmp_path: Path) -> None:
        refuse(tmp_path, np.random.default_rng(5).bytes(4096), "not a text file")

    def test_a_damaged_gzip_file(self, tmp_path: Path) -> None:
        refuse(tmp_path, gzip.compress("\n".join(good_rows()).encode())[:-200], "the gzip file is damaged")

    def test_prose(self, tmp_path: Path) -> None:
        refuse(tmp_path, "Notes on the bench.\nNothing to see.\n", "line 2", "no columns of numbers", "Nothing to see")


class TestDamagedRows:
    def test_text_among_the_numbers(self, tmp_path: Path) -> None:
        lines = good_lines()
        lines[57] = "overload"
        refuse(tmp_path, "\n".join(lines) + "\n", "line 58", "another number of values", "overload")

    def test_a_cell_that_is_no_number(self, tmp_path: Path) -> None:
        lines = good_lines()
        lines[57] = f"{TIME_S[56]:.6g},0.1x4"
        refuse(tmp_path, "\n".join(lines) + "\n", "line 58", "text among the numbers", "'0.1x4'", "wanted a number")

    def test_text_soon_after_the_first_rows(self, tmp_path: Path) -> None:
        """Samples above a line of text are not taken for a preamble."""
        lines = good_lines()
        lines[4] = "Event 2,"
        refuse(tmp_path, "\n".join(lines) + "\n", "line 5", "text among the numbers", "Event 2")

    @pytest.mark.parametrize(("row", "found"), [("1e-9", "1 in '1e-9'"), ("1e-9,0.1,7", "3 in '1e-9,0.1,7'")])
    def test_another_number_of_values(self, tmp_path: Path, row: str, found: str) -> None:
        lines = good_lines()
        lines[101] = row
        refuse(tmp_path, "\n".join(lines) + "\n", "line 102", "another number of values", found, "wanted 2")

    @pytest.mark.parametrize("last", ["9.9e-08", "9.9e-08,", "9.9e-08,-", "9.9e-08,1.5e"])
    def test_a_last_line_that_is_cut_off(self, tmp_path: Path, last: str) -> None:
        lines = good_lines()
        refuse(tmp_path, "\n".join(lines[:-1]) + "\n" + last, "line 201", "cut off in its last line", last)

    def test_a_last_number_that_is_cut_off(self, tmp_path: Path) -> None:
        """All others have six decimals; a line end behind the last one would say that it is whole."""
        lines = [*good_lines()[:-1], "9.9e-08,0.40"]
        refuse(tmp_path, "\n".join(lines), "line 201", "cut off in its last line; found 0.40; wanted a number written")
        (tmp_path / "whole.csv").write_text("\n".join(good_lines()), encoding="utf-8")
        assert read_capture(tmp_path / "whole.csv").outputs[1].signal_V.size == N

    @pytest.mark.parametrize("last", ["9.9e-08,-0.", "9.9e-08,3.5", "9.9e-08,3.96531e-1"])
    def test_a_last_number_of_which_nothing_says_that_it_is_whole_is_left_out(self, tmp_path: Path, last: str) -> None:
        """Numbers as short as they can be have no common form to hold it against: `-0.0796` may lack its end."""
        rows = good_rows(lambda t, v: f"{t:.6g},{v:.3g}")[:-1]
        path = tmp_path / "trace.csv"
        path.write_text("\n".join(["time (s),out (V)", *rows, last]), encoding="utf-8")
        capture = read_capture(path)
        assert capture.outputs[1].signal_V.size == N - 1
        assert "left out: line 201, whose number may have lost digits" in capture.read_as[-1]
        path.write_text("\n".join(["time (s),out (V)", *rows, last]) + "\n", encoding="utf-8")
        assert read_capture(path).outputs[1].signal_V.size == N

    @pytest.mark.parametrize("cell", ["", "NaN", "nan", "-1.#IND"])
    def test_a_sample_missing_among_the_others(self, tmp_path: Path, cell: str) -> None:
        lines = good_lines()
        lines[57] = f"{TIME_S[56]:.6g},{cell}"
        refuse(tmp_path, "\n".join(lines) + "\n", "line 58, column 2 (out)", "a sample is missing", "wanted a number")

    @pytest.mark.parametrize("cell", ["inf", "-Infinity", "1e999", "1.#INF"])
    def test_an_infinite_value(self, tmp_path: Path, cell: str) -> None:
        lines = good_lines()
        lines[57] = f"{TIME_S[56]:.6g},{cell}"
        refuse(tmp_path, "\n".join(lines) + "\n", "line 58", "infinite", cell, "wider range")

    @pytest.mark.parametrize("cell", ["9.9E+37", "-9.91e37", "1e308"])
    def test_the_number_that_instruments_write_for_infinity(self, tmp_path: Path, cell: str) -> None:
        """SCPI-1999, volume 1, 7.2.1.4 and 7.2.1.5: 9.9E37 for infinity, 9.91E37 for no number."""
        lines = good_lines()
        lines[57] = f"{TIME_S[56]:.6g},{cell}"
        refuse(tmp_path, "\n".join(lines) + "\n", "line 58", "infinite", cell, "wider range")

    def test_a_sample_without_its_time(self, tmp_path: Path) -> None:
        text = "\n".join(good_lines()) + "\n,0.25\n"
        refuse(tmp_path, text, "line 202, column 2 (out)", "a sample without its time")

    def test_headings_and_no_rows(self, tmp_path: Path) -> None:
        refuse(tmp_path, "TIME,CH1\n", "line 1", "no columns of numbers", "wanted rows of time and volts")

    def test_two_rows(self, tmp_path: Path) -> None:
        refuse(tmp_path, "TIME,CH1\n0,0.5\n1e-9,0.6\n", "line 3", "too few rows", "wanted 8 rows or more")

    @pytest.mark.parametrize("end", [",", " mV", "mV"])
    def test_a_column_of_numbers_with_something_behind_them(self, tmp_path: Path, end: str) -> None:
        """Left aside as text, the output would be gone, and the drive would be taken for it."""
        rows = good_rows(lambda t, v: f"{t * 1e6:.6f};{3 * (t > 0):.3f};{v:.6f}{end}".replace(".", ","))
        text = "Zeit [µs];A [V];B [V]\n" + "\n".join(rows) + "\n"
        refuse(tmp_path, text, "line 201, column 3", "numbers that cannot be read", "decimal comma and nothing else")

    def test_two_decimal_marks(self, tmp_path: Path) -> None:
        rows = good_rows(lambda t, v: f"{t:.9f};{v:.6f}".replace(".", ","))
        rows[90] = rows[90].replace(",", ".")
        refuse(tmp_path, "\n".join(rows) + "\n", "line 91", "two decimal marks", "decimal comma")


class TestTime:
    def test_time_that_goes_back(self, tmp_path: Path) -> None:
        lines = good_lines()
        lines[50], lines[51] = lines[51], lines[50]
        refuse(tmp_path, "\n".join(lines) + "\n", "line 52, column 1 (time)", "the time goes back", "rise from row")

    def test_several_events_in_one_file(self, tmp_path: Path) -> None:
        text = "\n".join([*good_lines(), *good_rows()]) + "\n"
        refuse(tmp_path, text, "line 202", "the time goes back", "Export one acquisition to a file")

    @pytest.mark.parametrize(
        "heading", ["", "#Device: invented\n\nTime (s),Channel 1 (V)\n", "x-axis,3\nsecond,Volt\n"]
    )
    def test_another_capture_above_in_another_layout(self, tmp_path: Path, heading: str) -> None:
        """Neither of the two is taken, and the first is no heading of the second."""
        other = "in s;C1 in V\n" + "".join(f"{t:.6g};{v:.6f}\n" for t, v in zip(TIME_S, VOLT, strict=True))
        text = other + heading + "\n".join(good_rows()) + "\n"
        refuse(tmp_path, text, "line 9", "rows of numbers in two layouts", "wanted one capture", "Split the file")

    def test_steps_shorter_than_any_record_has(self, tmp_path: Path) -> None:
        rows = "".join(f"{1e-300 * i!r},{v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, f"time (s),out (V)\n{rows}", "line 3, column 1 (time)", "shorter than any record's", "unit of")

    def test_a_row_twice(self, tmp_path: Path) -> None:
        lines = good_lines()
        lines.insert(50, lines[50])
        refuse(tmp_path, "\n".join(lines) + "\n", "line 52", "the time stands still")

    def test_rounded_stamps_without_a_stated_interval(self, tmp_path: Path) -> None:
        rows = good_rows(lambda t, v: f"{t - 1e-6:.2e}  {v:.2e}")
        refuse(tmp_path, "\n".join(rows) + "\n", "the time stands still", "sample interval = 2e-9 s")

    def test_sample_numbers_without_an_interval(self, tmp_path: Path) -> None:
        text = "Time - Plot 0\tAmplitude - Plot 0\t\n" + "".join(f"{i}\t{v:.6f}\t\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line 1, column 1 (Time - Plot 0)", "samples are counted", "found sample numbers")

    @pytest.mark.parametrize(
        ("start", "increment"), [("1e999", "1e-9"), ("0", "1e999"), ("0", "1e308"), ("0", "-1e-9")]
    )
    def test_a_start_or_an_increment_that_no_record_can_have(self, tmp_path: Path, start: str, increment: str) -> None:
        text = f"X,CH1,Start,Increment,\nSequence,Volt,{start},{increment}\n"
        text += "".join(f"{i},{v:.6f},\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line 2, column 1 (X)", "nothing says how long one takes")

    @pytest.mark.parametrize("period", ["1e999", "1e308", "1e-320"])
    def test_a_sampling_period_that_no_record_can_have(self, tmp_path: Path, period: str) -> None:
        text = f"Sampling Period,{period},\nWaveform Data,\n" + "".join(f"{v:.6f},\n" for v in VOLT)
        refuse(tmp_path, text, "line 3", "nothing says when the samples were taken")

    def test_a_start_so_far_from_zero_that_the_samples_cannot_be_told_apart(self, tmp_path: Path) -> None:
        text = "X,CH1,Start,Increment,\nSequence,Volt,1e9,1e-9\n" + "".join(
            f"{i},{v:.6f},\n" for i, v in enumerate(VOLT)
        )
        refuse(tmp_path, text, "line 2", "cannot be told apart so far from 0 s", "1e+09 s", "1e-09 s")

    def test_two_intervals_that_differ(self, tmp_path: Path) -> None:
        text = "Sample Interval,1e-9\nSample Rate,2e9\n\nn,V\n" + "".join(f"{i},{v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "more than one sample interval", "1e-09 s, 5e-10 s")

    def test_volts_alone(self, tmp_path: Path) -> None:
        text = "Model,invented\nSegments,1,SegmentSize,200\nAmpl\r\n" + "".join(f"{v:.6f}\r\n" for v in VOLT)
        refuse(tmp_path, text, "line 4", "nothing says when the samples were taken", "1 column, of which none rises")

    def test_one_record_a_line(self, tmp_path: Path) -> None:
        line = ",".join(f"{v:.5f}" for v in VOLT)
        refuse(tmp_path, f"\n{line}\n{line}\n{line}\n", "line 4", "each line holds a whole record", "200 values a line")

    def test_clock_stamps(self, tmp_path: Path) -> None:
        text = "stamp,V\n" + "".join(f"2026-03-03 09:14:{i / 10:06.3f},{v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "nothing says when the samples were taken")

    def test_a_time_that_may_not_be_seconds(self, tmp_path: Path) -> None:
        rows = good_rows(lambda t, v: f"{t * 1e9 / 2:.1f},{v:.6f}")
        refuse(
            tmp_path,
            "TIME,CH1\n" + "\n".join(rows) + "\n",
            "unit of the time is not stated",
            "steps of 0.5",
            "time (us)",
        )

    def test_a_counter_of_whole_numbers(self, tmp_path: Path) -> None:
        text = "".join(f"{4 * i}\t{v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line 1, column 1", "unit of the time is not stated", "found steps of 4")

    def test_two_columns_that_could_be_the_time(self, tmp_path: Path) -> None:
        text = "".join(f"{t:.6g},{1e-3 * i:.4f},{v:.6f}\n" for i, (t, v) in enumerate(zip(TIME_S, VOLT, strict=True)))
        refuse(tmp_path, text, "line 1", "which column is the time", "column 1, column 2 all rise", "time (s)")

    def test_blocks_with_different_times(self, tmp_path: Path) -> None:
        rows = good_rows(lambda t, v: f"{t:.6g},{v:.6f},{2 * t + 1e-9:.6g},{v:.6f}")
        text = "\n".join(rows) + "\n"
        refuse(tmp_path, text, "line 1", "different times, and may be two acquisitions", "--channels")
        (tmp_path / "trace.csv").write_text(text, encoding="utf-8")
        capture = read_capture(tmp_path / "trace.csv", channels=ChannelRoles.parse("drive=1,output=2"))
        assert capture.outputs[1].dt_s == pytest.approx(2e-9)


class TestNoWaveform:
    def test_a_spectrum_with_settings_beside_it(self, tmp_path: Path) -> None:
        settings = ["Record Length,200,", "Vertical Units,dB,", "Horizontal Units,Hz,"]
        rows = [f"{settings[i] if i < 3 else ',,'}, {1e6 * i:.6f}, {-20 * v:.4f}," for i, v in enumerate(VOLT)]
        refuse(tmp_path, "\n".join(rows) + "\n", "line 2", "unit of a spectrum", "found dB", "volts against time")

    def test_a_frequency_response_under_the_same_comments_as_a_waveform(self, tmp_path: Path) -> None:
        text = "#Device: invented\n\nFrequency (Hz),Channel 1 Magnitude (dB)\n"
        text += "".join(f"{1e3 * (i + 1):.1f},{-v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line 3, column 1 (Frequency)", "the column that rises is no time", "found Hz")

    def test_a_frequency_without_its_unit(self, tmp_path: Path) -> None:
        text = "Frequency,Magnitude\n" + "".join(f"{1e-5 * (i + 1):.7f},{-v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line 1, column 1 (Frequency)", "the column that rises is no time")

    def test_a_level_in_decibels_against_time(self, tmp_path: Path) -> None:
        text = "Time (s),Level (dBm)\n" + "\n".join(good_rows()) + "\n"
        refuse(tmp_path, text, "line 1", "no column in volts", "column 2 (Level) in dBm")

    def test_an_output_in_amperes(self, tmp_path: Path) -> None:
        refuse(tmp_path, "Time (s),Out (mA)\n" + "\n".join(good_rows()) + "\n", "line 1", "not in volts; found mA")

    @pytest.mark.parametrize("unknown", ["X", "0"])
    def test_logic_states(self, tmp_path: Path, unknown: str) -> None:
        rows = "".join(f"{i % 2},{i // 4 % 2},{unknown if i == 77 else 1}\n" for i in range(N))
        refuse(tmp_path, "#Device: invented\n#Channels: 3\n" + rows, "line")

    def test_counts_of_a_converter(self, tmp_path: Path) -> None:
        text = "Vertical Units,V\nSampling Period,4e-9,\nVertical Scale,0.1,\nWaveform Data,\n"
        text += "".join(f"{round(v * 100)},\n" for v in VOLT)
        refuse(tmp_path, text, "line 5", "counts or logic states, not volts", "whole numbers without a unit", "CH1 (V)")

    def test_counts_without_anything(self, tmp_path: Path) -> None:
        refuse(tmp_path, "".join(f"{round(v * 100)}\n" for v in VOLT), "line 1", "nothing says when")

    def test_sample_number_and_count(self, tmp_path: Path) -> None:
        refuse(tmp_path, "".join(f"{i + 1} {round(v * 100)}\n" for i, v in enumerate(VOLT)), "line 1", "counts")

    def test_counts_against_time(self, tmp_path: Path) -> None:
        refuse(
            tmp_path, "\n".join(good_rows(lambda t, v: f"{t:.6g},{round(v * 100)}")) + "\n", "counts or logic states"
        )

    def test_capacitance_against_bias(self, tmp_path: Path) -> None:
        text = "".join(f"{0.1 * i:.2f},{6e-11 / (1 + i) ** 0.4:.4e}\n" for i in range(80))
        refuse(tmp_path, text, "line 1, column 1", "unit of the time is not stated, and it may not be seconds")

    def test_current_against_bias_with_units(self, tmp_path: Path) -> None:
        text = "Reverse Voltage;Leakage current density\nV;nA/cm2\n" + "".join(
            f"{i / 10};{i / 7:.4f}\n" for i in range(80)
        )
        refuse(tmp_path, text, "line 2, column 1 (Reverse Voltage)", "the column that rises is no time; found V")

    @pytest.mark.parametrize("heading", ["V,I", "I,V", "I,U", "Reverse voltage,I", "Vr,Ir", "V,Dark"])
    def test_current_against_voltage_is_never_taken_for_time_because_it_rises(
        self, tmp_path: Path, heading: str
    ) -> None:
        rows = "".join(f"{i / 1e6:.6f},{1e-9 * (i + 1) ** 0.5:.4e}\n" for i in range(80))
        message = refuse(tmp_path, f"{heading}\n{rows}", "line 1")
        assert "no time" in message or "which column is the time" in message

    @pytest.mark.parametrize("heading", ["Pulse width (us),amplitude (V)", "rise_time_s,out_V", "delay (ns),U (V)"])
    def test_a_sweep_over_a_duration(self, tmp_path: Path, heading: str) -> None:
        refuse(
            tmp_path,
            heading + "\n" + "\n".join(good_rows()) + "\n",
            "line 1, column 1",
            "the column that rises is no time",
        )

    def test_a_table_of_results(self, tmp_path: Path) -> None:
        text = "cycle,rise (ns),amplitude (V)\n" + "".join(f"{i},{v * 30:.3f},{v:.4f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line")

    def test_a_profile_over_a_length(self, tmp_path: Path) -> None:
        text = "x (mm),signal (V)\n" + "".join(f"{0.01 * i:.2f},{v:.6f}\n" for i, v in enumerate(VOLT))
        refuse(tmp_path, text, "line 1, column 1 (x)", "the column that rises is no time; found mm")


class TestDecimalComma:
    def test_commas_between_and_within_the_numbers(self, tmp_path: Path) -> None:
        rows = good_rows(lambda t, v: f"{t:.6g},{v:.6f}".replace(".", ","))
        refuse(tmp_path, "\n".join(rows) + "\n", "line", "comma may separate the values or be their decimal mark",
               "decimal points, or another separator", "semicolons")  # fmt: skip

    def test_the_same_number_of_commas_in_every_row(self, tmp_path: Path) -> None:
        """`0,000001000,0,250000` reads as four whole numbers in every row."""
        rows = [f"{1e-6 * i:.9f},{v + 1:.6f}".replace(".", ",") for i, v in enumerate(VOLT)]
        refuse(tmp_path, "\n".join(rows) + "\n", "line 1", "comma may separate the values or be their decimal mark")
        refuse(tmp_path, "t,v\n" + "\n".join(rows) + "\n", "line 2", "comma may separate the values")

    def test_one_column_with_a_decimal_comma(self, tmp_path: Path) -> None:
        rows = [f"{v + 1:.6f}".replace(".", ",") for v in VOLT]
        refuse(tmp_path, "Sample interval = 1e-9\n" + "\n".join(rows) + "\n", "comma may separate the values")


class TestLongLines:
    """A line longer than any that a program writes costs no more time than its length, and is not quoted whole."""

    @pytest.mark.parametrize("piece", ["\t", " ", '"', "in ", "_a", "/", "sampl", ": "])
    def test_above_the_numbers_it_states_nothing(self, tmp_path: Path, piece: str) -> None:
        begin = process_time()
        (tmp_path / "trace.csv").write_text("\n".join([piece * 70_000, *good_lines()]) + "\n", encoding="utf-8")
        assert read_capture(tmp_path / "trace.csv").outputs[1].signal_V.size == N
        assert process_time() - begin < 3

    @pytest.mark.parametrize("piece", ["1,", "1.5e-3,", "x", '"', "0;"])
    def test_below_the_numbers_it_is_refused(self, tmp_path: Path, piece: str) -> None:
        begin = process_time()
        refuse(tmp_path, "\n".join([*good_lines(), piece * 70_000]) + "\n", "line 202", "another number of values")
        assert process_time() - begin < 3

    def test_a_quote_that_is_never_closed(self, tmp_path: Path) -> None:
        refuse(tmp_path, "\n".join([*good_lines(), '"' + "1" * 200_000]) + "\n", "line 202", "another number of values")

    @pytest.mark.parametrize(
        "lines",
        [
            ["# format = darkedge-capture " + "x" * 50_000, "time_s,output_V"],
            ["# format = darkedge-capture 1", f"# {'x' * 50_000} = 1", "time_s,output_V"],
            ["# format = darkedge-capture 1", f"# kind = {'x' * 50_000}", "time_s,output_V"],
            ["# format = darkedge-capture 1", f"# element = {'9' * 5_000}", "time_s,output_V"],
            ["# format = darkedge-capture 1", f"time_s,output{'9' * 5_000}_V"],
            [f"time (s),{'out in ' * 500}"],
        ],
    )
    def test_a_refusal_quotes_only_its_beginning(self, tmp_path: Path, lines: list[str]) -> None:
        assert len(refuse(tmp_path, "\n".join([*lines, *good_rows()]) + "\n", "...")) < 1500


class TestChannels:
    TEXT = "TIME,CH1,CH2,CH3\n" + "".join(
        f"{t:.6g},{v:.6f},{-v:.6f},{v / 2:.6f}\n" for t, v in zip(TIME_S, VOLT, strict=True)
    )

    def test_three_channels_are_never_guessed_at(self, tmp_path: Path) -> None:
        refuse(
            tmp_path, self.TEXT, "which channel is the drive", "channels CH1, CH2, CH3", "--channels, such as drive=1"
        )

    def test_a_stated_channel_that_is_not_there(self, tmp_path: Path) -> None:
        refuse(tmp_path, self.TEXT, "channel 7 of --channels is not in the file", "CH1, CH2, CH3",
               channels="drive=1,output=7")  # fmt: skip

    @pytest.mark.parametrize(
        ("text", "words"),
        [
            ("drive=1", "no output is named"),
            ("1,2", "not a channel with its role"),
            ("drive=1,detector=2", "not a channel with its role; found 'detector=2'"),
            ("drive=1,output=1", "given twice"),
            ("output=1,output1=2", "given twice"),
            ("output=", "not a channel with its role"),
            ("output0=1", "not a channel with its role"),
            ("", "not a channel with its role"),
        ],
    )
    def test_roles_that_make_no_sense(self, text: str, words: str) -> None:
        with pytest.raises(Exception, match=re.escape(words)) as caught:
            ChannelRoles.parse(text)
        assert str(caught.value).startswith(f"--channels {text}")


def test_a_bad_condition_in_our_names_is_refused_with_its_line(tmp_path: Path) -> None:
    refuse(tmp_path, "# bias_V = 5 mA\n" + "\n".join(good_lines()) + "\n", "line 1, bias_V", "wrong unit", "'5 mA'")
