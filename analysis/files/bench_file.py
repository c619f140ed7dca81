"""The bench file: which instruments there are, at which addresses, and what is wired to what."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Literal

from pydantic import Field, model_validator

from darkedge.analysis.bench import Bench, BiasLink, BiasSource, GeneratorLink, OscilloscopeLink, SwitchLink
from darkedge.analysis.errors import BenchFileError, InputError
from darkedge.analysis.files.toml_checks import Checked, NotNegative, Positive, check, fault, read_toml
from darkedge.analysis.quantities import parse_quantity

FORMAT = "darkedge-bench 1"
_SIGNAL = re.compile(r"drive|output([2-9]|1\d)?")


class _Oscilloscope(Checked):
    address: str = Field(min_length=1)
    dialect: str = "scpi-1999"
    channels: dict[str, int]
    probe_ratio: dict[str, float | int] = Field(default_factory=dict)
    points: int = Field(default=2000, ge=100, le=10_000_000)
    averages: int = Field(default=16, ge=1, le=65_536)

    @model_validator(mode="after")
    def _wired(self) -> _Oscilloscope:
        for signal in (*self.channels, *self.probe_ratio):
            if not _SIGNAL.fullmatch(signal):
                raise fault("not a signal", found=repr(signal), wanted="drive, output, output2 and so on")
        for wanted in ("drive", "output"):
            if wanted not in self.channels:
                raise fault(f"channels lacks {wanted}", mend=f"write {wanted} = 1, or whichever channel it is on")
        if len(set(self.channels.values())) < len(self.channels) or min(self.channels.values()) < 1:
            raise fault("channels are not each a scope channel of its own", found=str(dict(self.channels)))
        if any(ratio <= 0 for ratio in self.probe_ratio.values()):
            raise fault("a probe ratio is not positive", found=str(dict(self.probe_ratio)))
        return self


class _Generator(Checked):
    address: str = Field(min_length=1)
    dialect: str = "scpi-1999"
    emitter_channels: list[int] = Field(default_factory=lambda: [1], min_length=1)
    source_ohm: Positive = 50.0


class _Bias(Checked):
    source: Literal["supply", "generator", "by_hand"]
    address: str | None = None
    dialect: str | None = None
    channel: int | None = None
    source_ohm: NotNegative = 0.0
    decoupling_F: NotNegative = 0.0
    compliance_A: Positive | None = None
    ramp_V_per_s: Positive = 20.0

    @model_validator(mode="after")
    def _complete(self) -> _Bias:
        if self.source == "supply" and self.address is None:
            raise fault("a supply without an address", mend="give address, or source = 'by_hand'")
        if self.source == "generator" and self.channel is None:
            raise fault("bias from the generator without a channel", mend="give channel = 2, or whichever it is")
        if self.source == "by_hand" and self.address is not None:
            raise fault("a bias set by hand has no address", found=self.address)
        return self


class _Switch(Checked):
    address: str = Field(min_length=1)
    dialect: str = "scpi-1999"
    loads: dict[str, int] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _readable(self) -> _Switch:
        for load in self.loads:
            _load_ohm(load)
        return self


class _Bench(Checked):
    format: str
    visa: str = "@py"
    oscilloscope: _Oscilloscope
    function_generator: _Generator
    bias: _Bias
    switch: _Switch | None = None


def read_bench(path: Path) -> Bench:
    """Read a bench file.

    Raises
    ------
    BenchFileError
        Every fault of the file at once.
    """
    stated = check(read_toml(path, BenchFileError), _Bench, where=str(path), word=FORMAT, error_class=BenchFileError)
    scope, generator, bias, switch = stated.oscilloscope, stated.function_generator, stated.bias, stated.switch
    return Bench(
        visa=stated.visa,
        oscilloscope=OscilloscopeLink(
            address=scope.address,
            dialect=scope.dialect,
            channels=dict(scope.channels),
            probe_ratio={name: float(ratio) for name, ratio in scope.probe_ratio.items()},
            points=scope.points,
            averages=scope.averages,
        ),
        function_generator=GeneratorLink(
            address=generator.address,
            dialect=generator.dialect,
            emitter_channels=tuple(generator.emitter_channels),
            source_ohm=generator.source_ohm,
        ),
        bias=BiasLink(
            source=BiasSource(bias.source),
            address=bias.address,
            dialect=bias.dialect or ("scpi-1999" if bias.source == "supply" else None),
            channel=bias.channel,
            source_ohm=bias.source_ohm,
            decoupling_F=bias.decoupling_F,
            compliance_A=bias.compliance_A,
            ramp_V_per_s=bias.ramp_V_per_s,
        ),
        switch=None
        if switch is None
        else SwitchLink(
            address=switch.address,
            dialect=switch.dialect,
            loads={_load_ohm(load): path_number for load, path_number in switch.loads.items()},
        ),
    )


def _load_ohm(text: str) -> float:
    try:
        return parse_quantity(text, "load_ohm")
    except InputError as error:
        raise fault(f"loads: {error.what}", found=error.found, wanted=error.wanted, mend=error.mend) from error
