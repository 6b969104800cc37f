"""Detection: which word was sent in each payload period.

A detector is a function

    detect(y, channel, noise, codebook) -> words

with y complex64 (K, Nr), channel complex128 (Nr, Nt), noise N0, codebook a `Codebook`, and words
int64 (K,). To add one: enter it in `DETECTORS`. One's own from outside the package is named
"module:function" in the receiver options.

Sources: maximum likelihood: J. Jeganathan, A. Ghrayeb, L. Szczecinski, "Spatial modulation: optimal
detection and performance analysis", IEEE Commun. Lett. 12(8), 2008. Two-step: R. Mesleh et al.,
"Spatial modulation", IEEE Trans. Veh. Technol. 57(4), 2008, with the metric divided by the norm of
the channel column, as it must be when the columns differ in norm.
"""

from __future__ import annotations

import importlib
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.receiver.detection_kernels import detect_maximum_likelihood, detect_two_step
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.signal.codebooks import Codebook

Detector = Callable[
    [NDArray[np.complex64], NDArray[np.complex128], float, Codebook], NDArray[np.int64]
]


def maximum_likelihood(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], noise: float, codebook: Codebook
) -> NDArray[np.int64]:
    """Nearest received codeword: argmin over c of ||y - H x[c]||^2."""
    received = (channel @ codebook.vectors.T).astype(np.complex64)
    words = np.empty(y.shape[0], np.int64)
    detect_maximum_likelihood(
        y,
        np.ascontiguousarray(received.real),
        np.ascontiguousarray(received.imag),
        np.sum(np.abs(received) ** 2, axis=0),
        words,
    )
    return words


def two_step(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], noise: float, codebook: Codebook
) -> NDArray[np.int64]:
    """Antenna set by maximum-ratio combining, then the symbol given the set.

    Raises:
        InputError: for codebooks in which a set has more than one active antenna.
    """
    plan = _two_step_plan(codebook)
    columns = np.ascontiguousarray(channel[:, plan.antennas].T).astype(np.complex64)
    words = np.empty(y.shape[0], np.int64)
    detect_two_step(y, columns, plan.members, plan.counts, plan.values, words)
    return words


@dataclass(frozen=True, eq=False)
class _TwoStepPlan:
    """Words of each antenna (A, C), how many (A,), the antennas (A,), symbol of each word (C,)."""

    members: NDArray[np.int64]
    counts: NDArray[np.int64]
    antennas: NDArray[np.int64]
    values: NDArray[np.complex64]


@lru_cache(maxsize=8)
def _two_step_plan(codebook: Codebook) -> _TwoStepPlan:
    if any(len(s) != 1 for s in codebook.antenna_sets):
        raise InputError(
            "receiver options", "detector", "two-step", "one active antenna per symbol period"
        )
    sets = len(codebook.antenna_sets)
    members = np.full((sets, codebook.size), -1, np.int64)
    counts = np.zeros(sets, np.int64)
    for c in range(codebook.size):
        s = codebook.set_index[c]
        members[s, counts[s]] = c
        counts[s] += 1
    antennas = np.array([s[0] for s in codebook.antenna_sets], np.int64)
    values = codebook.vectors[np.arange(codebook.size), antennas[codebook.set_index]]
    return _TwoStepPlan(members, counts, antennas, values.astype(np.complex64))


DETECTORS: dict[str, Detector] = {
    "maximum-likelihood": maximum_likelihood,
    "two-step": two_step,
}


def find_detector(name: str) -> Detector:
    """A registered detector, or one's own as "module:function".

    Raises:
        InputError: when there is none of that name.
    """
    if name in DETECTORS:
        return DETECTORS[name]
    known = ", ".join(DETECTORS) + ', or "module:function"'
    module, _, function = name.partition(":")
    if not module or not function or module.startswith("."):
        raise InputError("receiver options", "detector", name, known)
    try:
        found = getattr(importlib.import_module(module), function)
    except (ImportError, AttributeError) as error:
        raise InputError("receiver options", "detector", f"{name} ({error})", known) from error
    if not callable(found):
        raise InputError("receiver options", "detector", name, "a function")
    detector: Detector = found
    return detector


@dataclass(frozen=True, eq=False)
class Detection:
    """The stage: words of all payload periods by one detector, and by two-step to compare."""

    codebook: Codebook
    detector: Detector
    compare_two_step: bool

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill words and words_two_step.

        Raises:
            InputError: when a detector of one's own returns something else than words.
        """
        compare = self.compare_two_step and all(len(s) == 1 for s in self.codebook.antenna_sets)
        if compare:
            batch.words_two_step = np.zeros_like(batch.words)
        for i in range(batch.count):
            arguments = (batch.symbols[i], batch.channel[i], float(batch.noise[i]), self.codebook)
            words = np.asarray(self.detector(*arguments))
            _check_words(words, batch.words[i].shape, self.codebook.size)
            batch.words[i] = words
            if batch.words_two_step is not None:
                batch.words_two_step[i] = two_step(*arguments)
        return batch


def _check_words(words: NDArray[np.int64], shape: tuple[int, ...], size: int) -> None:
    integers = np.issubdtype(words.dtype, np.integer)
    if (
        words.shape != shape
        or not integers
        or (words.size and not 0 <= words.min() <= words.max() < size)
    ):
        raise InputError(
            "detector",
            "",
            f"{words.dtype} array of shape {words.shape}",
            f"integer words 0..{size - 1} of shape {shape}",
        )
