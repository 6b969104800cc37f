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

# Payload periods looked at: enough to tell a tenth of the noise, that is S + 51 Nr.
TESTED = 256
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
        follows: uint8 (n,); 1 where a payload period follows another at once; n of them.
        floor: share of the signal that counts as the pulse's own.
    """

    words: SparseVectors
    inverse: NDArray[np.complex128]
    rank: int
    follows: NDArray[np.uint8]
    floor: float

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill `echoes`."""
        shape = (batch.count, *batch.channel.shape[1:])
        before, behind = np.empty(shape, np.complex128), np.empty(shape, np.complex128)
        sums = np.empty((batch.count, 3))
        count = self.follows.size
        for i in range(batch.count):
            neighbour_sums(
                batch.symbols[i, :count],
                batch.channel[i],
                batch.words[i, :count],
                self.words.parts,
                self.follows,
                before[i],
                behind[i],
                sums[i],
            )
        batch.echoes = self.judge(before, behind, sums)
        return batch

    def judge(
        self,
        before: NDArray[np.complex128],
        behind: NDArray[np.complex128],
        sums: NDArray[np.float64],
    ) -> NDArray[np.bool_]:
        """Which of F frames are marked; arrays of `neighbour_sums`, frames first."""
        channels, periods = before.shape[1], self.follows.size
        statistic, explained = self.statistic(before, behind, sums)
        noise = sums[:, 1] / periods
        # What noise alone explains is no leak.
        leak = explained / np.maximum(sums[:, 0], 1) - 2 * self.rank * noise / periods
        least = np.maximum(SHARE_OF_NOISE * noise, self.floor * sums[:, 2] / periods)
        limit = float(scipy.stats.chi2.isf(CHANCE, 4 * channels * self.rank))
        return np.asarray((statistic > limit) & (leak > least), np.bool_)

    def statistic(
        self,
        before: NDArray[np.complex128],
        behind: NDArray[np.complex128],
        sums: NDArray[np.float64],
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """S, and the energy that the neighbours explain; (F,), 0 where there is nothing to tell."""
        power = sums[:, 1] / (self.follows.size * before.shape[1])
        known = (sums[:, 0] > 0) & (power > 0)
        explained = np.zeros(len(sums))
        for crossed in (before, behind):
            energy = np.sum((crossed @ self.inverse) * crossed.conj(), axis=(1, 2)).real
            explained += energy / np.maximum(sums[:, 0], 1)
        explained = np.where(known, explained, 0.0)
        return 2.0 * explained / np.where(known, power, 1.0), explained


def echo_test(link: Link, samples_per_symbol: float) -> EchoTest:
    """The stage for a link whose words are single periods."""
    vectors = link.codebook.vectors
    gram = vectors.T @ vectors.conj() / len(vectors)
    inverse = np.linalg.pinv(gram, rcond=1e-9, hermitian=True)
    payload = link.layout.payload_index
    follows = np.zeros(payload.size, np.uint8)
    follows[1:] = np.diff(payload) == 1
    follows = follows[:TESTED]
    # Where a pulse is cut off, its floor moves with the instants: the worst, and twice that.
    floors = [isi_floor(link.pulse, samples_per_symbol, t) for t in (0.0, 0.25, 0.5)]
    return EchoTest(
        words=sparse_vectors(vectors),
        inverse=np.asarray(inverse, np.complex128),
        rank=int(np.linalg.matrix_rank(gram, tol=1e-9, hermitian=True)),
        follows=follows,
        floor=max(2.0 * 10 ** (max(floors) / 10), SHARE_OF_SIGNAL),
    )
