"""What a plan means before it is run, and what the instruments say to it."""

import re
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import pytest
from bench_for_tests import DARK, desk, override, plan_text

from darkedge.analysis.bench import BiasSource
from darkedge.analysis.captures import Kind
from darkedge.analysis.errors import PlanError
from darkedge.analysis.files.fixture_file import read_fixture
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.files.plan_text import KINDS
from darkedge.analysis.files.plan_text import plan_text as new_plan
from darkedge.analysis.fixture import Fixture, Load, Response
from darkedge.analysis.plan import Plan
from darkedge.analysis.planning import outlook
from darkedge.instruments.plan_trial import try_plan
from darkedge.instruments.virtual.lots import PartKind
from darkedge.instruments.virtual.rehearsal import Rehearsal


def plan(folder: Path, text: str) -> Plan:
    (folder / "plan.toml").write_text(text)
    return read_plan(folder / "plan.toml")


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("elements", [1, 2])
def test_a_new_plan_is_a_plan_and_explains_every_key(tmp_path: Path, kind: str, elements: int) -> None:
    text = new_plan(kind, elements=elements)
    made = plan(tmp_path, text)
    assert made.device.kind == kind
    assert made.device.elements == elements
    assert text.count("#") > 20


def test_points_traces_and_hand_work_are_counted(tmp_path: Path) -> None:
    found = outlook(plan(tmp_path, plan_text(loads='["1 kohm", "10 kohm"]', biases="[1, 5]", dark=DARK)))
    assert (found.pulse_points, found.still_traces) == (4, 5)
    assert found.hand_work == (
        "put in 1 kΩ", "put in 10 kΩ", "put in 1 MΩ", "cover the device for the dark traces",
    )  # fmt: skip


def test_a_switch_takes_the_hand_work_of_the_loads(tmp_path: Path) -> None:
    found = outlook(plan(tmp_path, plan_text(loads='["1 kohm", "10 kohm"]', change="switched")))
    assert found.hand_work == ()


def test_a_rail_by_hand_is_hand_work_and_a_caution(tmp_path: Path) -> None:
    with desk(tmp_path) as table:
        bench = table.bench()
    by_hand = replace(bench, bias=replace(bench.bias, source=BiasSource.BY_HAND, address=None))
    found = outlook(plan(tmp_path, plan_text(biases="[1, 5, 12]")), bench=by_hand)
    assert found.hand_work.count("set the rail") == 4  # three biases, and down before the load
    assert "bias_by_hand" in {caution.code for caution in found.cautions}


def test_time_grows_with_points_periods_averages_and_settling(tmp_path: Path) -> None:
    short = outlook(plan(tmp_path, plan_text(change="fixed"))).time_s
    more = outlook(plan(tmp_path, plan_text(change="fixed", biases="[5, 12]"))).time_s
    slow = outlook(plan(tmp_path, plan_text(change="fixed", widths='["10 ms"]'))).time_s
    assert timedelta(seconds=1) < timedelta(seconds=short) < timedelta(seconds=5)
    assert more > short
    assert slow - short == pytest.approx(2.5 * 16 * 2 * 0.1, rel=0.01)  # looks, averages, two periods of 0.1 s


def test_the_smallest_dark_current_is_one_code_over_the_effective_resistance(tmp_path: Path) -> None:
    """1 Mohm with the scope's 1 Mohm across it is 500 kohm."""
    found = outlook(plan(tmp_path, plan_text(dark=DARK)), code_V=1e-4)
    assert found.smallest_dark_A == pytest.approx(1e-4 / 5e5)
    assert outlook(plan(tmp_path, plan_text())).smallest_dark_A is None


EXPECTED = '[expected]\nphotocurrent_ratio = 0.002\ncapacitance_F = "40 pF"\n'


def test_a_swing_beyond_a_tenth_of_the_bias_is_warned_and_a_current_proposed(tmp_path: Path) -> None:
    """0.002 of 5 mA in 9.9 kohm is 99 mV; a tenth of 0.5 V is 50 mV."""
    (words,) = outlook(plan(tmp_path, plan_text(loads='["10 kohm"]', biases="[0.5, 5]") + EXPECTED)).warnings[:1]
    assert re.search(
        r"at 10 kΩ and 500 mV the swing of 99\.01 mV is 20 % of the bias; an emitter current of 2\.5 mA", words
    )


def test_a_swing_that_eats_the_bias_is_said_so(tmp_path: Path) -> None:
    (words, *_) = outlook(plan(tmp_path, plan_text(loads='["100 kohm"]', biases="[0.5]") + EXPECTED)).warnings
    assert "would eat the whole bias" in words


def test_edges_near_the_bench_and_pulses_too_short_are_foreseen(tmp_path: Path) -> None:
    fixture = Fixture(
        loads=(Load(nominal_ohm=100, actual_ohm=100, stray_F=14e-12),),
        response=Response(rise_time_s=10e-9, fall_time_s=16e-9),
    )
    near = outlook(plan(tmp_path, plan_text(loads='["100 ohm"]') + EXPECTED), fixture=fixture).warnings
    assert any("edges near 11.86 ns are not clearly slower than emitter and scope (16 ns)" in words for words in near)
    short = outlook(plan(tmp_path, plan_text(loads='["100 kohm"]', biases="[5]") + EXPECTED)).warnings
    assert any("no pulse is long enough to settle" in words for words in short)


def test_what_cannot_be_foreseen_is_said(tmp_path: Path) -> None:
    assert any("[expected]" in words for words in outlook(plan(tmp_path, plan_text())).notes)


@pytest.mark.parametrize(
    ("duration", "warned"), [("200 ms", False), ("100 ms", False), ("130 ms", True), ("5 ms", True)]
)
def test_dark_traces_that_are_no_whole_mains_periods_are_warned(tmp_path: Path, duration: str, warned: bool) -> None:
    found = outlook(plan(tmp_path, plan_text(dark=DARK.replace("200 ms", duration))))
    assert any("mains periods" in words for words in found.warnings) == warned


def test_a_fixed_load_that_is_not_that_of_the_dark_traces_is_refused(tmp_path: Path) -> None:
    with pytest.raises(PlanError, match=r'axes\.load_change: "fixed", and dark\.load_ohm is another load'):
        plan(tmp_path, plan_text(change="fixed", dark=DARK))


def test_steps_are_numbered_through_and_the_dark_series_ends_with_an_offset(tmp_path: Path) -> None:
    steps = plan(tmp_path, plan_text(biases="[1, 5]", dark=DARK)).steps()
    assert [s.name for s in steps] == [f"{n:04d}" for n in range(1, 8)]
    assert [s.kind for s in steps[2:]] == [Kind.OFFSET, Kind.DARK, Kind.OFFSET, Kind.DARK, Kind.OFFSET]


@pytest.mark.parametrize("words", ["scpi-1999", "own"])
def test_the_instruments_are_asked_with_their_outputs_off(tmp_path: Path, words: str) -> None:
    with desk(tmp_path, words=words) as table:
        made = table.plan(plan_text(biases="[1, 30]", dark=DARK))
        with table.live(made) as live:
            trial = try_plan(live, made)
        assert trial.faults == ()
        assert trial.finest_code_V in (8e-3 / 256, 16e-3 / 256)  # what trying wider and wider ranges hits
        assert any("the supply takes 30 V (output off)" in words for words in trial.facts)
        assert table.virtual.world.extremes.reverse_bias_V == 0.0
        assert table.virtual.world.extremes.emitter_current_A == 0.0


def test_what_the_instruments_cannot_do_is_told_before_anything_is_driven(tmp_path: Path) -> None:
    with desk(tmp_path) as table:
        made = table.plan(
            plan_text(widths='["1 ns"]')
            .replace("bias_V = [5]", "bias_V = [5, 130]")
            .replace("= 32", "= 200\nbias_above_60_V = true")
        )
        with table.live(made) as live:
            trial = try_plan(live, made)
        assert len(trial.faults) == 3
        assert any("-222" in words and "PULS:WIDT" in words for words in trial.faults)
        assert any("-222" in words and "VOLT 130" in words for words in trial.faults)
        assert any("-222" in words and "SWE:TIME 2.4E-09" in words for words in trial.faults)


def test_a_supply_that_answers_another_level_is_told(tmp_path: Path) -> None:
    with desk(tmp_path) as table:
        override(table.virtual.instruments["bias"], "[SOURce:]VOLTage?", lambda _call: "3.0")
        made = table.plan(plan_text())
        with table.live(made) as live:
            trial = try_plan(live, made)
        assert any("another bias was set than asked for; found 3 V; wanted 5 V" in words for words in trial.faults)


@pytest.mark.parametrize("kind", list(PartKind))
def test_the_files_of_a_rehearsal_are_good_ones(tmp_path: Path, kind: PartKind) -> None:
    job = Rehearsal(kind=kind)
    (tmp_path / "fixture.toml").write_text(job.fixture_toml())
    made = plan(tmp_path, job.plan_toml())
    assert outlook(made, fixture=read_fixture(tmp_path / "fixture.toml")).warnings == ()
