"""What the commands share: their options, the way in, tables for people, and errors as exit statuses."""

from __future__ import annotations

import functools
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, ParamSpec

import typer

from darkedge.analysis.errors import DarkedgeError

if TYPE_CHECKING:  # heavy: a command that only prints its help must not load them
    from matplotlib.figure import Figure

    from darkedge.analysis.files.intake import Intake
    from darkedge.analysis.waveform.reference import ReferenceLevels
    from darkedge.cli.listing import Listing

P = ParamSpec("P")

Paths = Annotated[
    list[Path],
    typer.Argument(
        metavar="PATH", help="Captures, folders, runs, lots, or a saved measurement table.", show_default=False
    ),
]
Names = Annotated[
    str | None,
    typer.Option(
        "--names",
        metavar="PATTERN",
        help="Conditions in the file names, such as '{device}_{bias_V}V_{load_ohm}ohm'.",
        show_default=False,
    ),
]
ConditionsTable = Annotated[
    Path | None,
    typer.Option(
        "--conditions",
        metavar="TABLE",
        help="A table with a column `capture` and one for each condition.",
        show_default=False,
    ),
]
FixtureFile = Annotated[
    Path | None,
    typer.Option(
        "--fixture",
        metavar="FILE",
        help="What is true of the bench: loads, stray, skew, response. A run's plan names its own.",
        show_default=False,
    ),
]
Channels = Annotated[
    str | None,
    typer.Option(
        "--channels",
        metavar="ROLES",
        help="Which channel is which in other programs' files, such as 'drive=1,output=3'; of a file per channel 'drive=*_1.csv,output=*_3.csv'; 'time=us' where no unit is stated.",
        show_default=False,
    ),
]
Cluster = Annotated[
    str | None,
    typer.Option(
        "--cluster",
        metavar="ADDRESS",
        help="Let the workers of a Dask scheduler read and measure, such as tcp://host:8786.",
        show_default=False,
    ),
]
Jobs = Annotated[int, typer.Option("--jobs", metavar="N", help="Processes that read and measure.", min=1, max=256)]
Json = Annotated[bool, typer.Option("--json", help="Print JSON instead of a table.")]
PlotFolder = Annotated[
    Path | None,
    typer.Option("--plots", metavar="FOLDER", help="Save the plots there, as PNG.", show_default=False),
]


def say(text: str) -> None:
    """Talk: to stderr, so that results on stdout stay clean."""
    typer.echo(text, err=True)


def guarded(command: Callable[P, int | None]) -> Callable[P, None]:
    """Run a command so that errors are told in words and the exit status says which part failed."""

    @functools.wraps(command)
    def wrapper(*args: P.args, **kwargs: P.kwargs) -> None:
        try:
            status = command(*args, **kwargs)
        except DarkedgeError as error:
            say(f"error: {error}")
            status = error.exit_status
        except KeyboardInterrupt:
            say("interrupted")
            status = 130
        raise typer.Exit(status or 0)

    return wrapper


def take_in_paths(
    paths: Sequence[Path],
    *,
    names: str | None,
    conditions: Path | None,
    fixture: Path | None,
    channels: str | None,
    jobs: int = 1,
    cluster: str | None = None,
    reference: ReferenceLevels | None = None,
) -> Intake:
    """Read and measure what the paths hold, with a progress bar, and tell what was refused."""
    from rich.console import Console
    from rich.progress import Progress

    from darkedge.analysis.files.intake import take_in
    from darkedge.analysis.waveform.reference import TEN_FIFTY_NINETY

    progress = Progress(console=Console(stderr=True), transient=True)
    task = progress.add_task("measuring", total=None)

    def tell(done: int, total: int) -> None:
        progress.start()  # no sooner: the bar has a thread of its own, and processes are copied before
        progress.update(task, completed=done, total=total)

    try:
        intake = take_in(
            paths,
            names=names,
            conditions=conditions,
            fixture=fixture,
            channels=channels,
            today=datetime.now(UTC).date(),
            jobs=jobs,
            cluster=cluster,
            reference=reference or TEN_FIFTY_NINETY,
            progress=tell,
        )
    finally:
        progress.stop()
    for refusal in intake.refusals:
        say(f"refused: {refusal.error}")
    return intake


@contextmanager
def working(what: str) -> Iterator[None]:
    """Say on stderr that something takes its time, while it does."""
    from rich.console import Console

    with Console(stderr=True).status(what):
        yield


def print_listing(listing: Listing) -> None:
    """Print a table for people on stdout; nothing is cut off when it goes to a file or another program."""
    from rich import box
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(width=None if sys.stdout.isatty() else 400, highlight=False)
    if listing.title:
        console.print(Text(listing.title, style="bold"))
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for column in listing.columns:
        table.add_column(column, overflow="fold")
    for row in listing.rows:
        table.add_row(*(Text(cell) for cell in row))
    console.print(table)
    for note in listing.notes:
        console.print(Text(f"Note: {note}\n"))


def save_plots(folder: Path, figures: dict[str, Figure]) -> None:
    """Save figures as PNG under safe names, and say where."""
    from darkedge.analysis.pictures.saving import save_png

    for name, figure in figures.items():
        say(f"plot: {save_png(figure, folder, name)}")
