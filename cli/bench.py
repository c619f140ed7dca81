"""`darkedge bench`: what answers, whether it does what is asked, and the virtual instruments on loopback."""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from darkedge.cli.common import Json, guarded, print_listing, say

if TYPE_CHECKING:
    from darkedge.instruments.bench_check import Answered

app = typer.Typer(no_args_is_help=True, rich_markup_mode=None)

BenchOption = Annotated[
    Path | None,
    typer.Option("--bench", metavar="FILE", help="Ask at the addresses of this bench file too.", show_default=False),
]


@app.command("list", short_help="What answers: VISA resources and the addresses of a bench file.")
@guarded
def list_(
    *,
    bench: BenchOption = None,
    visa: Annotated[str, typer.Option("--visa", metavar="LIBRARY", help="A VISA library that pyvisa knows.")] = "@py",
    json: Json = False,
) -> int:
    """List the VISA resources that can be found, and who answers at the addresses of a bench file.

    Instruments behind a raw socket (TCPIP ... SOCKET) cannot be found: they stand in the bench file.

    Example:

    darkedge bench list --bench bench.toml
    """
    from darkedge.analysis.files.bench_file import read_bench
    from darkedge.cli.listing import Listing
    from darkedge.instruments.bench_check import who_answers
    from darkedge.instruments.visa import list_resources

    wired = None if bench is None else read_bench(bench)
    found = list_resources(visa if wired is None else wired.visa)
    answers = () if wired is None or bench is None else who_answers(wired, folder=bench.parent)
    if json:
        typer.echo(_answers_json(found.resources, answers))
    else:
        rows = [["found", name, ""] for name in found.resources]
        rows += [[a.role.replace("_", " "), a.address, a.identity or f"no answer: {a.trouble}"] for a in answers]
        print_listing(Listing(title="", columns=["what", "address", "who answers"], rows=rows))
        if found.trouble:
            say(f"note: the VISA library says: {found.trouble}")
        say("note: raw sockets (TCPIP ... SOCKET) cannot be found by asking; they stand in the bench file.")
    return 3 if any(not answer.identity for answer in answers) else 0


@app.command("check", short_help="Identify, set, read back.")
@guarded
def check(
    *,
    bench: Annotated[
        Path,
        typer.Option(
            "--bench", metavar="FILE", help="Which instruments, and what is wired to what.", show_default=False
        ),
    ],
    json: Json = False,
) -> int:
    """Identify every instrument, make each kind of setting with the outputs off, and read it back.

    The exit status is 3 where something does not answer or does not do what it is told.

    Example:

    darkedge bench check --bench bench.toml
    """
    from darkedge.analysis.files.bench_file import read_bench
    from darkedge.cli.listing import Listing
    from darkedge.instruments.bench_check import check_bench

    lines = check_bench(read_bench(bench), folder=bench.parent)
    if json:
        import json as printer

        typer.echo(printer.dumps([line.as_row() for line in lines], indent=1, ensure_ascii=False))
    else:
        rows = [[line.role.replace("_", " "), line.operation, line.state, line.words] for line in lines]
        print_listing(Listing(title=str(bench), columns=["instrument", "operation", "", "what came back"], rows=rows))
    return 3 if any(line.state == "fault" for line in lines) else 0


@app.command("serve", short_help="Virtual instruments on loopback.")
@guarded
def serve(
    *,
    kind: Annotated[
        str,
        typer.Option(
            "--kind", metavar="KIND", help="photodiode, pin, transistor_switch, optocoupler or dual_optocoupler."
        ),
    ] = "photodiode",
    fault: Annotated[
        str, typer.Option("--fault", metavar="FAULT", help="none, slow, leaky, reversed, dead or noisy.")
    ] = "none",
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="The same seed gives the same part and noise.")] = 1,
    words: Annotated[
        str, typer.Option("--words", metavar="WORDS", help="scpi-1999, or own: instruments with words of their own.")
    ] = "scpi-1999",
    port: Annotated[
        int,
        typer.Option("--port", metavar="PORT", help="First of four ports; 0 takes any free ones.", min=0, max=65532),
    ] = 0,
    save: Annotated[
        Path | None, typer.Option("--save", metavar="FILE", help="Write the bench file there.", show_default=False)
    ] = None,
) -> int:
    """Run an oscilloscope, a generator, a supply and a load switch in software, behind sockets on this machine only.

    The part in the socket is invented. Prints the addresses and a bench file that reaches them; Ctrl-C ends it.

    Example:

    darkedge bench serve --save bench.toml
    """
    from darkedge.analysis.files.atomic import make_folder, write_atomic
    from darkedge.instruments.virtual.rehearsal import OWN_WORDS, OWN_WORDS_NAME, serve_part

    with serve_part(kind, fault=fault, seed=seed, words=words, port=port) as served:
        dialects = (
            dict.fromkeys(("oscilloscope", "function_generator", "bias"), OWN_WORDS_NAME) if words == "own" else {}
        )
        text = served.bench_toml(dialects=dialects, switched=True)
        if save is not None:
            make_folder(save.parent)
            write_atomic(save, text)
            if words == "own":
                write_atomic(save.parent / OWN_WORDS_NAME, OWN_WORDS.read_bytes())
            say(f"bench file: {save}")
        typer.echo(text)
        say(f"{served.world.device.name}, invented, is in the socket; Ctrl-C ends it")
        while True:
            time.sleep(0.5)


def _answers_json(resources: tuple[str, ...], answers: tuple[Answered, ...]) -> str:
    import json

    rows = [{"role": None, "address": name, "identity": None, "trouble": None} for name in resources]
    rows += [
        {"role": a.role, "address": a.address, "identity": a.identity or None, "trouble": a.trouble or None}
        for a in answers
    ]
    return json.dumps(rows, indent=1, ensure_ascii=False)
