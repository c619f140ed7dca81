"""The fixture file: what is true of the bench and not of the device."""

from __future__ import annotations

from collections.abc import Callable
from datetime import date
from pathlib import Path

from pydantic import Field, model_validator

from darkedge.analysis.errors import FixtureError
from darkedge.analysis.files.toml_checks import Checked, NotNegative, Number, Positive, check, fault, read_toml
from darkedge.analysis.fixture import CapturedEdge, Fixture, Load, Response

FORMAT = "darkedge-fixture 1"

EdgeTime = Callable[[Path, str], CapturedEdge | None]
"""Measures a captured reference edge: the file, and `rise_time_s` or `fall_time_s`; `None` where it has no such edge."""

Skew = Callable[[Path], tuple[float, float] | None]
"""Measures by how much the output channel of a reference capture reads later than its drive channel, with its standard uncertainty."""


class _Load(Checked):
    nominal_ohm: Positive
    actual_ohm: Positive
    u_actual_ohm: NotNegative = 0.0
    stray_F: NotNegative | None = None
    u_stray_F: NotNegative | None = None

    @model_validator(mode="after")
    def _agree(self) -> _Load:
        if abs(self.actual_ohm / self.nominal_ohm - 1) > 0.2:
            raise fault(
                "nominal_ohm and actual_ohm differ by more than 20 %",
                found=f"{self.nominal_ohm:g} and {self.actual_ohm:g}",
                mend="correct one of them",
            )
        return self


class _Response(Checked):
    rise_capture: str | None = None
    fall_capture: str | None = None
    rise_time_s: Positive | None = None
    fall_time_s: Positive | None = None
    u_rise_time_s: NotNegative = 0.0
    u_fall_time_s: NotNegative = 0.0
    emitter_current_A: Positive | None = None

    @model_validator(mode="after")
    def _one_of_each(self) -> _Response:
        for edge in ("rise", "fall"):
            capture, time = getattr(self, f"{edge}_capture"), getattr(self, f"{edge}_time_s")
            if (capture is None) == (time is None):
                raise fault(f"wanted either {edge}_capture or {edge}_time_s", mend="give one of the two")
        return self


class _Fixture(Checked):
    format: str
    measured: date | None = None
    valid_days: Positive | None = None
    scope_input_ohm: Positive | None = None
    u_scope_input_ohm: NotNegative = 0.0
    channel_skew_s: Number = 0.0
    u_channel_skew_s: NotNegative = 0.0
    skew_capture: str | None = None
    trigger_jitter_s: NotNegative = 0.0
    u_gain_ratio: NotNegative = 0.0
    u_timebase_ratio: NotNegative = 0.0
    offset_V: Number = 0.0
    u_offset_V: NotNegative | None = None
    scope_input_bias_A: Number = 0.0
    u_scope_input_bias_A: NotNegative = 0.0
    load: list[_Load] = Field(default_factory=list)
    response: _Response | None = None

    @model_validator(mode="after")
    def _one_skew(self) -> _Fixture:
        if self.skew_capture is not None and self.channel_skew_s:
            raise fault("channel_skew_s and skew_capture are both given", mend="give one of the two")
        return self


def read_fixture(path: Path, *, edge_time: EdgeTime | None = None, skew: Skew | None = None) -> Fixture:
    """Read a fixture file.

    Parameters
    ----------
    path : Path
    edge_time : callable, optional
        Measures the reference edges where the file names captures of them; their paths are relative to the
        fixture file.
    skew : callable, optional
        Measures the skew where the file names a capture in which both channels see the same signal.

    Raises
    ------
    FixtureError
        Every fault of the file at once; a reference capture that is not there or has no such edge.
    """
    stated = check(read_toml(path, FixtureError), _Fixture, where=str(path), word=FORMAT, error_class=FixtureError)
    plain = stated.model_dump(exclude={"format", "load", "response", "skew_capture"})
    if stated.skew_capture is not None:
        plain["channel_skew_s"], plain["u_channel_skew_s"] = _skew(stated.skew_capture, path, skew)
    if plain["u_offset_V"] is None:
        # A stated offset without its uncertainty is not known to be exact: half of it, and nothing where it is zero.
        plain["u_offset_V"] = abs(stated.offset_V) / 2
    response = None if stated.response is None else _response(stated.response, path, edge_time)
    return Fixture(loads=tuple(Load(**load.model_dump()) for load in stated.load), response=response, **plain)


def _skew(capture: str, path: Path, skew: Skew | None) -> tuple[float, float]:
    found = None if skew is None else skew(path.parent / capture)
    if found is None:
        raise FixtureError(
            "the skew cannot be told from the reference capture", where=f"{path}, skew_capture", found=capture,
            wanted="drive and output on the same signal, with an edge in both",
        )  # fmt: skip
    return found


def _response(stated: _Response, path: Path, edge_time: EdgeTime | None) -> Response:
    rise = _edge(stated.rise_capture, stated.rise_time_s, stated.u_rise_time_s, "rise_time_s", path, edge_time)
    fall = _edge(stated.fall_capture, stated.fall_time_s, stated.u_fall_time_s, "fall_time_s", path, edge_time)
    return Response(
        rise_time_s=rise.time_s, fall_time_s=fall.time_s, u_rise_time_s=rise.u_time_s, u_fall_time_s=fall.u_time_s,
        emitter_current_A=stated.emitter_current_A, rise_share=rise.share, fall_share=fall.share,
        u_rise_share=rise.u_share, u_fall_share=fall.u_share,
    )  # fmt: skip


def _edge(
    capture: str | None, time_s: float | None, u_s: float, quantity: str, path: Path, edge_time: EdgeTime | None
) -> CapturedEdge:
    if time_s is not None:
        return CapturedEdge(time_s=time_s, u_time_s=u_s)
    key = f"response.{quantity.removesuffix('_time_s')}_capture"
    if edge_time is None:
        raise FixtureError("reference captures cannot be measured here", where=f"{path}, {key}")
    found = edge_time(path.parent / str(capture), quantity)
    if found is None:
        raise FixtureError("the reference capture has no such edge", where=f"{path}, {key}", found=str(capture))
    return found
