"""The contract of detectors, as a suite that runs over any of them.

    from spatiq.receiver.detector_contract import check_detector
    print(check_detector(my_detector))             # maximum likelihood is claimed
    print(check_detector(my_detector, exact=False))

Codebooks of all schemes, one to four receive channels; every decision of a detector that claims
maximum likelihood is held against an exhaustive search in double precision.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.codebooks import Codebook, DifferentialCodebook
from spatiq.signal.scheme_examples import scheme_examples

Detector = Callable[
    [NDArray[np.complex64], NDArray[np.complex128], float, Codebook], NDArray[np.int64]
]
# What single precision leaves open: metrics that agree to this share of their largest terms.
TIE = 1e-5
_CHANNELS = (1, 2, 4)
_WORDS = 120
_NOISE = 0.3


@dataclass(frozen=True)
class ContractReport:
    """What was tried.

    Attributes:
        kept: codebooks that the detector decided, the contract kept.
        refused: codebooks that it refused with an `InputError`.
    """

    kept: tuple[str, ...]
    refused: tuple[str, ...]

    def __str__(self) -> str:
        """Lines for people."""
        lines = [f"contract kept with {len(self.kept)} codebooks:"]
        lines += [f"  {name}" for name in self.kept]
        lines += [f"  refused: {name}" for name in self.refused]
        return "\n".join(lines)


def check_detector(
    detector: Detector, *, exact: bool = True, schemes: Sequence[str] = (), seed: int = 1
) -> ContractReport:
    """Put a detector through the contract.

    Args:
        detector: see `spatiq.receiver.detection`.
        exact: it claims the decisions of an exhaustive search; otherwise only what it must do
            without noise and the form of what it returns are looked at.
        schemes: registered names of those to be tried; none: all.
        seed: of the made-up channels, words and noise.

    Raises:
        InputError: what the detector does that it must not do; or that it refuses every codebook.
    """
    kept, refused = [], []
    examples = scheme_examples()
    for scheme in schemes:
        if scheme not in examples:
            raise InputError("detector contract", "schemes", scheme, ", ".join(examples))
    chosen = {s: books for s, books in examples.items() if not schemes or s in schemes}
    for scheme, books in chosen.items():
        for i, book in enumerate(books):
            name = f"{scheme} {i}: {book.antennas} antennas, {book.bits} bits"
            try:
                detector(*_received(book, 2, 0.0, 0, seed)[1:])
            except InputError:
                refused.append(name)
                continue
            for channels in _CHANNELS:
                _check(detector, book, channels, exact, seed, f"{name}, {channels} channels")
            kept.append(name)
    if not kept:
        raise InputError("detector contract", "", "every codebook refused", "one that is accepted")
    return ContractReport(tuple(kept), tuple(refused))


_Case = tuple[NDArray[np.int64], NDArray[np.complex64], NDArray[np.complex128], float, Codebook]


def _received(book: Codebook, channels: int, noise: float, words: int, seed: int) -> _Case:
    """Words sent, and the detector's arguments."""
    rng = np.random.default_rng((seed, channels, book.size, words))

    def normal(*shape: int) -> NDArray[np.complex128]:
        parts = rng.standard_normal((2, *shape)) * np.sqrt(0.5)
        return np.asarray(parts[0] + 1j * parts[1])

    channel = normal(channels, book.antennas)
    sent = rng.integers(0, book.size, words)
    x = book.vectors[book.carried(sent[None])[0]]
    y = x @ channel.T + np.sqrt(noise) * normal(len(x), channels)
    return sent, y.astype(np.complex64), channel, max(noise, 1e-6), book


def _check(
    detector: Detector, book: Codebook, channels: int, exact: bool, seed: int, name: str
) -> None:
    def fault(found: str, expected: str) -> InputError:
        return InputError("detector contract", name, found, expected)

    sent, y, channel, noise, _ = _received(book, channels, 0.0, _WORDS, seed)
    if exact or channels > 1:  # one channel alone does not tell directions apart
        words = np.asarray(detector(y, channel, noise, book))
        if not np.array_equal(words, sent):
            raise fault(f"{_differing(words, sent)} words wrong without noise", "none wrong")
    sent, y, channel, noise, _ = _received(book, channels, _NOISE, _WORDS, seed)
    before = y.copy(), channel.copy()
    words = np.asarray(detector(y, channel, noise, book))
    if not (np.array_equal(y, before[0]) and np.array_equal(channel, before[1])):
        raise fault("arguments changed", "arguments left as they are")
    inside = words.size == 0 or 0 <= words.min() <= words.max() < book.size
    if words.shape != sent.shape or not np.issubdtype(words.dtype, np.integer) or not inside:
        found = f"{words.dtype} array of shape {words.shape}"
        raise fault(found, f"integer words 0..{book.size - 1} of shape {sent.shape}")
    none = np.asarray(detector(y[: book.block if book.block > 1 else 0], channel, noise, book))
    if none.shape != (0,):
        raise fault(f"shape {none.shape} for no words", "shape (0,)")
    half = (_WORDS // 2) * book.block
    overlap = book.block if book.block > 1 else 0
    parts = (
        detector(y[: half + overlap], channel, noise, book),
        detector(y[half:], channel, noise, book),
    )
    if not np.array_equal(np.concatenate(parts), words):
        raise fault("other words when a run is cut in two", "the same words")
    if exact:
        worse = _worse_than_exhaustive(words, y, channel, book)
        if worse:
            raise fault(f"{worse} words farther than the nearest", "the nearest words")


def _differing(words: NDArray[np.int64], sent: NDArray[np.int64]) -> int:
    return int(np.sum(words != sent)) if np.shape(words) == sent.shape else sent.size


def _worse_than_exhaustive(
    words: NDArray[np.int64],
    y: NDArray[np.complex64],
    channel: NDArray[np.complex128],
    book: Codebook,
) -> int:
    """Decisions that an exhaustive search in double precision shows to be wrong."""
    metric = distances(y, channel, book)
    taken = np.take_along_axis(metric, words[:, None], axis=1)[:, 0]
    return int(np.sum(taken > metric.min(axis=1) + TIE * (1 + metric.max(axis=1))))


def distances(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], book: Codebook
) -> NDArray[np.float64]:
    """||y - H x||^2, in differential form ||Y_t - Y_{t-1} X||^2, of every word: float64 (n, C)."""
    given = y.astype(np.complex128)
    if isinstance(book, DifferentialCodebook):
        blocks = given.reshape(-1, book.block, y.shape[1]).transpose(0, 2, 1)
        ideal = np.einsum("trm,cmj->tcrj", blocks[:-1], book.matrices())
        return np.asarray(np.sum(np.abs(blocks[1:, None] - ideal) ** 2, axis=(2, 3)))
    ideal = book.vectors @ channel.T
    return np.asarray(np.sum(np.abs(given[:, None] - ideal) ** 2, axis=2))
