"""Which files are captures, what they are called, and in which order they come."""

import re
from pathlib import Path

import pytest

from darkedge.analysis.errors import InputError
from darkedge.analysis.files.gather import find_captures

CAPTURE = "TIME,CH1\n0,1\n"


def plant(root: Path, *names: str, text: str = CAPTURE) -> None:
    for name in names:
        path = root / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")


def names(*paths: Path) -> list[str]:
    return [source.name for source in find_captures(paths)]


def test_a_file_stands_for_itself_whatever_it_is_called(tmp_path: Path) -> None:
    plant(tmp_path, "odd.xyz")
    assert names(tmp_path / "odd.xyz") == ["odd.xyz"]


def test_a_folder_is_searched_through_all_its_folders(tmp_path: Path) -> None:
    plant(tmp_path, "a.csv", "b.CSV", "c.txt", "d.dat", "e.csv.gz", "deep/er/f.csv", "g", "SP-2_1.5V", "h i'(1) µ.csv")
    assert names(tmp_path) == [
        "a.csv", "b.CSV", "c.txt", "d.dat", "e.csv.gz", "g", "h i'(1) µ.csv", "SP-2_1.5V", "deep/er/f.csv",
    ]  # fmt: skip


def test_what_is_no_capture_is_left_out(tmp_path: Path) -> None:
    plant(tmp_path, "a.csv")
    plant(tmp_path, "plan.toml", "bench.json", "journal.csv", "README", "README.txt", "readme.md", "LICENSE", "x.png",
          ".hidden.csv", ".git/b.csv", "report.html", "t.parquet", ".a.csv.0a1b.part", "Makefile")  # fmt: skip
    plant(tmp_path, "measured.csv", text="run,capture,kind,device\n")
    plant(tmp_path, "stated.csv", text='\ufeff"capture";"bias_V"\n')
    assert names(tmp_path) == ["a.csv"]


def test_a_run_gives_its_captures_and_nothing_else(tmp_path: Path) -> None:
    plant(tmp_path, "plan.toml", "bench.json", "journal.csv", "captures/0001_pulse.csv", "captures/0002_dark.csv",
          "spare/x.csv", "y.csv")  # fmt: skip
    assert names(tmp_path) == ["captures/0001_pulse.csv", "captures/0002_dark.csv"]
    assert {source.run_folder for source in find_captures([tmp_path])} == {tmp_path}


def test_a_lot_gives_the_captures_of_each_run(tmp_path: Path) -> None:
    plant(tmp_path, "lot.toml", "SP-2-01/captures/0001_pulse.csv", "SP-2-02/captures/0001_pulse.csv")
    sources = find_captures([tmp_path])
    assert [s.name for s in sources] == ["SP-2-01/captures/0001_pulse.csv", "SP-2-02/captures/0001_pulse.csv"]
    assert [s.run_folder for s in sources] == [tmp_path / "SP-2-01", tmp_path / "SP-2-02"]


def test_a_capture_of_a_run_knows_its_run_however_it_was_named(tmp_path: Path) -> None:
    plant(tmp_path, "run/captures/0001_pulse.csv", "loose.csv")
    captures = tmp_path / "run" / "captures"
    for path in (captures, captures / "0001_pulse.csv"):
        assert [s.run_folder for s in find_captures([path])] == [tmp_path / "run"]
    assert find_captures([tmp_path / "loose.csv"])[0].run_folder is None


def test_names_are_ordered_as_people_count(tmp_path: Path) -> None:
    plant(tmp_path, "p10.csv", "p2.csv", "p1.csv", "P3.csv")
    assert names(tmp_path) == ["p1.csv", "p2.csv", "P3.csv", "p10.csv"]


def test_the_order_is_that_of_the_arguments(tmp_path: Path) -> None:
    plant(tmp_path, "b.csv", "a.csv")
    assert names(tmp_path / "b.csv", tmp_path / "a.csv") == ["b.csv", "a.csv"]


def test_a_file_found_twice_is_listed_once(tmp_path: Path) -> None:
    plant(tmp_path, "a.csv")
    assert names(tmp_path, tmp_path / "a.csv", tmp_path) == ["a.csv"]


def test_names_that_would_be_alike_carry_their_folders(tmp_path: Path) -> None:
    plant(
        tmp_path, "one/captures/0001.csv", "two/captures/0001.csv", "three/captures/0002.csv", "x/one/captures/0001.csv"
    )
    assert names(tmp_path / "one", tmp_path / "two", tmp_path / "three") == [
        "one/captures/0001.csv", "two/captures/0001.csv", "captures/0002.csv",
    ]  # fmt: skip
    assert names(tmp_path / "one", tmp_path / "x" / "one") == [
        f"{tmp_path.name}/one/captures/0001.csv", "x/one/captures/0001.csv",
    ]  # fmt: skip
    assert names(tmp_path / "one/captures/0001.csv", tmp_path / "two/captures/0001.csv") == [
        "one/captures/0001.csv", "two/captures/0001.csv",
    ]  # fmt: skip


def test_a_path_that_is_not_there(tmp_path: Path) -> None:
    message = f"{tmp_path / 'none'}: no such file or folder. Check the path"
    with pytest.raises(InputError, match=re.escape(message)):
        find_captures([tmp_path / "none"])


def test_a_folder_without_captures(tmp_path: Path) -> None:
    plant(tmp_path, "README.md")
    with pytest.raises(InputError, match=re.escape(f"{tmp_path}: no captures in this folder; wanted files such as")):
        find_captures([tmp_path])
