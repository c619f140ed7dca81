"""`darkedge measure`: captures into the measurement table."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from darkedge.cli.common import (
    Channels,
    ConditionsTable,
    FixtureFile,
    Jobs,
    Json,
    Names,
    Paths,
    guarded,
    print_listing,
    say,
    take_in_paths,
)

Out = Annotated[
    Path | None,
    typer.Option(
        "--out",
        "-o",
        metavar="FILE",
        help="Save the table: .csv, .json or .parquet. Every other command reads it back.",
        show_default=False,
    ),
]


@guarded
def measure(
    paths: Paths,
    *,
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
    out: Out = None,
    jobs: Jobs = 1,
    explain: Annotated[
        bool, typer.Option("--explain", help="Show how each file was understood, and measure nothing more.")
    ] = False,
    json: Json = False,
) -> int:
    """Measure captures: levels, rise and fall time, delays, widths, dark current, each with its uncertainty.

    Example:

    darkedge measure sample_captures/foreign --names '{device}_{bias_V}V_{load_ohm}ohm'
    """
    intake = take_in_paths(paths, names=names, conditions=conditions, fixture=fixture, channels=channels, jobs=jobs)
    from darkedge.analysis.files.tables import table_json, write_table
    from darkedge.cli.listing import flag_lines, measurement_listing, reading_listings

    if out is not None:
        write_table(intake.measurements, out)
        say(f"table: {out}")
    if explain:
        for listing in reading_listings(intake):
            print_listing(listing)
    elif json:
        typer.echo(table_json(intake.measurements))
    elif out is None:
        print_listing(measurement_listing(intake.measurements))
        for line in flag_lines(intake.measurements):
            say(line)
    return intake.exit_status
