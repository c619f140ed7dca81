"""Device by device: the junction fit, the shortest pulse, the dark current and the choice that follows."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from darkedge.analysis.captures import DeviceKind, Kind
from darkedge.analysis.dark.model import fit_dark_current
from darkedge.analysis.dark.results import ASSUMED, DarkFit, Depletion
from darkedge.analysis.decide.choose import choose
from darkedge.analysis.decide.results import Choice, Wish
from darkedge.analysis.errors import DarkedgeError, FitError
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.junction.fit import fit_junction
from darkedge.analysis.junction.results import JunctionFit, PulseWidthPoint, ShortestPulse
from darkedge.analysis.junction.shortest import shortest_pulses
from darkedge.analysis.measurement import Measurement

FixtureFor = Callable[[str], Fixture]
TRANSISTOR_OUTPUTS = (DeviceKind.TRANSISTOR_SWITCH, DeviceKind.OPTOCOUPLER)
"""Kinds whose edges are those of a transistor."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ExplainedDevice:
    """What the measurements say of one element of one device; `None` or empty where they do not say it."""

    lot: str | None
    device: str | None
    element: int | None
    device_kind: DeviceKind | None
    measurements: tuple[Measurement, ...]
    junction: JunctionFit | None = None
    shortest: tuple[ShortestPulse, ...] = ()
    widths: tuple[PulseWidthPoint, ...] = ()
    dark: DarkFit | None = None
    of_several: bool = False

    @property
    def title(self) -> str:
        """Name for a heading: lot and device, those that are known, and the element where the device has several."""
        parts = [self.lot, self.device or "unnamed device", f"element {self.element}" if self.of_several else ""]
        return ", ".join(str(part) for part in parts if part)


@dataclass(frozen=True, slots=True, kw_only=True)
class Explained:
    """All devices that something could be said of, and the fits that were refused with their reasons."""

    devices: tuple[ExplainedDevice, ...]
    errors: tuple[DarkedgeError, ...]

    @property
    def exit_status(self) -> int:
        """2 where a fit was refused, else 0."""
        return 2 if self.errors else 0


@dataclass(frozen=True, slots=True, kw_only=True)
class Choices:
    """One choice for each device whose junction could be fitted, and the refusals of the others."""

    choices: tuple[Choice, ...]
    errors: tuple[DarkedgeError, ...] = field(default=())

    @property
    def exit_status(self) -> int:
        """0 where every device has a feasible pair, 1 where one has none, 2 where none could be judged."""
        if self.errors or not self.choices:
            return 2
        return 0 if all(choice.best is not None for choice in self.choices) else 1


def explain_devices(
    measurements: Sequence[Measurement], *, fixture_for: FixtureFor = lambda _name: UNKNOWN_FIXTURE
) -> Explained:
    """Fit whatever each device's measurements carry; never raises for one device.

    Captures that do not name their device count as one device together. Elements of a device are told
    apart. The junction is fitted for devices whose output is a photocurrent in a load; for transistor outputs
    the capacitance cannot be read from the edges, and only the rest is given.
    """
    devices: list[ExplainedDevice] = []
    errors: list[DarkedgeError] = []
    groups = _by_device(measurements)
    for (lot, device, element), rows in groups.items():
        try:
            fixture = _one_fixture(rows, fixture_for)
        except FitError as error:
            errors.append(error)
            continue
        shortest, widths = shortest_pulses(rows)
        kind = next((r.conditions.device_kind for r in rows if r.conditions.device_kind is not None), None)
        junction = None
        if kind not in TRANSISTOR_OUTPUTS and _has_pulses(rows):
            try:
                junction = fit_junction(rows, fixture=fixture)
            except FitError as error:
                errors.append(error)
        dark = fit_dark_current(rows, fixture=fixture, depletion=_depletion(junction))
        devices.append(
            ExplainedDevice(
                lot=lot,
                device=device,
                element=element,
                device_kind=kind,
                measurements=tuple(rows),
                junction=junction,
                shortest=tuple(shortest),
                widths=tuple(widths),
                dark=dark[0] if dark else None,
                of_several=sum(key[:2] == (lot, device) for key in groups) > 1,
            )
        )
    return Explained(devices=tuple(devices), errors=tuple(errors))


def choose_for_devices(
    measurements: Sequence[Measurement],
    *,
    wish: Wish,
    fixture_for: FixtureFor = lambda _name: UNKNOWN_FIXTURE,
) -> Choices:
    """Choose bias and load for each device whose junction can be fitted; never raises for one device."""
    explained = explain_devices(measurements, fixture_for=fixture_for)
    choices: list[Choice] = []
    errors = list(explained.errors)
    for device in explained.devices:
        if device.junction is None:
            continue
        fixture = fixture_for(device.measurements[0].capture)
        try:
            choices.append(
                choose(
                    device.junction,
                    dark=device.dark,
                    measurements=device.measurements,
                    wish=wish,
                    fixture=fixture,
                )
            )
        except DarkedgeError as error:
            errors.append(error)
    if not choices and not errors:
        errors.append(
            FitError(
                "no device with a photocurrent in a load was found",
                wanted="pulse captures of a photodiode or PIN at several biases and two loads",
                mend="point at a folder that holds them",
            )
        )
    return Choices(choices=tuple(choices), errors=tuple(errors))


def _by_device(
    measurements: Sequence[Measurement],
) -> dict[tuple[str | None, str | None, int | None], list[Measurement]]:
    groups: dict[tuple[str | None, str | None, int | None], list[Measurement]] = {}
    for row in measurements:
        if "refused" in row.flags or row.conditions.kind is Kind.OFFSET:
            continue
        key = row.conditions.lot, row.conditions.device, row.element
        groups.setdefault(key, []).append(row)
    return groups


def _depletion(junction: JunctionFit | None) -> Depletion:
    """How the depletion width grows by the junction fit, or the assumption of the dark fit where there is none."""
    values = {} if junction is None else {name: e.value for name, e in junction.parameters.items()}
    v_bi_V, grading = values.get("v_bi_V"), values.get("grading")
    if v_bi_V is None or grading is None:
        return ASSUMED
    return Depletion(v_bi_V=v_bi_V, grading=grading, full_depletion_V=values.get("full_depletion_V"))


def _has_pulses(rows: Sequence[Measurement]) -> bool:
    return any(row.value("rise_time_s") or row.value("fall_time_s") for row in rows)


def _one_fixture(rows: Sequence[Measurement], fixture_for: FixtureFor) -> Fixture:
    fixture = fixture_for(rows[0].capture)
    for row in rows[1:]:
        if fixture_for(row.capture) != fixture:
            raise FitError(
                "captures of one device were taken with different fixtures",
                where=rows[0].conditions.device or "unnamed device",
                found=f"{rows[0].capture} and {row.capture}",
                mend="fit them in separate calls",
            )
    return fixture
