"""Detection: which word was sent in each payload period.

A detector is a function

    detect(y, channel, noise, codebook) -> words

with y complex64 (K, Nr), channel complex128 (Nr, Nt), noise N0, codebook a `Codebook`, and words
int64 (K,). In differential form y is a reference block and a block for each word, words int64
(K / Nt - 1,), and the channel means nothing. What a detector cannot do it refuses with an
`InputError`.

To add one: a file of its own, and an entry in `DETECTORS`: the contract suite runs over them. One's
own from outside the package is named "module:function" in the receiver options, and put through the
same suite by

    from spatiq.receiver.detector_contract import check_detector
    print(check_detector(my_detector))
"""

from __future__ import annotations

import importlib
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.receiver.differential_detection import detect_blocks
from spatiq.receiver.exhaustive_search import nearest_vectors
from spatiq.receiver.frame_batch import FrameBatch, decision_runs
from spatiq.receiver.project_and_slice import project_and_slice
from spatiq.receiver.tree_search import tree_search
from spatiq.receiver.two_step import two_step
from spatiq.signal.codebooks import Codebook, DifferentialCodebook

Detector = Callable[
    [NDArray[np.complex64], NDArray[np.complex128], float, Codebook], NDArray[np.int64]
]


def maximum_likelihood(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], noise: float, codebook: Codebook
) -> NDArray[np.int64]:
    """Nearest received codeword: argmin over c of ||y - H x[c]||^2.

    In the differential form, the change of block that fits best: the channel is not used.
    """
    if isinstance(codebook, DifferentialCodebook):
        return detect_blocks(y, codebook)
    return nearest_vectors(y, channel, codebook.vectors)


DETECTORS: dict[str, Detector] = {
    "maximum-likelihood": maximum_likelihood,
    "project-and-slice": project_and_slice,
    "tree-search": tree_search,
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


def check_detector_applies(name: str, codebook: Codebook, channels: int = 2) -> None:
    """A registered detector that cannot decide a codebook says so before anything is received.

    Raises:
        InputError: what the detector refuses.
    """
    # Maximum likelihood applies to all; at first use its kernel is compiled elsewhere meanwhile.
    if name in DETECTORS and name != "maximum-likelihood":
        nothing = np.empty((0, channels), np.complex64)
        flat = np.eye(channels, codebook.antennas, dtype=np.complex128)
        DETECTORS[name](nothing, flat, 1.0, codebook)


@dataclass(frozen=True, eq=False)
class Detection:
    """The stage: words of all payload periods by one detector, and by two-step to compare.

    Attributes:
        codebook: C words.
        detector: see above.
        compare_two_step: whether to run two-step beside it, where it applies.
        runs: payload periods of each section; None: all in one.
    """

    codebook: Codebook
    detector: Detector
    compare_two_step: bool
    runs: tuple[int, ...] | None = None

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill words and words_two_step.

        Raises:
            InputError: when a detector of one's own returns something else than words.
        """
        if self.compare_two_step and self.codebook.single_antenna:
            batch.words_two_step = np.zeros_like(batch.words)
        for i in range(batch.count):
            words = self._frame(batch, i)
            _check_words(words, batch.words[i].shape, self.codebook.size)
            batch.words[i] = words
            if batch.words_two_step is not None:
                batch.words_two_step[i] = self._along(batch, i, two_step)
        return batch

    def _frame(self, batch: FrameBatch, i: int) -> NDArray[np.int64]:
        """Words of a frame; in differential form section by section, for each has its reference."""
        if self.codebook.block == 1 or self.runs is None:
            return self._along(batch, i, self.detector)
        y, channel, noise = batch.symbols[i], batch.channel[i], float(batch.noise[i])
        parts = np.split(y, np.cumsum(self.runs)[:-1])
        return np.concatenate([self.detector(p, channel, noise, self.codebook) for p in parts])

    def _along(self, batch: FrameBatch, i: int, detector: Detector) -> NDArray[np.int64]:
        """Words of a frame, run by run of the channel where it moves."""
        noise = float(batch.noise[i])
        parts = [
            np.asarray(detector(y, channel, noise, self.codebook))
            for _, y, channel in decision_runs(batch, i)
        ]
        return parts[0] if len(parts) == 1 else np.concatenate(parts)


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
