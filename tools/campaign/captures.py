"""Simulated captures as files, opened as the receiver opens them."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from spatiq.link.loading import Link
from spatiq.receiver.chain import receive
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.recording import Recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.simulation import SimulatedCapture
from spatiq.transmit.truth import Truth

Samples = NDArray[np.complex64]


@contextmanager
def recorded(capture: SimulatedCapture, samples: Samples | None = None) -> Iterator[Recording]:
    """The capture as a recording, for as long as the context lasts."""
    if samples is None:
        samples = capture.samples()
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder) / "capture"
        write_recording(base, samples, sample_rate=capture.sample_rate, captures=capture.captures())
        yield open_recording(base.with_suffix(".sigmf-meta"))


def places_found(recording: Recording, link: Link, options: ReceiverOptions) -> NDArray[np.float64]:
    """Starts of the frames that search and framing find, samples; no other stage runs."""
    batches = receive(recording, link, options, stages=[])
    return np.concatenate([batch.first_sample + batch.t0 for batch in batches])


def matched(truth: Truth, starts: NDArray[np.float64], within: float) -> NDArray[np.int64]:
    """For each frame sent, which of the starts found is it? -1: none within so many samples."""
    found = np.full(truth.frames, -1, np.int64)
    for f, start in enumerate(truth.recorded_starts):
        if starts.size and np.isfinite(start):
            nearest = int(np.argmin(np.abs(starts - start)))
            if abs(starts[nearest] - start) <= within:
                found[f] = nearest
    return found
