"""Run and lot folders: which plan, lot and fixture stand behind a capture."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from darkedge.analysis.errors import InputError
from darkedge.analysis.files.fixture_file import EdgeTime, Skew, read_fixture
from darkedge.analysis.files.lot_file import NAME as LOT_NAME
from darkedge.analysis.files.lot_file import Lot, read_lot
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.fixture import Fixture
from darkedge.analysis.plan import Plan

PLAN_NAME = "plan.toml"
FIXTURE_COPY = "fixture.toml"
"""The fixture as it was when the run was made, beside the plan."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RunContext:
    """What stands beside the captures of a run: its plan, the fixture that the plan names, the lot it belongs to."""

    folder: Path
    plan: Plan | None
    fixture: Fixture | None
    lot: Lot | None


def read_run_context(folder: Path, *, edge_time: EdgeTime, skew: Skew) -> RunContext:
    """Read what stands in and above a run folder. A fixture kept in the run goes before the one that the plan points at.

    Raises
    ------
    InputError
        A plan, lot or fixture file that is wrong, or a fixture that the plan names and that is not there.
    """
    plan_file, lot_file = folder / PLAN_NAME, folder.parent / LOT_NAME
    plan = read_plan(plan_file) if plan_file.is_file() else None
    lot = read_lot(lot_file) if lot_file.is_file() else None
    fixture = None
    if plan is not None and plan.fixture_file is not None:
        path = folder / FIXTURE_COPY
        if not path.is_file():
            path = folder / plan.fixture_file
        if not path.is_file():
            raise InputError(
                "the plan names a fixture file that is not there",
                where=f"{plan_file}, fixture.file",
                found=plan.fixture_file,
                mend="put it there, or correct the path (it is relative to the plan)",
            )
        fixture = read_fixture(path, edge_time=edge_time, skew=skew)
    return RunContext(folder=folder, plan=plan, fixture=fixture, lot=lot)
