"""Frames as words and as transmit vectors, by frame number."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.link.blocks import fill_blocks
from spatiq.link.description import Link


def frame_words(
    link: Link, frame_numbers: NDArray[np.int64], data_bits: NDArray[np.uint8] | None = None
) -> NDArray[np.int64]:
    """Payload words of frames, shape (F, Kw): what selects the transmit vectors.

    Args:
        link: the link description.
        frame_numbers: int64, shape (F,); number of each frame, counted from 0.
        data_bits: uint8, shape (F, link.payload.data_bits); the bits of the "data" fields in order,
            needed only when the payload has such fields.
    """
    bits = link.payload.encode(np.asarray(frame_numbers, np.int64), data_bits)
    words: NDArray[np.int64] = link.codebook.bits_to_words(bits)
    return words


def vectors_of_words(link: Link, words: NDArray[np.int64]) -> NDArray[np.complex128]:
    """Frames that carry the given payload words.

    Args:
        link: the link description.
        words: int64, shape (F, Kw).

    Returns:
        complex128, shape (F, K, Nt): vector of every symbol period, section power included.
    """
    layout = link.layout
    frames = np.repeat(layout.known[None], len(words), axis=0)
    amplitude = layout.payload_amplitude[:, None]
    frames[:, layout.payload_index] = link.codebook.vectors[link.carried(words)] * amplitude
    fill_blocks(frames, layout.blocks)
    return frames


def frame_vectors(
    link: Link, frame_numbers: NDArray[np.int64], data_bits: NDArray[np.uint8] | None = None
) -> NDArray[np.complex128]:
    """Transmit vectors of frames by frame number.

    Args:
        link: the link description.
        frame_numbers: int64, shape (F,).
        data_bits: uint8, shape (F, link.payload.data_bits), or None when there are none.

    Returns:
        complex128, shape (F, K, Nt).

    Raises:
        InputError: data bits missing, or of the wrong number (raised by the payload format).
    """
    return vectors_of_words(link, frame_words(link, frame_numbers, data_bits))


def mean_payload_power(link: Link) -> float:
    """Mean over payload periods and equiprobable words of the total power sent, sum |x|^2.

    With independent channel coefficients of unit mean power this is also the mean signal power at a
    receive antenna.
    """
    per_word = float(np.mean(np.sum(np.abs(link.codebook.vectors) ** 2, axis=1)))
    return per_word * float(np.mean(link.layout.payload_amplitude**2))


def received_payload_power(link: Link, channels: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Mean payload power per receive antenna behind given channels, over equiprobable words.

    Args:
        link: the link description.
        channels: complex, shape (F, Nr, Nt).

    Returns:
        float64, shape (F,): mean over words of ||H x||^2 / Nr.
    """
    vectors = link.codebook.vectors
    # mean ||H x||^2 = trace(H R H^H), R the mean of x x^H: no need to multiply all vectors out.
    mean_outer = vectors.T @ vectors.conj() / len(vectors)
    power = np.einsum("fra,ab,frb->f", channels, mean_outer, channels.conj(), optimize=True).real
    scale = float(np.mean(link.layout.payload_amplitude**2)) / channels.shape[1]
    return np.asarray(power * scale, dtype=np.float64)
