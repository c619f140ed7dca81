"""What to do with a capture that was just taken: the answer that a sweep waits for."""

from __future__ import annotations

from enum import StrEnum


class Judgement(StrEnum):
    """Keep it; take it again as it was; or take it again with ranges chosen afresh."""

    KEEP = "keep"
    RETAKE = "retake"
    ADJUST = "adjust"
