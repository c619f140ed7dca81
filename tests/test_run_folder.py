"""The journal as text: what is written is read back, what is not a journal is refused."""

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from darkedge.analysis.captures import Kind
from darkedge.analysis.errors import FixtureError, InputError
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.files.run_folder import COLUMNS, JournalRow, RunFolder, _text, read_journal

NUMBERS = st.floats(1e-12, 1e9)
TEXT = st.text(st.characters(codec="utf-8", exclude_categories=("Cs", "Cc")), max_size=30)
ROWS = st.builds(
    JournalRow,
    point=st.from_regex(r"[0-9]{4}", fullmatch=True),
    capture=st.just("0001_pulse.csv;0001_pulse_on.csv"),
    kind=st.sampled_from(Kind),
    element=st.none() | st.integers(1, 16),
    load_ohm=NUMBERS,
    bias_V=NUMBERS,
    emitter_current_A=st.none() | NUMBERS,
    pulse_width_s=st.none() | NUMBERS,
    repeat=st.integers(1, 99),
    taken_utc=st.just("2026-03-02T09:00:00Z"),
    attempts=st.integers(1, 3),
    range_V=st.none() | NUMBERS,
    remark=TEXT,
)


@given(st.lists(ROWS, max_size=5))
def test_a_journal_is_read_back_as_it_was_written(
    tmp_path_factory: pytest.TempPathFactory, rows: list[JournalRow]
) -> None:
    path = tmp_path_factory.mktemp("journal") / "journal.csv"
    path.write_bytes(_text(rows).encode("utf-8"))
    assert read_journal(path) == rows


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ("0001,a.csv,pulse,1,1,,5,,,1,,1,,,", "line 2: .*load_ohm is missing"),
        ("0001,a.csv,party,1,1,1000,5,,,1,,1,,,", "line 2: .*party"),
        ("0001,a.csv,pulse,1,1,lots,5,,,1,,1,,,", "line 2: .*lots"),
        ("0001", "line 2: .*is missing"),
    ],
)
def test_a_line_that_is_none_of_a_journal_is_named(tmp_path: Path, line: str, words: str) -> None:
    (tmp_path / "journal.csv").write_text(",".join(COLUMNS) + "\n" + line + "\n")
    with pytest.raises(InputError, match=words):
        read_journal(tmp_path / "journal.csv")


def test_a_journal_that_is_not_there_is_told(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="the journal cannot be read"):
        read_journal(tmp_path / "journal.csv")


@pytest.mark.parametrize("name", ["../edge.csv", "/edge.csv", "missing.csv"])
def test_a_reference_capture_that_cannot_go_with_the_run_is_refused(tmp_path: Path, name: str) -> None:
    from bench_for_tests import plan_text

    (tmp_path / "plan.toml").write_text(plan_text() + '[fixture]\nfile = "fixture.toml"\n')
    (tmp_path / "fixture.toml").write_text(
        f'format = "darkedge-fixture 1"\n[response]\nrise_capture = "{name}"\nfall_time_s = "9 ns"\n'
    )
    with pytest.raises(FixtureError, match=r"a reference capture cannot go with the run"):
        RunFolder.create(tmp_path / "run", read_plan(tmp_path / "plan.toml"), {})
    assert not (tmp_path / "run").exists()
