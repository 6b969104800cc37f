"""Random bits for "data" fields: content that the receiver cannot know."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.transmit.randomness import Purpose, generator

# Drawn for this many frames at a time, so that any frame's bits can be had alone.
FRAMES_TOGETHER = 64


def random_data_bits(link: Link, seed: int, first: int, stop: int) -> NDArray[np.uint8] | None:
    """Data bits of frames first..stop-1, counted from the first frame sent.

    Args:
        link: the link description.
        seed: the same seed gives the same bits, however they are asked for.
        first: first frame.
        stop: frame after the last one.

    Returns:
        uint8, shape (stop - first, link.payload.data_bits); None when there is no data field.
    """
    width = link.payload.data_bits
    if width == 0:
        return None
    begin = first // FRAMES_TOGETHER
    drawn = [np.zeros((0, width), np.uint8)]
    for together in range(begin, -(-stop // FRAMES_TOGETHER)):
        rng = generator(seed, Purpose.DATA, together)
        drawn.append(rng.integers(0, 2, (FRAMES_TOGETHER, width), np.uint8))
    offset = begin * FRAMES_TOGETHER
    return np.concatenate(drawn)[first - offset : stop - offset]
