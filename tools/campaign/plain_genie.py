"""A genie's decisions with plain arrays: maximum likelihood, everything known but the bits.

Deliberately apart from the receiver's own detectors.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.signal.codebooks import Codebook
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.truth import Truth

Complex = NDArray[np.complex128]
Ints = NDArray[np.int64]
_TOGETHER = 256  # symbol periods decided at once


def decide(y: Complex, channel: Complex, codebook: Codebook, whitener: Complex | None) -> Ints:
    """Nearest received codeword of each period.

    Args:
        y: complex128 (K, Nr).
        channel: complex128 (Nr, Nt), or (K, Nr, Nt) when it moves.
        codebook: codewords.
        whitener: complex128 (Nr, Nr), W with W R W^H = 1 for noise of covariance R; None: white.
    """
    if whitener is not None:
        y, channel = y @ whitener.T, whitener @ channel
    words = np.empty(len(y), np.int64)
    for first in range(0, len(y), _TOGETHER):
        part = slice(first, first + _TOGETHER)
        here = channel[part] if channel.ndim == 3 else channel[None]
        received = here @ codebook.vectors.T  # (K or 1, Nr, C)
        distance = np.sum(np.abs(y[part, :, None] - received) ** 2, axis=1)
        words[part] = np.argmin(distance, axis=1)
    return words


def genie_words(
    truth: Truth,
    samples: NDArray[np.complex64],
    *,
    whiten: bool = False,
    dead: tuple[int, ...] = (),
) -> Ints:
    """Words of all frames, int64 (F, Kp).

    Args:
        truth: truth of the recording.
        samples: complex64 (Nr, n_clock), lost samples as zeros.
        whiten: whether the covariance of noise and interference over the channels is used, as it is
            over all symbols of the recording.
        dead: receive channels that carry nothing.
    """
    link = truth.link
    payload = link.layout.payload_index
    alive = np.setdiff1d(np.arange(truth.H.shape[1]), dead)
    symbols = genie_symbols(truth, samples)[:, :, alive]
    whitener = None
    if whiten:
        rest = (symbols - truth.received_symbols()[:, :, alive]).reshape(-1, alive.size)
        whitener = np.linalg.inv(np.linalg.cholesky(rest.T @ rest.conj() / len(rest)))
    words = []
    for f in range(truth.frames):
        channel = truth.H[f] if truth.moving is None else truth.channels(f)[payload]
        channel = channel[..., alive, :]
        words.append(decide(symbols[f, payload], channel, link.codebook, whitener))
    return np.array(words)


def wrong_bits(words: Ints, sent: Ints) -> Ints:
    """Wrong bits of each frame, int64 (F,)."""
    difference = (words ^ sent).astype(np.uint64)
    return np.asarray(np.bitwise_count(difference).sum(axis=1), np.int64)
