"""The speed campaign and its table."""

from __future__ import annotations

import statistics
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path

from campaign.speed_recordings import KINDS, SNR_DB, Kind, Made, make_recording
from campaign.speed_timing import (
    TRANSFORM,
    measure_all,
    stages,
    transform_all,
    transform_blocks,
    transform_each,
    whole_work,
)

BAR = 10.0
_SAMPLES = 4_000_000
_STAGE_TURNS = 3


@dataclass(frozen=True)
class Turn:
    """One turn of everything, seconds; the transform pass is timed before and after each other.

    Attributes:
        measure, whole: Python interface; whole work of the command.
        each: transform pass, one call per block: around measure, around whole.
        batched: transform pass, all blocks in one call.
    """

    measure: float
    whole: float
    each: tuple[float, float]
    batched: float


@dataclass(frozen=True)
class Times:
    """Timings of a recording.

    Attributes:
        frames: found.
        samples: of all channels.
        turns: in order.
        stages: seconds, median over a few turns of their own.
    """

    frames: int
    samples: int
    turns: list[Turn]
    stages: dict[str, float]

    def nanoseconds(self, seconds: Callable[[Turn], float]) -> float:
        """Median per channel-sample."""
        return 1e9 * statistics.median(map(seconds, self.turns)) / self.samples

    @property
    def measure_ratio(self) -> float:
        """Measuring over the transform passes around it, median."""
        return statistics.median(t.measure / t.each[0] for t in self.turns)

    @property
    def whole_ratio(self) -> float:
        """Whole work over the transform passes around it, median."""
        return statistics.median(t.whole / t.each[1] for t in self.turns)


def _seconds(call: Callable[[], object]) -> float:
    began = time.perf_counter()
    call()
    return time.perf_counter() - began


def time_recording(made: Made, results: Path, turns: int) -> Times:
    """Time everything in turn, after one turn that does not count."""
    blocks = transform_blocks(made)
    frames = whole_work(made, results)
    measure_all(made)
    transform_all(blocks)
    transform_each(blocks)
    taken, stage_turns = [], []
    for number in range(turns):
        each = [_seconds(partial(transform_each, blocks))]
        measuring = _seconds(partial(measure_all, made))
        each.append(_seconds(partial(transform_each, blocks)))
        whole = _seconds(partial(whole_work, made, results))
        each.append(_seconds(partial(transform_each, blocks)))
        around = ((each[0] + each[1]) / 2, (each[1] + each[2]) / 2)
        taken.append(
            Turn(measuring, whole, around, batched=_seconds(partial(transform_all, blocks)))
        )
        if number < _STAGE_TURNS:
            stage_turns.append(stages(made, results))
    names = stage_turns[0]
    medians = {name: statistics.median(t[name] for t in stage_turns) for name in names}
    return Times(frames, blocks.size, taken, medians)


def _print_times(kind: Kind, times: Times) -> None:
    each = times.nanoseconds(lambda t: sum(t.each) / 2)
    batched = times.nanoseconds(lambda t: t.batched)
    print(f"{kind.name}: {times.frames} frames, {times.samples / 1e6:.1f} M channel-samples")
    print(
        f"  transform pass of {TRANSFORM}: {each:6.1f} ns, one call per block;"
        f" {batched:6.1f} ns, all in one call"
    )
    for name, value, share in (
        ("measure()", times.nanoseconds(lambda t: t.measure), times.measure_ratio),
        ("whole command", times.nanoseconds(lambda t: t.whole), times.whole_ratio),
    ):
        print(
            f"  {name:<23} {value:6.1f} ns: {share:.2f} transform passes;"
            f" {value / batched:.2f} of all in one call"
        )
    scale = 1e9 / times.samples
    listed = ", ".join(f"{name} {scale * s:.1f}" for name, s in times.stages.items())
    print(f"  stages, ns: {listed}\n", flush=True)


def run(quick: bool) -> int:
    """Print the tables; 0 when the bar is met, else 1."""
    print(
        "Time per channel-sample on one core, kernels compiled; medians. 4 transmit antennas,\n"
        f"QPSK, 2 receive channels, 4 samples per symbol, SNR {SNR_DB:.0f} dB, ci16_le. The bar is"
        f" {BAR:.0f} forward and inverse\ntransforms of the same samples, one call per block.\n"
    )
    worst = 0.0
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for kind in KINDS:
            made = make_recording(folder, kind, _SAMPLES)
            times = time_recording(made, folder / "results.h5", 3 if quick else 11)
            _print_times(kind, times)
            worst = max(worst, times.measure_ratio, times.whole_ratio)
    print(f"slowest over a transform pass: {worst:.2f}")
    return 1 if worst > BAR else 0
