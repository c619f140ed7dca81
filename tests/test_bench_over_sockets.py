"""Drivers on the virtual bench through pyvisa and real sockets: in the standard's words, and in words of their own."""

import math
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from bench_for_tests import Desk, desk, override, plan_text

from darkedge.analysis.bench import BiasSource
from darkedge.analysis.errors import BenchFileError, InputError, LinkError, RatingError, RefusedByInstrument
from darkedge.instruments.bench_check import check_bench, who_answers
from darkedge.instruments.dialect import BIAS, GENERATOR
from darkedge.instruments.live_bench import LiveBench
from darkedge.instruments.oscilloscope import Window
from darkedge.instruments.session import Setting
from darkedge.instruments.virtual.lots import Fault, PartKind
from darkedge.instruments.visa import VisaTransport, list_resources, open_library

WORDS = ("scpi-1999", "own")


@pytest.fixture(params=WORDS)
def table(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Desk]:
    with desk(tmp_path, words=request.param) as found:
        yield found


@pytest.fixture
def plain(tmp_path: Path) -> Iterator[Desk]:
    with desk(tmp_path) as found:
        yield found


def test_every_instrument_says_who_it_is(table: Desk) -> None:
    answers = who_answers(table.bench(), folder=table.folder)
    assert [a.identity.split(",")[1] for a in answers] == [
        "virtual bias supply", "virtual function generator", "virtual oscilloscope",
    ]  # fmt: skip


def test_a_silent_address_is_told_and_the_others_still_answer(plain: Desk) -> None:
    bench = plain.bench()
    bench = replace(bench, bias=replace(bench.bias, address="TCPIP::127.0.0.1::1::SOCKET"))
    answers = {a.role: a for a in who_answers(bench, folder=plain.folder)}
    assert answers["bias"].identity == ""
    assert "cannot be reached" in answers["bias"].trouble
    assert answers["oscilloscope"].identity


def test_every_operation_of_the_bench_is_checked_and_none_is_at_fault(table: Desk) -> None:
    lines = check_bench(table.bench(), folder=table.folder)
    assert [line for line in lines if line.state == "fault"] == []
    tried = {line.operation for line in lines}
    assert {
        "channel_range",
        "read_waveform",
        "trigger_slope",
        "high",
        "load_impedance",
        "level",
        "read_current",
    } <= tried
    absent = {line.operation for line in lines if line.state == "absent"}
    assert absent == (
        {"bandwidth_limit", "shape", "load_impedance", "read_current"} if table.virtual.words == "own" else set()
    )
    assert table.everything_is_off()


def test_a_range_the_scope_lacks_is_read_back_as_the_one_it_took(table: Desk) -> None:
    with table.live(table.plan(plan_text())) as live:
        live.oscilloscope.prepare(["output"])
        assert live.oscilloscope.show("output", Window(range_V=0.033)).range_V == pytest.approx(0.04)
        state = live.oscilloscope.state("output")
    assert state.volts_per_code == pytest.approx(0.04 / 256)
    assert state.input_ohm == 1e6
    assert state.coupling == "DC"
    assert state.bandwidth_limited is False


def test_a_range_finer_than_the_scope_has_becomes_one_that_it_has(table: Desk) -> None:
    with table.live(table.plan(plan_text())) as live:
        live.oscilloscope.prepare(["output"])
        assert 0.008 <= live.oscilloscope.show("output", Window(range_V=1e-3)).range_V <= 0.04
        assert live.oscilloscope.show("output", Window(range_V=100.0)).range_V == pytest.approx(40.0)


def test_both_dialects_bring_the_same_pulse(tmp_path: Path) -> None:
    """16-bit codes by a preamble and plain volts are two ways to say one record; a code of the first is 1/256 of the scope's."""
    seen = {}
    for words in WORDS:
        folder = tmp_path / words
        folder.mkdir()
        with desk(folder, words=words) as found, found.live(found.plan(plan_text())) as live:
            seen[words] = _pulse(live, found)
    (time, one), (other_time, other) = seen["scpi-1999"], seen["own"]
    assert other_time == pytest.approx(time, abs=1e-12)
    assert other == pytest.approx(one, abs=0.02 / 65536)


def _pulse(live: LiveBench, table: Desk) -> tuple[np.ndarray, np.ndarray]:
    plan = table.plan(plan_text())
    live.bias.prepare()
    live.bias.go_to(5.0)
    live.generator.pulse(element=1, current_A=5e-3, width_s=1e-6, period_s=1e-5, plan=plan)
    scope = live.oscilloscope
    scope.prepare(["drive", "output"])
    scope.show("drive", Window(range_V=4.0, offset_V=1.3))
    scope.show("output", Window(range_V=0.016, offset_V=0.004))
    scope.trigger("drive", level_V=1.3)
    scope.time(start_s=-2e-7, span_s=2.4e-6, points=1200, averages=4)
    traces = scope.acquire(["drive", "output"], period_s=1e-5)
    assert traces.averages == 4
    assert traces.volts["drive"].max() == pytest.approx(2.6, abs=0.05)  # 1.5 V and 5 mA through 220 ohm
    assert np.ptp(traces.volts["output"]) == pytest.approx(9.0e-3, rel=0.1)  # 0.0018 of 5 mA in 998 ohm
    return traces.time_s(), traces.volts["output"]


def test_levels_are_right_into_whichever_load_the_generator_states_them(table: Desk) -> None:
    """Common practice, no source: a level stated into 50 ohm is half of the open one."""
    plan = table.plan(plan_text())
    with table.live(plan) as live:
        real = live.generator.pulse(element=1, current_A=5e-3, width_s=1e-6, period_s=1e-5, plan=plan)
        assert table.virtual.world.emitter_A(0) == pytest.approx(5e-3, rel=2e-3)
        assert real.emitter_current_A == pytest.approx(5e-3, rel=2e-3)


def test_a_generator_that_does_not_take_its_load_impedance_is_refused(plain: Desk) -> None:
    generator = plain.virtual.instruments["function_generator"]
    override(generator, "OUTPut#:IMPedance", lambda _call: None)  # takes the command and does nothing
    plan = plain.plan(plan_text())
    with plain.live(plan) as live:
        generator.world.drives[0].load_ohm = 75.0
        with pytest.raises(RefusedByInstrument, match="wrong by up to a factor of two"):
            live.generator.pulse(element=1, current_A=5e-3, width_s=1e-6, period_s=1e-5, plan=plan)
    assert plain.virtual.world.extremes.emitter_current_A == 0.0


def test_a_current_beyond_its_rating_is_never_driven(plain: Desk) -> None:
    plan = plain.plan(plan_text())
    with plain.live(plan) as live:
        with pytest.raises(RatingError, match=r"peak current of the emitter would be beyond its rating; found 0\.12 A"):
            live.generator.pulse(element=1, current_A=0.12, width_s=1e-6, period_s=1e-4, plan=plan)
        with pytest.raises(RatingError, match="mean current"):
            live.generator.pulse(element=1, current_A=0.05, width_s=5e-5, period_s=1e-4, plan=plan)
        low = replace(plan, drive=replace(plan.drive, low_V=-1.0))
        with pytest.raises(RatingError, match="reverse voltage of the emitter"):
            live.generator.pulse(element=1, current_A=5e-3, width_s=1e-6, period_s=1e-4, plan=low)
    assert plain.virtual.world.extremes.emitter_current_A == 0.0
    assert plain.virtual.world.extremes.emitter_reverse_V == 0.0


def test_a_level_that_reads_back_beyond_the_rating_never_reaches_the_emitter(plain: Desk) -> None:
    """Ratings hold for what is read back, not only for what is set."""
    plan = plain.plan(plan_text())
    plan = replace(plan, ratings=replace(plan.ratings, emitter_peak_current_A=6e-3))
    world = plain.virtual.world
    generator = plain.virtual.instruments["function_generator"]
    with plain.live(plan) as live:

        def doubled(call: object) -> None:
            world.drives[0].high_V = 2 * float(call.only())

        override(generator, "[SOURce#:]VOLTage:HIGH", doubled)
        override(generator, "[SOURce#:]VOLTage:HIGH?", lambda _call: f"{world.drives[0].high_V}")
        with pytest.raises(RatingError, match="peak current"):
            live.generator.pulse(element=1, current_A=5e-3, width_s=1e-6, period_s=1e-5, plan=plan)
    assert world.extremes.emitter_current_A == 0.0


def test_the_bias_is_ramped_no_faster_than_the_bench_file_says(plain: Desk) -> None:
    with plain.live(plain.plan(plan_text())) as live:
        live.bias.prepare()
        begun = plain.time.elapsed_s
        live.bias.go_to(12.0)
        assert plain.time.elapsed_s - begun >= 12.0 / 20.0
        levels = [
            float(text.split()[1]) for role, text in plain.heard if role == "bias" and text.startswith("SOUR:VOLT ")
        ]
        assert max(np.diff(levels)) <= 1.0 + 1e-9
        assert plain.virtual.world.bias_V == 12.0


def test_a_bias_beyond_its_rating_is_never_set(plain: Desk) -> None:
    with plain.live(plain.plan(plan_text())) as live:
        live.bias.prepare()
        with pytest.raises(
            RatingError, match=r"the bias asked for is beyond its rating; found 40 V; wanted at most 32 V"
        ):
            live.bias.go_to(40.0)
    assert plain.virtual.world.extremes.reverse_bias_V == 0.0


def test_a_rail_that_reads_beyond_the_rating_ends_the_run_with_everything_off(plain: Desk) -> None:
    supply = plain.virtual.instruments["bias"]
    override(
        supply, "MEASure[:SCALar]:VOLTage[:DC]?", lambda _call: "35.0" if plain.virtual.world.bias_V > 4 else "0.0"
    )
    with pytest.raises(RatingError, match=r"the bias read back is beyond its rating; found 35 V"):
        plain.run(plain.plan(plan_text()))
    assert plain.everything_is_off()
    assert plain.left_on == []


@pytest.mark.parametrize("words", WORDS)
def test_a_reversed_device_is_noticed_as_compliance(tmp_path: Path, words: str) -> None:
    with desk(tmp_path, fault=Fault.REVERSED, words=words) as found:
        bench = found.bench()
        bench = replace(bench, bias=replace(bench.bias, compliance_A=1e-3))
        said = "the supply is in compliance" if words == "scpi-1999" else "the rail does not reach its bias"
        with pytest.raises(RefusedByInstrument, match=said):
            found.run(found.plan(plan_text()), bench=bench)
        assert found.everything_is_off()


def test_the_bias_can_come_from_the_generators_second_channel(plain: Desk) -> None:
    plain.virtual.world.bias_from = "generator"
    bench = plain.bench()
    bias = replace(bench.bias, source=BiasSource.GENERATOR, address=None, dialect=None, channel=2)
    with plain.live(plain.plan(plan_text()), replace(bench, bias=bias)) as live:
        live.bias.prepare()
        assert live.bias.go_to(5.0) == pytest.approx(5.0)
        assert plain.virtual.world.bias_V == pytest.approx(5.0)
    assert plain.everything_is_off()


def test_a_generator_without_a_dc_level_cannot_give_the_bias(tmp_path: Path) -> None:
    with desk(tmp_path, words="own") as found:
        bench = found.bench()
        bias = replace(bench.bias, source=BiasSource.GENERATOR, address=None, dialect=None, channel=2)
        with (
            found.live(found.plan(plan_text()), replace(bench, bias=bias)) as live,
            pytest.raises(InputError, match="its dialect has no dc_level"),
        ):
            live.bias.prepare()


def test_a_rail_set_by_hand_is_read_off_a_meter_and_never_claimed(plain: Desk) -> None:
    world = plain.virtual.world
    world.bias_from = "hand"
    bench = plain.bench()
    by_hand = replace(bench, bias=replace(bench.bias, source=BiasSource.BY_HAND, address=None, dialect=None))
    ran = plain.run(plain.plan(plan_text(biases="[5, 12]")), bench=by_hand)
    assert [row.bias_V for row in ran.swept.rows] == [5.0, 12.0]
    assert plain.left_on == ["the rail is set by hand: switch it off, and check it with a meter"]


def test_a_rail_that_is_not_at_its_bias_is_not_measured(plain: Desk) -> None:
    plain.virtual.world.bias_from = "hand"
    bench = plain.bench()
    by_hand = replace(bench, bias=replace(bench.bias, source=BiasSource.BY_HAND, address=None, dialect=None))
    plain.hands = type("Wrong", (type(plain.hands),), {"set_rail": lambda _self, bias: 0.0 if bias == 0 else bias + 1})(
        plain.virtual.world
    )
    with pytest.raises(InputError, match=r"the rail is not at the bias of the point; found 6 V; wanted 5 V"):
        plain.run(plain.plan(plan_text()), bench=by_hand)


def test_a_dual_part_needs_a_channel_for_each_output_and_each_emitter(tmp_path: Path) -> None:
    text = (
        plan_text()
        .replace("[ratings]", "elements = 2\n[ratings]")
        .replace("load_change", "element = [1, 2]\nload_change")
    )
    with desk(tmp_path) as found:
        with pytest.raises(BenchFileError, match=r"oscilloscope\.channels: the device has 2 elements, and output2"):
            found.run(found.plan(text))
        bench = found.bench()
        wired = replace(
            bench, oscilloscope=replace(bench.oscilloscope, channels={"drive": 1, "output": 2, "output2": 3})
        )
        with pytest.raises(BenchFileError, match=r"emitter_channels: an element has no generator channel"):
            found.run(found.plan(text), bench=wired)


def test_a_probe_that_the_scope_does_not_know_is_multiplied_here(tmp_path: Path) -> None:
    with desk(tmp_path) as found:
        bench = found.bench()
        shipped = (Path(__file__).resolve().parents[1] / "instruments/dialects/scpi-1999.toml").read_text("utf-8")
        line = next(text for text in shipped.splitlines() if text.startswith("probe_ratio"))
        (tmp_path / "no_probe.toml").write_text(
            shipped.replace(line, 'probe_ratio = { absent = "set it at the scope" }')
        )
        scope = replace(bench.oscilloscope, dialect="no_probe.toml", probe_ratio={"output": 10.0})
        with found.live(found.plan(plan_text()), replace(bench, oscilloscope=scope)) as live:
            live.oscilloscope.prepare(["output"])
            assert live.oscilloscope.show("output", Window(range_V=4.0)).range_V == pytest.approx(4.0)
            assert found.virtual.instruments["oscilloscope"].channels[1].range_V == pytest.approx(0.4)
            assert live.oscilloscope.state("output").probe_ratio == 10.0


def test_no_trigger_is_told_and_does_not_hang(plain: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("darkedge.instruments.oscilloscope.ANSWER_MARGIN_s", 0.3)
    with plain.live(plain.plan(plan_text())) as live:
        scope = live.oscilloscope
        scope.prepare(["drive", "output"])
        scope.show("drive", Window(range_V=4.0))
        scope.trigger("drive", level_V=1.0)
        scope.time(start_s=0.0, span_s=1e-6, points=500, averages=1)
        with pytest.raises(LinkError, match="no trigger, or no answer while waiting for one"):
            scope.acquire(["drive"], period_s=1e-5)
        assert live.oscilloscope.session.identify()  # the link was opened afresh


def test_an_address_where_nobody_listens_is_told() -> None:
    with pytest.raises(LinkError, match=r"TCPIP::127\.0\.0\.1::1::SOCKET: the instrument cannot be reached"):
        VisaTransport("TCPIP::127.0.0.1::1::SOCKET")


@pytest.mark.parametrize("address", ["rubbish", "TCPIP::not-an-address::SOCKET", ""])
def test_an_address_that_is_none_is_told(address: str) -> None:
    with pytest.raises(LinkError, match="cannot be reached"):
        VisaTransport(address)


def test_a_visa_library_that_is_not_here_is_told() -> None:
    with pytest.raises(BenchFileError, match="no such VISA library here"):
        open_library("/no/such/library.so")


def test_listing_finds_no_raw_sockets_and_does_not_fail(plain: Desk) -> None:
    assert plain.virtual.addresses()["bias"] not in list_resources("@py").resources


def test_a_short_answer_after_settings_names_operation_and_instrument(plain: Desk) -> None:
    supply = plain.virtual.instruments["bias"]
    override(supply, "[SOURce:]CURRent?", lambda _call: "lots")
    with (
        plain.live(plain.plan(plan_text())) as live,
        pytest.raises(LinkError, match=r"bias, bias\.compliance: the answer is no number"),
    ):
        live.bias.prepare()


def test_the_worth_of_a_setting_that_cannot_be_read_is_not_invented(tmp_path: Path) -> None:
    with desk(tmp_path, words="own") as found, found.live(found.plan(plan_text())) as live:
        (shape,) = live.generator.session.settle([Setting(what=GENERATOR["shape"], value="pulse")])
        assert (shape.value, shape.read_back) == (None, False)
        assert live.sessions["bias"].read_number(BIAS["read_current"]) is None
        assert math.isclose(live.generator.stated_ratio(1), 0.5)


@pytest.mark.parametrize("kind", list(PartKind))
def test_every_kind_of_part_answers_a_pulse(tmp_path: Path, kind: PartKind) -> None:
    with desk(tmp_path, kind=kind) as found:
        world = found.virtual.world
        world.rail.level_V, world.rail.on = 5.0, True
        drive = world.drives[0]
        drive.high_V, drive.width_s, drive.period_s, drive.on = 2.1, 1e-4, 1e-3, True
        moved = np.ptp(world.output_signal(0, np.linspace(-1e-5, 2e-4, 3000)))
        assert moved > (3.0 if "photo" not in kind and kind != "pin" else 5e-3)
