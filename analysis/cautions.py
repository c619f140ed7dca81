"""The register of cautions: what triggers each, its text, and where it is shown.

All of them defer to local rules and to qualified people; none of them replaces either.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

TOUCHABLE_DC_V = 60.0
"""DC voltage above which a touchable part is no longer harmless in ordinary dry use (IEC 60598-1, SELV)."""

VISIBLE_FROM_M, VISIBLE_TO_M = 400e-9, 700e-9
"""Band in which the eye sees well enough to turn away (IEC 60825-1 counts on it only here)."""

STORED_CHARGE_F = 0.1e-6
"""Capacitance above which an accessible charged part counts as able to hurt (IEC 60335-1, up to 450 V)."""

WHERE = ("plan check", "before a sweep", "report", "README")


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """What a job does that could hurt somebody; `None` is not known."""

    bias_V: float | None = None
    emitter_kind: str | None = None
    wavelength_m: float | None = None
    decoupling_F: float | None = None
    generator_low_V: float | None = None
    supply_by_hand: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Caution:
    """One caution: a code, what brings it up, the text, and where it is shown."""

    code: str
    applies: Callable[[Setting], bool]
    text: str
    shown: tuple[str, ...] = WHERE


def _invisible(setting: Setting) -> bool:
    return setting.wavelength_m is not None and setting.wavelength_m > VISIBLE_TO_M


def _ultraviolet(setting: Setting) -> bool:
    return setting.wavelength_m is not None and setting.wavelength_m < VISIBLE_FROM_M


REGISTER: tuple[Caution, ...] = (
    Caution(
        code="high_bias",
        applies=lambda s: s.bias_V is not None and s.bias_V > TOUCHABLE_DC_V,
        text=(
            "Bias above 60 V DC can hurt. Cover live parts, switch off and discharge before touching anything, "
            "and let only people qualified for it under your local rules do this work."
        ),
    ),
    Caution(
        code="invisible_light",
        applies=_invisible,
        text=(
            "The emitter's light is invisible and the eye does not turn away from it. Never look into the emitter or "
            "a fibre; close the box before switching on. Your local rules and safety officer decide what else is needed."
        ),
    ),
    Caution(
        code="ultraviolet_light",
        applies=_ultraviolet,
        text=(
            "The emitter's light is ultraviolet and harms eyes and skin. Close the box before switching on, and "
            "follow your local rules and safety officer."
        ),
    ),
    Caution(
        code="laser",
        applies=lambda s: s.emitter_kind == "laser",
        text=(
            "The emitter is a laser. Its class and your local rules say what protection is needed; ask your laser "
            "safety officer before switching on. darkedge works out no class."
        ),
    ),
    Caution(
        code="stored_charge",
        applies=lambda s: (s.decoupling_F or 0.0) > STORED_CHARGE_F and (s.bias_V or 0.0) > TOUCHABLE_DC_V,
        text=(
            "Decoupling capacitors stay charged after the supply is off. Wait for the bias to read below 2 V, or "
            "discharge them, before touching the socket."
        ),
    ),
    Caution(
        code="generator_low",
        applies=lambda s: s.generator_low_V is not None and s.generator_low_V < 0,
        text=(
            "The generator's low level is below zero: the emitter sees it in reverse. Keep it inside the emitter's "
            "reverse rating, and remember that an amplitude stated into the wrong load is wrong by a factor of two."
        ),
    ),
    Caution(
        code="bias_by_hand",
        applies=lambda s: s.supply_by_hand,
        text=(
            "The bias is set by hand: the tool cannot switch it off. Switch it off yourself, and check it with a "
            "meter, before changing a part."
        ),
    ),
)


def cautions_for(setting: Setting) -> tuple[Caution, ...]:
    """Return the cautions that `setting` brings up, in the order of the register."""
    return tuple(caution for caution in REGISTER if caution.applies(setting))
