"""The command line as a user meets it: the README's commands, exit statuses, refusals, JSON."""

import json
import re
import shlex
import shutil
from pathlib import Path

import pytest
from typer.testing import CliRunner

from darkedge.analysis.files.tables import read_table
from darkedge.cli.main import app

ROOT = Path(__file__).resolve().parents[1]
SAMPLES = ROOT / "sample_captures"
CAPTURE = SAMPLES / "photodiode" / "captures" / "0006_pulse.csv"
LIMITS = SAMPLES / "limits.toml"
README = (ROOT / "README.md").read_text(encoding="utf-8")
COMMANDS = re.findall(r"^\s*darkedge ((?:measure|pack|fit|choose|screen|report) .*)$", README, flags=re.MULTILINE)
ALL = (
    "rehearse",
    "bench list",
    "bench check",
    "bench serve",
    "plan new",
    "plan check",
    "sweep",
    "measure",
    "fit",
    "choose",
    "screen",
    "report",
)
NAMES = "{device}_{bias_V}V_{load_ohm}ohm"


def run(*words: object, status: int = 0) -> tuple[str, str]:
    result = CliRunner().invoke(app, [str(w) for w in words])
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exc_info
    assert result.exit_code == status, result.output
    assert "Traceback" not in result.output
    return result.stdout, result.stderr


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_of_the_readme_runs(command: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    shutil.copytree(SAMPLES, tmp_path / "sample_captures")
    monkeypatch.chdir(tmp_path)
    words = shlex.split(command)
    if "photodiode.parquet" in words[:2]:
        run("pack", "sample_captures/photodiode", "--out", "photodiode.parquet")
    run(*words, status=1 if words[0] == "screen" else 0)  # the sample lot holds a slow and a leaky part


def test_the_readme_shows_every_command() -> None:
    for name in ALL:
        assert f"darkedge {name}" in README


def test_help_of_every_command_has_an_example() -> None:
    shown, _ = run("--help")
    for name in ALL:
        assert name.split()[0] in shown
        assert "Example:" in run(*name.split(), "--help")[0]
    assert "repeatability" not in shown


def test_json_is_one_array_without_nan() -> None:
    shown, _ = run("measure", CAPTURE, "--json")
    (row,) = json.loads(shown)
    assert row["capture"] == "0006_pulse.csv"
    assert row["u_rise_time_s"] > 0
    assert row["dark_current_A"] is None
    assert "NaN" not in shown


def test_a_saved_table_gives_the_same_fit_as_the_captures(tmp_path: Path) -> None:
    table = tmp_path / "table.parquet"
    run("measure", SAMPLES / "photodiode", "--out", table)
    fixture = ("--fixture", SAMPLES / "fixture.toml")
    (from_table,) = json.loads(run("fit", table, *fixture, "--json")[0])
    (from_captures,) = json.loads(run("fit", SAMPLES / "photodiode", "--json")[0])
    assert from_table["c_j0_F"] == pytest.approx(
        from_captures["c_j0_F"], rel=2e-3
    )  # the table holds no input resistance


def test_fit_json_has_the_parameters_with_their_twins() -> None:
    (device,) = json.loads(run("fit", SAMPLES / "pin", "--json")[0])
    for name in ("c_j0_F", "v_bi_V", "grading", "c_stray_F", "full_depletion_V"):
        assert device[f"{name}_lo95"] < device[name] < device[f"{name}_hi95"]
    assert {"bias_V", "c_F", "u_c_F"} == set(device["capacitance"][0])
    assert device["model"] == "full_depletion"


def test_plots_are_saved_as_png(tmp_path: Path) -> None:
    run("fit", SAMPLES / "photodiode", "--plots", tmp_path / "plots")
    pictures = list((tmp_path / "plots").glob("*.png"))
    assert len(pictures) == 4
    assert all(p.read_bytes().startswith(b"\x89PNG") for p in pictures)


def test_screen_says_by_its_status_whether_all_pass() -> None:
    shown, _ = run("screen", SAMPLES / "lot_K-0417" / "SP-2-01", "--limits", LIMITS)
    assert "PASS" in shown
    shown, _ = run("screen", SAMPLES / "lot_K-0417", "--limits", LIMITS, "--json", status=1)
    verdicts = {d["device"]: d["verdict"] for d in json.loads(shown) if "device" in d}
    assert verdicts.pop("SP-2-04") == "fail"
    assert verdicts.pop("SP-2-07") == "fail"
    assert set(verdicts.values()) == {"pass"}


def test_choose_says_by_its_status_whether_there_is_a_pair() -> None:
    _, talk = run("choose", SAMPLES / "photodiode", "--pulse-width", "10 ns", status=1)
    assert "Traceback" not in talk
    shown, _ = run("choose", SAMPLES / "photodiode", "--pulse-width", "1 us", "--json")
    (choice,) = json.loads(shown)
    assert choice["best"]["misses"] == []


def test_conditions_come_from_names_with_their_units(tmp_path: Path) -> None:
    table = tmp_path / "t.csv"
    run("measure", SAMPLES / "foreign", "--names", NAMES, "--out", table)
    rows = read_table(table)
    assert [(m.conditions.bias_V, m.conditions.load_ohm) for m in rows] == [(12, 1e3), (5, 1e4), (12, 1e3)]


BAD = {
    "empty.csv": b"", "binary.csv": b"\x89PNG\r\n\x1a\n\x00\x00\xff", "words.csv": b"hello\nworld\n", "one_column.csv": b"1\n2\n3\n",
    "backwards.csv": b"time_s,v\n0,1\n-1,2\n-2,3\n-1.5,1\n", "header_only.csv": b"# format = darkedge-capture 1\ntime_s,output_V\n",
    "newer.csv": b"# format = darkedge-capture 2\ntime_s,output_V\n0,1\n1,2\n",
}  # fmt: skip


def test_a_refused_file_does_not_cost_the_others(tmp_path: Path) -> None:
    for name, content in BAD.items():
        (tmp_path / name).write_bytes(content)
    text = CAPTURE.read_bytes()
    (tmp_path / "cut.csv").write_bytes(text[: len(text) // 2].rsplit(b",", 1)[0])
    (tmp_path / "with_nan.csv").write_bytes(text.replace(b"0.0005", b"NaN", 1) if b"0.0005" in text else text + b"x")
    shutil.copy(CAPTURE, tmp_path / "good.csv")
    shown, talk = run("measure", tmp_path, "--json", status=2)
    rows = {row["capture"]: row for row in json.loads(shown)}
    assert rows["good.csv"]["rise_time_s"] > 0
    for name in BAD:
        assert rows[name]["flags"] == ["refused"]
        assert rows[name]["rise_time_s"] is None
        assert f"{name}" in talk
    assert rows["cut.csv"]["flags"] == ["refused"]


def test_a_flat_a_clipped_and_a_pulseless_capture_give_no_edge_times(tmp_path: Path) -> None:
    head = "# format = darkedge-capture 1\n# kind = pulse\ntime_s,output_V\n"
    flat = "".join(f"{k}e-9,0.5\n" for k in range(500))
    (tmp_path / "flat.csv").write_text(head + flat, encoding="utf-8")
    shown, _ = run("measure", tmp_path, "--json")
    (row,) = json.loads(shown)
    assert row["rise_time_s"] is None
    assert "no_pulse" in row["flags"]


@pytest.mark.parametrize(
    ("words", "talk"),
    [
        (["measure", "nowhere"], "no such file or folder"),
        (["screen", CAPTURE, "--limits", "nowhere.toml"], "nowhere.toml: no such file"),
        (["measure", CAPTURE, "--names", "{colour}_x"], "colour"),
        (["measure", CAPTURE, "--out", "t.xlsx"], "not a form of table"),
        (["choose", SAMPLES / "photodiode", "--pulse-width", "2 mV"], "pulse_width_s has the wrong unit; found '2 mV'"),
        (["choose", SAMPLES / "photodiode", "--pulse-width", "2 us", "--rails", "100 V"], "no rail lies within"),
        (["choose", SAMPLES / "photodiode", "--pulse-width", "0"], "pulse_width_s cannot be wished; found 0"),
        (["choose", SAMPLES / "photodiode", "--pulse-width", "1us", "--loads", "-5"], "loads_ohm cannot be wished"),
        (["choose", SAMPLES / "photodiode", "--pulse-width", "1us", "--stray", "-5 pF"], "board_stray_F cannot be wished"),
        (["choose", SAMPLES / "photodiode", "--pulse-width", "1us", "--distortion", "500 %"], "distortion_ratio cannot be wished"),
        (["measure", CAPTURE, "--channels", "drive"], "not a channel with its role"),
        (["measure", CAPTURE, "--fixture", LIMITS], "darkedge-fixture 1"),
    ],
)  # fmt: skip
def test_a_wrong_request_is_told_in_words(
    words: list[object], talk: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    _, said = run(*words, status=2)
    assert talk in said


def test_a_device_without_a_junction_to_fit_says_so() -> None:
    assert "transistor output does not show" in run("fit", SAMPLES / "npn_switch")[1]


def test_a_contradiction_names_both_places(tmp_path: Path) -> None:
    shutil.copy(CAPTURE, tmp_path / "SP_5V.csv")
    _, said = run("measure", tmp_path, "--names", "{device}_{bias_V}V", status=2)
    assert "given twice and differs" in said
    assert "bias_V" in said or "device" in said


def test_the_report_is_written_where_asked_and_says_so(tmp_path: Path) -> None:
    page = tmp_path / "page.html"
    shown, talk = run("report", SAMPLES / "lot_K-0417", "--out", page)
    assert str(page) in shown
    assert "limits.toml" in talk
    assert page.read_text(encoding="utf-8").startswith("<!DOCTYPE html>")


def test_measure_can_explain_how_each_file_was_understood() -> None:
    shown, _ = run("measure", SAMPLES / "foreign", "--names", NAMES, "--explain")
    assert "separated by ';', decimal comma" in shown
    assert "bias_V = 12.0, load_ohm = 1000.0" in shown
    assert "rise" not in shown
