"""Transmitters under test: simulated recordings and what verifying finds in them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.limits import parse_limits
from spatiq.acceptance.verification import Verification, verify
from spatiq.link.description import Link
from spatiq.link.loading import load_link
from spatiq.recording.placement import Segment
from spatiq.transmit.simulation import SimulatedCapture, simulate

BENCH = Path(__file__).parents[1] / "cli" / "bench.link.toml"
LIMITS = 'format = 1\nsnr_db = 12\n[[limit]]\nfigure = "evm_rms"\nupper = 8\n'
CABLED = np.array([[1.0, 0.1], [0.05j, 0.8]])


@dataclass
class Held:
    """What verifying asks of a recording, samples held in memory."""

    samples: NDArray[np.complex64]
    sample_rate: float
    clipping_known: bool = False
    path: str = "memory"
    datasets: tuple[object, ...] = ()

    @property
    def segments(self) -> tuple[Segment, ...]:
        return (Segment(0, 0, self.n_samples, 0, None, None),)

    @property
    def channels(self) -> int:
        return int(self.samples.shape[0])

    @property
    def n_samples(self) -> int:
        return int(self.samples.shape[1])

    def blocks(self, block_size: int = 1 << 18, start: int = 0, stop: int | None = None) -> Any:
        stop = self.n_samples if stop is None else stop
        for at in range(start, stop, block_size):
            yield _Block(self.samples[:, at : min(stop, at + block_size)].copy())


@dataclass
class _Block:
    samples: NDArray[np.complex64]


def bench(link: Link | None = None, **choices: Any) -> SimulatedCapture:
    """A transmitter cabled port by port to two receive channels, unless told otherwise."""
    settings: dict[str, Any] = {
        "samples_per_symbol": 4.0,
        "frames": 12,
        "snr_db": 25.0,
        "snr_reference": "frame",
        "receive_channels": 2,
        "channels": CABLED,
        "datatype": "cf32_le",
        "cfo_hz": 3000.0,
        "seed": 1,
    }
    return simulate(link or load_link(BENCH), **(settings | choices))


def verified(
    capture: SimulatedCapture, link: Link | None = None, limits: str = LIMITS, **choices: Any
) -> Verification:
    """Verify a simulated recording."""
    held = Held(capture.samples(), capture.sample_rate)
    link = link or load_link(BENCH)
    found: Verification = verify(held, link, parse_limits(limits), **choices)  # type: ignore[arg-type]  # a recording for all that is asked of it
    return found


def figure(found: Verification, name: str, subject: str = "") -> Figure:
    """The one figure of that name and subject."""
    (one,) = [f for f in found.figures if f.kind.name == name and f.subject == subject]
    return one
