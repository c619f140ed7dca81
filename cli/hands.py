"""Hand work put to the person at the keyboard: asked on stderr, never taken for granted."""

from __future__ import annotations

import sys
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext

import typer

from darkedge.analysis.errors import InputError
from darkedge.analysis.quantities import format_quantity, parse_quantity


class PersonAtTheBench:
    """Asks, and waits for the word; `aside` makes room on the screen for the question."""

    def __init__(self, aside: Callable[[], AbstractContextManager[None]] = nullcontext) -> None:
        self._aside = aside

    def put_in_load(self, load_ohm: float) -> None:
        """Put a load resistor into the circuit."""
        self._confirm(f"Emitter off, bias down. Put in the load of {format_quantity(load_ohm, 'Ω')}")

    def cover(self) -> None:
        """Keep room light from the device."""
        self._confirm("Dark traces come next. Cover the device so that no room light reaches it")

    def set_rail(self, bias_V: float) -> float:
        """Set the rail by hand, and return what a meter reads on it."""
        question = f"Set the rail to {format_quantity(bias_V, 'V')}. What does the meter read?"
        while True:
            written = self._ask(question)
            try:
                return parse_quantity(written, "bias_V")
            except InputError as error:
                typer.echo(f"not understood: {error}", err=True)

    def _confirm(self, what: str) -> None:
        answer = self._ask(f"{what}. Type yes when it is done, stop to end the run")
        while answer.strip().lower() not in ("yes", "y"):
            if answer.strip().lower() in ("stop", "no", "n"):
                raise InputError("stopped at hand work", where=what, mend="go on later with --resume")
            answer = self._ask("yes or stop")

    def _ask(self, question: str) -> str:
        with self._aside():
            return self._answer(question)

    @staticmethod
    def _answer(question: str) -> str:
        if not sys.stdin.isatty():
            typer.echo(question, err=True)
            line = sys.stdin.readline()
            if not line:
                raise InputError(
                    "hand work was not confirmed, and nobody is there to ask", where=question,
                    mend="run it at a terminal, or go on later with --resume",
                )  # fmt: skip
            return line
        return str(typer.prompt(question, err=True, default="", show_default=False))
