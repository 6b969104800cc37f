"""Spectral inversion: was the recording made with a mixer on the wrong side of the carrier?

Such samples are the conjugate of what they should be. Real sync sections are found all the same, at
the opposite carrier offset; complex symbols are then taken for their conjugates. Nothing that the
receiver sees need tell; what the payload is known to hold does. When no frame of the first batch is
confirmed by its payload, the recording is looked at a second time, conjugated.

A frame confirms the spectrum when its CRC is right; without a CRC, when fewer than half of the bits
are wrong that conjugate decisions would get wrong. Under the wrong spectrum a right CRC has the
chance 2^-width, so few errors a binomial one. The second look is believed when it confirms more
frames than the first, and when that many would be confirmed by chance less than once in a million
recordings; or, without any frame in the whole first look, when it finds some.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import scipy.stats

from spatiq.link.description import Link
from spatiq.metrics.frame_table import MeasuredFrames
from spatiq.signal.differential import DifferentialCodebook

_CHANCE = 1e-6
Look = Callable[[str], Iterator[MeasuredFrames]]


def conjugate_error_share(link: Link) -> float:
    """Share of a word's bits that are wrong when its conjugate is decided; mean over the words.

    Of a large codebook, over 256 words spread evenly.
    """
    book = link.codebook
    vectors = book.vectors
    if isinstance(book, DifferentialCodebook):  # the change from block to block is conjugated
        vectors = book.matrices().reshape(book.size, -1)
    words = np.arange(0, book.size, max(book.size // 256, 1))
    nearest = [
        int(np.argmin(np.sum(np.abs(vectors - vectors[w].conj()) ** 2, axis=1))) for w in words
    ]
    return float(np.mean(book.words_to_bits(words) != book.words_to_bits(np.array(nearest))))


@dataclass(frozen=True)
class _Evidence:
    """Frames seen, those confirmed, and the chance of one to be so under the wrong spectrum."""

    frames: int
    confirmed: int
    chance: float


def _evidence(measured: MeasuredFrames, link: Link, share: float) -> _Evidence:
    columns = measured.columns
    checks = link.payload.check_width
    if checks:
        return _Evidence(measured.count, int(np.sum(columns["crc_ok"] == 1)), 2.0**-checks)
    bits, errors = columns["bits_compared"], columns["bit_errors"]
    few = (bits > 0) & (errors < share / 2 * bits)
    most = int(bits.max(initial=0))
    chance = float(scipy.stats.binom.cdf(np.ceil(share / 2 * most) - 1, most, share))
    return _Evidence(measured.count, int(few.sum()), chance if most else 1.0)


def _convincing(second: _Evidence, first: _Evidence) -> bool:
    if second.confirmed <= first.confirmed:
        return False
    chance = scipy.stats.binom.sf(second.confirmed - 1, second.frames, second.chance)
    return bool(chance < _CHANCE)


def look_both_ways(look: Look, link: Link) -> Iterator[MeasuredFrames]:
    """Frames by the spectrum that they confirm, the normal one when in doubt.

    Args:
        look: measures the recording, given "normal" or "inverted"; batches in order of time.
        link: link description.
    """
    _, held, rest = _believed(look, link)
    yield from held
    yield from rest


def believed_spectrum(look: Look, link: Link) -> str:
    """Which of the two `look_both_ways` takes: "normal" or "inverted"."""
    return _believed(look, link)[0]


def _believed(look: Look, link: Link) -> tuple[str, list[MeasuredFrames], Iterator[MeasuredFrames]]:
    """The spectrum, the batches looked at to tell, and those that follow."""
    first = look("normal")
    held, seen = _up_to_frames(first)
    share = conjugate_error_share(link)
    # Real words are their own conjugates: either way is right, and neither can be told.
    telling = share > 0 and (link.payload.has_reference or link.payload.check_width > 0)
    evidence = _evidence(seen, link, share) if seen is not None else None
    doubted = evidence is None or (telling and evidence.confirmed == 0)
    if doubted:
        second = look("inverted")
        held_second, seen_second = _up_to_frames(second)
        if seen_second is not None and (
            evidence is None or _convincing(_evidence(seen_second, link, share), evidence)
        ):
            return "inverted", held_second, second
    return "normal", held, first


def _up_to_frames(
    batches: Iterator[MeasuredFrames],
) -> tuple[list[MeasuredFrames], MeasuredFrames | None]:
    """Batches up to the first that has frames, and that one."""
    held = []
    for measured in batches:
        held.append(measured)
        if measured.count:
            return held, measured
    return held, None
