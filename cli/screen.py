"""`darkedge screen`: verdicts for devices and lots."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from darkedge.cli.common import (
    Channels,
    ConditionsTable,
    FixtureFile,
    Json,
    Names,
    Paths,
    guarded,
    print_listing,
    take_in_paths,
)


@guarded
def screen(
    paths: Paths,
    *,
    limits: Annotated[
        Path, typer.Option("--limits", metavar="FILE", help="The limits and the decision rule.", show_default=False)
    ],
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
    json: Json = False,
) -> int:
    """Hold devices and lots against limits: pass, fail, or undecided where the uncertainty reaches over the limit.

    The exit status is 0 when everything passes, 1 when it does not, 2 when a file was refused.

    Example:

    darkedge screen sample_captures/lot_K-0417 --limits sample_captures/limits.toml
    """
    from darkedge.analysis.decide.results import Verdict
    from darkedge.analysis.decide.verdicts import screen as hold_against
    from darkedge.analysis.files.limits_file import read_limits
    from darkedge.analysis.files.results_json import screening_json
    from darkedge.cli.listing import screening_listings

    wanted = read_limits(limits)
    intake = take_in_paths(paths, names=names, conditions=conditions, fixture=fixture, channels=channels)
    screening = hold_against(intake.measurements, wanted)
    if json:
        typer.echo(screening_json(screening))
    else:
        for listing in screening_listings(screening):
            print_listing(listing)
    return intake.exit_status or (0 if screening.verdict is Verdict.PASS else 1)
