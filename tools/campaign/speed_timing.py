"""What is timed: the transform pass, measuring, the whole work of the command, and its stages."""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import TypeVar

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from campaign.speed_recordings import Made
from spatiq.link.loading import load_link
from spatiq.metrics.measuring import Measuring, measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.chain import chain_parts, standard_stages
from spatiq.receiver.framing import Framing
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import Recording, open_recording
from spatiq.results.hdf5 import ResultsWriter

TRANSFORM = 16_384
Samples = NDArray[np.complex64]
Value = TypeVar("Value")


def transform_blocks(made: Made) -> Samples:
    """All samples in blocks of one transform, complex64 (blocks, 16384); the rest is left out."""
    recording = open_recording(made.meta)
    whole = np.concatenate([b.samples for b in recording.blocks()], axis=1)
    count = whole.shape[1] // TRANSFORM
    return np.ascontiguousarray(whole[:, : count * TRANSFORM]).reshape(-1, TRANSFORM)


def transform_each(blocks: Samples) -> None:
    """Forward and inverse transform, one call for each block and direction."""
    for block in blocks:
        scipy.fft.ifft(scipy.fft.fft(block))


def transform_all(blocks: Samples) -> None:
    """The same, one call for all blocks of a direction."""
    scipy.fft.ifft(scipy.fft.fft(blocks, axis=-1), axis=-1)


def measure_all(made: Made) -> None:
    """The Python interface: every batch of measured frames."""
    for _ in measure(open_recording(made.meta), load_link(made.link)):
        pass


def whole_work(made: Made, results: Path) -> int:
    """All that `spatiq measure` does before it prints: open, measure, keep. Returns the frames."""
    recording, link, options = open_recording(made.meta), load_link(made.link), ReceiverOptions()
    summary = Summary(link, options.confidence)
    with ResultsWriter(results, link, recording, options, overwrite=True) as writer:
        for frames in measure(recording, link, options):
            writer.add(frames)
            summary.add(frames)
        writer.close(summary.as_dict())
    return summary.frames


def stages(made: Made, results: Path) -> dict[str, float]:
    """Seconds spent in each stage of the whole work, in order."""
    clock = _Clock()
    recording, link, options = open_recording(made.meta), load_link(made.link), ReceiverOptions()
    clock.timed("reading", partial(_read, recording))
    parts = chain_parts(recording, link, options)
    chain = standard_stages(link, options, parts)
    measuring = Measuring(recording, link, options)
    summary = Summary(link, options.confidence)
    framing = iter(Framing(recording, link, options, parts.bank, parts.tables, parts.pattern))
    with ResultsWriter(results, link, recording, options, overwrite=True) as writer:
        while (batch := clock.timed("framing", partial(next, framing, None))) is not None:
            for stage in chain:
                batch = clock.timed(type(stage).__name__.lower(), partial(stage, batch))
            measured = clock.timed("measuring", partial(measuring, batch))
            clock.timed("summary", partial(summary.add, measured))
            clock.timed("results", partial(writer.add, measured))
        figures = clock.timed("summary", summary.as_dict)
        clock.timed("closing", partial(writer.close, figures))
    # Reading was done twice: by itself, and within framing.
    clock.seconds["framing"] -= clock.seconds["reading"]
    return clock.seconds


def _read(recording: Recording) -> None:
    for _ in recording.blocks():
        pass


class _Clock:
    """Adds up the time of calls by name."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}

    def timed(self, name: str, call: Callable[[], Value]) -> Value:
        began = time.perf_counter()
        value = call()
        self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - began
        return value
