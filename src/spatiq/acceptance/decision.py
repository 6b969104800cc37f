"""Decision rule: is a figure within its bound, given what it is worth?

Accepted when the whole interval of the figure lies within the bounds, not accepted when the whole
interval lies outside, undecided otherwise: guarded acceptance and guarded rejection with the
interval's half-width as guard band (JCGM 106:2012 = ISO/IEC Guide 98-4, clause 8.3; from memory).
With two-sided intervals of level 1 - a, a figure on its bound is accepted with a probability of at
most a/2, and rejected with at most a/2.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from enum import Enum

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.limits import Limit, Limits


class Decision(Enum):
    """What a verdict can be."""

    ACCEPTED = "accepted"
    NOT_ACCEPTED = "not accepted"
    UNDECIDED = "undecided"
    NOT_MEASURED = "not measured"


@dataclass(frozen=True)
class Judgement:
    """One figure held against one limit.

    Attributes:
        limit: the bound.
        figure: None when the figure could not be measured.
        decision: what came out.
        frames_needed: frames that would probably decide, in all; None when decided, or when no
            number of frames would.
    """

    limit: Limit
    figure: Figure | None
    decision: Decision
    frames_needed: int | None = None


def judge(figure: Figure, limit: Limit) -> Judgement:
    """Hold a figure against a limit."""
    below = limit.lower is not None and figure.low < limit.lower
    above = limit.upper is not None and figure.high > limit.upper
    if not math.isfinite(figure.value):
        return Judgement(limit, figure, Decision.NOT_MEASURED)
    if not below and not above:
        return Judgement(limit, figure, Decision.ACCEPTED)
    outside = (limit.lower is not None and figure.high < limit.lower) or (
        limit.upper is not None and figure.low > limit.upper
    )
    if outside:
        return Judgement(limit, figure, Decision.NOT_ACCEPTED)
    return Judgement(limit, figure, Decision.UNDECIDED, _frames_needed(figure, limit))


def judge_all(figures: Iterable[Figure], limits: Limits) -> list[Judgement]:
    """Hold every limit against the figures that it covers; one that covers none is not measured."""
    measured = list(figures)
    judgements = []
    for limit in limits.limit:
        covered = [f for f in measured if limit.covers(f)]
        judgements += [judge(f, limit) for f in covered]
        if not covered:
            judgements.append(Judgement(limit, None, Decision.NOT_MEASURED))
    return judgements


def overall(judgements: Iterable[Judgement]) -> Decision:
    """The verdict on all: a single figure out of bounds is enough to refuse."""
    found = {j.decision for j in judgements}
    if Decision.NOT_ACCEPTED in found:
        return Decision.NOT_ACCEPTED
    if found == {Decision.ACCEPTED}:
        return Decision.ACCEPTED
    return Decision.UNDECIDED


def _frames_needed(figure: Figure, limit: Limit) -> int | None:
    """Half-widths shrink with the root of the number of frames: when do they clear the bound?"""
    needed = 0.0
    for bound in (limit.lower, limit.upper):
        if bound is None or not figure.low <= bound <= figure.high:
            continue
        distance = abs(figure.value - bound)
        width = figure.value - figure.low if bound < figure.value else figure.high - figure.value
        if distance <= 0.0 or not math.isfinite(width):
            return None
        needed = max(needed, (width / distance) ** 2)
    frames = math.ceil(needed * figure.frames)
    return max(frames, figure.frames + 1) if frames < 10**9 else None
