"""`darkedge plan`: a commented plan to begin with, and what a plan means before it is run."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from darkedge.cli.bench_talk import duration_words, say_left_on
from darkedge.cli.common import Json, guarded, print_listing, say

if TYPE_CHECKING:
    from darkedge.analysis.bench import Bench
    from darkedge.analysis.plan import Plan
    from darkedge.analysis.planning import Outlook
    from darkedge.cli.listing import Listing
    from darkedge.instruments.plan_trial import Trial

app = typer.Typer(no_args_is_help=True, rich_markup_mode=None)


@app.command("new", short_help="Write a commented plan.")
@guarded
def new(
    path: Annotated[Path, typer.Argument(metavar="FILE", help="The plan to write.")] = Path("plan.toml"),
    *,
    kind: Annotated[
        str,
        typer.Option(
            "--kind", metavar="KIND", help="photodiode, pin, transistor_switch, optocoupler or dual_optocoupler."
        ),
    ] = "photodiode",
    elements: Annotated[int, typer.Option("--elements", metavar="N", help="A dual part has 2.", min=1, max=16)] = 1,
) -> int:
    """Write a commented plan, ready to be changed. A file that is there is never overwritten.

    Example:

    darkedge plan new plan.toml --kind pin
    """
    from darkedge.analysis.errors import InputError
    from darkedge.analysis.files.atomic import write_atomic
    from darkedge.analysis.files.plan_text import KINDS, plan_text

    if kind == "dual_optocoupler":
        kind, elements = "optocoupler", max(elements, 2)
    if kind not in KINDS:
        raise InputError(
            "not a kind of device", where="--kind", found=repr(kind), wanted=", ".join((*KINDS, "dual_optocoupler"))
        )
    if path.exists():
        raise InputError("there is a file already", where=str(path), mend="give another name")
    write_atomic(path, plan_text(kind, elements=elements))
    typer.echo(f"plan: {path}")
    say(f"look through it, then: darkedge plan check {path}")
    return 0


@app.command("check", short_help="Hold a plan against ratings and instruments.")
@guarded
def check(
    plan: Annotated[Path, typer.Argument(metavar="PLAN", help="The plan file.", show_default=False)],
    *,
    bench: Annotated[
        Path | None,
        typer.Option(
            "--bench",
            metavar="FILE",
            help="Ask the instruments too: every setting is made with the outputs off.",
            show_default=False,
        ),
    ] = None,
    offline: Annotated[bool, typer.Option("--offline", help="Read the bench file, and open nothing.")] = False,
    json: Json = False,
) -> int:
    """Hold a plan against ratings and instruments: points, hand work, time, what can be resolved, cautions.

    The exit status is 2 where the plan is refused and 3 where the instruments cannot do what it wants.

    Example:

    darkedge plan check plan.toml --bench bench.toml
    """
    from darkedge.analysis.files.bench_file import read_bench
    from darkedge.analysis.files.intake import fixture_of
    from darkedge.analysis.files.plan_file import read_plan
    from darkedge.analysis.planning import outlook
    from darkedge.instruments.live_bench import check_fit

    wanted = read_plan(plan)
    wired = None if bench is None else read_bench(bench)
    if wired is not None:
        check_fit(wired, wanted)
    trial = None
    if wired is not None and bench is not None and not offline:
        trial = _try(wired, wanted, bench.parent)
    found = outlook(
        wanted, bench=wired, fixture=fixture_of(wanted), code_V=None if trial is None else trial.finest_code_V
    )
    if json:
        typer.echo(_json(found, trial))
    else:
        print_listing(outlook_listing(wanted.title or str(plan), found))
        for text in trial.facts if trial else ():
            say(f"bench: {text}")
        for text in found.notes:
            say(f"note: {text}")
        for text in found.warnings:
            say(f"warning: {text}")
        for caution in found.cautions:
            say(f"caution: {caution.text}")
    for text in trial.faults if trial else ():
        say(f"error: {text}")
    return 3 if trial is not None and trial.faults else 0


def _try(bench: Bench, plan: Plan, folder: Path) -> Trial:
    from darkedge.cli.hands import PersonAtTheBench
    from darkedge.instruments.live_bench import open_bench
    from darkedge.instruments.plan_trial import try_plan

    with open_bench(bench, plan, hands=PersonAtTheBench(), folder=folder, left_on=say_left_on) as live:
        return try_plan(live, plan)


def outlook_listing(title: str, found: Outlook) -> Listing:
    """What a plan means, as a table."""
    from darkedge.analysis.quantities import format_quantity
    from darkedge.cli.listing import Listing

    hands = list(dict.fromkeys(found.hand_work))
    rows = [
        ["pulse points", str(found.pulse_points)],
        ["dark and offset traces", str(found.still_traces)],
        ["hand work", f"{len(found.hand_work)} times: " + "; ".join(hands) if hands else "none"],
        ["time", f"about {duration_words(found.time_s)}, hand work at one minute each"],
    ]
    if found.smallest_dark_A is not None:
        rows.append(
            [
                "dark current worth one code",
                f"{format_quantity(float(f'{found.smallest_dark_A:.2g}'), 'A')}; the mean of a trace resolves less where its noise moves it by codes",
            ]
        )
    return Listing(title=title, columns=["", "this plan"], rows=rows)


def _json(found: Outlook, trial: Trial | None) -> str:
    import json

    row = {
        "pulse_points": found.pulse_points,
        "still_traces": found.still_traces,
        "hand_work": list(found.hand_work),
        "time_s": found.time_s,
        "smallest_dark_current_A": found.smallest_dark_A,
        "notes": list(found.notes),
        "warnings": list(found.warnings),
        "cautions": [caution.code for caution in found.cautions],
        "bench": list(trial.facts) if trial else [],
        "faults": list(trial.faults) if trial else [],
    }
    return json.dumps([row], indent=1, ensure_ascii=False)
