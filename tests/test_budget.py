"""The uncertainty budget: every part by name, and together what is stated."""

from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.fixture_file import read_fixture
from darkedge.analysis.waveform.measure import measure_pulse_capture
from darkedge.cli.main import app

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"
CAPTURES = [
    SAMPLES / "photodiode" / "captures" / "0006_pulse.csv",
    SAMPLES / "npn_switch" / "captures" / "0001_pulse.csv",
]
FIXTURE = read_fixture(SAMPLES / "fixture.toml")


@pytest.mark.parametrize("path", CAPTURES, ids=["photodiode", "npn_switch"])
def test_the_parts_put_together_are_the_stated_uncertainty(path: Path) -> None:
    """JCGM 100:2008, 5.1.2: independent parts add in squares."""
    (row,) = measure_pulse_capture(read_capture(path), fixture=FIXTURE, keep_parts=True)
    with_parts = {name: e for name, e in row.quantities.items() if e.parts is not None}
    assert {"rise_time_s", "t_plh_s", "amplitude_V", "width_out_s", "low_V"} <= with_parts.keys()
    for name, estimate in with_parts.items():
        assert estimate.parts is not None
        assert np.sqrt(np.sum(np.square(list(estimate.parts.values())))) == pytest.approx(estimate.u, rel=1e-9), name


def test_what_the_fixture_states_stands_in_the_budget() -> None:
    (row,) = measure_pulse_capture(read_capture(CAPTURES[0]), fixture=FIXTURE, keep_parts=True)
    delay, amplitude = row.quantities["t_plh_s"].parts, row.quantities["amplitude_V"].parts
    assert delay is not None
    assert amplitude is not None
    assert delay["channel skew"] == pytest.approx(FIXTURE.u_channel_skew_s)
    assert amplitude["gain of the scope"] == pytest.approx(FIXTURE.u_gain_ratio * (row.value("amplitude_V") or 0))


def test_parts_are_kept_only_where_asked_for_and_change_nothing() -> None:
    capture = read_capture(CAPTURES[0])
    plain, kept = measure_pulse_capture(capture), measure_pulse_capture(capture, keep_parts=True)
    assert plain == kept
    assert all(estimate.parts is None for estimate in plain[0].quantities.values())


def test_the_command_prints_the_budget_largest_part_first() -> None:
    result = CliRunner().invoke(
        app, ["measure", str(CAPTURES[0]), "--fixture", str(SAMPLES / "fixture.toml"), "--budget"]
    )
    assert result.exit_code == 0, result.output
    lines = [line for line in result.stdout.splitlines() if line.strip()]
    (first,) = [k for k, line in enumerate(lines) if line.strip().startswith("tPLH")]
    assert "noise and sampling" in lines[first]
    assert "channel skew" in lines[first + 1]
