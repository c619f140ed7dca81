"""The virtual function generator, bias supply and load switch: SCPI-1999's source and route commands."""

from __future__ import annotations

from darkedge.instruments.virtual.errors import ScpiError
from darkedge.instruments.virtual.instrument import Call, Range, Reply, ScpiInstrument, read_boolean, read_choice
from darkedge.instruments.virtual.wiring import Drive, Rail, World

_LEVEL = Range(low=-20, high=20, default=0, unit="V", round_to=lambda x: round(x, 3))
_WIDTH = Range(low=20e-9, high=1.0, default=1e-4, unit="S")
_PERIOD = Range(low=100e-9, high=10.0, default=1e-3, unit="S")
_STATED_LOAD = Range(low=1, high=9.9e37, default=50, unit="OHM")
_BIAS = Range(low=0, high=120, default=0, unit="V", round_to=lambda x: round(x * 2000) / 2000)
_COMPLIANCE = Range(low=1e-6, high=0.5, default=0.1, unit="A")


class FunctionGenerator(ScpiInstrument):
    """Two channels of pulses; levels are stated into a load, as on real ones (`OUTPut:IMPedance`)."""

    def __init__(self, world: World) -> None:
        super().__init__(("darkedge", "virtual function generator", "0", "0"))
        self.world = world

        def number(pattern: str, setting: Range, name: str) -> None:
            def put(call: Call) -> Reply:
                self._change(call, name, setting.read(call.only()))
                return None

            self.add(pattern, put)
            self.add(f"{pattern}?", lambda call: setting.answer(getattr(self._drive(call), name), call.parameters))

        number("[SOURce#:]VOLTage[:LEVel][:IMMediate]:HIGH", _LEVEL, "high_V")
        number("[SOURce#:]VOLTage[:LEVel][:IMMediate]:LOW", _LEVEL, "low_V")
        number("[SOURce#:]PULSe:WIDTh", _WIDTH, "width_s")
        number("[SOURce#:]PULSe:PERiod", _PERIOD, "period_s")
        number("OUTPut#:IMPedance", _STATED_LOAD, "load_ohm")
        self.add("OUTPut#[:STATe]", self._set_output)
        self.add("OUTPut#[:STATe]?", lambda call: self._text(call, lambda: str(int(self._drive(call).on))))
        number("[SOURce#:]VOLTage[:LEVel][:IMMediate]:OFFSet", _LEVEL, "dc_V")
        self.add("[SOURce#:]FUNCtion[:SHAPe]", self._set_shape)
        self.add("[SOURce#:]FUNCtion[:SHAPe]?", self._shape)

    def reset(self) -> None:
        """Outputs off, defaults."""
        self.world.drives[:] = [Drive() for _ in self.world.drives]

    def _drive(self, call: Call) -> Drive:
        return self.world.drives[call.channel(len(self.world.drives)) - 1]

    def _change(self, call: Call, name: str, value: float) -> None:
        drive = self._drive(call)
        before = getattr(drive, name)
        setattr(drive, name, value)
        if drive.high_V <= drive.low_V or drive.width_s >= drive.period_s:
            setattr(drive, name, before)
            raise ScpiError(-221, name)
        self.world.note_extremes()

    def _set_output(self, call: Call) -> Reply:
        self._drive(call).on = read_boolean(call.only())
        self.world.note_extremes()
        return None

    def _set_shape(self, call: Call) -> Reply:
        self._drive(call).shape = read_choice(call.only(), ("PULSe", "DC"))
        self.world.note_extremes()
        return None

    def _shape(self, call: Call) -> Reply:
        call.none()
        return self._drive(call).shape


class BiasSupply(ScpiInstrument):
    """One rail with a compliance; measures what it gives."""

    def __init__(self, world: World) -> None:
        super().__init__(("darkedge", "virtual bias supply", "0", "0"))
        self.world = world

        def number(pattern: str, setting: Range, name: str) -> None:
            def put(call: Call) -> Reply:
                setattr(self.world.rail, name, setting.read(call.only()))
                self.world.note_extremes()
                return None

            self.add(pattern, put)
            self.add(f"{pattern}?", lambda call: setting.answer(getattr(self.world.rail, name), call.parameters))

        number("[SOURce:]VOLTage[:LEVel][:IMMediate][:AMPLitude]", _BIAS, "level_V")
        number("[SOURce:]CURRent[:LEVel][:IMMediate][:AMPLitude]", _COMPLIANCE, "compliance_A")
        self.add("OUTPut[:STATe]", self._set_output)
        self.add("OUTPut[:STATe]?", lambda call: self._text(call, lambda: str(int(self.world.rail.on))))
        self.add("MEASure[:SCALar]:VOLTage[:DC]?", lambda call: self._reading(call, self.world.bias_V * 1.0002))
        self.add("MEASure[:SCALar]:CURRent[:DC]?", lambda call: self._reading(call, self.world.rail_current_A()))

    def reset(self) -> None:
        """Output off, level zero."""
        self.world.rail = Rail()

    def _set_output(self, call: Call) -> Reply:
        self.world.rail.on = read_boolean(call.only())
        self.world.note_extremes()
        return None

    @staticmethod
    def _reading(call: Call, value: float) -> Reply:
        call.none()
        return f"{value:.7G}"


class LoadSwitch(ScpiInstrument):
    """Puts one of several loads into the socket: `ROUTe:CLOSe (@2)`."""

    def __init__(self, world: World, loads_ohm: tuple[float, ...]) -> None:
        super().__init__(("darkedge", "virtual load switch", "0", "0"))
        self.world, self.loads_ohm = world, loads_ohm
        self.closed: int | None = None
        self.add("ROUTe:CLOSe", self._close)
        self.add("ROUTe:CLOSe?", lambda call: str(int(self._place(call) == self.closed)))
        self.add("ROUTe:OPEN", self._open)
        self.add("ROUTe:OPEN:ALL", lambda call: self._plain(call, self.reset))

    def reset(self) -> None:
        """Everything open: no load in the socket but the scope's input."""
        self.closed = None

    def _place(self, call: Call) -> int:
        text = call.only().replace(" ", "")
        if not (text.startswith("(@") and text.endswith(")") and text[2:-1].isascii() and text[2:-1].isdigit()):
            raise ScpiError(-102, text[:20])
        place = int(text[2:-1].lstrip("0")[:9] or "0")
        if not 1 <= place <= len(self.loads_ohm):
            raise ScpiError(-222, text[:20])
        return place

    def _close(self, call: Call) -> Reply:
        self.closed = self._place(call)
        self.world.mount(load_ohm=self.loads_ohm[self.closed - 1])
        return None

    def _open(self, call: Call) -> Reply:
        if self._place(call) == self.closed:
            self.closed = None
        return None
