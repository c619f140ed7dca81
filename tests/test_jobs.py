"""Several processes give what one gives, in the same order."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date
from pathlib import Path

import pytest

from darkedge.analysis.errors import InputError
from darkedge.analysis.files import intake
from darkedge.analysis.files.intake import take_in

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"
TODAY = date(2026, 3, 3)


@contextmanager
def another_thread() -> Iterator[None]:
    stop = threading.Event()
    thread = threading.Thread(target=stop.wait, daemon=True)
    thread.start()
    yield
    stop.set()
    thread.join()


def test_two_processes_give_the_same_rows_refusals_and_order(tmp_path: Path) -> None:
    for name in ("good.csv", "bad.csv", "also_good.csv", "4.csv", "5.csv"):
        text = (SAMPLES / "photodiode" / "captures" / "0006_pulse.csv").read_text()
        (tmp_path / name).write_text(text if name != "bad.csv" else "not a capture\n")
    with another_thread():  # a copied process is no option then
        found = {jobs: take_in([tmp_path, SAMPLES / "dark_traces"], today=TODAY, jobs=jobs) for jobs in (1, 2)}
    assert found[1].measurements == found[2].measurements
    assert [str(r.error) for r in found[1].refusals] == [str(r.error) for r in found[2].refusals]
    assert len(found[2].refusals) == 1
    assert any("dark_current_A" in row.quantities for row in found[2].measurements)


@pytest.mark.parametrize("alone", [True, False])
def test_a_process_is_copied_only_where_it_has_no_other_thread(alone: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    ways: list[str] = []
    real = intake.multiprocessing.get_context

    def watched(way: str) -> object:
        ways.append(way)
        return real("spawn")

    monkeypatch.setattr(intake.threading, "active_count", lambda: 1 if alone else 2)
    monkeypatch.setattr(intake.multiprocessing, "get_context", watched)
    take_in([SAMPLES / "dark_traces"], today=TODAY, jobs=2)
    assert ways == ["fork" if alone and intake.sys.platform == "linux" else "spawn"]


def test_no_process_at_all_is_refused() -> None:
    with pytest.raises(InputError, match="jobs is not a number of processes; found 0"):
        take_in([SAMPLES / "dark_traces"], today=TODAY, jobs=0)
