"""First use: kernels of detection and measuring are compiled by a second process.

Compiling takes one core some fifteen seconds. While this process compiles the receiver, a helper
compiles what comes after it and leaves it in numba's cache, where this process finds it. Without a
folder to keep compiled kernels in, or with one core, nothing is done.

    python -m spatiq.cli.compiling LINK
"""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import SimpleNamespace
from typing import Any, cast

import numpy as np

from spatiq.kernels import CACHED
from spatiq.link.description import Link
from spatiq.link.loading import load_link
from spatiq.metrics.measuring import Measuring
from spatiq.metrics.prediction_kernels import predict_frames
from spatiq.receiver.detection import Detection, find_detector
from spatiq.receiver.echo_test import echo_test
from spatiq.receiver.frame_batch import FrameBatch, empty_batch
from spatiq.receiver.link_tables import link_tables
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.placement import Segment
from spatiq.recording.recording import Recording


def is_compiled() -> bool:
    """True when numba's cache holds the costliest kernel of measuring."""
    folder = Path(cast(Any, predict_frames).stats.cache_path)
    return any(folder.glob("prediction_kernels.predict_frames-*.nbi"))


@contextmanager
def compiling_ahead(link_file: Path) -> Iterator[None]:
    """Let a helper compile while the body runs; it is ended with the body at the latest."""
    if not CACHED or (os.cpu_count() or 1) < 2 or is_compiled():
        yield
        return
    command = [sys.executable, "-m", "spatiq.cli.compiling", str(link_file)]
    quiet = subprocess.DEVNULL
    helper = subprocess.Popen(command, stdin=quiet, stdout=quiet, stderr=quiet)
    try:
        yield
    finally:
        helper.terminate()
        helper.wait()


def made_up_batch(link: Link, channels: int) -> FrameBatch:
    """Two received frames of noise, as the refit would hand them on."""
    rng = np.random.default_rng(1)
    tables = link_tables(link)
    planes = np.zeros((2, channels, 2, 8), np.float32)
    payload = link.layout.payload_index.size
    batch = empty_batch(planes, link.antennas, tables.active.size, payload, link.words_per_frame)
    shape = batch.channel.shape
    batch.channel[:] = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    batch.symbols[:] = rng.standard_normal(batch.symbols.shape)
    batch.noise[:] = batch.header_noise[:] = 0.1
    batch.antenna_energy[:] = 100.0
    batch.step[:] = 4.0
    return batch


def compile_measuring(link: Link, channels: int = 2) -> None:
    """Detect and measure made-up frames: everything after the refit is compiled by that."""
    options = ReceiverOptions()
    segment = Segment(0, 0, 1000, 0, None, None)
    recording = SimpleNamespace(sample_rate=4.0 * link.symbol_rate_hz, segments=(segment,))
    batch = made_up_batch(link, channels)
    detection = Detection(
        link.codebook, find_detector(options.detector), True, link.layout.payload_runs()
    )
    batch = detection(batch)
    if link.codebook.block == 1:
        batch = echo_test(link, 4.0)(batch)
    Measuring(cast(Recording, recording), link, options)(batch)


if __name__ == "__main__":
    compile_measuring(load_link(sys.argv[1]))
