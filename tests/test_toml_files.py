"""Plan, bench, fixture, limit and lot files: read whole, every fault named with its address and the mend."""

from collections.abc import Callable
from datetime import date
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from darkedge.analysis.bench import BiasSource
from darkedge.analysis.captures import DeviceKind
from darkedge.analysis.decide.results import Rule
from darkedge.analysis.errors import BenchFileError, FixtureError, InputError, LimitError, PlanError
from darkedge.analysis.files.bench_file import read_bench
from darkedge.analysis.files.fixture_file import read_fixture
from darkedge.analysis.files.limits_file import find_limits, read_limits
from darkedge.analysis.files.lot_file import read_lot
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.fixture import CapturedEdge

PLAN = """format = "darkedge-plan 1"
title = "Pick-up detector, first look"
[device]
kind = "pin"
elements = 1
output_connection = "load_to_ground"
[ratings]
reverse_bias_V = 32
emitter_peak_current_A = "100 mA"
emitter_mean_current_A = "20 mA"
emitter_reverse_V = 5
[emitter]
kind = "led"
wavelength_m = "850 nm"
series_ohm = 220
forward_V = 1.5
reference = "voltage"
[axes]
load_ohm = ["1 kohm", "10 kohm"]
load_change = "ask"
element = [1]
bias_V = { from = 1, to = 30, points = 8, spacing = "log" }
emitter_current_A = ["5 mA"]
pulse_width_s = ["1 us", "10 us", "100 us"]
repeats = 1
[drive]
duty = 0.10
low_V = 0
[dark]
load_ohm = "1 Mohm"
bias_V = [1, 5, 12, 30]
settle_s = 2
duration_s = "200 ms"
[fixture]
file = "fixture.toml"
"""
BENCH = """format = "darkedge-bench 1"
visa = "@py"
[oscilloscope]
address = "TCPIP::192.0.2.10::5025::SOCKET"
dialect = "scpi-1999"
[oscilloscope.channels]
drive = 1
output = 2
[oscilloscope.probe_ratio]
output = 10
[function_generator]
address = "TCPIP::192.0.2.11::5025::SOCKET"
dialect = "scpi-1999"
emitter_channels = [1]
[bias]
source = "supply"
address = "TCPIP::192.0.2.12::5025::SOCKET"
dialect = "scpi-1999"
source_ohm = 0
decoupling_F = "100 nF"
compliance_A = "1 mA"
"""
FIXTURE = """format = "darkedge-fixture 1"
measured = 2026-03-02
valid_days = 90
scope_input_ohm = "1 Mohm"
u_scope_input_ohm = "10 kohm"
channel_skew_s = "0.4 ns"
u_gain_ratio = 0.01
u_timebase_ratio = 2e-6
offset_V = "0.3 mV"
[[load]]
nominal_ohm = "1 kohm"
actual_ohm = 998.7
u_actual_ohm = 0.5
stray_F = "14.2 pF"
u_stray_F = "0.4 pF"
[response]
rise_capture = "reference_rise.csv"
fall_capture = "reference_fall.csv"
emitter_current_A = "5 mA"
"""
LIMITS = """format = "darkedge-limits 1"
[decision]
rule = "guarded"
confidence = 0.95
[[limit]]
quantity = "rise_time_s"
upper = "120 ns"
when = { bias_V = 12, load_ohm = "1 kohm" }
tolerance_ratio = 0.02
[[limit]]
quantity = "dark_current_A"
upper = "5 nA"
when = { bias_V = 12 }
"""
LOT = """format = "darkedge-lot 1"
lot = "K-0417"
part = "SP-2 pick-up"
received = 2026-03-01
size = 200
"""


def edge_time(path: Path, quantity: str) -> CapturedEdge:
    return CapturedEdge(time_s=10e-9 if quantity == "rise_time_s" else 15e-9, u_time_s=1e-10, share=0.3, u_share=0.01)


READERS: dict[str, tuple[str, Callable[[Path], object], type[InputError]]] = {
    "plan": (PLAN, read_plan, PlanError),
    "bench": (BENCH, read_bench, BenchFileError),
    "fixture": (FIXTURE, lambda p: read_fixture(p, edge_time=edge_time), FixtureError),
    "limits": (LIMITS, read_limits, LimitError),
    "lot": (LOT, read_lot, InputError),
}


def read(kind: str, folder: Path, *changes: tuple[str, str]) -> object:
    text, reader, _ = READERS[kind]
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    path = folder / f"{kind}.toml"
    path.write_text(text, encoding="utf-8")
    return reader(path)


def test_a_plan_is_read_with_its_axes_expanded(tmp_path: Path) -> None:
    plan = read("plan", tmp_path)
    assert plan.device.kind is DeviceKind.PIN
    assert plan.axes.bias_V == (1.0, 1.626, 2.643, 4.296, 6.983, 11.35, 18.45, 30.0)
    assert plan.axes.load_ohm == (1e3, 1e4)
    assert plan.drive.period_for(1e-5) == pytest.approx(1e-4)


def test_points_come_with_the_load_outermost_so_that_hand_work_is_least(tmp_path: Path) -> None:
    points = list(read("plan", tmp_path).points())
    assert len(points) == 48
    assert [p.load_ohm for p in points] == [1e3] * 24 + [1e4] * 24
    assert [p.pulse_width_s for p in points[:3]] == [1e-6, 1e-5, 1e-4]


def test_a_bench_a_fixture_limits_and_a_lot_are_read(tmp_path: Path) -> None:
    bench, fixture = read("bench", tmp_path), read("fixture", tmp_path)
    limits, lot = read("limits", tmp_path), read("lot", tmp_path)
    assert (bench.bias.source, bench.bias.decoupling_F) == (BiasSource.SUPPLY, 100e-9)
    assert fixture.load(1000.0).stray_F == pytest.approx(14.2e-12)
    assert (fixture.response.rise_time_s, fixture.response.fall_time_s) == (10e-9, 15e-9)
    assert fixture.expired(date(2026, 6, 1))
    assert not fixture.expired(date(2026, 5, 31))
    assert (limits.rule, limits.limits[0].upper) == (Rule.GUARDED, pytest.approx(120e-9))
    assert limits.limits[0].when == {"bias_V": 12.0, "load_ohm": 1e3}
    assert lot.lot == "K-0417"


@pytest.mark.parametrize(
    ("kind", "change", "words"),
    [
        ("plan", ("reverse_bias_V = 32", "reverse_bais_V = 32"), "ratings.reverse_bais_V: unknown key; did you mean reverse_bias_V"),
        ("plan", ("bias_V = [1, 5, 12, 30]", "bias_V = [1, -5]"), "magnitude; found -5. Write 5"),
        ("plan", ("reverse_bias_V = 32", "reverse_bias_V = 20"), "axes.bias_V\\[7\\]: beyond ratings.reverse_bias_V; found 30 V"),
        ("plan", ("reverse_bias_V = 32", ""), "ratings.reverse_bias_V: missing"),
        ("plan", ('"5 mA"', '"500 mA"'), "emitter_peak_current_A; found 0.5 A"),
        ("plan", ("low_V = 0", "low_V = -9"), "drive.low_V: beyond ratings.emitter_reverse_V"),
        ("plan", ("duty = 0.10", "duty = 0.5\nperiod_s = 1"), "either duty or period_s"),
        ("plan", ("duty = 0.10", "period_s = 1e-5"), "not longer than the longest pulse"),
        ("plan", ("element = [1]", "element = [2]"), "no such element; found 2"),
        ("plan", ('load_change = "ask"', 'load_change = "fixed"'), '"ask" or "switched"'),
        ("plan", ("series_ohm = 220", 'series_ohm = "5 mA"'), "series_ohm has the wrong unit; found '5 mA'"),
        ("plan", ('kind = "pin"', 'kind = "pinn"'), "device.kind.*found 'pinn'"),
        ("plan", ("darkedge-plan 1", "darkedge-plan 2"), 'wanted format = "darkedge-plan 1"'),
        ("plan", ("[drive]", "[drive"), "not valid TOML.*line"),
        ("plan", ("points = 8", "points = 0"), "points is not a number of points"),
        ("plan", ('wavelength_m = "850 nm"', ""), "emitter.wavelength_m: missing"),
        ("bench", ("drive = 1", "driver = 1"), "not a signal; found 'driver'"),
        ("bench", ("output = 2\n", "output = 1\n"), "scope channel of its own"),
        ("bench", ('address = "TCPIP::192.0.2.12::5025::SOCKET"', ""), "supply without an address"),
        ("bench", ('source = "supply"', 'source = "battery"'), "bias.source"),
        ("fixture", ("14.2 pF", "14,2 pF"), "decimal comma"),
        ("fixture", ("actual_ohm = 998.7", "actual_ohm = 9987"), "differ by more than 20 %"),
        ("fixture", ('fall_capture = "reference_fall.csv"', ""), "either fall_capture or fall_time_s"),
        ("limits", ("rise_time_s", "rise_tme_s"), "not a quantity.*wanted rise_time_s"),
        ("limits", ("bias_V = 12, ", "bais_V = 12, "), "not a condition; found 'bais_V'"),
        ("limits", ("120 ns", "120 nA"), "wrong unit; found '120 nA'"),
        ("limits", ("confidence = 0.95", "confidence = 95"), "not between 0.5 and 1"),
        ("limits", ('upper = "120 ns"', 'upper = "120 ns"\nlower = "1 us"'), "lower is not below upper"),
        ("limits", ('upper = "120 ns"\n', ""), "without a bound"),
        ("lot", ("size = 200", "size = 0"), "not a number of devices"),
    ],
)  # fmt: skip
def test_a_fault_is_named_with_its_address(tmp_path: Path, kind: str, change: tuple[str, str], words: str) -> None:
    with pytest.raises(READERS[kind][2], match=words):
        read(kind, tmp_path, change)


def test_all_faults_are_told_at_once(tmp_path: Path) -> None:
    with pytest.raises(PlanError, match="3 faults") as raised:
        read(
            "plan", tmp_path, ("reverse_bias_V = 32", "reverse_bais_V = 32"), ("series_ohm = 220", 'series_ohm = "x"'),
            ("repeats = 1", "repeats = 0"),
        )  # fmt: skip
    for word in ("reverse_bais_V", "series_ohm", "repeats"):
        assert word in str(raised.value)


def test_more_than_60_volt_needs_an_explicit_word(tmp_path: Path) -> None:
    """60 V DC is the touchable limit in ordinary dry use (IEC 60598-1:2008, 8.2.3)."""
    high = (("reverse_bias_V = 32", "reverse_bias_V = 100"), ("to = 30", "to = 80"))
    with pytest.raises(PlanError, match="bias_above_60_V = true"):
        read("plan", tmp_path, *high)
    allowed = read("plan", tmp_path, *high, ("emitter_reverse_V = 5", "emitter_reverse_V = 5\nbias_above_60_V = true"))
    assert max(allowed.axes.bias_V) == 80


def test_a_missing_or_binary_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(LimitError, match="no such file"):
        read_limits(tmp_path / "none.toml")
    (tmp_path / "binary.toml").write_bytes(b"\x89PNG\xff\xfe")
    with pytest.raises(LimitError, match="cannot be read"):
        read_limits(tmp_path / "binary.toml")


def test_the_limits_beside_the_captures_are_found(tmp_path: Path) -> None:
    (tmp_path / "run").mkdir()
    assert find_limits([tmp_path / "run"]) is None
    (tmp_path / "limits.toml").write_text(LIMITS, encoding="utf-8")
    assert find_limits([tmp_path / "run"]) == tmp_path / "limits.toml"


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data(), kind=st.sampled_from(sorted(READERS)))
def test_a_damaged_file_gives_our_error_or_a_value_and_nothing_else(
    tmp_path: Path, data: st.DataObject, kind: str
) -> None:
    text, reader, error = READERS[kind]
    place = data.draw(st.integers(0, len(text) - 1))
    length = data.draw(st.integers(0, 12))
    patch = data.draw(st.text(st.characters(codec="utf-8"), max_size=6))
    path = tmp_path / "damaged.toml"
    path.write_text(text[:place] + patch + text[place + length :], encoding="utf-8", newline="")
    try:
        reader(path)
    except error as found:
        assert "damaged.toml" in str(found)  # noqa: PT017 - other errors must escape
