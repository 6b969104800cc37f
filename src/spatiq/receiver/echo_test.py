"""Warning from the data that a channel taken for flat is not: do symbols reach into neighbours?

What decisions leave of a period, e[k] = y[k] - H x[k], is noise on a flat channel and has nothing
to do with the words sent just before and just after. With n pairs of adjacent payload periods, G =
E[x x^H] and s the power of e in one receive channel,

    S = 2 / (n s) * sum over both neighbours of trace(C G^-1 C^H),  C = sum of e[k] x[k -+ 1]^H,

is then chi-square distributed with 4 Nr rank(G) degrees of freedom for large n (a Lagrange
multiplier test of no further taps: T. S. Breusch, "Testing for autocorrelation in dynamic linear
models", Austral. Econ. Papers 17, 1978, and L. G. Godfrey, Econometrica 46(6), 1978, from memory).

A frame is marked when S is beyond chance and the neighbours' energy is also worth minding: more
than a tenth of the noise, which an EVM would show as 0.4 dB, and more than the pulse itself leaves.
Timing that is off leaves the same trace as echoes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.echo_test_kernels import neighbour_sums
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.link_tables import SparseVectors, sparse_vectors
from spatiq.signal.pulses import isi_floor

CHANCE = 1e-6  # that a flat channel is taken for a dispersive one, per frame
SHARE_OF_NOISE = 0.1
# Rounding and timing of a capture without noise leave as much of the signal: -50 dB.
SHARE_OF_SIGNAL = 1e-5


@dataclass(frozen=True, eq=False)
class EchoTest:
    """The stage, after detection on a flat channel.

    Attributes:
        words: codeword vectors.
        inverse: complex128 (Nt, Nt); pseudo-inverse of G.
        rank: of G.
        follows: uint8 (Kp,); 1 where a payload period follows another at once.
        floor: share of the signal that counts as the pulse's own.
    """

    words: SparseVectors
    inverse: NDArray[np.complex128]
    rank: int
    follows: NDArray[np.uint8]
    floor: float

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill `echoes`."""
        channels, antennas = batch.channel.shape[1:]
        limit = float(scipy.stats.chi2.isf(CHANCE, 4 * channels * self.rank))
        before = np.empty((channels, antennas), np.complex128)
        behind = np.empty_like(before)
        sums = np.empty(3)
        found = np.zeros(batch.count, np.bool_)
        for i in range(batch.count):
            neighbour_sums(
                batch.symbols[i],
                batch.channel[i],
                batch.words[i],
                self.words.parts,
                self.follows,
                before,
                behind,
                sums,
            )
            statistic, leak = self._judge(before, behind, sums)
            noise = sums[1] / batch.words.shape[1]
            least = max(SHARE_OF_NOISE * noise, self.floor * sums[2] / batch.words.shape[1])
            found[i] = statistic > limit and leak > least
        batch.echoes = found
        return batch

    def _judge(
        self,
        before: NDArray[np.complex128],
        behind: NDArray[np.complex128],
        sums: NDArray[np.float64],
    ) -> tuple[float, float]:
        """S, and the neighbours' energy in a received vector, less what noise alone shows."""
        pairs, error, _ = sums
        channels, periods = before.shape[0], self.follows.size
        power = error / (periods * channels)
        if not (pairs > 0 and power > 0):
            return 0.0, 0.0
        explained = 0.0
        for crossed in (before, behind):
            explained += float(np.sum((crossed @ self.inverse) * crossed.conj()).real) / pairs
        chance = 2 * channels * self.rank * power
        return 2.0 * explained / power, (explained - chance) / pairs


def echo_test(link: Link, samples_per_symbol: float) -> EchoTest:
    """The stage for a link whose words are single periods."""
    vectors = link.codebook.vectors
    gram = vectors.T @ vectors.conj() / len(vectors)
    inverse = np.linalg.pinv(gram, rcond=1e-9, hermitian=True)
    payload = link.layout.payload_index
    follows = np.zeros(payload.size, np.uint8)
    follows[1:] = np.diff(payload) == 1
    # Where a pulse is cut off, its floor moves with the instants: the worst, and twice that.
    floors = [isi_floor(link.pulse, samples_per_symbol, t) for t in (0.0, 0.25, 0.5)]
    return EchoTest(
        words=sparse_vectors(vectors),
        inverse=np.asarray(inverse, np.complex128),
        rank=int(np.linalg.matrix_rank(gram, tol=1e-9, hermitian=True)),
        follows=follows,
        floor=max(2.0 * 10 ** (max(floors) / 10), SHARE_OF_SIGNAL),
    )
