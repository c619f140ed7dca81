"""The sweep on the virtual bench: order, ranging, dark recipe, what is safe when, resume, and everything off however it ends."""

import os
import signal
import threading
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from bench_for_tests import DARK, Desk, desk, override, plan_text

from darkedge.analysis.captures import Capture, Kind
from darkedge.analysis.errors import BenchError, FixtureError, InputError, LinkError, PlanError
from darkedge.analysis.files import run_folder
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.run_folder import read_journal
from darkedge.analysis.judgement import Judgement
from darkedge.analysis.judging import judge_capture
from darkedge.analysis.plan import Step
from darkedge.instruments.live_bench import open_visa
from darkedge.instruments.sweep import Progress, in_plan_order
from darkedge.instruments.virtual.lots import Fault

TWO_LOADS = plan_text(loads='["1 kohm", "10 kohm"]', biases="[1, 5]", widths='["1 us", "10 us"]', dark=DARK)


@pytest.fixture
def table(tmp_path: Path) -> Iterator[Desk]:
    with desk(tmp_path) as found:
        yield found


def captures(table: Desk, name: str = "SP-2-01") -> dict[str, Capture]:
    folder = table.folder / name / "captures"
    return {path.name: read_capture(path) for path in sorted(folder.iterdir())}


def test_points_come_in_the_order_of_the_plan_hand_work_least_often(table: Desk) -> None:
    table.run(table.plan(TWO_LOADS))
    rows = read_journal(table.folder / "SP-2-01" / "journal.csv")
    pulses = [(r.load_ohm, r.bias_V, r.pulse_width_s) for r in rows if r.kind is Kind.PULSE]
    assert pulses == [(load, bias, width) for load in (1e3, 1e4) for bias in (1.0, 5.0) for width in (1e-6, 1e-5)]
    still = [(r.kind, r.bias_V) for r in rows if r.kind is not Kind.PULSE]
    assert still == [(Kind.OFFSET, 0), (Kind.DARK, 5), (Kind.OFFSET, 0), (Kind.DARK, 12), (Kind.OFFSET, 0)]
    assert table.everything_is_off()
    assert table.left_on == []


def test_hands_touch_nothing_before_the_bias_is_down(table: Desk) -> None:
    """The design's own rule: no prompt before the bias reads below 2 V."""
    table.run(table.plan(TWO_LOADS))
    assert len(table.hands.touched_at_V) == 4  # three loads and the cover
    assert max(table.hands.touched_at_V) < 2.0


def test_no_rating_is_exceeded_anywhere_in_a_sweep(table: Desk) -> None:
    table.run(table.plan(TWO_LOADS))
    extremes = table.virtual.world.extremes
    assert extremes.reverse_bias_V <= 12.0
    assert extremes.emitter_current_A == pytest.approx(5e-3, rel=1e-3)
    assert extremes.emitter_mean_A <= 5.1e-4
    assert extremes.emitter_reverse_V == 0.0


def test_nothing_clips_and_the_signal_fills_what_the_scopes_ranges_allow(table: Desk) -> None:
    """Ranges of the virtual scope stand at most 2.5 times apart, and a quarter is room: a third of the range at least."""
    table.run(table.plan(TWO_LOADS))
    for name, capture in captures(table).items():
        span = (capture.conditions.volts_per_code or 0.0) * 256
        swing = float(np.ptp(capture.outputs[1].signal_V))
        assert swing < 0.99 * span, name
        if "pulse" in name:
            assert swing > 0.3 * span, name


def test_each_edge_has_its_samples_in_one_of_the_captures_of_a_point(table: Desk) -> None:
    """0.8 of the samples between 10 % and 90 %: about thirty at least, where the scope can."""
    table.run(table.plan(TWO_LOADS))
    by_point: dict[str, list[Capture]] = {}
    for name, capture in captures(table).items():
        if "pulse" in name:
            by_point.setdefault(name[:4], []).append(capture)
    for point, found in by_point.items():
        if found[0].conditions.load_ohm == 1e4 and found[0].conditions.pulse_width_s == 1e-6:
            continue  # never settles: there is no edge to speak of
        for rising in (True, False):
            assert max(_samples_on_edge(capture, rising=rising) for capture in found) >= 25, (point, rising)


def _samples_on_edge(capture: Capture, *, rising: bool) -> int:
    record, width = capture.outputs[1], capture.conditions.pulse_width_s or 0.0
    signal, time = record.signal_V, record.t0_s + record.dt_s * np.arange(record.signal_V.size)
    low, high = np.percentile(signal, [2, 98])
    share = (signal - low) / (high - low)
    here = time < width if rising else time > width
    return int(np.count_nonzero(here & (share > 0.1) & (share < 0.9)))


def test_a_long_pulse_with_fast_edges_gets_two_captures_of_its_edges(table: Desk) -> None:
    table.run(table.plan(plan_text(widths='["1 us", "100 us"]')))
    assert list(captures(table)) == ["0001_pulse.csv", "0002_pulse.csv", "0002_pulse_off.csv", "0002_pulse_on.csv"]
    rows = read_journal(table.folder / "SP-2-01" / "journal.csv")
    assert rows[1].capture == "0002_pulse.csv;0002_pulse_on.csv;0002_pulse_off.csv"


def test_what_the_instruments_really_set_stands_in_the_capture(table: Desk) -> None:
    override(
        table.virtual.instruments["bias"],
        "MEASure[:SCALar]:VOLTage[:DC]?",
        lambda _call: f"{table.virtual.world.bias_V + 0.01:.4f}",
    )
    table.run(table.plan(plan_text()))
    known = captures(table)["0001_pulse.csv"].conditions
    assert (known.bias_V, known.bias_read_V) == (5.0, 5.01)
    assert (known.averages, known.coupling, known.input_ohm, known.probe_ratio) == (4, "DC", 1e6, 1.0)
    assert known.emitter_current_A == pytest.approx(5e-3, rel=1e-3)
    assert known.drive_period_s == pytest.approx(1e-5)
    assert (known.run, known.point, known.device, known.element, known.driven_element) == (
        "SP-2-01",
        "0001",
        "SP-2-01",
        1,
        1,
    )


def test_dark_and_offset_traces_share_one_range_and_the_light_is_off(table: Desk) -> None:
    lit: list[bool] = []
    scope = table.virtual.instruments["oscilloscope"]
    acquire = scope._acquire

    def watched(call: object) -> None:
        if scope.timing.source == "IMM":
            lit.append(any(drive.on for drive in table.virtual.world.drives))
        acquire(call)

    override(scope, "INITiate[:IMMediate]", watched)
    table.run(table.plan(plan_text(dark=DARK)))
    still = [c for name, c in captures(table).items() if "pulse" not in name]
    assert len({c.conditions.volts_per_code for c in still}) == 1
    assert {c.conditions.load_ohm for c in still} == {1e6}
    assert lit
    assert not any(lit)
    assert table.time.elapsed_s > 5 * 2.0  # each trace had its settling


def test_the_run_folder_holds_plan_bench_captures_and_journal(table: Desk) -> None:
    ran = table.run(table.plan(plan_text()))
    assert sorted(p.name for p in ran.folder.iterdir()) == ["bench.json", "captures", "journal.csv", "plan.toml"]
    assert (ran.folder / "plan.toml").read_bytes() == (table.folder / "plan.toml").read_bytes()
    assert '"identity": "darkedge,virtual oscilloscope,0,0"' in (ran.folder / "bench.json").read_text()


def test_the_fixture_that_the_plan_names_goes_into_the_run(table: Desk) -> None:
    (table.folder / "elsewhere").mkdir()
    (table.folder / "elsewhere" / "fixture.toml").write_text('format = "darkedge-fixture 1"\noffset_V = "0.3 mV"\n')
    plan = table.plan(plan_text() + '[fixture]\nfile = "elsewhere/fixture.toml"\n')
    ran = table.run(plan)
    assert (ran.folder / "fixture.toml").read_text().endswith('"0.3 mV"\n')
    (table.folder / "elsewhere" / "fixture.toml").unlink()
    with pytest.raises(FixtureError, match="the plan names a fixture file that is not there"):
        table.run(plan, name="SP-2-02")
    assert not (table.folder / "SP-2-02").exists()


def test_the_same_seed_gives_the_same_run(tmp_path: Path) -> None:
    texts = []
    for place in ("one", "two"):
        (tmp_path / place).mkdir()
        with desk(tmp_path / place, seed=7) as found:
            found.run(found.plan(TWO_LOADS))
            folder = found.folder / "SP-2-01"
            texts.append({p.name: p.read_bytes() for p in folder.rglob("*.csv")})
    assert texts[0] == texts[1]


def test_an_existing_run_is_never_written_over(table: Desk) -> None:
    plan = table.plan(plan_text())
    table.run(plan)
    with pytest.raises(InputError, match=r"there is a run in this folder already(.|\n)*--resume"):
        table.run(plan)


def test_nothing_is_opened_for_a_run_that_cannot_be_begun(table: Desk) -> None:
    plan = table.plan(plan_text())
    table.run(plan)
    table.heard.clear()
    with pytest.raises(InputError, match="there is a run in this folder already"):
        table.run(plan)
    with pytest.raises(PlanError, match="of another plan"):
        table.run(table.plan(plan_text(biases="[6]")), resume=True)
    assert table.heard == []


@pytest.mark.skipif(os.name == "nt", reason="processes are told apart otherwise there")
def test_a_second_sweep_is_kept_out_and_a_dead_one_is_not(table: Desk) -> None:
    plan, note = table.plan(plan_text()), table.folder / ".SP-2-01.sweeping"
    note.write_text("1")
    with pytest.raises(InputError, match=r"another sweep is under way in this folder; found process 1"):
        table.run(plan)
    note.write_text("999999999")
    table.run(plan)
    assert not note.exists()


def test_where_the_rail_cannot_be_read_hands_wait_for_the_decoupling(tmp_path: Path) -> None:
    shipped = (Path(__file__).resolve().parents[1] / "instruments/dialects/scpi-1999.toml").read_text("utf-8")
    (tmp_path / "blind.toml").write_text(
        shipped.replace('read_voltage = { get = "MEAS:VOLT?" }', 'read_voltage = { absent = "it has no meter" }')
    )
    with desk(tmp_path) as found:
        bench = found.bench()
        blind = replace(bench, bias=replace(bench.bias, dialect="blind.toml"))
        ran = found.run(found.plan(plan_text(loads='["1 kohm", "10 kohm"]')), bench=blind)
        assert found.time.elapsed_s > 2 * 5.0
        assert captures(found)["0001_pulse.csv"].conditions.bias_read_V is None
        assert ran.swept.taken == 2


class Stop(Exception):  # noqa: N818 - a stand-in for anything that can happen
    """Something that nobody foresaw."""


def stop_after(count: int, error: BaseException) -> object:
    def tell(progress: Progress) -> None:
        if progress.done >= count:
            raise error

    return tell


@pytest.mark.parametrize(
    "error", [KeyboardInterrupt(), Stop(), BenchError("gone"), MemoryError()], ids=lambda e: type(e).__name__
)
def test_however_a_run_ends_everything_is_off_and_resume_takes_exactly_the_rest(
    table: Desk, error: BaseException
) -> None:
    plan = table.plan(TWO_LOADS)
    with pytest.raises(type(error)):
        table.run(plan, progress=stop_after(3, error))
    assert table.everything_is_off()
    assert table.left_on == []
    folder = table.folder / "SP-2-01"
    before = {p.name: p.stat().st_mtime_ns for p in (folder / "captures").iterdir()}
    assert [r.point for r in read_journal(folder / "journal.csv")] == ["0001", "0002", "0003"]
    taken: list[str] = []
    ran = table.run(plan, resume=True, progress=lambda p: taken.append(p.step.name) if p.step else None)
    assert taken == [f"{n:04d}" for n in range(4, 14)]
    assert ran.swept.taken == 10
    assert [r.point for r in read_journal(folder / "journal.csv")] == [f"{n:04d}" for n in range(1, 14)]
    assert all((folder / "captures" / name).stat().st_mtime_ns == time for name, time in before.items())


def test_a_resumed_dark_series_keeps_its_range(table: Desk) -> None:
    plan = table.plan(plan_text(dark=DARK))
    with pytest.raises(KeyboardInterrupt):
        table.run(plan, progress=stop_after(3, KeyboardInterrupt()))
    table.run(plan, resume=True)
    still = [c for name, c in captures(table).items() if "pulse" not in name]
    assert len(still) == 5
    assert len({c.conditions.volts_per_code for c in still}) == 1


def test_a_finished_run_resumed_takes_nothing_and_drives_nothing(table: Desk) -> None:
    plan = table.plan(plan_text())
    table.run(plan)
    table.heard.clear()
    assert table.run(plan, resume=True).swept.taken == 0
    assert not any("ON" in text for role, text in table.heard if role != "oscilloscope")


def test_a_run_of_another_plan_is_not_gone_on_with(table: Desk) -> None:
    table.run(table.plan(plan_text()))
    with pytest.raises(PlanError, match=r"the run in this folder is of another plan(.|\n)*SP-2-01/plan\.toml"):
        table.run(table.plan(plan_text(biases="[5, 6]")), resume=True)


def test_resume_without_a_run_is_refused(table: Desk) -> None:
    with pytest.raises(InputError, match=r"there is no run to go on with(.|\n)*leave --resume out|Leave --resume out"):
        table.run(table.plan(plan_text()), resume=True)


def test_a_journal_line_that_was_cut_off_is_taken_again(table: Desk) -> None:
    plan = table.plan(plan_text(biases="[1, 5]"))
    table.run(plan)
    journal = table.folder / "SP-2-01" / "journal.csv"
    journal.write_bytes(journal.read_bytes()[:-20])
    ran = table.run(plan, resume=True)
    assert ran.swept.taken == 1
    assert [r.point for r in read_journal(journal)] == ["0001", "0002"]


def test_a_capture_that_is_gone_is_taken_again(table: Desk) -> None:
    plan = table.plan(plan_text(biases="[1, 5]"))
    table.run(plan)
    (table.folder / "SP-2-01" / "captures" / "0001_pulse.csv").unlink()
    assert table.run(plan, resume=True).swept.taken == 1
    assert (table.folder / "SP-2-01" / "captures" / "0001_pulse.csv").is_file()


def test_a_spoiled_journal_is_told_with_its_line(table: Desk) -> None:
    plan = table.plan(plan_text())
    table.run(plan)
    journal = table.folder / "SP-2-01" / "journal.csv"
    journal.write_text(journal.read_text().replace("pulse,1,1", "pulse,one,1"))
    with pytest.raises(InputError, match=r"journal\.csv, line 2: not a line of a journal"):
        table.run(plan, resume=True)


def test_a_full_disk_ends_the_run_with_a_message_and_costs_nothing_that_was_taken(
    table: Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    write, count = run_folder.write_capture, [0]

    def full(capture: Capture, path: Path) -> None:
        count[0] += 1
        if count[0] > 2:
            raise InputError("the capture cannot be written", where=str(path), found="No space left on device")
        write(capture, path)

    monkeypatch.setattr(run_folder, "write_capture", full)
    with pytest.raises(InputError, match="No space left on device"):
        table.run(table.plan(plan_text(biases="[1, 5, 12]")))
    assert table.everything_is_off()
    assert [r.point for r in read_journal(table.folder / "SP-2-01" / "journal.csv")] == ["0001", "0002"]
    monkeypatch.setattr(run_folder, "write_capture", write)
    assert table.run(table.plan(plan_text(biases="[1, 5, 12]")), resume=True).swept.taken == 1


def test_a_lost_link_ends_the_run_and_the_outputs_go_off_by_a_fresh_one(table: Desk) -> None:
    """The link to the supply breaks in mid-sweep; the way out opens another."""
    opened = []

    def open_link(address: str, visa: str, line_end: str) -> object:
        opened.append(open_visa(address, visa, line_end))
        return opened[-1]

    table.open_link = open_link

    def cut(progress: Progress) -> None:
        if progress.done == 1:
            for transport in opened:
                transport._resource.close()

    with pytest.raises(LinkError):
        table.run(table.plan(plan_text(biases="[1, 5]")), progress=cut)
    assert table.everything_is_off()
    assert table.left_on == []


def test_what_cannot_be_switched_off_is_said(table: Desk) -> None:
    def die(progress: Progress) -> None:
        if progress.done == 1:
            table.virtual.servers["bias"].close()

    bench = table.bench()
    with pytest.raises(BenchError):
        _with_short_limits(table, bench, die)
    assert table.left_on is not None
    assert any("the bias (TCPIP" in words for words in table.left_on)
    assert not any(drive.on for drive in table.virtual.world.drives)


def _with_short_limits(table: Desk, bench: object, die: object) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("darkedge.instruments.visa.ANSWER_LIMIT_s", 0.3)
        patch.setattr("darkedge.instruments.visa.OPEN_LIMIT_s", 0.3)
        table.run(table.plan(plan_text(biases="[1, 5]")), bench=bench, progress=die)  # type: ignore[arg-type]


@pytest.mark.parametrize(("role", "pattern", "name"), [
    ("function_generator", "OUTPut#[:STATe]", "the emitter drive"), ("bias", "OUTPut[:STATe]", "the bias"),
])  # fmt: skip
def test_an_output_that_stays_on_is_the_benchs_failure_even_where_all_else_went_well(
    table: Desk, role: str, pattern: str, name: str
) -> None:
    world, instrument = table.virtual.world, table.virtual.instruments[role]

    def only_on(call: object) -> None:
        if call.only().upper() == "ON":
            (world.drives[0] if role != "bias" else world.rail).on = True

    def break_it(progress: Progress) -> None:
        if progress.step is None:
            override(instrument, pattern, only_on)

    with pytest.raises(BenchError, match=r"bench: an output may still be on"):
        table.run(table.plan(plan_text()), progress=break_it)
    assert table.left_on is not None
    assert any(words.startswith(name) and "may still be on" in words for words in table.left_on)
    assert len(read_journal(table.folder / "SP-2-01" / "journal.csv")) == 1


@pytest.mark.skipif(os.name == "nt", reason="there is no SIGTERM to send there")
def test_the_end_asked_for_from_outside_is_taken_like_ctrl_c(table: Desk) -> None:
    def terminate(progress: Progress) -> None:
        if progress.done == 2:
            os.kill(os.getpid(), signal.SIGTERM)

    assert threading.current_thread() is threading.main_thread()
    with pytest.raises(KeyboardInterrupt):
        table.run(table.plan(TWO_LOADS), progress=terminate)
    assert table.everything_is_off()
    assert signal.getsignal(signal.SIGTERM) is signal.SIG_DFL


def test_a_capture_that_is_judged_bad_is_taken_again_and_at_most_three_times(table: Desk) -> None:
    verdicts = iter([Judgement.RETAKE, Judgement.KEEP, Judgement.ADJUST, Judgement.ADJUST, Judgement.ADJUST])
    ran = table.run(table.plan(plan_text(biases="[1, 5]")), judge=lambda _capture: next(verdicts))
    assert [(r.attempts, r.remark) for r in ran.swept.rows] == [
        (2, "taken again"), (3, "kept although the last of 3 attempts was not good"),
    ]  # fmt: skip
    assert ran.swept.retaken == 3


def test_the_next_point_is_whatever_is_proposed(table: Desk) -> None:
    plan = table.plan(plan_text(biases="[1, 5, 12]"))
    steps = plan.steps()

    def backwards(rows: object) -> Step | None:
        done = {row.point for row in rows}
        return next((s for s in reversed(steps[1:]) if s.name not in done), None)

    assert [r.point for r in table.run(plan, propose=backwards).swept.rows] == ["0003", "0002"]
    assert in_plan_order(plan)([]) == steps[0]


def test_a_good_pulse_and_a_dead_device_are_kept_a_clipped_one_is_not(tmp_path: Path) -> None:
    with desk(tmp_path, fault=Fault.DEAD) as found:
        found.run(found.plan(plan_text()), judge=judge_capture)
        (dead,) = captures(found).values()
    assert judge_capture(dead) is Judgement.KEEP
    lit = dead.outputs[1].time_s > 0
    rng = np.random.default_rng(3)
    signal = rng.normal(0, 2e-4, lit.size) + np.where(lit & (dead.outputs[1].time_s < 1e-6), 0.02, 0.0)
    good = replace(dead, outputs={1: replace(dead.outputs[1], signal_V=signal)})
    clipped = replace(dead, outputs={1: replace(dead.outputs[1], signal_V=np.minimum(signal, 0.0199))})
    assert judge_capture(good) is Judgement.KEEP
    assert judge_capture(clipped) is Judgement.ADJUST


def test_loads_can_be_put_in_by_the_switch(table: Desk) -> None:
    plan = table.plan(plan_text(loads='["1 kohm", "10 kohm"]', change="switched"))
    ran = table.run(plan, bench=table.bench(switched=True))
    found = captures(table)
    assert table.hands.touched_at_V == []
    ratio = np.ptp(found["0002_pulse.csv"].outputs[1].signal_V) / np.ptp(found["0001_pulse.csv"].outputs[1].signal_V)
    assert ratio > 5
    assert ran.swept.taken == 2


def test_a_drive_that_is_not_connected_is_told(table: Desk) -> None:
    bench = table.bench()
    crossed = replace(bench, oscilloscope=replace(bench.oscilloscope, channels={"drive": 4, "output": 2}))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("darkedge.instruments.oscilloscope.ANSWER_MARGIN_s", 0.3)
        with pytest.raises(BenchError, match=r"no trigger(.|\n)*drive reaches its channel"):
            table.run(table.plan(plan_text()), bench=crossed)
    assert table.everything_is_off()


def test_with_light_as_the_reference_the_drive_level_is_found(table: Desk) -> None:
    table.virtual.world.wiring = replace(table.virtual.world.wiring, reference="light")
    plan = table.plan(plan_text().replace("forward_V = 1.5", 'forward_V = 1.5\nreference = "light"'))
    table.run(plan)
    drive = captures(table)["0001_pulse.csv"].drive
    assert drive is not None
    assert np.ptp(drive.signal_V) == pytest.approx(0.2, rel=0.05)  # 40 V an ampere, 5 mA
