"""The measurement table: out and back the same, in every form; a wrong cell named by row and column."""

import json
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from darkedge.analysis.captures import Conditions, DeviceKind, Kind, Reference
from darkedge.analysis.columns import ALL_QUANTITIES, OPTIONAL_QUANTITIES, table_columns
from darkedge.analysis.errors import InputError
from darkedge.analysis.files.tables import (
    is_table,
    measurements_to_frame,
    read_table,
    table_csv,
    table_json,
    write_table,
)
from darkedge.analysis.flags import REGISTRY
from darkedge.analysis.measurement import Estimate, Measurement

PULSE = Measurement(
    capture="run/captures/0001_pulse.csv",
    element=1,
    conditions=Conditions(run="run", kind=Kind.PULSE, bias_V=12.0, load_ohm=1e3, device_kind=DeviceKind.PIN),
    quantities={"rise_time_s": Estimate(value=1.23456789012345e-7, u=1e-10), "dark_current_A": Estimate(hi95=1e-9)},
    flags=("few_samples_on_edge", "slow_tail"),
    levels="histogram",
    estimator="shape",
    n_pulses=3,
)
REFUSED = Measurement(capture="bad.csv", element=None, conditions=Conditions(), flags=("refused",))

numbers = st.floats(allow_nan=False, allow_infinity=False, width=64)
positive = st.floats(0, 1e6, allow_nan=False)
words = st.text(
    st.characters(whitelist_categories=("L", "N"), whitelist_characters=" _-./()é,;\"'"), min_size=1, max_size=12
).filter(lambda t: t == t.strip() and bool(t))
estimates = st.one_of(
    st.builds(lambda v, u: Estimate(value=v, u=u), numbers, positive), st.builds(lambda h: Estimate(hi95=h), numbers)
)
measurements = st.builds(
    Measurement,
    capture=words,
    element=st.integers(1, 9),
    conditions=st.builds(
        Conditions,
        run=st.none() | words,
        kind=st.none() | st.sampled_from(Kind),
        reference=st.none() | st.sampled_from(Reference),
        device=st.none() | words,
        bias_V=st.none() | positive,
        driven_element=st.none() | st.integers(1, 9),
    ),
    quantities=st.dictionaries(st.sampled_from(ALL_QUANTITIES), estimates, max_size=4),
    flags=st.lists(st.sampled_from(sorted(REGISTRY)), max_size=3).map(tuple),
    n_pulses=st.none() | st.integers(0, 10**6),
)


@pytest.mark.parametrize("form", ["csv", "json", "parquet"])
def test_a_saved_table_is_told_by_its_columns_and_read_back_the_same(tmp_path: Path, form: str) -> None:
    path = tmp_path / f"table.{form}"
    write_table([PULSE, REFUSED], path)
    assert is_table(path)
    assert read_table(path) == [PULSE, REFUSED]


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(rows=st.lists(measurements, min_size=1, max_size=4), form=st.sampled_from(["csv", "json", "parquet"]))
def test_any_table_is_read_back_the_same(tmp_path: Path, rows: list[Measurement], form: str) -> None:
    path = tmp_path / f"any.{form}"
    write_table(rows, path)
    assert read_table(path) == rows


def test_columns_stand_in_their_order_and_optional_ones_only_where_used() -> None:
    columns = list(measurements_to_frame([PULSE]).columns)
    assert columns == [c for c in table_columns() if not any(q in c for q in OPTIONAL_QUANTITIES)]


def test_json_has_null_and_a_list_of_flags_and_csv_has_empty_cells() -> None:
    first, second = json.loads(table_json([PULSE, REFUSED]))
    assert (second["rise_time_s"], first["flags"], second["element"]) == (
        None,
        ["few_samples_on_edge", "slow_tail"],
        None,
    )
    assert "nan" not in table_csv([PULSE, REFUSED]).lower()
    assert "few_samples_on_edge;slow_tail" in table_csv([PULSE])


def test_a_capture_is_not_a_table(tmp_path: Path) -> None:
    path = tmp_path / "capture.csv"
    path.write_text("time_s,drive_V,output_V\n0,1,2\n", encoding="utf-8")
    assert not is_table(path)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("1.23456789012345e-07", "fast", "row 1, rise_time_s: not a number; found 'fast'"),
        ("few_samples_on_edge", "few_sample", "unknown flag; found 'few_sample'"),
        (",pulse,", ",pulses,", "kind: unknown word; found 'pulses'"),
        ("run,capture", "run,capture,colour", "cannot be read|unknown column; found 'colour'"),
        ("run/captures/0001_pulse.csv", "", "a row without a capture"),
        (",1000.0,", ",-1000.0,", "row 1, load_ohm: not a possible condition; found '-1000.0'"),
    ],
)
def test_a_wrong_cell_is_named(tmp_path: Path, old: str, new: str, words: str) -> None:
    path = tmp_path / "table.csv"
    text = table_csv([PULSE])
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    with pytest.raises(InputError, match=words):
        read_table(path)


def test_another_form_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"not a form of table; found .xlsx; wanted .csv, .json, .parquet"):
        write_table([PULSE], tmp_path / "table.xlsx")
