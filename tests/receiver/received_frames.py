"""Recordings simulated, written to SigMF files, opened and received whole."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace

import numpy as np

from spatiq.link.description import Link
from spatiq.receiver.chain import receive
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.recording import Recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import SimulatedCapture, simulate

# Estimates that stages fill in, as collected by `collect`.
FIGURES = (
    "first_sample",
    "segment",
    "sync_metric",
    "clipped",
    "t0",
    "step",
    "carrier_estimate",
    "channel",
    "noise",
    "header_noise",
    "phase",
    "frequency_var",
    "timing_var",
    "step_var",
    "antenna_energy",
    "symbols",
    "words",
)


def record(folder: Path, link: Link, samples=None, captures=None, **choices):
    """A simulated capture in a SigMF file: the opened recording, and the capture."""
    capture = simulate(link, **choices)
    samples = capture.samples() if samples is None else samples(capture)
    written = write_recording(
        folder / "capture",
        np.nan_to_num(samples, posinf=0.0, neginf=0.0),
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        captures=captures,
        overwrite=True,
    )
    if not np.isfinite(samples).all():  # the writer refuses these, other recorders do not
        written.data_path.write_bytes(samples.T.astype("<c8").tobytes())
    return open_recording(written.meta_path), capture


def collect(recording: Recording, link: Link, options=None, **more) -> SimpleNamespace:
    """All frames of a recording in one: arrays of `FIGURES`, `start`, and the list of lost ones."""
    parts, lost = [], []
    for batch in receive(recording, link, options or ReceiverOptions(), **more):
        parts.append({name: np.array(getattr(batch, name)) for name in FIGURES})
        parts[-1]["two_step"] = (
            np.zeros_like(batch.words) if batch.words_two_step is None else batch.words_two_step
        )
        lost += batch.lost
    columns = {name: np.concatenate([p[name] for p in parts]) for name in parts[0]}
    return SimpleNamespace(
        **columns, start=columns["first_sample"] + columns["t0"], lost=lost, columns=columns
    )


def partner(frames: SimpleNamespace, capture: SimulatedCapture) -> np.ndarray:
    """Index of the simulated frame that each received one is."""
    starts = capture.truth.starts
    found = np.array([int(np.argmin(np.abs(starts - s))) for s in frames.start], int)
    sps = capture.truth.samples_per_symbol
    assert np.all(np.abs(starts[found] - frames.start) < sps / 2)
    assert np.unique(found).size == found.size
    return found


def genie_words(capture: SimulatedCapture, samples=None) -> np.ndarray:
    """Maximum-likelihood decisions at the true timing, carrier and channel, (F, Kp)."""
    truth = capture.truth
    samples = capture.samples() if samples is None else samples
    y = genie_symbols(truth, samples)[:, truth.link.layout.payload_index]
    y = y / truth.link.layout.payload_amplitude[:, None]
    book = truth.link.codebook
    return np.stack(
        [
            maximum_likelihood(y[i].astype(np.complex64), truth.H[i], truth.N0, book)
            for i in range(truth.frames)
        ]
    )


def bit_errors(link: Link, one: np.ndarray, other: np.ndarray) -> int:
    bits = link.codebook.words_to_bits
    return int(np.count_nonzero(bits(one) != bits(other)))
