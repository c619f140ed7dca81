"""An existing Dask scheduler does the same work: same rows, same order, same refusals."""

import re
import warnings
from collections.abc import Iterator
from datetime import date
from pathlib import Path

import pytest

from darkedge.analysis.errors import InputError
from darkedge.analysis.files.intake import take_in

distributed = pytest.importorskip("distributed")

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"
TODAY = date(2026, 3, 3)


@pytest.fixture(scope="module")
def scheduler() -> Iterator[str]:
    """A real scheduler with two workers in processes of their own."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        with distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None, host="127.0.0.1"
        ) as cluster:
            yield cluster.scheduler_address


@pytest.mark.filterwarnings("ignore")
def test_two_workers_give_what_one_process_gives(scheduler: str, tmp_path: Path) -> None:
    (tmp_path / "bad.csv").write_text("not a capture\n")
    paths = [SAMPLES / "photodiode", SAMPLES / "dark_traces", tmp_path]
    alone = take_in(paths, today=TODAY)
    together = take_in(paths, today=TODAY, cluster=scheduler)
    assert together.measurements == alone.measurements
    assert [r.name for r in together.refusals] == [r.name for r in alone.refusals] == ["bad.csv"]


@pytest.mark.filterwarnings("ignore")
def test_an_address_where_no_scheduler_answers_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("darkedge.analysis.files.cluster.CONNECT_S", 1)
    with pytest.raises(InputError, match=re.escape("no scheduler answers; found tcp://127.0.0.1:9")):
        take_in([SAMPLES / "dark_traces"], today=TODAY, cluster="tcp://127.0.0.1:9")


def test_an_address_that_is_none_is_refused() -> None:
    with pytest.raises(InputError, match="no scheduler answers"):
        take_in([SAMPLES / "dark_traces"], today=TODAY, cluster="somewhere://")
