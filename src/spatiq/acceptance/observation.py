"""What the figures are taken from: symbols sent beside symbols received, frame by frame.

Frames are found, synchronised and decided by the receiver, with none of the stages that would set
faults right. Samples are then read again: matched filter, least-squares fit (`fit.py`).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.calibration import Calibration
from spatiq.acceptance.fit import Fit, fit_frames
from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.metrics.frame_table import MeasuredFrames
from spatiq.metrics.measuring import measure
from spatiq.receiver.acquisition import Acquisition
from spatiq.receiver.chain import Progress, Stage, chain_parts, standard_stages
from spatiq.receiver.detection import Detection
from spatiq.receiver.differential_whitening import DifferentialWhitening
from spatiq.receiver.frame_batch import LostFrame
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.refit import Refit
from spatiq.receiver.tracking import Tracking
from spatiq.recording.recording import Recording
from spatiq.transmit.frames import vectors_of_words

# A payload that differs from the expected one in so many words is no reference for its symbols.
_FOREIGN = 0.3
TIMING_STEP = 0.02  # symbol periods between the instants that timing is fitted from
_KEPT = (Acquisition, Tracking, Refit, DifferentialWhitening, Detection)


@dataclass(frozen=True, eq=False)
class ObservedFrames:
    """F frames: what was sent, what was received.

    Attributes:
        columns: of the frame table, see `spatiq.metrics.frame_table`.
        measured: words decided and expected, receiver's channel.
        sent: complex128 (F, K, Nt); vectors taken to have been sent, section power included.
        aided: bool (F,); whether the payload's words are the expected ones, else the decided ones.
        fit: after the least-squares fit.
        carrier_hz: float64 (F,); carrier offset, of the fit.
        start_s: float64 (F,); instant of the first symbol, of the fit, seconds since the first
            sample.
        samples: complex64 (F, Nr, W); samples round each frame, carrier removed, calibrated.
        t0, step: float64 (F,); first symbol's place in them and symbol period, samples.
        symbol_s: nominal symbol period, seconds.
        lost: frames known to be lost before or between these.
    """

    columns: dict[str, NDArray[Any]]
    measured: MeasuredFrames
    sent: NDArray[np.complex128]
    aided: NDArray[np.bool_]
    fit: Fit
    carrier_hz: NDArray[np.float64]
    start_s: NDArray[np.float64]
    samples: NDArray[np.complex64]
    t0: NDArray[np.float64]
    step: NDArray[np.float64]
    symbol_s: float
    lost: list[LostFrame]

    @property
    def count(self) -> int:
        """Number of frames, F."""
        return int(self.aided.size)


def check_link(link: Link) -> None:
    """Refuse links whose payload has no symbol periods of its own.

    Raises:
        InputError: a multicarrier payload.
    """
    if link.layout.multicarrier:
        place = link.path or "link description"
        expected = "a payload sent symbol by symbol, to be verified"
        raise InputError(place, "frame.section", "a payload on subcarriers", expected)


def observe(
    recording: Recording,
    link: Link,
    options: ReceiverOptions,
    calibration: Calibration | None = None,
    *,
    progress: Callable[[Progress], None] | None = None,
) -> Iterator[ObservedFrames]:
    """Frames of a recording, in the order of time.

    Args:
        recording: opened recording.
        link: link description.
        options: how to receive; "auto" spectrum is taken for normal, for verifying looks at faults.
        calibration: complex gain of each receive channel.
        progress: called after each batch.

    Raises:
        InputError: when the link cannot be verified from this recording.
    """
    check_link(link)
    if options.spectrum == "auto":
        options = replace(options, spectrum="normal")
    parts = chain_parts(recording, link, options)
    stages: list[Stage] = [s for s in standard_stages(link, options, parts) if isinstance(s, _KEPT)]
    for frames in measure(recording, link, options, stages=stages, progress=progress):
        yield _observed(frames, recording, link, options, calibration)


def _observed(
    frames: MeasuredFrames,
    recording: Recording,
    link: Link,
    options: ReceiverOptions,
    calibration: Calibration | None,
) -> ObservedFrames:
    columns = frames.columns
    words, aided = _words(frames)
    sent = vectors_of_words(link, words) if frames.count else _no_vectors(link)
    samples, t0, step = _windows(frames, recording, link, calibration)
    if options.spectrum == "inverted":
        samples = samples.conj()
    n = np.arange(samples.shape[2])
    turns = columns["cfo_hz"] / recording.sample_rate
    samples *= np.exp(-2j * np.pi * turns[:, None] * n).astype(np.complex64)[:, None, :]
    looks = [filtered(samples, link, t0 + d * step, step) for d in (-TIMING_STEP, 0, TIMING_STEP)]
    fit = fit_frames(np.stack(looks), sent, TIMING_STEP)
    rate = 1.0 / (step / recording.sample_rate)
    return ObservedFrames(
        columns=columns,
        measured=frames,
        sent=sent,
        aided=aided,
        fit=fit,
        carrier_hz=columns["cfo_hz"] + fit.carrier / (2 * np.pi) * rate,
        start_s=columns["time_s"] + fit.timing / rate,
        samples=samples,
        t0=t0,
        step=step,
        symbol_s=1.0 / link.symbol_rate_hz,
        lost=list(frames.lost),
    )


def _no_vectors(link: Link) -> NDArray[np.complex128]:
    return np.zeros((0, link.frame_symbols, link.antennas), np.complex128)


def _words(frames: MeasuredFrames) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Words taken to have been sent (F, Kw), and whether they are the expected ones (F,)."""
    expected, decided = frames.words_sent, frames.words_decided
    known = expected >= 0
    wrong = known & (expected != decided)
    compared = known.sum(axis=1)
    aided = (compared > 0) & (wrong.sum(axis=1) <= _FOREIGN * compared)
    return np.where(known & aided[:, None], expected, decided), aided


def _windows(
    frames: MeasuredFrames, recording: Recording, link: Link, calibration: Calibration | None
) -> tuple[NDArray[np.complex64], NDArray[np.float64], NDArray[np.float64]]:
    """Samples round each frame, zero beyond its segment; place of its first symbol; period."""
    nominal = recording.sample_rate / link.symbol_rate_hz
    start = frames.columns["start_sample"]
    step = nominal * (1.0 + frames.columns["clock_ppm"] * 1e-6)
    margin = int(np.ceil((link.pulse.half_span + 1.0) * nominal)) + 2
    first = np.floor(start).astype(np.int64) - margin
    width = 2 * margin + int(np.ceil(link.frame_symbols * nominal * 1.002)) + 2
    samples = np.zeros((frames.count, recording.channels, width), np.complex64)
    for i in range(frames.count):
        segment = recording.segments[int(frames.columns["segment"][i])]
        low, high = max(int(first[i]), segment.start), min(int(first[i]) + width, segment.stop)
        at = low - int(first[i])
        for block in recording.blocks(width, low, high):
            samples[i, :, at : at + block.samples.shape[1]] = block.samples
            at += block.samples.shape[1]
    if calibration is not None:
        samples /= calibration.gains.astype(np.complex64)[None, :, None]
    return samples, start - first, step


def filtered(
    samples: NDArray[np.complex64],
    link: Link,
    t0: NDArray[np.float64],
    step: NDArray[np.float64],
) -> NDArray[np.complex128]:
    """Matched filter (unit energy) at each symbol's instant.

    Args:
        samples: complex64 (F, Nr, W).
        link: link description.
        t0, step: float64 (F,); first symbol's place and symbol period, samples.

    Returns:
        complex128 (F, K, Nr).
    """
    count, channels, width = samples.shape
    out = np.zeros((count, link.frame_symbols, channels), np.complex128)
    for i in range(count):
        half = int(np.ceil(link.pulse.half_span * step[i]))
        at = t0[i] + step[i] * np.arange(link.frame_symbols)
        nearest = np.round(at).astype(np.int64)
        index = nearest[:, None] + np.arange(-half, half + 1)[None, :]
        taps = link.pulse.samples((index - at[:, None]) / step[i], float(step[i]))
        inside = (index >= 0) & (index < width)
        taps = np.where(inside, taps, 0.0) / np.sqrt(step[i])
        taken = samples[i][:, np.clip(index, 0, width - 1)]
        out[i] = np.einsum("rkn,kn->kr", taken, taps)
    return out
