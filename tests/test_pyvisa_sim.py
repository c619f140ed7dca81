"""An instrument that nobody here wrote: pyvisa-sim, spoken to through a dialect file, by the same session."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from bench_for_tests import desk

from darkedge.analysis.errors import LinkError, RatingError, RefusedByInstrument
from darkedge.instruments.bench_check import check_bench, who_answers
from darkedge.instruments.bias_source import SupplyBias
from darkedge.instruments.dialect import BIAS
from darkedge.instruments.dialect_file import read_dialect
from darkedge.instruments.session import ScpiSession, Setting
from darkedge.instruments.visa import VisaTransport, list_resources

DEVICES = """
spec: "1.1"
devices:
  supply:
    eom:
      TCPIP SOCKET:
        q: "\\n"
        r: "\\n"
      GPIB INSTR:
        q: "\\n"
        r: "\\n"
    error:
      status_register:
        - q: "*ESR?"
          command_error: 32
          query_error: 4
      error_queue:
        - q: ":SYST:ERR?"
          default: '0,No Error'
          command_error: '-100,Command Error'
          query_error: '-400,Query Error'
    dialogues:
      - q: "*IDN?"
        r: "made up,simulated supply,0,0"
      - q: "*RST"
      - q: "*CLS"
      - q: ":MEAS:CURR?"
        r: "1.0E-9"
    properties:
      voltage:
        default: 0.0
        getter:
          q: ":VOLT?"
          r: "{:.3f}"
        setter:
          q: ":VOLT {}"
        specs:
          min: 0
          max: 40
          type: float
      current:
        default: 0.1
        getter:
          q: ":CURR?"
          r: "{:.4f}"
        setter:
          q: ":CURR {}"
        specs:
          min: 0
          max: 0.5
          type: float
      output:
        default: 0
        getter:
          q: ":OUTP?"
          r: "{:d}"
        setter:
          q: ":OUTP {}"
        specs:
          valid: [0, 1]
          type: int
resources:
  TCPIP::192.0.2.5::5025::SOCKET:
    device: supply
  GPIB0::8::INSTR:
    device: supply
"""
DIALECT = """format = "darkedge-dialect 1"
name = "simulated-supply"
[common]
identify = { get = "*IDN?" }
reset = { set = "*RST" }
clear = { set = "*CLS" }
next_error = { get = ":SYST:ERR?", none = "0" }
[bias]
level = { set = ":VOLT {value}", get = ":VOLT?" }
compliance = { set = ":CURR {value}", get = ":CURR?" }
output = { set = ":OUTP {value}", get = ":OUTP?", words = { off = "0", on = "1" } }
read_voltage = { absent = "it has no meter" }
read_current = { get = ":MEAS:CURR?" }
"""
ADDRESSES = ("TCPIP::192.0.2.5::5025::SOCKET", "GPIB0::8::INSTR")


@pytest.fixture
def library(tmp_path: Path) -> str:
    pytest.importorskip("pyvisa_sim")
    (tmp_path / "devices.yaml").write_text(DEVICES)
    (tmp_path / "simulated.toml").write_text(DIALECT)
    return f"{tmp_path / 'devices.yaml'}@sim"


@pytest.fixture(params=ADDRESSES)
def session(request: pytest.FixtureRequest, library: str, tmp_path: Path) -> Iterator[ScpiSession]:
    transport = VisaTransport(request.param, visa=library)
    yield ScpiSession("bias", transport, read_dialect("simulated.toml", beside=tmp_path))
    transport.close()


def test_its_resources_are_listed(library: str) -> None:
    assert set(list_resources(library).resources) == {"TCPIP0::192.0.2.5::5025::SOCKET", "GPIB0::8::INSTR"}


def test_it_says_who_it_is_and_settings_are_read_back(session: ScpiSession) -> None:
    assert session.identify() == "made up,simulated supply,0,0"
    session.reset()
    level, compliance = session.settle(
        [Setting(what=BIAS["level"], value=12.5), Setting(what=BIAS["compliance"], value=0.01)]
    )
    assert (level.value, compliance.value) == (12.5, 0.01)
    assert session.read_number(BIAS["read_current"]) == 1e-9
    assert session.read(BIAS["read_voltage"]) is None


def test_a_level_that_it_does_not_take_is_refused_in_its_own_words(session: ScpiSession) -> None:
    with pytest.raises(RefusedByInstrument, match=r"-100,Command Error(.|\n)*:VOLT 90"):
        session.settle([Setting(what=BIAS["level"], value=90.0)])


def test_it_can_be_the_bias_of_a_bench(session: ScpiSession, tmp_path: Path) -> None:
    with desk(tmp_path) as found:
        waited: list[float] = []
        bias = SupplyBias(session, found.bench().bias, rating_V=32.0, wait=waited.append)
        bias.prepare()
        assert bias.go_to(12.0) == 12.0
        assert session.read(BIAS["output"]) == "on"
        with pytest.raises(RatingError):
            bias.go_to(33.0)
        bias.discharge()
        bias.off()
        assert session.read_number(BIAS["level"]) == 0.0
        assert session.read(BIAS["output"]) == "off"


def test_a_bench_of_it_and_of_nobody_is_told_apart(library: str, tmp_path: Path) -> None:
    with desk(tmp_path) as found:
        bench = found.bench()
    bias = replace(bench.bias, address=ADDRESSES[1], dialect="simulated.toml")
    bench = replace(bench, visa=library, bias=bias)
    answers = {a.role: a for a in who_answers(bench, folder=tmp_path)}
    assert answers["bias"].identity == "made up,simulated supply,0,0"
    assert answers["oscilloscope"].identity == ""
    lines = check_bench(bench, folder=tmp_path)
    assert {line.operation: line.state for line in lines if line.role == "bias"} == {
        "identify": "ok", "output": "ok", "level": "ok", "compliance": "ok", "read_voltage": "absent", "read_current": "ok",
    }  # fmt: skip
    assert {line.state for line in lines if line.role == "oscilloscope"} == {"fault"}


def test_an_answer_that_never_comes_is_a_time_out(session: ScpiSession) -> None:
    with pytest.raises(LinkError, match=r"no answer in time|the link failed|gone"):
        session.transport.query(":UNKNOWN?", limit_s=0.2)
