"""The virtual oscilloscope, generator, supply and switch, over their commands."""

import struct

import numpy as np
import pytest

from darkedge.instruments.virtual.parts import Device, Element, Junction
from darkedge.instruments.virtual.scope import Flaws, Oscilloscope
from darkedge.instruments.virtual.sources import BiasSupply, FunctionGenerator, LoadSwitch
from darkedge.instruments.virtual.wiring import World

JUNCTION = Junction(c_j0_F=100e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=0.004)


class Bench:
    def __init__(self, *, seed: int = 1, flaws: Flaws | None = None) -> None:
        self.world = World(device=Device(kind="photodiode", elements=(Element(junction=JUNCTION),)))
        self.scope = Oscilloscope(self.world, seed=seed, flaws=flaws)
        self.generator = FunctionGenerator(self.world)
        self.supply = BiasSupply(self.world)
        self.generator.carry_out("PULS:WIDT 10 US;PER 100 US;:OUTP:IMP 50;:VOLT:HIGH 1.425;LOW 0;:OUTP ON")
        self.supply.carry_out("VOLT 12;CURR 1 MA;:OUTP ON")
        self.scope.carry_out("SWE:TIME 20 US;POIN 2000;OFFS:TIME -5 US;:TRIG:SOUR INT1;LEV 0.7;SLOP POS")
        self.scope.carry_out("SENS2:VOLT:RANG:PTP 40 MV;OFFS 10 MV;:FORM REAL,32")

    def trace(self, name: str = "CH2") -> np.ndarray:
        assert self.scope.carry_out("INIT;*OPC?") == b"1\n"
        block = self.scope.carry_out(f"TRAC? {name}")
        digits = int(block[1:2])
        payload = block[2 + digits : 2 + digits + int(block[2 : 2 + digits])]
        return np.frombuffer(payload, ">f4").astype(float)


def errors(instrument: object) -> bytes:
    return instrument.carry_out("SYST:ERR?")


@pytest.fixture
def bench() -> Bench:
    return Bench()


def test_the_pulse_stands_where_the_trigger_says_and_is_as_high_as_the_light(bench: Bench) -> None:
    """2 V open, less 1.5 V, through 270 ohm is 5 mA; 0.004 of it in 999 ohm is 20 mV."""
    trace = bench.trace()
    time = -5e-6 + 1e-8 * np.arange(2000)
    lit = trace[(time > 5e-6) & (time < 9.5e-6)].mean() - trace[time < -1e-7].mean()
    current = (2 * 1.425 - 1.5) / 270
    assert lit == pytest.approx(0.004 * current * 999.0, rel=0.02)  # half a code of 40 mV / 256
    assert trace[time < -1e-7].std() < 2e-3


def test_a_level_stated_into_fifty_ohm_doubles_when_stated_into_high_impedance(bench: Bench) -> None:
    """Common practice, no source: the factor of two that kills emitters."""
    into_50 = bench.world.drives[0].open_V(1.0)
    bench.generator.carry_out("OUTP:IMP MAX")
    assert into_50 == pytest.approx(2.0)
    assert bench.world.drives[0].open_V(1.0) == pytest.approx(1.0)


def test_codes_stand_on_the_grid_of_the_range_and_clip_at_its_ends(bench: Bench) -> None:
    trace = bench.trace()
    step = 0.04 / 256
    assert np.allclose((trace - 0.01) / step, np.round((trace - 0.01) / step), atol=1e-3)
    bench.scope.carry_out("SENS2:VOLT:RANG:PTP 8 MV;OFFS 0")
    clipped = bench.trace()
    assert clipped.max() == pytest.approx(0.008 * 127 / 256, rel=1e-6)


def test_a_range_the_hardware_lacks_becomes_the_next_one_and_is_read_back(bench: Bench) -> None:
    bench.scope.carry_out("SENS2:VOLT:RANG:PTP 33 MV")
    assert float(bench.scope.carry_out("SENS2:VOLT:RANG:PTP?")) == pytest.approx(0.04)


def test_averaging_lowers_the_noise_by_the_root_of_the_count(bench: Bench) -> None:
    bench.scope.carry_out("SENS2:VOLT:RANG:PTP 40 MV")
    single = bench.trace()[:400].std()
    bench.scope.carry_out("AVER:COUN 16;STAT ON")
    assert bench.trace()[:400].std() == pytest.approx(single / 4, rel=0.3)  # codes add a little


def test_integer_blocks_come_in_the_order_that_was_asked_for(bench: Bench) -> None:
    """Source: SCPI-1999 Volume 2, FORMat:BORDer: NORMal has the most significant byte first."""
    bench.scope.carry_out("FORM INT,16")
    bench.scope.carry_out("INIT")
    normal = bench.scope.carry_out("TRAC? CH2")
    bench.scope.carry_out("FORM:BORD SWAP")
    swapped = bench.scope.carry_out("TRAC? CH2")
    assert normal[:6] == b"#44000"
    assert struct.unpack(">2000h", normal[6:4006]) == struct.unpack("<2000h", swapped[6:4006])


def test_without_a_trigger_completion_is_never_answered_and_abort_frees_it(bench: Bench) -> None:
    bench.scope.carry_out("TRIG:LEV 9")
    assert bench.scope.carry_out("INIT;*OPC?") == b""
    assert errors(bench.scope) == b'0,"No error"\n'
    assert bench.scope.carry_out("ABOR;*OPC?") == b"1\n"


def test_reading_before_acquiring_is_an_error_not_a_number(bench: Bench) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.10: -230, data corrupt or stale."""
    assert bench.scope.carry_out("TRAC? CH2") == b""
    assert errors(bench.scope).startswith(b"-230")


def test_a_width_beyond_the_period_conflicts(bench: Bench) -> None:
    """Source: SCPI-1999 Volume 2, 21.8.10: -221, settings conflict."""
    bench.generator.carry_out("PULS:WIDT 1 MS")
    assert errors(bench.generator).startswith(b"-221")
    assert float(bench.generator.carry_out("PULS:WIDT?")) == pytest.approx(10e-6)


def test_reset_switches_every_output_off(bench: Bench) -> None:
    bench.generator.carry_out("*RST")
    bench.supply.carry_out("*RST")
    assert bench.generator.carry_out("OUTP?") == b"0\n"
    assert bench.supply.carry_out("OUTP?;:MEAS:VOLT?") == b"0;0\n"


def test_the_world_remembers_the_most_that_the_terminals_saw(bench: Bench) -> None:
    bench.supply.carry_out("VOLT 30")
    bench.supply.carry_out("VOLT 5")
    assert bench.world.extremes.reverse_bias_V == pytest.approx(30)
    assert bench.world.extremes.emitter_current_A == pytest.approx((2.85 - 1.5) / 270)


def test_the_switch_puts_another_load_into_the_socket(bench: Bench) -> None:
    switch = LoadSwitch(bench.world, (1e3, 1e4))
    switch.carry_out("ROUT:CLOS (@2)")
    assert bench.world.wiring.load_ohm == 1e4
    assert switch.carry_out("ROUT:CLOS? (@2);CLOS? (@1)") == b"1;0\n"
    switch.carry_out("ROUT:CLOS (@7)")
    assert errors(switch).startswith(b"-222")


def test_the_same_seed_gives_the_same_record() -> None:
    assert np.array_equal(Bench(seed=5).trace(), Bench(seed=5).trace())
    assert not np.array_equal(Bench(seed=5).trace(), Bench(seed=6).trace())


def test_a_megohm_input_across_a_megohm_resistor_halves_the_dark_reading() -> None:
    """Common practice, no source: everybody's first mistake."""
    bench = Bench(flaws=Flaws(input_bias_A=0.0, zero_error_V=(0, 0, 0, 0), noise_ratio=0.0))
    bench.generator.carry_out("OUTP OFF")
    bench.world.mount(load_ohm=1e6)
    bench.scope.carry_out("TRIG:SOUR IMM;:SWE:TIME 0.2;OFFS:TIME 0;:SENS2:VOLT:RANG:PTP 8 MV;OFFS 0")
    expected = JUNCTION.dark_A(12.0) * 0.5e6
    assert bench.trace().mean() == pytest.approx(expected, abs=8e-3 / 256)  # one code
