"""When frames start."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link

Spacing = str | float | tuple[float, float]


def frame_starts(
    link: Link,
    frames: int,
    spacing: Spacing,
    first: float,
    symbol_spacing: float,
    rng: np.random.Generator,
    pause: tuple[int, float] | None = None,
) -> NDArray[np.float64]:
    """Sample instants of the frames' first symbols, float64 (F,), ascending.

    Args:
        link: the link description.
        frames: F.
        spacing: "link": the link's frame period, back to back when it states none; "back-to-back";
            a number: silence after each frame in symbol periods (any real number, 0 or more); two
            numbers: silence drawn uniformly between them after each frame.
        first: start of the first frame, samples.
        symbol_spacing: samples per symbol period as transmitted, clock offset included.
        rng: for random silences.
        pause: (every, silence): after so many frames, further silence of so many symbol periods.

    Raises:
        InputError: unknown word, negative silence, a range that runs backwards, or a pause after no
            frame.
    """
    length = float(link.layout.length)
    if isinstance(spacing, str):
        if spacing not in ("link", "back-to-back"):
            expected = "link, back-to-back, a number of symbol periods, or two"
            raise InputError("frame spacing", "", repr(spacing), expected)
        period = length
        if spacing == "link" and link.period_symbols is not None:
            period = link.period_symbols
        periods = period * np.arange(frames)
    else:
        low, high = spacing if isinstance(spacing, tuple) else (spacing, spacing)
        if not 0.0 <= low <= high < 1e9:
            raise InputError(
                "frame spacing", "", spacing, "silences from 0 to 1e9 symbol periods, lower first"
            )
        if isinstance(spacing, tuple):
            silences = rng.uniform(low, high, frames)
            periods = np.concatenate([[0.0], np.cumsum(length + silences)[:-1]])
        else:
            periods = (length + low) * np.arange(frames)
    if pause is not None:
        every, silence = pause
        if every < 1 or not 0.0 <= silence < 1e12:
            expected = "1 or more frames, then 0 to 1e12 symbol periods"
            raise InputError("pause", "", pause, expected)
        periods = periods + (np.arange(frames) // every) * silence
    return np.asarray(first + periods * symbol_spacing, np.float64)
