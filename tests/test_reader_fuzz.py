"""Damaged files: never anything but a capture or a refusal, and never a sample that was not in the file."""

import random
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from darkedge.analysis.captures import Capture, Conditions, Kind, Record, Waveform
from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.numbers import Body, Writing, read_at_once, read_by_line
from darkedge.analysis.files.own_capture import print_capture
from darkedge.analysis.files.roles import ChannelRoles

N = 60
RNG = np.random.default_rng(11)
TIME_S = -2e-8 + 1e-9 * np.arange(N)
DRIVE_V = np.round(3.3 * ((TIME_S > 0) & (TIME_S < 2e-8)) + RNG.normal(0, 0.01, N), 4)
OUTPUT_V = np.round(0.4 / (1 + np.exp(-TIME_S / 3e-9)) + RNG.normal(0, 2e-3, N), 5)
ROWS = list(zip(TIME_S.tolist(), DRIVE_V.tolist(), OUTPUT_V.tolist(), strict=True))


def rows(row: Callable[[float, float, float], str]) -> str:
    return "".join(row(*values) + "\n" for values in ROWS)


def own() -> str:
    drive, output = (Waveform(signal_V=v, dt_s=1e-9, t0_s=-2e-8) for v in (DRIVE_V, OUTPUT_V))
    conditions = Conditions(device="SP-2-03", kind=Kind.PULSE, bias_V=12.0, load_ohm=1000.0, element=1)
    return print_capture(Capture(name="x", drive=drive, outputs={1: output}, conditions=conditions))


def beside() -> str:
    keys = ["Record Length,60", "Sample Interval,1e-9", "Vertical Units,V", "Horizontal Units,s", *["Key,text"] * 8]
    return "".join(f"{keys[i] if i < len(keys) else ','},, {t:.12f}, {o:.5f},\n" for i, (t, _, o) in enumerate(ROWS))


GOOD = {
    "own": own(),
    "plain": "time (s),drive (V),out (V)\n" + rows(lambda t, d, o: f"{t:.3g},{d:.4f},{o:.5f}"),
    "no heading": rows(lambda t, d, o: f"{t:.3e},{d:.4f},{o:.5f}"),
    "two headings": "x-axis,1,3,F1\nsecond,Volt,Volt,Volt\n"
    + rows(lambda t, d, o: f"{t:+.6E},{d:+.6E},{o:+.6E},{d - o:+.6E}"),
    "start and increment": "X,CH1,CH2,Start,Increment,\nSequence,Volt,Volt,-2e-8,1e-9\n"
    + "".join(f"{i},{d:.4f},{o:.5f},\n" for i, (_, d, o) in enumerate(ROWS)),
    "beside": beside(),
    "preamble": "Model,invented\nSample Interval,1e-9\n\nLabel,,\nTIME,CH1,CH2\n"
    + rows(lambda t, d, o: f"{t:.3g},{d:.4f},{o:.5f}"),
    "decimal comma": "03.03.2026;title\nZeit [s];A [V];B [V]\n"
    + rows(lambda t, d, o: f"{t:.9f};{d:.4f};{o:.5f}").replace(".", ","),
    "blanks": rows(lambda t, d, o: f"  {t:.3e}   {d:7.4f}  {o:8.5f}"),
    "tabs": "t   V\n" + rows(lambda t, _d, o: f"{t:.9f}\t{o:.5f}"),
}
SAMPLES = {round(t * 1e9): (d, o, d - o) for t, d, o in ROWS}


def read(folder: Path, data: bytes, channels: ChannelRoles | None = None) -> Capture | None:
    """The capture, or nothing where the file is refused; any other error is the test's failure."""
    path = folder / "x.csv"
    path.write_bytes(data)
    try:
        return read_capture(path, channels=channels)
    except CaptureError:
        return None


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("fuzz")


def flip(data: bytes, rng: random.Random) -> bytes:
    place = rng.randrange(len(data))
    return data[:place] + bytes([rng.randrange(256)]) + data[place + 1 :]


def cut_out(data: bytes, rng: random.Random) -> bytes:
    begin = rng.randrange(len(data))
    return data[:begin] + data[begin + rng.randrange(1, 40) :]


def put_in(data: bytes, rng: random.Random) -> bytes:
    place = rng.randrange(len(data))
    new = rng.choice([b",", b";", b"\t", b" ", b"\n", b"\r", b'"', b"#", b"nan", b"inf", b"e", b"1e999", b"-", b"\x00", b"\xff",
                      b",,,,", b"# bias_V = 5\n", b"9" * 400, "µ".encode(), b"'", b"1_0", b"0x1f"])  # fmt: skip
    return data[:place] + new + data[place:]


def swap_separators(data: bytes, rng: random.Random) -> bytes:
    old, new = rng.sample([b",", b";", b"\t", b" ", b".", b"|", b":"], 2)
    return data.replace(old, new)


def shuffle_columns(data: bytes, rng: random.Random) -> bytes:
    lines = data.split(b"\n")
    begin = rng.randrange(len(lines))
    order = rng.sample(range(3), 3)
    for place in range(begin, len(lines)):
        cells = lines[place].split(b",")
        if len(cells) == 3:
            lines[place] = b",".join(cells[k] for k in order)
    return b"\n".join(lines)


def drop_lines(data: bytes, rng: random.Random) -> bytes:
    lines = data.split(b"\n")
    begin = rng.randrange(len(lines))
    del lines[begin : begin + rng.choice([1, 1, 2, 10])]
    return b"\n".join(lines)


def repeat_lines(data: bytes, rng: random.Random) -> bytes:
    lines = data.split(b"\n")
    begin, count = rng.randrange(len(lines)), rng.choice([1, 2, 20])
    return b"\n".join(lines[: begin + count] + lines[begin:])


def swap_lines(data: bytes, rng: random.Random) -> bytes:
    lines = data.split(b"\n")
    a, b = rng.randrange(len(lines)), rng.randrange(len(lines))
    lines[a], lines[b] = lines[b], lines[a]
    return b"\n".join(lines)


def cut_end(data: bytes, rng: random.Random) -> bytes:
    return data[: rng.randrange(len(data))]


def cut_start(data: bytes, rng: random.Random) -> bytes:
    return data[rng.randrange(len(data)) :]


def join_two(data: bytes, rng: random.Random) -> bytes:
    return data + rng.choice(list(GOOD.values())).encode()


def encode(data: bytes, rng: random.Random) -> bytes:
    text = data.decode("latin-1")
    return text.encode(rng.choice(["utf-16", "utf-16-le", "utf-16-be", "utf-8-sig", "utf-32"]))


WHOLE_LINES = (drop_lines, repeat_lines, swap_lines)
MUTATIONS = (
    *WHOLE_LINES,
    flip,
    cut_out,
    put_in,
    swap_separators,
    shuffle_columns,
    cut_end,
    cut_start,
    join_two,
    encode,
)
CI = settings(
    max_examples=200,
    deadline=None,
    phases=[Phase.generate],
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)


def mutated(name: str, seed: int, mutations: tuple[Callable[[bytes, random.Random], bytes], ...]) -> bytes:
    rng = random.Random(seed)
    data = GOOD[name].encode()
    for _ in range(rng.choice([1, 1, 2, 3])):
        data = rng.choice(mutations)(data, rng) or b" "
    return data


def assert_samples_of_the_file(record: Record) -> None:
    """Every sample stands in the undamaged file, at its time.

    Times are compared to a tenth of the step: a row that is gone is seen as a gap, never closed up.
    """
    for t, v in zip(record.time_s.tolist(), record.signal_V.tolist(), strict=True):
        place = t * 1e9
        assert abs(place - round(place)) < 0.1
        assert any(abs(v - there) < 2e-5 for there in SAMPLES[round(place)])


@pytest.mark.parametrize("name", GOOD)
def test_the_undamaged_files_are_read(folder: Path, name: str) -> None:
    capture = read(folder, GOOD[name].encode())
    assert capture is not None
    assert_samples_of_the_file(capture.outputs[1])
    assert capture.outputs[1].signal_V == pytest.approx(OUTPUT_V, abs=1e-5)  # as printed


@CI
@given(name=st.sampled_from(sorted(GOOD)), seed=st.integers(0, 2**32))
def test_a_damaged_file_is_read_or_refused_and_nothing_else(folder: Path, name: str, seed: int) -> None:
    read(folder, mutated(name, seed, MUTATIONS))


@CI
@given(name=st.sampled_from(sorted(set(GOOD) - {"start and increment"})), seed=st.integers(0, 2**32))
def test_lost_doubled_and_swapped_lines_never_move_a_sample(folder: Path, name: str, seed: int) -> None:
    """What is read stands in the undamaged file, at the time it is read at.

    Left out is the file that counts its samples: with the first row lost it counts from 1, as whole files do too.
    """
    capture = read(folder, mutated(name, seed, WHOLE_LINES))
    if capture is not None:
        for record in (capture.drive, *capture.outputs.values()):
            if record is not None:
                assert_samples_of_the_file(record)


@CI
@given(name=st.sampled_from(sorted(GOOD)), end=st.floats(0.05, 0.999))
def test_a_file_that_ends_too_early_gives_the_samples_before(folder: Path, name: str, end: float) -> None:
    data = GOOD[name].encode()
    capture = read(folder, data[: int(end * len(data))])
    if capture is not None:
        assert_samples_of_the_file(capture.outputs[1])


@CI
@given(data=st.binary(min_size=1, max_size=3000))
def test_arbitrary_bytes(folder: Path, data: bytes) -> None:
    read(folder, data)


@CI
@given(
    data=st.lists(
        st.lists(st.sampled_from(["1", "2.5", "-3e-9", "x", "", "nan", "1,5", "Hz", "time (s)", "V", "0"]), max_size=5),
        max_size=30,
    ),
    separator=st.sampled_from([",", ";", "\t", " ", "  "]),
)
def test_arbitrary_cells(folder: Path, data: list[list[str]], separator: str) -> None:
    read(folder, "\n".join(separator.join(row) for row in data).encode())


CELLS = st.sampled_from(
    ["1", "-2.5", "+3e-9", " 4", "5 ", ".5", "6.", "007", "1e-004", "nan", "inf", "", "x", "1e", "--1", "0x1", "1_0", "1e999",
     "0,5", "5,", ",5", "1,5e-3", "٣", "1.5.", "e5", "1d5", "NaN", "infinity", "1\u00a0", "1e-400", "+", "9" * 400]
)  # fmt: skip
WRITINGS = [(",", "."), (";", "."), ("\t", "."), (" ", "."), (";", ","), ("\t", ","), (" ", ",")]


@CI
@given(data=st.lists(st.lists(CELLS, min_size=1, max_size=4), max_size=6), writing=st.sampled_from(WRITINGS))
def test_the_fast_way_and_the_slow_way_agree(data: list[list[str]], writing: tuple[str, str]) -> None:
    """Where pyarrow takes a body, the definition gives the same numbers."""
    separator, decimal = writing
    text = "".join(separator.join(row) + "\n" for row in data).encode()
    how = Writing(separator=separator, decimal=decimal)
    body = Body(text=text, start=0, first_line=1, writing=how, columns=(0, 2), n_cells=3)
    fast = read_at_once(body)
    if fast is not None:
        assert np.array_equal(fast, read_by_line(body))


@pytest.mark.campaign
def test_campaign_of_damaged_files(folder: Path) -> None:
    """30,000 damaged files; the ways to damage and the files are drawn by a seeded generator."""
    rng = random.Random(2026)
    kept = 0
    for seed in range(30_000):
        name = rng.choice(sorted(GOOD))
        capture = read(folder, mutated(name, seed, MUTATIONS))
        kept += capture is not None
    assert 0.1 < kept / 30_000 < 0.9
