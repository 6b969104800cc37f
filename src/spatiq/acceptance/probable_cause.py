"""A probable cause, and how sure one has to be to name it."""

from __future__ import annotations

from dataclasses import dataclass

CHANCE = 1e-6  # of naming one that is not there, per test


@dataclass(frozen=True)
class Cause:
    """Something that is probably wrong.

    Attributes:
        name: what.
        saw: the evidence.
        chance: probability of such evidence without the cause, at most.
        advice: what to try.
    """

    name: str
    saw: str
    chance: float
    advice: str
