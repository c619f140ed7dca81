"""Conditions in a table, and how header, file name and table are joined."""

import json
import re
from pathlib import Path

import numpy as np
import pytest

from darkedge.analysis.captures import Capture, Conditions, Kind, Waveform
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.captures import write_capture
from darkedge.analysis.files.conditions import read_conditions
from darkedge.analysis.files.gather import find_captures
from darkedge.analysis.files.load import Refusal, load_captures
from darkedge.analysis.files.names import NamePattern

FOREIGN = "TIME,CH1\n" + "".join(f"{i * 1e-9:.9f},{0.1 + i / 1e4:.5f}\n" for i in range(50))
TABLE = "capture,device,bias_V,load_ohm,kind\na.csv,SP-2-03,500 mV,1 kohm,\nb.csv,SP-2-03,5,1000,dark\n"


def table(tmp_path: Path, text: str, name: str = "table.csv") -> Path:
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return path


def known(path: Path, capture: str) -> dict[str, object]:
    rows = read_conditions(path).for_capture(capture)
    assert len(rows) == 1
    return dict(rows[0].conditions.known())


class TestReading:
    EXPECTED = {"device": "SP-2-03", "bias_V": 0.5, "load_ohm": 1000.0}  # noqa: RUF012 - read only

    def test_quantities_carry_units_and_an_empty_cell_is_not_known(self, tmp_path: Path) -> None:
        path = table(tmp_path, TABLE)
        assert known(path, "a.csv") == self.EXPECTED
        assert known(path, "b.csv") == {"device": "SP-2-03", "bias_V": 5.0, "load_ohm": 1000.0, "kind": Kind.DARK}

    @pytest.mark.parametrize("separator", [";", "\t"])
    def test_other_separators(self, tmp_path: Path, separator: str) -> None:
        assert known(table(tmp_path, TABLE.replace(",", separator)), "a.csv") == self.EXPECTED

    def test_mark_line_ends_blank_lines_and_trailing_commas_do_not_matter(self, tmp_path: Path) -> None:
        text = "\ufeff\r\n" + TABLE.replace("\n", ",\r\n").replace("a.csv", '"a.csv"') + "\r\n,,,,,\r\n"
        assert known(table(tmp_path, text), "a.csv") == self.EXPECTED

    def test_json(self, tmp_path: Path) -> None:
        rows = [{"capture": "a.csv", "device": "SP-2-03", "bias_V": "500 mV", "load_ohm": 1000, "kind": None}]
        assert known(table(tmp_path, json.dumps(rows), "table.json"), "a.csv") == self.EXPECTED

    @pytest.mark.parametrize("key", ["run/a.csv", "run/a", "a.csv", "a", "./run/a.csv", "run\\a.csv"])
    def test_a_capture_goes_by_path_or_name_with_or_without_extension(self, tmp_path: Path, key: str) -> None:
        assert known(table(tmp_path, f"capture,bias_V\n{key},5\n"), "run/a.csv") == {"bias_V": 5.0}

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            ("capture,bias\na.csv,5\n", "table.csv, column bias: not a condition that darkedge knows; found bias"),
            ("capture,bias_v\na.csv,5\n", "Did you mean bias_V?"),
            ("file,bias_V\na.csv,5\n", "table.csv: the table has no column capture; found file, bias_V"),
            ("capture,bias_V\na.csv,5\nb.csv,5\na.csv,6\n", "table.csv, line 4: a.csv is there twice; found also"),
            ("capture,bias_V\n,5\n", "table.csv, line 2: nothing stands under capture"),
            ("capture,bias_V\na.csv,5\nb.csv,5 mA\n", "table.csv, line 3, column bias_V: bias_V has the wrong unit; found '5 mA'"),
            ("capture;bias_V\na.csv;2,5\n", "table.csv, line 2, column bias_V: bias_V has a decimal comma; found '2,5'"),
            ("capture,kind\na.csv,light\n", "line 2, column kind: kind is not one of its words; found 'light'"),
            ("capture,bias_V\na.csv,-5\n", "line 2, column bias_V: bias_V is negative"),
            ("capture,bias_V,bias_V\na.csv,5,6\n", "table.csv: two columns have the same name; found bias_V"),
            ("capture,bias_V\na.csv,5,6\n", "table.csv: not a table"),
            ("capture,bias_V\n", "table.csv: the table of conditions has no rows"),
            ("", "table.csv: not a table"),
        ],
    )  # fmt: skip
    def test_what_is_wrong_is_said_with_row_and_column(self, tmp_path: Path, text: str, message: str) -> None:
        with pytest.raises(InputError, match=re.escape(message)):
            read_conditions(table(tmp_path, text))

    @pytest.mark.parametrize(
        ("text", "message"),
        [
            ("{", "table.json: not JSON"),
            ("{}", "table.json: not a table; wanted a JSON array of objects"),
            ("[1]", "table.json: not a table"),
            ('[{"capture": "a", "bias_V": [5]}]', "table.json, row 1, column bias_V: not a single value; found [5]"),
            ('[{"capture": "a", "bias_V": true}]', "row 1, column bias_V: not a single value; found True"),
            ('[{"capture": "a", "bias": 5}]', "table.json, row 1, column bias: not a condition"),
        ],
    )
    def test_json_that_is_no_table(self, tmp_path: Path, text: str, message: str) -> None:
        with pytest.raises(InputError, match=re.escape(message)):
            read_conditions(table(tmp_path, text, "table.json"))

    def test_a_missing_table(self, tmp_path: Path) -> None:
        with pytest.raises(InputError, match=r"none\.csv: the table of conditions cannot be read; found No such file"):
            read_conditions(tmp_path / "none.csv")


def own(folder: Path, name: str, conditions: Conditions) -> None:
    record = Waveform(signal_V=np.array([0.1, 0.2, 0.3]), dt_s=1e-9)
    write_capture(Capture(name=name, outputs={conditions.element or 1: record}, conditions=conditions), folder / name)


def load(folder: Path, *, names: str | None = None, conditions: str | None = None) -> dict[str, Capture | Refusal]:
    stated = None if conditions is None else read_conditions(table(folder, conditions, "stated.csv"))
    pattern = NamePattern(names) if names else None
    return {x.name: x for x in load_captures(find_captures([folder]), names=pattern, conditions=stated)}


def capture_of(loaded: dict[str, Capture | Refusal], name: str) -> Capture:
    found = loaded[name]
    assert isinstance(found, Capture), found
    return found


def error_of(loaded: dict[str, Capture | Refusal], name: str) -> CaptureError:
    found = loaded[name]
    assert isinstance(found, Refusal), found
    return found.error


class TestJoining:
    def test_header_name_and_table_complete_each_other(self, tmp_path: Path) -> None:
        own(tmp_path, "SP-2-03_5V.csv", Conditions(temperature_degC=23.5, bias_V=5.0))
        loaded = load(tmp_path, names="{device}_{bias_V}V", conditions="capture,load_ohm\nSP-2-03_5V,1000\n")
        assert capture_of(loaded, "SP-2-03_5V.csv").conditions == Conditions(
            device="SP-2-03", bias_V=5.0, load_ohm=1000.0, temperature_degC=23.5
        )

    def test_header_against_file_name(self, tmp_path: Path) -> None:
        own(tmp_path, "a_12V.csv", Conditions(bias_V=5.0))
        error = error_of(load(tmp_path, names="{device}_{bias_V}V"), "a_12V.csv")
        assert str(error) == (
            "a_12V.csv: bias_V is given twice and differs; found 5.0 in the file and 12.0 in the file name. "
            "Correct one of them."
        )

    def test_file_name_against_table(self, tmp_path: Path) -> None:
        (tmp_path / "a_12V.csv").write_text(FOREIGN, encoding="utf-8")
        loaded = load(tmp_path, names="{device}_{bias_V}V", conditions="capture,bias_V\na_12V.csv,5\n")
        message = str(error_of(loaded, "a_12V.csv"))
        assert "12.0 in the file or its name and 5.0 in" in message
        assert "stated.csv, line 2" in message

    def test_the_same_value_twice_is_no_contradiction(self, tmp_path: Path) -> None:
        own(tmp_path, "a_12V.csv", Conditions(bias_V=12.0))
        assert capture_of(load(tmp_path, names="{device}_{bias_V}V"), "a_12V.csv").conditions.bias_V == 12.0

    def test_a_name_that_does_not_match_leaves_conditions_empty_and_says_so(self, tmp_path: Path) -> None:
        (tmp_path / "odd.csv").write_text(FOREIGN, encoding="utf-8")
        capture = capture_of(load(tmp_path, names="{device}_{bias_V}V"), "odd.csv")
        assert capture.conditions == Conditions()
        assert capture.remarks[-1:] == ("conditions_missing",)

    def test_a_capture_that_states_everything_itself_needs_no_matching_name(self, tmp_path: Path) -> None:
        own(tmp_path, "0007_pulse.csv", Conditions(device="SP-2-03", bias_V=5.0, load_ohm=1000.0))
        assert capture_of(load(tmp_path, names="{device}_{bias_V}V"), "0007_pulse.csv").remarks == ()

    def test_nothing_stated_anywhere_is_remarked(self, tmp_path: Path) -> None:
        (tmp_path / "a.csv").write_text(FOREIGN, encoding="utf-8")
        assert capture_of(load(tmp_path), "a.csv").remarks[-1:] == ("conditions_missing",)

    def test_the_element_of_a_lone_output_can_be_stated(self, tmp_path: Path) -> None:
        (tmp_path / "a.csv").write_text(FOREIGN, encoding="utf-8")
        assert list(capture_of(load(tmp_path, conditions="capture,element\na,2\n"), "a.csv").outputs) == [2]

    def test_a_refused_file_stands_beside_the_others(self, tmp_path: Path) -> None:
        own(tmp_path, "a.csv", Conditions(bias_V=5.0))
        (tmp_path / "b.csv").write_bytes(b"\x00\x01\x02" * 100)
        own(tmp_path, "c.csv", Conditions(bias_V=5.0))
        loaded = load(tmp_path)
        assert list(loaded) == ["a.csv", "b.csv", "c.csv"]
        assert "not a text file" in str(error_of(loaded, "b.csv"))

    def test_a_value_in_the_name_that_cannot_be_is_a_refusal(self, tmp_path: Path) -> None:
        (tmp_path / "a_2,5V.csv").write_text(FOREIGN, encoding="utf-8")
        message = str(error_of(load(tmp_path, names="{device}_{bias_V}V"), "a_2,5V.csv"))
        assert message.startswith("a_2,5V.csv, file name, {bias_V}: bias_V has a decimal comma; found '2,5V'")

    def test_a_row_that_means_two_captures_is_refused_before_any_is_read(self, tmp_path: Path) -> None:
        for run in ("one", "two"):
            (tmp_path / run).mkdir()
            own(tmp_path / run, "a.csv", Conditions())
        with pytest.raises(
            InputError,
            match=re.escape("line 2: a means more than one capture; found one/a.csv and two/a.csv. Write the path"),
        ):
            load(tmp_path, conditions="capture,bias_V\na,5\n")
        assert capture_of(load(tmp_path, conditions="capture,bias_V\ntwo/a,5\n"), "two/a.csv").conditions.bias_V == 5.0

    def test_a_table_that_means_none_of_the_captures_is_refused(self, tmp_path: Path) -> None:
        own(tmp_path, "a.csv", Conditions())
        with pytest.raises(
            InputError, match=r"no row means any of the captures; found z under capture; wanted names such as a\.csv"
        ):
            load(tmp_path, conditions="capture,bias_V\nz,5\n")

    def test_two_rows_for_one_capture_may_not_differ(self, tmp_path: Path) -> None:
        own(tmp_path, "a.csv", Conditions())
        message = str(error_of(load(tmp_path, conditions="capture,bias_V\na,5\na.csv,6\n"), "a.csv"))
        assert "bias_V is given twice and differs" in message
        assert "line 2" in message
