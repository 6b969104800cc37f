"""Causes that show in the payload: mapping of words, reference sequence, scrambler, CRC.

Each hypothesis is undone on the decided words, and the bits are compared with the reference. One
is named when it leaves less than half of the errors, and so few that unrelated bits would agree as
well with a probability below `CHANCE` (binomial), all hypotheses counted.
Of those that leave equally few errors, the CRC tells; else all are named.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.acceptance.probable_cause import CHANCE, Cause
from spatiq.acceptance.word_maps import word_maps
from spatiq.link.description import Link
from spatiq.link.payload_fields import PrbsSource
from spatiq.metrics.reference_following import ReferenceFollower
from spatiq.signal.prbs import NAMES, prbs

Bits = NDArray[np.uint8]
_MOST_SLIP = 64
_RIGHT = 0.05  # bit error ratio below which the payload is what it should be
_ADVICE = {
    "antenna": "compare the antenna order of the payload with that of the pilots",
    "bits": "compare the order of bits with the description's labels",
    "points": "compare the constellation table with the description's",
    "sequence": "compare the reference generator with the description",
    "scrambler": "compare the scrambler's polynomial and start value, and where it begins",
    "crc": "compare the CRC's polynomial, start value, reflection, and the bits it covers",
}


@dataclass(frozen=True, eq=False)
class Payloads:
    """Decided words of some frames.

    Attributes:
        link: what they should be.
        words: int64 (F, Kw).
        position: float64 (F,); places in the recording, samples.
        period: frame period, samples; None: none.
        shortest: least distance of two frames, samples.
    """

    link: Link
    words: NDArray[np.int64]
    position: NDArray[np.float64]
    period: float | None
    shortest: float


@dataclass(frozen=True)
class _Score:
    errors: int
    compared: int

    @property
    def ratio(self) -> float:
        return self.errors / self.compared if self.compared else 0.5

    def chance(self, hypotheses: int) -> float:
        """That unrelated bits agree so well in one of so many."""
        return hypotheses * float(scipy.stats.binom.cdf(self.errors, self.compared, 0.5))


@dataclass(frozen=True)
class _Tried:
    """A hypothesis undone: its errors, and the share of frames whose CRC then passes."""

    name: str
    score: _Score
    kind: str
    passed: float


def _passed(payloads: Payloads, plain: Bits) -> float:
    ok = payloads.link.payload.crc_ok(plain)
    return 0.0 if ok is None else float(ok.mean())


def payload_causes(payloads: Payloads) -> list[Cause]:
    """At most one cause: the hypothesis, or those alike, that leave the fewest errors."""
    link = payloads.link
    if not link.payload.has_reference or link.codebook.block > 1 or not len(payloads.words):
        return []
    plain = _plain(payloads, payloads.words)
    before = _score(payloads, plain)
    if before.compared and before.ratio < _RIGHT:
        return _check(payloads, plain, before)
    tried: list[_Tried] = []
    for name, score, kind in _sequences(payloads, plain):
        tried.append(_Tried(name, score, kind, _passed(payloads, plain)))
    for hypothesis in word_maps(link.codebook):
        undone = _plain(payloads, hypothesis.inverse[payloads.words])
        name = ", or ".join(hypothesis.names)
        kind = "antenna" if "antennas" in name else "points" if "constell" in name else "bits"
        passed = _passed(payloads, undone)
        tried.append(_Tried(name, _score(payloads, undone), kind, passed))
    if not tried:
        return []
    order = [(one.score.ratio, -one.passed) for one in tried]
    equal = [one for one, rank in zip(tried, order, strict=True) if rank == min(order)]
    best, kind = equal[0].score, equal[0].kind
    name = ", or ".join(one.name for one in equal)
    chance = best.chance(len(tried))
    if best.ratio > before.ratio / 2 or chance > CHANCE:
        return []
    saw = (
        f"bit error ratio {before.ratio:.3g} as described, {best.ratio:.3g} so; {best.compared} "
        f"bits, {len(tried)} hypotheses"
    )
    return [Cause(name, saw, chance, _ADVICE[kind])]


def _plain(payloads: Payloads, words: NDArray[np.int64]) -> Bits:
    link = payloads.link
    return link.payload.descramble(link.codebook.words_to_bits(words))


def _score(payloads: Payloads, plain: Bits) -> _Score:
    """Errors in the bits that are known, frames numbered anew."""
    payload = payloads.link.payload
    follower = ReferenceFollower(payload, payloads.period, payloads.shortest)
    numbering = follower.number(plain, payload.crc_ok(plain), payloads.position)
    known = np.where(numbering.resolved[:, None], payload.known_mask, _static(payloads))
    numbers = np.where(numbering.resolved, numbering.numbers, 0)
    wrong = payload.reference(np.maximum(numbers, 0)) != plain
    return _Score(int(np.sum(wrong & known)), int(np.sum(known)))


def _static(payloads: Payloads) -> NDArray[np.bool_]:
    mask = payloads.link.payload.known_mask.copy()
    for span in payloads.link.payload.fields:
        if span.is_running:
            mask[span.start : span.stop] = False
    return mask


def _sequences(payloads: Payloads, plain: Bits) -> Iterator[tuple[str, _Score, str]]:
    """Reference sequences that begin anew in each frame: other, inverted, slipped; scrambler."""
    link = payloads.link
    for span in link.payload.fields:
        source = span.source
        if not isinstance(source, PrbsSource) or source.running:
            continue
        width, bits = span.width, plain[:, span.start : span.stop]
        own = source.prbs.bits(0, width + _MOST_SLIP)
        yield "reference sequence inverted", _agreement(bits, 1 - own[:width]), "sequence"
        for slip in range(1, _MOST_SLIP + 1):
            late = _agreement(bits[:, slip:], own[: width - slip])
            yield f"reference sequence slipped by {slip} bits, late", late, "sequence"
            early = _agreement(bits, own[slip : width + slip])
            yield f"reference sequence slipped by {slip} bits, early", early, "sequence"
        for name in NAMES:
            other = prbs(name)
            if (other.order, other.name) != (source.prbs.order, source.prbs.name):
                score = _agreement(bits, other.bits(0, width))
                yield f"reference sequence {name} instead of {source.prbs.name}", score, "sequence"
        if link.payload.scrambler is not None:
            raw = link.codebook.words_to_bits(payloads.words)
            score = _agreement(raw[:, span.start : span.stop], own[:width])
            yield "scrambler not in use", score, "scrambler"


def _agreement(bits: Bits, expected: Bits) -> _Score:
    return _Score(int(np.sum(bits != expected)), bits.size)


def _check(payloads: Payloads, plain: Bits, score: _Score) -> list[Cause]:
    """A CRC that fails in frames whose known bits are right.

    Each then needs an error among the bits that are not known: no likelier than their number times
    the bit error ratio, whose upper bound at 99.9 % is taken (Clopper and Pearson 1934).
    """
    payload = payloads.link.payload
    passed = payload.crc_ok(plain)
    if passed is None or passed.any():
        return []
    upper = float(scipy.stats.beta.ppf(0.999, score.errors + 1, score.compared - score.errors))
    unknown = payload.n_bits - score.compared / len(passed)
    right = max(len(passed) - score.errors, 0)
    chance = float(min(unknown * upper, 1.0) ** right)
    if chance > CHANCE:
        return []
    saw = f"fails in all of {len(passed)} frames; bit error ratio {score.ratio:.2g}"
    return [Cause("CRC with other parameters", saw, chance, _ADVICE["crc"])]
