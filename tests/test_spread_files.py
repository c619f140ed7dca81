"""One acquisition that is spread over a file per channel: put together as stated, or where nothing leaves a doubt."""

from collections.abc import Callable
from datetime import date
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from darkedge.analysis.captures import Capture
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.archive import read_archived
from darkedge.analysis.files.intake import Intake, pack, take_in
from darkedge.analysis.files.roles import ChannelRoles
from darkedge.cli.main import app

TODAY = date(2026, 3, 3)
N, DT_S, T0_S = 500, 4e-9, -4e-7
TIME_S = T0_S + DT_S * np.arange(N)
DRIVE_V = np.where((TIME_S >= 0) & (TIME_S < 6e-7), 3.3, 0.02)
PATTERNS = "drive=*_1.csv,output=*_2.csv"


def response(tau_s: float = 6e-8) -> np.ndarray:
    """A first-order answer to the drive, rounded as a file would hold it."""
    since_on, since_off = np.clip(TIME_S, 0, None), np.clip(TIME_S - 6e-7, 0, None)
    return np.round(0.4 * (np.exp(-since_off / tau_s) - np.exp(-since_on / tau_s)), 6)


OUTPUT_V = response()


def two_rows(channel: str, signal: np.ndarray, *, step_s: float = DT_S, unit: str = "Volt") -> str:
    """The channel's name over its unit, exponents of three digits, a blank before what is not negative."""

    def number(value: float) -> str:
        mantissa, exponent = f"{value:.9e}".split("e")
        return f"{mantissa}e{exponent[0]}{int(exponent[1:]):03d}"

    rows = [f"x-axis,{channel}", f"second,{unit}"]
    for k, value in enumerate(signal.tolist()):
        rows.append(f"{number(T0_S + k * step_s)},{'' if value < 0 else ' '}{number(value)}")
    return "\n".join(rows) + "\n"


def plain(_channel: str, signal: np.ndarray) -> str:
    """Headings that do not say which channel it is."""
    return "time (s),value (V)\n" + "".join(f"{t:.9e},{v:.6f}\n" for t, v in zip(TIME_S, signal, strict=True))


def named(heading: str) -> Callable[[str, np.ndarray], str]:
    return lambda _channel, signal: plain("", signal).replace("value", heading)


def plant(folder: Path, files: dict[str, str]) -> None:
    for name, text in files.items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text(text, encoding="utf-8")


def pair(stem: str, write: Callable[[str, np.ndarray], str] = two_rows, tau_s: float = 6e-8) -> dict[str, str]:
    return {f"{stem}_1.csv": write("1", DRIVE_V), f"{stem}_2.csv": write("2", response(tau_s))}


def take(folder: Path, **options: object) -> Intake:
    return take_in([folder], today=TODAY, **options)  # type: ignore[arg-type]


def captured(intake: Intake, name: str) -> Capture:
    assert intake.reread is not None
    return intake.reread(name)


def names_in(intake: Intake) -> list[str]:
    return list(intake.sources)


def assert_joined(capture: Capture) -> None:
    assert capture.drive is not None
    assert capture.drive.signal_V == pytest.approx(DRIVE_V, abs=1e-9)
    assert capture.outputs[1].signal_V == pytest.approx(OUTPUT_V, abs=1e-9)
    assert capture.drive.t0_s == capture.outputs[1].t0_s
    assert capture.drive.dt_s == capture.outputs[1].dt_s == pytest.approx(DT_S, rel=1e-9)


def refusals(intake: Intake) -> list[str]:
    assert [r.name for r in intake.refusals] == [m.capture for m in intake.measurements if "refused" in m.flags]
    return [str(r.error) for r in intake.refusals]


class TestStated:
    @pytest.mark.parametrize("write", [two_rows, plain])
    def test_patterns_put_the_files_of_a_stem_together(
        self, tmp_path: Path, write: Callable[[str, np.ndarray], str]
    ) -> None:
        plant(tmp_path, pair("12V/SP-2", write) | pair("5V/SP-2", write))
        intake = take(tmp_path, channels=PATTERNS)
        assert names_in(intake) == ["5V/SP-2", "12V/SP-2"]
        assert_joined(captured(intake, "12V/SP-2"))
        assert all("t_plh_s" in row.quantities for row in intake.measurements)
        assert intake.exit_status == 0

    def test_it_measures_what_one_file_with_both_channels_measures(self, tmp_path: Path) -> None:
        plant(tmp_path / "spread", pair("a", plain))
        rows = "".join(f"{t:.9e},{d:.6f},{o:.6f}\n" for t, d, o in zip(TIME_S, DRIVE_V, OUTPUT_V, strict=True))
        plant(tmp_path / "whole", {"a.csv": "time (s),one (V),two (V)\n" + rows})
        (spread,), (whole,) = (
            take(tmp_path / "spread", channels=PATTERNS).measurements,
            take(tmp_path / "whole").measurements,
        )
        assert spread.quantities == whole.quantities

    def test_the_stem_may_stand_behind_what_names_the_channel(self, tmp_path: Path) -> None:
        plant(tmp_path, {"led SP-2.csv": plain("", DRIVE_V), "pd SP-2.csv": plain("", OUTPUT_V)})
        intake = take(tmp_path, channels="drive=led *.csv,output=pd *.csv")
        assert names_in(intake) == ["SP-2"]
        assert_joined(captured(intake, "SP-2"))

    def test_several_elements_and_the_unit_of_time(self, tmp_path: Path) -> None:
        micro = "".join(f"{k * 0.004:.3f},{v:.6f}\n" for k, v in enumerate(OUTPUT_V.tolist()))
        plant(tmp_path, {f"a_{k}.csv": "time,value (V)\n" + micro for k in (1, 2, 10)})
        intake = take(tmp_path, channels="output10=*_10.csv,drive=*_1.csv,time=us,output2=*_2.csv")
        capture = captured(intake, "a")
        assert list(capture.outputs) == [2, 10]
        assert capture.outputs[2].dt_s == pytest.approx(4e-9)

    def test_a_drive_in_amperes_and_whole_numbers_is_times_enough(self, tmp_path: Path) -> None:
        current = two_rows("1", np.where(DRIVE_V > 1, 0.02, 0.0), unit="Ampere")
        plant(tmp_path, {"a_1.csv": current, "a_2.csv": two_rows("2", OUTPUT_V)})
        assert captured(take(tmp_path, channels=PATTERNS), "a").drive is not None

    def test_a_file_that_no_pattern_matches_stays_a_capture_of_its_own(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"b.csv": plain("", OUTPUT_V), "a_3.csv": two_rows("3", OUTPUT_V)})
        assert names_in(take(tmp_path, channels=PATTERNS)) == ["a", "a_3.csv", "b.csv"]

    def test_a_trace_computed_from_the_channels_is_left_aside_in_words(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"a_F1.csv": two_rows("F1", DRIVE_V - OUTPUT_V)})
        for channels in (None, PATTERNS):
            intake = take(tmp_path, channels=channels)
            assert names_in(intake) == ["a"]
            assert "left aside: a_F1.csv" in captured(intake, "a").read_as

    def test_captures_with_the_same_stem_under_two_arguments_carry_their_folders(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("one/a") | pair("two/a"))
        intake = take_in([tmp_path / "one", tmp_path / "two"], channels=PATTERNS, today=TODAY)
        assert names_in(intake) == ["one/a", "two/a"]


class TestConditions:
    def test_names_are_held_against_the_stem(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("SP-2_12V_1kohm"))
        for channels in (None, PATTERNS):
            (row,) = take(tmp_path, channels=channels, names="{device}_{bias_V}V_{load_ohm}ohm").measurements
            assert (row.conditions.device, row.conditions.bias_V, row.conditions.load_ohm) == ("SP-2", 12.0, 1000.0)

    def test_names_of_the_files_serve_where_the_stem_does_not_match(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("SP-2_12V"))
        (row,) = take(tmp_path, channels=PATTERNS, names="{device}_{bias_V}V_{_}").measurements
        assert (row.conditions.device, row.conditions.bias_V) == ("SP-2", 12.0)

    @pytest.mark.parametrize("key", ["12V/a", "a", "12V/a_1.csv", "a_2.csv", "a_2"])
    def test_a_table_may_name_the_stem_or_any_of_the_files(self, tmp_path: Path, key: str) -> None:
        plant(tmp_path / "in", pair("12V/a"))
        (tmp_path / "table.csv").write_text(f"capture,bias_V\n{key},12\n")
        for channels in (None, PATTERNS):
            (row,) = take(tmp_path / "in", channels=channels, conditions=tmp_path / "table.csv").measurements
            assert row.conditions.bias_V == 12.0

    def test_conditions_in_the_files_are_joined(self, tmp_path: Path) -> None:
        files = pair("a", plain)
        plant(tmp_path, {name: f"# bias_V = 12\n# load_ohm = 50\n{text}" for name, text in files.items()})
        (row,) = take(tmp_path, channels=PATTERNS).measurements
        assert (row.conditions.bias_V, row.conditions.load_ohm) == (12.0, 50.0)

    def test_files_that_contradict_each_other_are_refused(self, tmp_path: Path) -> None:
        files = pair("a", plain)
        plant(tmp_path, {name: f"# bias_V = {k}\n{text}" for k, (name, text) in enumerate(files.items(), start=5)})
        (said,) = refusals(take(tmp_path, channels=PATTERNS))
        assert "a_2.csv: bias_V is given twice and differs; found 5.0 in a_1.csv and 6.0 in a_2.csv" in said


class TestRefused:
    """One row for an acquisition; the others are measured."""

    def test_a_missing_partner(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | pair("b"))
        (tmp_path / "b_2.csv").unlink()
        intake = take(tmp_path, channels=PATTERNS)
        (said,) = refusals(intake)
        assert said == (
            f"{tmp_path / 'b'}: a file of the acquisition is missing; found b_1.csv (drive); wanted b_2.csv beside it "
            "(output=*_2.csv). Put it there, or measure the others without patterns of files."
        )
        assert names_in(intake) == ["a", "b"]
        assert intake.exit_status == 2

    @pytest.mark.parametrize(
        ("count", "step_s", "found"),
        [
            (N - 100, DT_S, "400 samples from -4e-07 s to 1.196e-06 s"),
            (N, 2 * DT_S, "500 samples from -4e-07 s to 3.592e-06 s"),
        ],
    )
    def test_times_that_differ(self, tmp_path: Path, count: int, step_s: float, found: str) -> None:
        plant(tmp_path, pair("a") | pair("b"))
        plant(tmp_path, {"b_2.csv": two_rows("2", OUTPUT_V[:count], step_s=step_s)})
        intake = take(tmp_path, channels=PATTERNS)
        (said,) = refusals(intake)
        assert said.startswith(f"{tmp_path / 'b_2.csv'}: the files have different times, and may be two acquisitions")
        assert f"found {found}; wanted 500 samples from -4e-07 s to 1.596e-06 s, as in b_1.csv" in said
        assert "t_plh_s" in intake.measurements[0].quantities

    def test_two_files_for_one_role(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"a_3.csv": two_rows("3", OUTPUT_V)})
        (said,) = refusals(take(tmp_path, channels="output=*_?.csv"))
        assert "two files have the same role in one acquisition; found a_1.csv and a_2.csv and a_3.csv" in said

    def test_a_file_of_two_channels(self, tmp_path: Path) -> None:
        rows = "".join(f"{t:.9e},{v:.6f},{v:.6f}\n" for t, v in zip(TIME_S, OUTPUT_V, strict=True))
        plant(tmp_path, pair("a") | {"a_2.csv": "time (s),CH1 (V),CH2 (V)\n" + rows})
        (said,) = refusals(take(tmp_path, channels=PATTERNS))
        assert f"{tmp_path / 'a_2.csv'}, line 1: the file holds more than one signal; found channels CH1, CH2" in said

    def test_a_file_that_cannot_be_read(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"a_2.csv": "nothing of the kind\n"})
        (said,) = refusals(take(tmp_path, channels=PATTERNS))
        assert str(tmp_path / "a_2.csv") in said

    def test_an_output_in_amperes(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"a_2.csv": two_rows("2", OUTPUT_V, unit="Ampere")})
        (said,) = refusals(take(tmp_path, channels=PATTERNS))
        assert "the output is not in volts" in said

    def test_a_capture_file_of_darkedge(self, tmp_path: Path) -> None:
        own = Path(__file__).resolve().parents[1] / "sample_captures" / "photodiode" / "captures" / "0006_pulse.csv"
        plant(tmp_path, pair("a") | {"a_2.csv": own.read_text()})
        (said,) = refusals(take(tmp_path, channels=PATTERNS))
        assert "a capture file of darkedge is no channel of another acquisition; found output" in said


class TestWrongRequest:
    """The request as a whole is wrong; nothing is measured."""

    def test_a_pattern_that_matches_nothing(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a"))
        with pytest.raises(
            InputError,
            match=r"--channels output=\*_4.csv: a pattern of --channels matches none of the files; found a_1.csv",
        ):
            take(tmp_path, channels="drive=*_1.csv,output=*_4.csv")

    def test_two_patterns_that_match_the_same_file(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a"))
        with pytest.raises(
            InputError,
            match=r"a_1.csv: two patterns of --channels match the same file; found drive=\*_1.csv and output=\*.csv",
        ):
            take(tmp_path, channels="drive=*_1.csv,output=*.csv")

    def test_an_acquisition_called_like_another_file(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"a": plain("", OUTPUT_V)})
        with pytest.raises(InputError, match="an acquisition would be called like another file"):
            take(tmp_path, channels=PATTERNS)
        assert names_in(take(tmp_path)) == ["a", "a_1.csv", "a_2.csv"]  # by itself, nothing is put together then

    @pytest.mark.parametrize(
        ("text", "said"),
        [
            ("drive=1,output=*_2.csv", "channels of one file and patterns of files are mixed; found drive=1"),
            ("drive=*_1.csv,output=*a*.csv", "a pattern has one [*] for the stem; found '[*]a[*].csv'"),
            ("drive=*_1.csv,output=b/*.csv", "a pattern names files, not folders; found 'b/[*].csv'"),
            ("drive=*_1.csv,output=*_1.csv", "a role or channel is given twice"),
            ("drive=*_1.csv", "no output is named"),
        ],
    )
    def test_a_pattern_that_is_none(self, text: str, said: str) -> None:
        with pytest.raises(InputError, match=f"--channels .*: {said}"):
            ChannelRoles.parse(text)


class TestByItself:
    def test_headings_that_name_the_channels_of_the_tags_leave_no_doubt(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("SP-2") | pair("SP-3"))
        intake = take(tmp_path)
        assert names_in(intake) == ["SP-2", "SP-3"]
        assert_joined(captured(intake, "SP-2"))
        assert captured(intake, "SP-2").read_as[0] == "one acquisition, put together from SP-2_1.csv and SP-2_2.csv"

    @pytest.mark.parametrize(
        ("one", "two"), [("_CH1", "_CH2"), ("_ch1", "_ch2"), ("CH1", "CH2"), ("-drive", "-output")]
    )
    def test_tags_that_are_words_for_a_channel_or_a_role_leave_no_doubt(
        self, tmp_path: Path, one: str, two: str
    ) -> None:
        plant(tmp_path, {f"SP-2{one}.csv": plain("", DRIVE_V), f"SP-2{two}.csv": plain("", OUTPUT_V)})
        assert_joined(captured(take(tmp_path), "SP-2"))

    def test_headings_that_name_the_roles_leave_no_doubt(self, tmp_path: Path) -> None:
        files = {"a_1.csv": named("detector")("", OUTPUT_V), "a_2.csv": named("LED")("", DRIVE_V)}
        plant(tmp_path, files)
        assert_joined(captured(take(tmp_path), "a"))

    def test_settings_that_name_the_channel_serve_as_headings(self, tmp_path: Path) -> None:
        files = pair("a", plain)
        plant(tmp_path, {n: f"Source,CH{k}\nMode,plain\n{t}" for k, (n, t) in enumerate(files.items(), start=1)})
        assert_joined(captured(take(tmp_path), "a"))

    def test_roles_that_are_stated_by_channel_hold(self, tmp_path: Path) -> None:
        plant(
            tmp_path,
            {"a_1.csv": two_rows("1", OUTPUT_V), "a_3.csv": two_rows("3", DRIVE_V), "a_4.csv": two_rows("4", OUTPUT_V)},
        )
        capture = captured(take(tmp_path, channels="drive=3,output=1"), "a")
        assert_joined(capture)
        assert capture.read_as[-1] == "left aside: a_4.csv"

    def test_the_lower_channel_is_the_drive_in_whatever_order_the_files_are_given(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a"))
        intake = take_in([tmp_path / "a_2.csv", tmp_path / "a_1.csv"], today=TODAY)
        assert_joined(captured(intake, "a"))

    def test_a_trace_that_its_heading_calls_otherwise_is_not_left_aside(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | {"a_F1.csv": two_rows("4", OUTPUT_V)})
        assert names_in(take(tmp_path, channels=PATTERNS)) == ["a", "a_F1.csv"]

    def test_three_channels_without_roles_stay_apart_and_are_told_of(self, tmp_path: Path) -> None:
        """As in one file with three channels, nothing says which is the drive."""
        plant(tmp_path, pair("a") | {"a_3.csv": two_rows("3", OUTPUT_V)})
        intake = take(tmp_path)
        assert names_in(intake) == ["a_1.csv", "a_2.csv", "a_3.csv"]
        assert captured(intake, "a_1.csv").read_as[-1] == (
            "read by itself; it may be one channel of an acquisition with a_2.csv and a_3.csv (same form, same times), but "
            "that or the roles are not certain: if so, say which is which, such as --channels 'drive=*_1.csv,output=*_2.csv'"
        )

    def test_numbers_that_nothing_else_speaks_for_stay_apart_and_are_told_of(self, tmp_path: Path) -> None:
        """They may be devices or repeats."""
        plant(tmp_path, pair("a", plain))
        intake = take(tmp_path)
        assert names_in(intake) == ["a_1.csv", "a_2.csv"]
        assert "may be one channel" in captured(intake, "a_2.csv").read_as[-1]
        said = refusals(take(tmp_path, channels="drive=1,output=2"))
        assert len(said) == 2
        assert all("--channels 'drive=*_1.csv,output=*_2.csv'" in words for words in said)

    @pytest.mark.parametrize(
        "files",
        [
            {f"a_{k}.csv": two_rows("2", response(k * 3e-8)) for k in (1, 2, 3)},
            {"a_1.csv": two_rows("2", DRIVE_V), "a_2.csv": two_rows("1", OUTPUT_V)},
            {"a_CH1.csv": two_rows("CH3", DRIVE_V), "a_CH2.csv": two_rows("CH4", OUTPUT_V)},
            {"a_1.csv": named("Vout")("", DRIVE_V), "a_2.csv": named("Vout")("", OUTPUT_V)},
            {"a_1.csv": two_rows("1", DRIVE_V), "a_2.csv": two_rows("2", OUTPUT_V[:400])},
            {"a_1.csv": two_rows("1", DRIVE_V), "a_2.csv": two_rows("2", OUTPUT_V, step_s=2 * DT_S)},
            {"a_1.csv": two_rows("1", DRIVE_V), "a_2.csv": plain("", OUTPUT_V)},
            {"a_1.csv": two_rows("1", DRIVE_V), "b_2.csv": two_rows("2", OUTPUT_V)},
            {"a_1.csv": two_rows("1", DRIVE_V), "sub/a_2.csv": two_rows("2", OUTPUT_V)},
            {"a_1.csv": two_rows("1", DRIVE_V), "a_2.txt": two_rows("2", OUTPUT_V)},
            {"SP-1.csv": two_rows("1", DRIVE_V), "SP-2.csv": two_rows("2", OUTPUT_V)},
            {"a_1.csv": two_rows("1", DRIVE_V), "a_F1.csv": two_rows("F1", OUTPUT_V)},
            {f"a_{k}.csv": plain("", OUTPUT_V) for k in range(1, 12)},
        ],
        ids=[
            "repeats of one channel", "other channels than the names say", "the same with words", "one role twice",
            "another length", "another step", "another form", "another stem", "another folder", "another extension",
            "devices", "a channel and what was computed from it", "more files than channels",
        ],
    )  # fmt: skip
    def test_what_may_be_something_else_is_not_put_together(self, tmp_path: Path, files: dict[str, str]) -> None:
        plant(tmp_path, files)
        assert sorted(names_in(take(tmp_path))) == sorted(files)

    def test_files_that_the_user_tells_apart_are_not_put_together(self, tmp_path: Path) -> None:
        plant(tmp_path / "in", pair("SP"))
        (tmp_path / "table.csv").write_text("capture,device\nSP_1,A\nSP_2,B\n")
        for options in ({"conditions": tmp_path / "table.csv"}, {"names": "{device}_{element}"}):
            intake = take(tmp_path / "in", **options)
            assert names_in(intake) == ["SP_1.csv", "SP_2.csv"]
            assert not intake.refusals

    def test_a_damaged_file_refuses_its_acquisition_alone(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a") | pair("b"))
        lines = (tmp_path / "a_2.csv").read_text().splitlines()
        lines[200] = lines[200].partition(",")[0] + ", oops"
        (tmp_path / "a_2.csv").write_text("\n".join(lines) + "\n")
        intake = take(tmp_path)
        (said,) = refusals(intake)
        assert f"{tmp_path / 'a_2.csv'}, line 201" in said
        assert names_in(intake) == ["a", "b"]

    @pytest.mark.parametrize("bad", ["", "\x00\x01", "x-axis,2\nsecond,Volt\n", "# format = darkedge-capture 1\n"])
    def test_a_file_that_is_none_keeps_the_others_apart(self, tmp_path: Path, bad: str) -> None:
        plant(tmp_path, pair("a") | {"a_3.csv": bad})
        assert names_in(take(tmp_path)) == ["a_1.csv", "a_2.csv", "a_3.csv"]


class TestEveryCommand:
    def test_several_processes_give_the_same(self, tmp_path: Path) -> None:
        for k in range(6):
            plant(tmp_path, pair(f"SP-{k}", tau_s=3e-8 * (k + 1)))
        (tmp_path / "SP-3_2.csv").unlink()
        found = {jobs: take(tmp_path, channels=PATTERNS, jobs=jobs) for jobs in (1, 2)}
        assert found[1].measurements == found[2].measurements
        assert refusals(found[1]) == refusals(found[2])
        assert len(found[1].measurements) == 6

    def test_an_archive_keeps_them_put_together(self, tmp_path: Path) -> None:
        plant(tmp_path / "in", pair("a") | pair("b"))
        (tmp_path / "in" / "b_1.csv").unlink()
        packed = pack([tmp_path / "in"], tmp_path / "all.parquet", channels=PATTERNS)
        assert (packed.count, [r.name for r in packed.refusals]) == (1, ["b"])
        capture = read_archived(tmp_path / "all.parquet", 0)
        assert capture.name == "a"
        assert capture.drive is not None
        assert take_in([tmp_path / "all.parquet"], today=TODAY).measurements[0].capture == "a"

    @pytest.mark.parametrize("command", ["measure", "report", "fit"])
    def test_the_commands_name_the_stem_and_tell_a_refusal_by_their_status(
        self, tmp_path: Path, command: str, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        plant(tmp_path / "in", pair("SP-2_12V_1000ohm") | pair("SP-2_5V_1000ohm") | pair("SP-3_5V_1000ohm"))
        (tmp_path / "in" / "SP-3_5V_1000ohm_2.csv").unlink()
        monkeypatch.chdir(tmp_path)
        options = ["--channels", PATTERNS, "--names", "{device}_{bias_V}V_{load_ohm}ohm"]
        result = CliRunner().invoke(app, [command, "in", *options])
        assert result.exit_code == 2, result.output
        assert "a file of the acquisition is missing" in result.stderr
        if command == "measure":
            assert "SP-2_12V_1000ohm " in result.stdout
        if command == "report":
            assert "SP-2_12V_1000ohm" in (tmp_path / "darkedge-report.html").read_text(encoding="utf-8")

    def test_explain_says_which_file_is_what(self, tmp_path: Path) -> None:
        plant(tmp_path, pair("a"))
        result = CliRunner().invoke(app, ["measure", str(tmp_path), "--explain"])
        assert result.exit_code == 0
        assert "drive: a_1.csv, column 2 (1), in Volt" in result.stdout
        assert "output of element 1: a_2.csv, column 2 (2), in Volt" in result.stdout
