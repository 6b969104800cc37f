"""Payload that was lost inside frames: which words and bits are not to be counted.

Two sources: periods that the receiver found lost or could not place, and slips. A loss of whole
symbol periods that leaves the carrier's phase as it was is invisible to a receiver until the frame
ends early; the reference shows it, as a shift from some word on. As in a bit error ratio tester
that finds its pattern again after a slip (common practice, no source), what lies behind it is not
counted as errors but as lost.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.link_tables import active_periods

_WINDOW = 64  # words at the frame's end that must agree again
_WRONG = 0.6  # share of wrong words there, of what chance gives, below which nothing has slipped
_CHANCE = 1e-9  # that unrelated words agree as well under any shift
_MARGIN = 3  # words ahead of a slip that are given up


@dataclass(frozen=True, eq=False)
class Erasures:
    """What is not counted: payload periods, words and plain bits; bool (F, Kp), (F, Kw), (F, n)."""

    periods: NDArray[np.bool_]
    words: NDArray[np.bool_]
    bits: NDArray[np.bool_]


def erasures(batch: FrameBatch, link: Link) -> Erasures | None:
    """What the receiver left out; None when that is nothing."""
    if not batch.erased.any():
        return None
    payload = np.isin(active_periods(link.layout), link.layout.payload_index)
    return _of_periods(batch.erased[:, payload], link)


def _of_periods(periods: NDArray[np.bool_], link: Link) -> Erasures:
    block = link.codebook.block
    if block == 1:
        words = np.asarray(periods)
    else:  # a word is the change from one block to the next
        parts, at = [], 0
        for run in link.layout.payload_runs():
            count = run // block
            of_blocks = periods[:, at : at + count * block].reshape(-1, count, block)
            gone = np.asarray(np.any(of_blocks, axis=2))
            parts.append(gone[:, 1:] | gone[:, :-1])
            at += run
        words = np.concatenate(parts, axis=1)
    bits = np.repeat(words, link.codebook.bits, axis=1)
    scrambler = link.payload.scrambler
    if scrambler is not None and not hasattr(scrambler, "sequence"):
        # A self-synchronising descrambler reads as many bits back as its register is long.
        memory = max(getattr(scrambler, "taps", (0,)))
        spoilt = bits.copy()
        for distance in range(1, memory + 1):
            spoilt[:, distance:] |= bits[:, :-distance]
        bits = spoilt
    return Erasures(periods, words, bits)


def slips(
    batch: FrameBatch, sent: NDArray[np.int64], found: Erasures | None, link: Link
) -> Erasures | None:
    """Erasures with those behind slips added, which are entered in the batch's breaks.

    Args:
        batch: words decided.
        sent: int64 (F, Kp); -1 where unknown.
        found: erasures so far.
        link: link description.
    """
    if link.codebook.block > 1:
        return found
    compared = sent[:, -_WINDOW:] >= 0
    wrong = (batch.words[:, -_WINDOW:] != sent[:, -_WINDOW:]) & compared
    chance = 1.0 - 1.0 / link.codebook.size
    few = np.count_nonzero(compared, axis=1)
    suspects = np.flatnonzero((few >= 16) & (wrong.sum(axis=1) > _WRONG * chance * few))
    words = np.zeros(sent.shape, np.bool_) if found is None else found.words.copy()
    slipped = False
    for i in suspects:
        slip = _slip(batch.words[i], sent[i], link.codebook.size)
        if slip is None or words[i, slip[0] :].all():
            continue
        slipped = True
        at, shift = slip
        words[i, max(at - _MARGIN, 0) :] = True
        breaks = batch.breaks[i]
        if np.isnan(breaks["lost_at"]):
            breaks["samples_lost"] = round(shift * float(batch.step[i]))
            breaks["lost_at"] = float(link.layout.payload_index[at]) - 0.5
            breaks["lost_std"] = float(_MARGIN)
    return _of_periods(words, link) if slipped else found


def _slip(decided: NDArray[np.int64], sent: NDArray[np.int64], size: int) -> tuple[int, int] | None:
    """Word from which on the decided ones are those sent so many words later: (word, shift)."""
    count = sent.size
    best, most = 0, -1
    for shift in range(1, count - _WINDOW // 4):
        ours = decided[max(count - shift - _WINDOW, 0) : count - shift]
        theirs = sent[count - ours.size :]
        agree = int(np.count_nonzero(ours == theirs))
        if agree > most:
            best, most = shift, agree
    trials = min(_WINDOW, count - best)
    # Wrong words need not be evenly spread: half must agree, however unlikely fewer are.
    chance = scipy.stats.binom.sf(most - 1, trials, 1.0 / size) * count
    if chance > _CHANCE or 2 * most < trials:
        return None
    before = (decided == sent).astype(np.int64)
    after = np.zeros(count, np.int64)
    after[: count - best] = decided[: count - best] == sent[best:]
    ahead = np.cumsum((after - before)[::-1])[::-1]
    at = int(np.argmax(ahead))
    return (at, best) if count - best - at >= _WINDOW // 4 else None
