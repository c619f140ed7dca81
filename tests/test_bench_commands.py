"""The commands of the bench side as a user meets them: sweeps, checks, rehearsals, refusals, exit statuses."""

import json
import re
from collections.abc import Iterator
from pathlib import Path

import pytest
from bench_for_tests import DARK, Desk, desk, override, plan_text
from typer.testing import CliRunner

from darkedge.analysis.files.tables import read_table
from darkedge.cli.main import app
from darkedge.instruments.virtual.rehearsal import NOTICE_NAME


def run(*words: object, status: int = 0, typed: str = "") -> tuple[str, str]:
    result = CliRunner().invoke(app, [str(w) for w in words], input=typed)
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exc_info
    assert "Traceback" not in result.output
    assert result.exit_code == status, result.output
    return result.stdout, result.stderr


@pytest.fixture
def table(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Desk]:
    with desk(tmp_path) as found:
        monkeypatch.chdir(tmp_path)
        found.bench(switched=True)
        yield found


def plan(table: Desk, text: str) -> Path:
    table.plan(text)
    return table.folder / "plan.toml"


SWITCHED = plan_text(loads='["1 kohm", "10 kohm"]', change="switched")


def test_a_sweep_ends_with_the_run_and_everything_off(table: Desk) -> None:
    shown, said = run("sweep", plan(table, SWITCHED), "--bench", "bench.toml", "--device", "SP-2-01")
    assert shown == "run: SP-2-01\n"
    assert "caution: The emitter's light is invisible" in said
    assert "oscilloscope: darkedge,virtual oscilloscope,0,0" in said
    assert "outputs off" in said
    assert "2 points taken; 2 in the run" in said
    shown, _ = run("measure", "SP-2-01", "--json")
    rows = json.loads(shown)
    assert {row["device"] for row in rows} == {"SP-2-01"}
    assert all(row["rise_time_s"] > 0 for row in rows)


def test_a_sweep_into_a_lot_takes_the_lots_name(table: Desk) -> None:
    lot = table.folder / "lot"
    lot.mkdir()
    (lot / "lot.toml").write_text('format = "darkedge-lot 1"\nlot = "K-0417"\n')
    run(
        "sweep",
        plan(table, SWITCHED),
        "--bench",
        "bench.toml",
        "--device",
        "SP-2-01",
        "--into",
        lot,
        "--temperature",
        "23 degC",
    )
    text = (lot / "SP-2-01" / "captures" / "0001_pulse.csv").read_text()
    assert "# lot = K-0417\n" in text
    assert "# temperature_degC = 23.0\n" in text


def test_hand_work_is_asked_for_and_the_word_waited_for(table: Desk) -> None:
    asked = plan_text(loads='["1 kohm"]', dark=DARK).replace("settle_s = 2", "settle_s = 0")
    _, said = run(
        "sweep", plan(table, asked), "--bench", "bench.toml", "--device", "SP-2-01", typed="what?\nyes\nyes\nyes\n"
    )  # fmt: skip
    assert "Put in the load of 1 kΩ" in said
    assert "yes or stop" in said
    assert "Cover the device" in said


def test_a_rail_set_by_hand_is_asked_for_and_said_to_be_on_at_the_end(table: Desk) -> None:
    text = (table.folder / "bench.toml").read_text()
    start, rest = text.split("[bias]")
    (table.folder / "bench.toml").write_text(
        start + '[bias]\nsource = "by_hand"\n\n[switch]' + rest.split("[switch]", 1)[1]
    )
    table.virtual.world.bias_from = "hand"
    path = plan(table, SWITCHED)
    _, said = run("sweep", path, "--bench", "bench.toml", "--device", "S", typed="0\nabout 5\n5 V\n0.1 V\n5.02\n")
    assert said.count("What does the meter read?") == 5
    assert "not understood: bias_V is not a number" in said
    assert "CAUTION: the rail is set by hand: switch it off, and check it with a meter" in said
    assert "# bias_read_V = 5.02" in (table.folder / "S" / "captures" / "0002_pulse.csv").read_text()
    _, said = run("sweep", path, "--bench", "bench.toml", "--device", "T", typed="4 V\n", status=2)
    assert "the rail is still up; found 4 V; wanted below 2 V" in said


@pytest.mark.parametrize("typed", ["", "stop\n", "no\n"])
def test_hand_work_that_is_not_confirmed_ends_the_run(table: Desk, typed: str) -> None:
    _, said = run(
        "sweep", plan(table, plan_text()), "--bench", "bench.toml", "--device", "SP-2-01", typed=typed, status=2
    )
    assert re.search(r"not confirmed|stopped at hand work", said)
    assert "--resume" in said
    assert table.everything_is_off()


@pytest.mark.parametrize("name", ["", "..", "a/b", "a\\b", "a:b", ".hidden", "a\nb"])
def test_a_device_name_that_cannot_be_a_folder_is_refused(table: Desk, name: str) -> None:
    _, said = run("sweep", plan(table, SWITCHED), "--bench", "bench.toml", "--device", name, status=2)
    assert "--device: the device's name cannot be that of a folder" in said


def test_an_instrument_that_does_not_answer_is_the_benchs_fault(table: Desk) -> None:
    text = (table.folder / "bench.toml").read_text()
    (table.folder / "bench.toml").write_text(re.sub(r"(\[bias\][^[]*?)127\.0\.0\.1::\d+", r"\g<1>127.0.0.1::1", text))
    _, said = run("sweep", plan(table, SWITCHED), "--bench", "bench.toml", "--device", "SP-2-01", status=3)
    assert "127.0.0.1::1::SOCKET: the instrument cannot be reached" in said
    assert not (table.folder / "SP-2-01").exists()


def test_the_log_keeps_every_message(table: Desk) -> None:
    run("sweep", plan(table, SWITCHED), "--bench", "bench.toml", "--device", "SP-2-01", "--log", "talk.txt")
    lines = (table.folder / "talk.txt").read_text().splitlines()
    assert "bias\tSOUR:VOLT 5" in lines
    assert lines[0] == "bias\t*IDN?"


def test_a_log_that_cannot_be_written_is_told_before_anything_is_opened(table: Desk) -> None:
    _, said = run(
        "sweep", plan(table, SWITCHED), "--bench", "bench.toml", "--device", "S", "--log", "no/such/folder", status=2
    )
    assert "the log cannot be written" in said


def test_new_plans_are_written_and_never_over_another(table: Desk) -> None:
    shown, said = run("plan", "new", "mine.toml", "--kind", "pin")
    assert shown == "plan: mine.toml\n"
    assert "darkedge plan check mine.toml" in said
    _, said = run("plan", "new", "mine.toml", status=2)
    assert "there is a file already" in said
    _, said = run("plan", "new", "other.toml", "--kind", "lamp", status=2)
    assert "found 'lamp'; wanted photodiode, pin, transistor_switch, optocoupler, dual_optocoupler" in said


def test_a_plan_is_checked_without_and_with_instruments(table: Desk) -> None:
    path = plan(table, plan_text(change="switched", dark=DARK))
    shown, said = run("plan", "check", path)
    assert re.search(r"dark and offset traces +5", shown)
    assert "--bench asks the scope for its own" in said
    shown, said = run("plan", "check", path, "--bench", "bench.toml")
    assert "bench: the supply takes 12 V (output off)" in said
    assert "outputs off" in said
    row = json.loads(run("plan", "check", path, "--bench", "bench.toml", "--json")[0])[0]
    assert (row["pulse_points"], row["still_traces"], row["faults"]) == (1, 5, [])


def test_a_plan_that_the_bench_cannot_do_has_its_own_status(table: Desk) -> None:
    override(table.virtual.instruments["bias"], "[SOURce:]VOLTage?", lambda _call: "3.0")
    _, said = run("plan", "check", plan(table, SWITCHED), "--bench", "bench.toml", status=3)
    assert "error: another bias was set than asked for" in said
    _, said = run("plan", "check", table.folder / "plan.toml", "--bench", "bench.toml", "--offline")
    assert "another bias" not in said


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("bias_V = [5]", "bias_V = [50]", r"axes\.bias_V\[0\]: beyond ratings\.reverse_bias_V"),
        ("bias_V = [5]", 'bias_V = ["5 mA"]', "wrong unit"),
        ("bias_V = [5]", "bias_V = [5]\nbiass_V = 3", r"unknown key; did you mean bias_V\?"),
        ('emitter_current_A = "5 mA"', 'emitter_current_A = "5 A"', r"beyond ratings\.emitter_peak_current_A"),
        ("duty = 0.1", "duty = 0.1\nlow_V = -3", r"emitter_reverse_V: missing"),
        ("duty = 0.1", "duty = 0.1\nlow_V = 5", r"drive\.low_V: not below emitter\.forward_V"),
        ("load_change", "element = [1, 1]\nload_change", r"axes\.element: holds an element twice"),
    ],
)
def test_a_plan_that_is_wrong_drives_nothing(table: Desk, old: str, new: str, words: str) -> None:
    path = table.folder / "bad.toml"
    path.write_text(SWITCHED.replace(old, new))
    _, said = run("sweep", path, "--bench", "bench.toml", "--device", "SP-2-01", status=2)
    assert re.search(words, said)
    assert table.virtual.world.extremes.reverse_bias_V == 0.0


def test_the_bench_is_listed_and_checked(table: Desk) -> None:
    shown, said = run("bench", "list", "--bench", "bench.toml")
    assert "darkedge,virtual oscilloscope,0,0" in shown
    assert "raw sockets (TCPIP ... SOCKET) cannot be found" in said
    shown, _ = run("bench", "check", "--bench", "bench.toml")
    assert "fault" not in shown
    rows = json.loads(run("bench", "check", "--bench", "bench.toml", "--json")[0])
    assert {"role", "operation", "state", "words"} == set(rows[0])


def test_a_bench_with_somebody_missing_is_listed_with_status_three(table: Desk) -> None:
    table.virtual.servers["oscilloscope"].close()
    shown, _ = run("bench", "list", "--bench", "bench.toml", status=3)
    assert "no answer" in shown
    shown, _ = run("bench", "check", "--bench", "bench.toml", status=3)
    assert "fault" in shown


@pytest.mark.parametrize(
    ("option", "value", "words"),
    [
        ("--kind", "lamp", "not a kind of part"),
        ("--fault", "ugly", "not a fault"),
        ("--words", "latin", "not words of"),
    ],
)
def test_what_cannot_be_served_is_refused(option: str, value: str, words: str) -> None:
    assert words in run("bench", "serve", option, value, status=2)[1]


def test_a_rehearsal_touches_no_folder_that_it_did_not_make(tmp_path: Path) -> None:
    (tmp_path / "thesis.txt").write_text("three years of work")
    _, said = run("rehearse", "--out", tmp_path, status=2)
    assert "the folder holds something that no rehearsal made" in said
    assert [p.name for p in tmp_path.iterdir()] == ["thesis.txt"]
    assert "not a kind of part" in run("rehearse", "--kind", "lamp", "--out", tmp_path / "x", status=2)[1]


@pytest.mark.parametrize(("kind", "words"), [("transistor_switch", "own"), ("dual_optocoupler", "scpi-1999")])
def test_a_rehearsal_ends_with_the_right_verdicts_and_a_report(tmp_path: Path, kind: str, words: str) -> None:
    shown, said = run("rehearse", "--kind", kind, "--words", words, "--out", tmp_path / "lot")
    assert "Every verdict is right" in shown
    assert f"report: {(tmp_path / 'lot' / 'report.html').resolve()}" in shown
    assert "invented" in (tmp_path / "lot" / NOTICE_NAME).read_text()
    page = (tmp_path / "lot" / "report.html").read_text("utf-8")
    assert "invented" in page
    assert "outputs off" in said
    run("rehearse", "--kind", "lamp", "--out", tmp_path / "lot", status=2)


def test_a_rehearsed_photodiode_lot_is_judged_and_fitted_right(tmp_path: Path) -> None:
    """Every fitted value is told beside the one the part was made with; nineteen of twenty belong inside."""
    shown, _ = run("rehearse", "--out", tmp_path / "lot")
    assert "Every verdict is right" in shown
    assert "the best pair is marked" in shown
    assert shown.count(" inside") >= 13
    assert shown.count("OUTSIDE") <= 2
    run("measure", tmp_path / "lot" / "lot_K-0417", "--out", tmp_path / "table.csv")
    assert len({m.conditions.device for m in read_table(tmp_path / "table.csv")}) == 6
