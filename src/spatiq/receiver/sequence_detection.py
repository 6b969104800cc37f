"""Sequence detection: the words of a whole run of symbol periods, decided together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.causal_form import causal_form, normal_equations
from spatiq.receiver.fir_channel import Complex, Window
from spatiq.receiver.link_tables import sparse_vectors
from spatiq.receiver.sequence_kernels import survivor_search
from spatiq.signal.codebooks import Codebook


@dataclass(frozen=True, eq=False)
class SequenceDetector:
    """Decides runs of words on a dispersive channel.

    Attributes:
        codebook: the words.
        survivors: sequences kept from one symbol period to the next; with C^memory or more of them
            the result is the maximum-likelihood sequence.
    """

    codebook: Codebook
    survivors: int

    def __call__(
        self,
        received: Complex,
        taps: Complex,
        window: Window,
        noise: float,
        amplitude: NDArray[np.float64],
        heard: NDArray[np.bool_] | None = None,
    ) -> NDArray[np.int64]:
        """Words of N symbol periods, int64 (N,), -1 where nothing unknown is sent.

        Args:
            received: complex128 (N, Nr); what known symbols send, and symbols outside of the run,
                is taken out beforehand.
            taps, window: channel (L, Nr, Nt).
            noise: N0.
            amplitude: (N,); of each period's word; 0 where nothing unknown is sent.
            heard: bool (N,); which received vectors count; None: all.
        """
        heard = np.ones(amplitude.size, np.bool_) if heard is None else heard
        used = np.flatnonzero(np.any(self.codebook.vectors != 0, axis=0))
        vectors = self.codebook.vectors[:, used]
        equations = normal_equations(received, taps[:, :, used], window, amplitude, heard)
        power = float(np.mean(np.sum(np.abs(taps) ** 2, axis=(0, 1))))
        load = max(noise, 1e-6 * power, 1e-30)
        z, form = causal_form(equations, load)
        # Words never meet more states than there are.
        states = float(self.codebook.size) ** window.memory
        decided = np.empty(amplitude.size, np.int64)
        survivor_search(
            z,
            form,
            sparse_vectors(vectors).parts,
            load * np.sum(np.abs(vectors) ** 2, axis=1),
            (amplitude != 0).astype(np.uint8),
            int(min(self.survivors, max(states, 1.0))),
            decided,
        )
        return decided
