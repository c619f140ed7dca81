"""Captures packed into one file are measured as they are in their folders."""

from collections.abc import Iterator
from datetime import date
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from darkedge.analysis.captures import Capture, Conditions, DeviceKind, Kind, TimedRecord, Waveform
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.archive import (
    archive_fixtures,
    archive_names,
    is_archive,
    read_archived,
    write_archive,
)
from darkedge.analysis.files.intake import pack, take_in
from darkedge.analysis.files.tables import write_table
from darkedge.analysis.fixture import Fixture, Load, Response
from darkedge.analysis.measurement import Measurement

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"
TODAY = date(2026, 3, 3)


def capture(name: str = "a.csv", *, uneven: bool = False, size: int = 50) -> Capture:
    rng = np.random.default_rng(5)
    signal = rng.normal(size=size).astype(np.float32).astype(float)

    def record(values: np.ndarray) -> Waveform | TimedRecord:
        if uneven:
            return TimedRecord(signal_V=values, time_s=np.cumsum(0.5 + np.arange(size) % 3))
        return Waveform(signal_V=values, dt_s=1e-9, t0_s=-2e-8)

    return Capture(
        name=name,
        outputs={1: record(signal), 3: record(2 * signal)},
        drive=record(signal[::-1]),
        conditions=Conditions(kind=Kind.PULSE, device="SP", bias_V=5.0, averages=16, device_kind=DeviceKind.PIN),
        remarks=("uneven_time",) if uneven else (),
    )


FIXTURE = Fixture(
    measured=date(2026, 3, 2), valid_days=90.0, offset_V=3e-4, loads=(Load(nominal_ohm=1e3, actual_ohm=998.7, stray_F=1e-11),),
    response=Response(rise_time_s=9e-9, fall_time_s=15e-9, emitter_current_A=5e-3),
)  # fmt: skip


@pytest.mark.parametrize("uneven", [False, True])
def test_a_capture_comes_back_as_it_went_in(tmp_path: Path, uneven: bool) -> None:
    """32-bit samples are kept exactly; times and conditions in full."""
    before = capture(uneven=uneven)
    write_archive([(before, FIXTURE)], tmp_path / "x.parquet")
    after = read_archived(tmp_path / "x.parquet", 0)
    assert (after.name, after.conditions, after.remarks) == (before.name, before.conditions, before.remarks)
    assert after.outputs.keys() == before.outputs.keys()
    for one, other in [(after.drive, before.drive), *[(after.outputs[k], before.outputs[k]) for k in after.outputs]]:
        assert one is not None
        assert other is not None
        assert np.array_equal(one.signal_V, other.signal_V)
        assert np.array_equal(one.time_s, other.time_s)
    assert archive_fixtures(tmp_path / "x.parquet") == [FIXTURE]


def test_many_captures_stand_in_their_order(tmp_path: Path) -> None:
    path = tmp_path / "many.parquet"
    count = write_archive(((capture(f"{k}.csv", size=10), None) for k in range(150)), path)
    assert count == 150
    assert archive_names(path) == [f"{k}.csv" for k in range(150)]
    assert [read_archived(path, k).name for k in (0, 63, 64, 149)] == ["0.csv", "63.csv", "64.csv", "149.csv"]
    assert archive_fixtures(path) == [None] * 150


def without_names(rows: tuple[Measurement, ...]) -> Iterator[object]:
    for row in rows:
        yield row.element, row.conditions, row.flags, row.n_pulses, row.estimator


@pytest.mark.parametrize("run", ["photodiode", "dark_traces", "dual_optocoupler"])
def test_an_archive_is_measured_as_its_folder_is(tmp_path: Path, run: str) -> None:
    """Conditions, fixture and flags are the same; values to what 32-bit samples leave, a hundredth of their uncertainty."""
    packed = pack([SAMPLES / run], tmp_path / "run.parquet")
    folder, archive = take_in([SAMPLES / run], today=TODAY), take_in([tmp_path / "run.parquet"], today=TODAY)
    assert packed.count == len(folder.sources)
    assert list(without_names(archive.measurements)) == list(without_names(folder.measurements))
    for one, other in zip(archive.measurements, folder.measurements, strict=True):
        assert one.capture == other.capture
        assert one.quantities.keys() == other.quantities.keys()
        for name, estimate in other.quantities.items():
            if estimate.value is not None and estimate.u:
                assert one.value(name) == pytest.approx(estimate.value, abs=0.02 * estimate.u, rel=1e-6), name
    assert archive.fixture_for(archive.measurements[0].capture) == folder.fixture_for(folder.measurements[0].capture)


def test_archives_are_told_from_tables_by_what_is_in_them(tmp_path: Path) -> None:
    rows = take_in([SAMPLES / "dark_traces"], today=TODAY).measurements
    write_table(rows, tmp_path / "table.parquet")
    pack([SAMPLES / "dark_traces"], tmp_path / "archive.parquet")
    assert not is_archive(tmp_path / "table.parquet")
    assert is_archive(tmp_path / "archive.parquet")
    assert [m.quantities for m in take_in([tmp_path / "table.parquet"], today=TODAY).measurements] == [
        m.quantities for m in rows
    ]


def test_what_was_refused_is_not_packed_and_told(tmp_path: Path) -> None:
    (tmp_path / "bad.csv").write_text("nonsense\n")
    (tmp_path / "good.csv").write_text((SAMPLES / "photodiode" / "captures" / "0006_pulse.csv").read_text())
    packed = pack([tmp_path], tmp_path / "x.parquet")
    assert packed.count == 1
    assert [r.name for r in packed.refusals] == ["bad.csv"]


def test_nothing_to_pack_and_other_endings_are_refused_and_leave_nothing_behind(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no capture to pack"):
        write_archive([], tmp_path / "x.parquet")
    with pytest.raises(InputError, match=r"not a form of archive; found \.zip; wanted \.parquet"):
        write_archive([(capture(), None)], tmp_path / "x.zip")
    with pytest.raises(InputError, match="the archive cannot be written"):
        write_archive([(capture(), None)], tmp_path / "no" / "such" / "x.parquet")
    assert list(tmp_path.iterdir()) == []


def test_a_spoiled_archive_is_told(tmp_path: Path) -> None:
    path = tmp_path / "x.parquet"
    write_archive([(capture(), None)], path)
    with pytest.raises(CaptureError, match=r"x\.parquet, row 8: the row is not that of a capture"):
        read_archived(path, 7)
    table = pq.read_table(path)
    pq.write_table(table.replace_schema_metadata({b"darkedge": b"darkedge-archive 9"}), path)
    with pytest.raises(InputError, match=r"another version of the archive; found 'darkedge-archive 9'"):
        archive_names(path)
    path.write_bytes(b"PAR1 and then nothing")
    assert not is_archive(path)
    with pytest.raises(InputError):
        take_in([path], today=TODAY)


def test_an_archive_whose_row_is_no_capture_gives_a_refused_row(tmp_path: Path) -> None:
    path = tmp_path / "x.parquet"
    write_archive([(capture(), None), (capture("b.csv"), None)], path)
    table = pq.read_table(path)
    broken = table.set_column(table.schema.get_field_index("dt_s"), "dt_s", [[-1.0, 1e-9]])
    pq.write_table(broken.replace_schema_metadata(table.schema.metadata), path)
    found = take_in([path], today=TODAY)
    assert [r.name for r in found.refusals] == ["a.csv"]
    assert found.exit_status == 2
