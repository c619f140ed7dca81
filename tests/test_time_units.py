"""The unit of time: stated in the file, by the user, by a sample interval beside it, or flagged where it was assumed."""

from pathlib import Path

import pytest

from darkedge.analysis.captures import Capture
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.roles import ChannelRoles


def read(
    folder: Path, *, step: str, heading: str = "time,a,b", above: str = "", channels: str | None = None, power: str = ""
) -> Capture:
    """A file whose times are multiples of `step`, written as they stand; `power` makes exponents of them."""
    digits = len(step.partition(".")[2])
    rows = [f"{k * float(step):.{digits}f}{power},{k % 7},{0.1 * (k % 5):.3f}" for k in range(60)]
    path = folder / "trace.csv"
    path.write_text(above + heading + "\n" + "\n".join(rows) + "\n")
    return read_capture(path, channels=None if channels is None else ChannelRoles.parse(channels))


def step_of(capture: Capture) -> float:
    return capture.outputs[1].dt_s


def test_a_unit_in_the_heading_decides(tmp_path: Path) -> None:
    found = read(tmp_path, step="0.00001", heading="time (ms),a,b")
    assert step_of(found) == pytest.approx(1e-8)
    assert "time_unit_assumed" not in found.remarks


def test_the_user_decides_where_the_file_does_not(tmp_path: Path) -> None:
    """Steps of 0.25 without a unit could be anything; the user knows."""
    with pytest.raises(CaptureError, match=r"may not be seconds(.|\n)*--channels time=us"):
        read(tmp_path, step="0.25")
    assert step_of(read(tmp_path, step="0.25", channels="time=ms")) == pytest.approx(0.25e-3)
    found = read(tmp_path, step="0.00025", channels="time=s,drive=a,output=b")
    assert step_of(found) == pytest.approx(0.25e-3)
    assert found.drive is not None


def test_file_and_user_must_not_differ(tmp_path: Path) -> None:
    with pytest.raises(CaptureError, match=r"given twice and differs; found ms in the file"):
        read(tmp_path, step="0.01", heading="time (ms),a,b", channels="time=us")


@pytest.mark.parametrize(("interval", "step", "seconds"), [("10 ns", "0.00001", 1e-8), ("2 us", "0.000002", 2e-6)])
def test_a_sample_interval_beside_the_times_tells_their_unit(
    tmp_path: Path, interval: str, step: str, seconds: float
) -> None:
    found = read(tmp_path, step=step, above=f"Sample Interval,{interval}\n")
    assert step_of(found) == pytest.approx(seconds)
    assert "time_unit_assumed" not in found.remarks


def test_plain_decimals_without_a_unit_are_read_as_seconds_and_flagged(tmp_path: Path) -> None:
    found = read(tmp_path, step="0.00001")
    assert step_of(found) == pytest.approx(1e-5)
    assert "time_unit_assumed" in found.remarks
    assert any("no unit stated, taken as seconds" in words for words in found.read_as)


def test_exponents_are_how_seconds_are_written(tmp_path: Path) -> None:
    found = read(tmp_path, step="4.0", power="e-9")
    assert step_of(found) == pytest.approx(4e-9)
    assert "time_unit_assumed" not in found.remarks


@pytest.mark.parametrize("text", ["time=V", "time=", "time=parsec", "time=s,time=s", "drive=1,time=s"])
def test_what_is_no_unit_of_time_is_refused(text: str) -> None:
    with pytest.raises(InputError):
        ChannelRoles.parse(text)


def test_how_a_file_was_understood_is_said(tmp_path: Path) -> None:
    found = read(tmp_path, step="0.01", heading="time (us),drive (V),output (mV)")
    assert found.read_as == (
        "numbers from line 2 on, 60 rows, separated by ',', decimal point",
        "time: column 1 (time), from 0 s in steps of 1e-08 s",
        "drive: column 2 (drive), in V",
        "output of element 1: column 3 (output), in mV",
    )
