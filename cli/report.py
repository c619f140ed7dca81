"""`darkedge report`: one self-contained HTML page."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Annotated

import typer

from darkedge.cli.common import (
    Channels,
    ConditionsTable,
    FixtureFile,
    Names,
    Paths,
    guarded,
    print_listing,
    say,
    take_in_paths,
    working,
)


@guarded
def report(
    paths: Paths,
    *,
    limits: Annotated[
        Path | None,
        typer.Option(
            "--limits",
            metavar="FILE",
            help="The limits and the decision rule; else the limits.toml found beside the captures.",
            show_default=False,
        ),
    ] = None,
    out: Annotated[Path, typer.Option("--out", "-o", metavar="FILE", help="The page to write.")] = Path(
        "darkedge-report.html"
    ),
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
) -> int:
    """Write one self-contained HTML page: verdict, waveforms, trends, fits, cautions, how each number was made.

    Example:

    darkedge report sample_captures --out first-report.html
    """
    from darkedge.analysis.files.limits_file import find_limits, read_limits
    from darkedge.analysis.pictures.build import build_report, write_report
    from darkedge.cli.listing import screening_listings

    limits_file = limits or find_limits(paths)
    wanted = read_limits(limits_file) if limits_file else None
    if limits_file:
        say(f"limits: {limits_file}")
    intake = take_in_paths(paths, names=names, conditions=conditions, fixture=fixture, channels=channels)
    made = datetime.now(UTC).strftime("%Y-%m-%d %H:%M UTC")
    with working("fitting and drawing"):
        content = build_report(intake, paths=paths, made=made, limits=wanted, limits_source=str(limits_file or ""))
        write_report(content, out)
    if content.screening is not None:
        for listing in screening_listings(content.screening):
            print_listing(listing)
    typer.echo(f"report: {out.resolve()}")
    return intake.exit_status
