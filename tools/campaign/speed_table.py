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
    Samples,
    measure_all,
    stages,
    transform_all,
    transform_blocks,
    transform_each,
    whole_work,
)

BAR = 10.0
_SAMPLES = 4_000_000


@dataclass(frozen=True)
class Turn:
    """Seconds that one thing took, and the transform passes just before and after it (mean).

    Attributes:
        work: what is timed.
        each: transform pass, one call per block.
        batched: transform pass, all blocks in one call.
    """

    work: float
    each: float
    batched: float


@dataclass(frozen=True)
class Times:
    """Timings of a recording.

    Attributes:
        frames: found.
        samples: of all channels.
        turns: "measure": the Python interface; "whole": the work of the command.
        stages: seconds, median over a few turns of their own.
    """

    frames: int
    samples: int
    turns: dict[str, list[Turn]]
    stages: dict[str, float]

    def nanoseconds(self, name: str, seconds: Callable[[Turn], float]) -> float:
        """Median per channel-sample."""
        return 1e9 * statistics.median(map(seconds, self.turns[name])) / self.samples

    def ratio(self, name: str) -> float:
        """Over the transform passes around it, one call per block; median."""
        return statistics.median(t.work / t.each for t in self.turns[name])

    def batched_ratio(self, name: str) -> float:
        """Over the transform passes around it, all blocks in one call; median."""
        return statistics.median(t.work / t.batched for t in self.turns[name])


def _seconds(call: Callable[[], object]) -> float:
    began = time.perf_counter()
    call()
    return time.perf_counter() - began


def _turn(work: Callable[[], object], blocks: Samples) -> Turn:
    """Time transform passes before and after, for a busy machine slows all of them."""
    each, batched = partial(transform_each, blocks), partial(transform_all, blocks)
    before = _seconds(batched), _seconds(each)
    worked = _seconds(work)
    after = _seconds(each), _seconds(batched)
    return Turn(worked, (before[1] + after[0]) / 2, (before[0] + after[1]) / 2)


def time_recording(made: Made, results: Path, turns: int, stage_turns: int) -> Times:
    """Time everything in turn, after one turn that does not count."""
    blocks = transform_blocks(made)
    works: dict[str, Callable[[], object]] = {
        "measure": partial(measure_all, made),
        "whole": partial(whole_work, made, results),
    }
    frames = whole_work(made, results)
    for work in works.values():
        _turn(work, blocks)
    taken: dict[str, list[Turn]] = {name: [] for name in works}
    for _ in range(turns):
        for name, work in works.items():
            taken[name].append(_turn(work, blocks))
    parts = [stages(made, results) for _ in range(stage_turns)]
    medians = {name: statistics.median(p[name] for p in parts) for name in parts[0]}
    return Times(frames, blocks.size, taken, medians)


def _print_times(kind: Kind, times: Times) -> None:
    each = times.nanoseconds("measure", lambda t: t.each)
    batched = times.nanoseconds("measure", lambda t: t.batched)
    print(f"{kind.name}: {times.frames} frames, {times.samples / 1e6:.1f} M channel-samples")
    print(
        f"  transform pass of {TRANSFORM}: {each:6.1f} ns, one call per block;"
        f" {batched:6.1f} ns, all in one call"
    )
    for name, title in (("measure", "measure()"), ("whole", "whole command")):
        print(
            f"  {title:<23} {times.nanoseconds(name, lambda t: t.work):6.1f} ns:"
            f" {times.ratio(name):.2f} transform passes;"
            f" {times.batched_ratio(name):.2f} of all in one call"
        )
    scale = 1e9 / times.samples
    listed = ", ".join(f"{name} {scale * s:.1f}" for name, s in times.stages.items())
    print(f"  stages, ns: {listed}\n", flush=True)


def run(quick: bool) -> int:
    """Print the tables; 0 when the bar is met, else 1."""
    print(
        "Time per channel-sample on one core, kernels compiled; medians. 4 transmit antennas,\n"
        f"QPSK, 2 receive channels, 4 samples per symbol, SNR {SNR_DB:.0f} dB, ci16_le.\n"
        f"The bar is {BAR:.0f} transforms there and back of the same samples, one call a block.\n"
    )
    worst = 0.0
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for kind in KINDS:
            if quick and not kind.quick:
                continue
            made = make_recording(folder, kind, _SAMPLES)
            turns = (3, 1) if quick else (11, 5)
            times = time_recording(made, folder / "results.h5", *turns)
            _print_times(kind, times)
            worst = max(worst, times.ratio("measure"), times.ratio("whole"))
    print(f"slowest over a transform pass: {worst:.2f}")
    return 1 if worst > BAR else 0
