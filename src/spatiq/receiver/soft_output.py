"""Soft-decision output: a log-likelihood ratio for every payload bit, for decoders to work with.

Definition (J. Hagenauer, E. Offer, L. Papke, "Iterative decoding of binary block and convolutional
codes", IEEE Trans. Inf. Theory 42(2), 1996; from memory), with words sent equally often:

    L(bit) = ln P(bit = 0 | y) / P(bit = 1 | y)
           = ln sum p(y | word with bit 0) - ln sum p(y | word with bit 1)

Natural logarithm; POSITIVE means that 0 is the likelier value. "exact" sums over all words;
"max-log" keeps the largest term of each sum and differs by no more than ln(C/2). A bit whose ratio
is L, decided by its sign, is wrong with probability 1 / (1 + exp|L|).

The channel's error. What is known is an estimate G of the channel H whose errors have variance v_a
in the entries of column a. Taken as if it were H, it makes every ratio too large: a receiver too
sure of itself. Here the density of y is averaged over what H may be. With errors that are Gaussian
and independent, and nothing assumed of H beyond the estimate,

    y | word ~ CN(G x, N),   N = N0 / amplitude^2 + sum over a of |x_a|^2 v_a

(the detection metric of G. Taricco, E. Biglieri, "Space-time decoding with imperfect channel
estimation", IEEE Trans. Wireless Commun. 4(4), 2005, from memory, with a flat prior in the place of
theirs: no fading law is assumed, a laboratory's channel may stand still). N differs between words
where their powers or the v_a differ; the density's norm, N^-Nr, is kept. The amplitude is the
payload's power factor, by which the symbols have been divided: the noise in them is divided too,
the channel's error is not.

What is left out makes the ratios a little too large still (measured; see
tests/receiver/test_receiver_soft_calibration.py). A fading channel's prior would shrink the
estimate: with 4 unit pilots at 4 dB, up to a third more bits than said are wrong at |L| = 4 to 6,
up to 5 % more below |L| = 1. And the refit's channel comes from the payload, too: each period's
noise has moved it towards the word that was taken for sent, and words in doubt count with their
full energy. With 4 antennas and 128 words a frame, at a BER of 4 to 12 %, 9 to 27 % more bits than
said are wrong at |L| = 2 to 6, up to 4 % more below |L| = 1; with 32 words a frame up to 46 % and
5 %.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.receiver.frame_batch import FrameBatch, decision_runs
from spatiq.receiver.options import SOFT_OUTPUTS
from spatiq.receiver.soft_output_kernels import likelihood_ratios
from spatiq.signal.codebooks import Codebook


def log_likelihood_ratios(
    y: NDArray[np.complex64],
    channel: NDArray[np.complex128],
    noise: float,
    codebook: Codebook,
    *,
    kind: str = "exact",
    variance: NDArray[np.float64] | None = None,
    amplitude: NDArray[np.float64] | None = None,
) -> NDArray[np.float32]:
    """ln P(bit = 0 | y) / P(bit = 1 | y) of every bit; positive when 0 is the likelier value.

    Finite at any SNR: N0 is taken to be at least 1e-12 of the received words' mean power, which is
    what single precision leaves of a capture without noise.

    Args:
        y: complex64, shape (K, Nr); received vectors, divided by their amplitude.
        channel: complex128, shape (Nr, Nt).
        noise: N0 per complex component, before the division.
        codebook: C words of b bits.
        kind: "exact" or "max-log".
        variance: float64, shape (Nt,); error variance of each coefficient of `channel`, by transmit
            antenna; None for a channel that is known.
        amplitude: float64, shape (K,); what y was divided by; None for 1.

    Returns:
        float32, shape (K * b,): bits in the order sent, the first bit of a word first.

    Raises:
        InputError: for another kind.
    """
    if kind not in SOFT_OUTPUTS[1:]:
        raise InputError("soft output", "kind", kind, " or ".join(SOFT_OUTPUTS[1:]))
    received = (channel @ codebook.vectors.T).astype(np.complex64)
    parts = (
        np.ascontiguousarray(received.real),
        np.ascontiguousarray(received.imag),
        np.sum(np.abs(received) ** 2, axis=0),
    )
    given = np.zeros(codebook.antennas) if variance is None else variance
    scale = np.ones(y.shape[0]) if amplitude is None else amplitude
    labels = codebook.words_to_bits(np.arange(codebook.size)).reshape(codebook.size, codebook.bits)
    llr = np.empty(y.shape[0] * codebook.bits, np.float32)
    likelihood_ratios(
        np.ascontiguousarray(y, np.complex64),
        parts,
        noise,
        np.ascontiguousarray(scale, np.float64),
        np.abs(codebook.vectors) ** 2 @ given,
        labels,
        kind == "exact",
        llr,
    )
    return llr


def check_soft_output(codebook: Codebook) -> None:
    """There are no ratios for words of several periods.

    Raises:
        InputError: for the differential form.
    """
    if codebook.block > 1:
        raise InputError(
            "receiver options", "soft_output", codebook.scheme, "none with the differential form"
        )


@dataclass(frozen=True, eq=False)
class SoftOutput:
    """The stage after detection.

    Attributes:
        codebook: C words of b bits.
        amplitude: float64, shape (Kp,); power factor of each payload word.
        kind: "exact" or "max-log".
    """

    codebook: Codebook
    amplitude: NDArray[np.float64]
    kind: str

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill llr, the channel's error included: its variance is N0 over the energy behind it."""
        bits = batch.symbols.shape[1] * self.codebook.bits
        batch.llr = np.empty((batch.count, bits), np.float32)
        energy = batch.antenna_energy
        # Antennas that the link never uses have no energy, and no part in any word.
        share = np.divide(1.0, energy, out=np.zeros_like(energy), where=energy > 0)
        width = self.codebook.bits
        for i in range(batch.count):
            for run, y, channel in decision_runs(batch, i):
                batch.llr[i, run.start * width : run.stop * width] = log_likelihood_ratios(
                    y,
                    channel,
                    float(batch.noise[i]),
                    self.codebook,
                    kind=self.kind,
                    variance=batch.noise[i] * share[i],
                    amplitude=self.amplitude[run],
                )
        return batch
