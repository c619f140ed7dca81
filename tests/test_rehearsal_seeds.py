"""What is fitted from swept captures lies around what the virtual part was made with: over seeds, through plan, sockets and scope."""

from collections import Counter
from dataclasses import replace
from datetime import date
from pathlib import Path

import pytest
from bench_for_tests import Desk
from scipy.stats import binom

from darkedge.analysis.explain import explain_devices
from darkedge.analysis.files.intake import take_in
from darkedge.analysis.fixture import Fixture
from darkedge.instruments.virtual.lots import Fault, PartKind
from darkedge.instruments.virtual.parts import Device
from darkedge.instruments.virtual.rehearsal import Rehearsal, TEMPERATURE_degC, VirtualHands

PARAMETERS = ("c_j0_F", "v_bi_V", "grading", "full_depletion_V")


def sweep_one(folder: Path, kind: PartKind, seed: int) -> Device:
    """One good part, measured as a rehearsal does."""
    job = Rehearsal(kind=kind, seed=seed, faults=(Fault.NONE,))
    folder.mkdir(parents=True)
    (folder / "fixture.toml").write_text(job.fixture_toml())
    ((_, device),) = job.devices()
    with job.bench() as virtual:
        table = Desk(virtual=virtual, folder=folder, hands=VirtualHands(virtual.world))
        table.run(table.plan(job.plan_toml()), name="part")
    return device


def without_stray(fixture: Fixture) -> Fixture:
    """A bench whose stray capacitance nobody measured."""
    return replace(fixture, loads=tuple(replace(load, stray_F=None, u_stray_F=None) for load in fixture.loads))


def count_inside(
    folder: Path, kind: PartKind, seeds: range, *, stray_known: bool = True
) -> tuple[Counter[str], Counter[str]]:
    """How many fitted values there were, and how many lay inside their 95 % interval, by name."""
    tried: Counter[str] = Counter()
    inside: Counter[str] = Counter()
    for seed in seeds:
        device = sweep_one(folder / f"seed{seed}", kind, seed)
        intake = take_in([folder / f"seed{seed}" / "part"], today=date(2026, 3, 2))
        fixture = intake.fixture_for(intake.measurements[0].capture)
        known = fixture if stray_known else without_stray(fixture)
        (found,) = explain_devices(intake.measurements, fixture_for=lambda _name, known=known: known).devices
        junction = device.elements[0].junction
        assert found.junction is not None
        for name in PARAMETERS:
            estimate, truth = found.junction.parameters.get(name), getattr(junction, name)
            if estimate is None or truth is None or estimate.lo95 is None or estimate.hi95 is None:
                continue
            tried[name] += 1
            inside[name] += estimate.lo95 <= truth <= estimate.hi95
        for row in intake.measurements:
            dark = row.quantities.get("dark_current_A")
            if dark is None or dark.value is None or dark.u is None or row.conditions.bias_V is None:
                continue
            drop = dark.value * 5e5
            truth = junction.dark_A(row.conditions.bias_V - drop, TEMPERATURE_degC)
            tried["dark_current_A"] += 1
            inside["dark_current_A"] += abs(dark.value - truth) <= 1.96 * dark.u
    return tried, inside


def check(tried: Counter[str], inside: Counter[str]) -> None:
    for name, count in tried.items():
        # Fewer inside than 95 % intervals leave to chance in one of a thousand such counts.
        assert inside[name] >= binom.ppf(1e-3, count, 0.95), (name, inside[name], count)


@pytest.mark.parametrize("kind", [PartKind.PHOTODIODE, PartKind.PIN])
def test_fitted_values_lie_around_what_the_part_was_made_with(tmp_path: Path, kind: PartKind) -> None:
    tried, inside = count_inside(tmp_path, kind, range(11, 13))
    assert tried["c_j0_F"] == tried["grading"] == 2
    assert tried["dark_current_A"] >= 6
    check(tried, inside)


def test_without_the_stray_a_pin_tells_its_bend_and_says_what_it_cannot_tell(tmp_path: Path) -> None:
    tried, inside = count_inside(tmp_path, PartKind.PIN, range(11, 13), stray_known=False)
    assert set(tried) == {"full_depletion_V", "dark_current_A"}
    assert tried["full_depletion_V"] == inside["full_depletion_V"] == 2


@pytest.mark.campaign
@pytest.mark.parametrize("kind", [PartKind.PHOTODIODE, PartKind.PIN])
def test_without_the_stray_what_is_told_is_inside_over_many_seeds(tmp_path: Path, kind: PartKind) -> None:
    tried, inside = count_inside(tmp_path, kind, range(200, 216), stray_known=False)
    print({name: f"{inside[name]}/{tried[name]}" for name in tried})
    check(tried, inside)


@pytest.mark.campaign
@pytest.mark.parametrize("kind", [PartKind.PHOTODIODE, PartKind.PIN])
def test_fitted_values_lie_around_what_the_part_was_made_with_over_many_seeds(tmp_path: Path, kind: PartKind) -> None:
    tried, inside = count_inside(tmp_path, kind, range(100, 130))
    print({name: f"{inside[name]}/{tried[name]}" for name in tried})
    check(tried, inside)
