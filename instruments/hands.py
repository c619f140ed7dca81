"""What somebody at the bench does by hand. The sweep asks; the command line puts it to a person, a rehearsal does it itself."""

from __future__ import annotations

from typing import Protocol


class Hands(Protocol):
    """Hand work. Each call returns when it is done and confirmed, else raises `InputError`.

    The sweep calls these only with the emitter off and the bias down, as far as it can be switched.
    """

    def put_in_load(self, load_ohm: float) -> None:
        """Put a load resistor into the circuit."""

    def cover(self) -> None:
        """Keep room light from the device, for dark traces."""

    def set_rail(self, bias_V: float) -> float:
        """Set the rail by hand, and return what a meter reads on it."""


DISCHARGED_V = 2.0
"""Bias below which a part may be touched (the design's own bound, well below any touch limit)."""
