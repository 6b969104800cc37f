"""From a recording to figures, judgements and a verdict."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.acceptance.calibration import Calibration
from spatiq.acceptance.causes import Evidence, probable_causes
from spatiq.acceptance.decision import Decision, Judgement, judge_all, overall
from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.limits import Limits
from spatiq.acceptance.mapping import mapping_figures, mapping_sums
from spatiq.acceptance.modulation_accuracy import accuracy_figures, accuracy_sums
from spatiq.acceptance.modulator import modulator_figures, modulator_sums
from spatiq.acceptance.observation import ObservedFrames, observe
from spatiq.acceptance.payload_causes import Payloads
from spatiq.acceptance.pooling import Pooling
from spatiq.acceptance.power import power_figures, power_sums
from spatiq.acceptance.probable_cause import Cause
from spatiq.acceptance.setup import Setup, cannot_tell
from spatiq.acceptance.synchronisation import synchronisation_figures, synchronisation_sums
from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.metrics.measuring import shortest_distance
from spatiq.receiver.chain import Progress
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording

Sums = dict[str, NDArray[Any]]
_KEPT = 64  # frames whose symbols are kept for the search for causes, a batch more or less


@dataclass(frozen=True)
class Verification:
    """What came out.

    Attributes:
        figures: all that could be measured.
        judgements: each limit held against the figures it covers.
        verdict: on all of them.
        frames: frames found.
        lost: frames lost, by reason.
        cannot_tell: what the set-up cannot tell, sentences.
        causes: what is probably wrong.
    """

    figures: list[Figure]
    judgements: list[Judgement]
    verdict: Decision
    frames: int
    lost: dict[str, int]
    cannot_tell: list[str] = field(default_factory=list)
    causes: list[Cause] = field(default_factory=list)


@dataclass
class Collecting:
    """Adds up batches of frames; nothing as long as the recording but a few numbers a frame."""

    link: Link
    snr_db: float | None = None
    frames: int = 0
    lost: Counter[str] = field(default_factory=Counter)
    _parts: list[Sums] = field(default_factory=list)
    _kept: list[ObservedFrames] = field(default_factory=list)
    _clipped: int = 0

    def add(self, frames: ObservedFrames) -> None:
        """Take in a batch."""
        self.lost.update(frame.reason for frame in frames.lost)
        if not frames.count:
            return
        if self.frames < _KEPT:
            self._kept.append(frames)
        self.frames += frames.count
        self._clipped += int(frames.columns["clipped_samples"].sum())
        self._parts.append(
            accuracy_sums(frames)
            | synchronisation_sums(frames)
            | power_sums(frames)
            | modulator_sums(frames)
            | mapping_sums(frames, self.link, self.snr_db)
            | {"aided": frames.aided}
        )

    def evidence(self, recording: Recording, figures: list[Figure], setup: Setup) -> Evidence:
        """What causes are judged from."""
        link, rate = self.link, recording.sample_rate / self.link.symbol_rate_hz
        words = [f.measured.words_decided for f in self._kept]
        times = [f.columns["time_s"] for f in self._kept]
        payloads = Payloads(
            link,
            np.concatenate(words) if words else np.zeros((0, link.words_per_frame), np.int64),
            (np.concatenate(times) if times else np.zeros(0)) * recording.sample_rate,
            None if link.period_symbols is None else link.period_symbols * rate,
            shortest_distance(recording, link),
        )
        samples = int(self.frames * link.frame_symbols * rate * recording.channels)
        over_air = setup is Setup.OVER_AIR
        clipped = (self._clipped, samples)
        return Evidence(link, figures, self._kept, payloads, clipped, over_air)

    def figures(self, confidence: float, setup: Setup) -> list[Figure]:
        """All figures that could be measured."""
        if not self._parts:
            return []
        sums = {k: np.concatenate([p[k] for p in self._parts]) for k in self._parts[0]}
        pooling = Pooling(confidence)
        used = [a for a in range(self.link.antennas) if np.any(sums["power"][:, a] != 0)]
        found = [
            *accuracy_figures(sums, pooling),
            *synchronisation_figures(sums, pooling, self.link),
            *power_figures(sums, pooling, used, setup),
            *modulator_figures(sums, pooling, self.link, used),
            *mapping_figures(sums, pooling, self.link),
        ]
        return [figure for figure in found if figure is not None]


def verify(
    recording: Recording,
    link: Link,
    limits: Limits,
    options: ReceiverOptions | None = None,
    *,
    setup: Setup = Setup.OVER_AIR,
    calibration: Calibration | None = None,
    progress: Callable[[Progress], None] | None = None,
) -> Verification:
    """Figures of a transmitter held against limits.

    Args:
        recording: of the transmitter under test.
        link: what it should send.
        limits: what is accepted.
        options: how to receive.
        setup: how it is connected.
        calibration: complex gains of the receive channels.
        progress: called after each batch.

    Raises:
        InputError: recording, link and set-up that do not go together.
    """
    if setup is Setup.PORTS and recording.channels != link.antennas:
        expected = f"{link.antennas}, one for each antenna port"
        raise InputError(recording.path, "receive channels", recording.channels, expected)
    collecting = Collecting(link, limits.snr_db)
    chosen = options or ReceiverOptions(compare_two_step=False)
    for frames in observe(recording, link, chosen, calibration, progress=progress):
        collecting.add(frames)
    figures = collecting.figures(limits.confidence, setup)
    judgements = judge_all(figures, limits)
    return Verification(
        figures,
        judgements,
        overall(judgements),
        collecting.frames,
        dict(collecting.lost),
        cannot_tell(setup, calibration is not None),
        probable_causes(collecting.evidence(recording, figures, setup)),
    )
