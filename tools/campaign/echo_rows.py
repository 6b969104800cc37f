"""Loss of dispersive reception against a genie, in dB of SNR at a bit error ratio of 1e-3.

The genie has the true carrier, noise and taps, the receiver's own detector, and samples at the same
instants (with one sample a symbol period some are better than others, whatever is known); what lies
between the two is what estimation costs. Both see the same channels and the same noise, only scaled
from SNR to SNR, so that the loss scatters far less than either curve.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from campaign.links import campaign_link
from spatiq.link.loading import Link, load_link
from spatiq.metrics.measuring import measure
from spatiq.receiver.dispersive_chain import frame_decider
from spatiq.receiver.dispersive_plan import dispersive_plan
from spatiq.receiver.fir_channel import FirChannel, Window
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import SimulatedCapture, simulate
from spatiq.transmit.tapped_delay_line import TappedDelayLine

DEMO = Path(__file__).resolve().parents[2] / "captures_demo"
BER = 1e-3
LOSS_BAR = 0.5  # dB
_LAGS = Window(-4, 16)
_LEAST_ENERGY = 1e-4  # of all taps: what the genie leaves out
_RESAMPLINGS = 200

Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Point:
    """A row: antennas, delay spread in symbol periods, how to decide, SNRs about the BER.

    demo: demo link instead of the campaign's own.
    """

    transmit: int
    receive: int
    spread: float
    equaliser: str
    snr_db: tuple[float, ...]
    frames: int
    quick_frames: int = 0
    demo: str = ""

    @property
    def link(self) -> Link:
        """Its link."""
        if self.demo:
            return load_link(DEMO / f"{self.demo}.link.toml")
        return campaign_link(self.transmit, "QPSK")


POINTS = (
    Point(4, 4, 0.2, "sequence", (7.0, 8.5, 10.0), 120, 40),
    Point(4, 4, 1.0, "sequence", (6.0, 7.0, 8.0), 120, 40),
    Point(2, 2, 0.2, "sequence", (13.0, 15.0, 17.0), 300),
    Point(2, 2, 1.0, "sequence", (11.0, 12.5, 14.0), 200),
    Point(4, 4, 0.2, "mmse", (8.0, 9.5, 11.0), 120),
    Point(4, 4, 1.0, "mmse", (9.0, 10.5, 12.0), 120),
    Point(4, 4, 1.0, "auto", (10.5, 12.0, 13.5), 80, demo="silo_prefix"),
    Point(4, 4, 1.0, "auto", (8.5, 10.0, 11.5), 80, demo="silo_carriers"),
)


@dataclass(frozen=True, eq=False)
class Errors:
    """Wrong bits of each frame, (S, F) for S SNRs, and bits in a frame."""

    genie: Ints
    receiver: Ints
    missed: int
    frame_bits: int

    def loss(self, snr_db: NDArray[np.float64], chosen: Ints) -> float:
        """Loss in dB over some of the frames."""
        at = [crossing(snr_db, e[:, chosen].mean(axis=1) / self.frame_bits) for e in self._both]
        return at[1] - at[0]

    @property
    def _both(self) -> tuple[Ints, Ints]:
        return self.genie, self.receiver


def crossing(snr_db: NDArray[np.float64], ber: NDArray[np.float64]) -> float:
    """SNR at which a falling curve, straight in log BER between its points, passes `BER`.

    Beyond the points the nearest two go on; NaN where there is no error.
    """
    if not np.all(ber > 0):
        return float("nan")
    log = np.log10(ber)
    k = int(np.clip(np.count_nonzero(log > np.log10(BER)) - 1, 0, ber.size - 2))
    share = (np.log10(BER) - log[k]) / (log[k + 1] - log[k])
    return float(snr_db[k] + share * (snr_db[k + 1] - snr_db[k]))


def errors(point: Point, link: Link, frames: int, seed: int) -> Errors:
    """Wrong bits of genie and receiver at all SNRs of a point."""
    options = ReceiverOptions(channel="dispersive", equaliser=point.equaliser)
    reach = options.cfo_range * link.symbol_rate_hz
    genie, receiver, missed = [], [], 0
    for snr_db in point.snr_db:
        capture = simulate(
            link,
            receive_channels=point.receive,
            channels=TappedDelayLine("tdl-a", point.spread),
            snr_db=snr_db,
            samples_per_symbol=4,
            frames=frames,
            spacing="link" if point.demo else (60.0, 200.0),
            cfo_hz=(-reach, reach),
            seed=seed,
        )
        samples = capture.samples()
        words, found, delays = _received(capture, samples, options)
        genie.append(_wrong(capture, genie_words(capture, samples, options, delays)))
        missed += int(np.count_nonzero(~found))
        # A frame that was not found has all its bits wrong at random.
        bits = link.payload.n_bits
        receiver.append(np.where(found, _wrong(capture, words), bits // 2))
    return Errors(np.array(genie), np.array(receiver), missed, link.payload.n_bits)


def genie_words(
    capture: SimulatedCapture,
    samples: NDArray[np.complex64],
    options: ReceiverOptions,
    delays: NDArray[np.float64],
) -> Ints:
    """Words (F, Kp) with everything but the words known; instants late by `delays` (F,) symbols."""
    truth = capture.truth
    layout = truth.link.layout
    decider = frame_decider(truth.link, options, dispersive_plan(truth.link, None), 0.0)
    nothing = np.full(layout.payload_index.size, -1, np.int64)
    words = []
    for f in range(truth.frames):
        lags = np.arange(_LAGS.first, _LAGS.last + 1.0) + delays[f]
        window, taps = _true_taps(truth.taps(f, lags))
        (received,) = genie_symbols(truth, samples, f, f + 1, float(delays[f]))
        channel = FirChannel(window, taps, truth.N0, 1, np.zeros(truth.link.antennas))
        whole = [(0, layout.length, channel)]
        words.append(decider.decide(received, whole, truth.N0, nothing))
    return np.array(words)


def _true_taps(taps: NDArray[np.complex128]) -> tuple[Window, NDArray[np.complex128]]:
    energy = np.sum(np.abs(taps) ** 2, axis=(1, 2))
    kept = np.flatnonzero(energy > _LEAST_ENERGY * energy.sum())
    first, last = min(int(kept[0]), -_LAGS.first), max(int(kept[-1]), -_LAGS.first)
    return Window(first + _LAGS.first, last + _LAGS.first), taps[first : last + 1]


def _wrong(capture: SimulatedCapture, words: Ints) -> Ints:
    bits = capture.link.codebook.words_to_bits
    return np.count_nonzero(bits(words) != bits(capture.truth.words()), axis=1)


def _received(
    capture: SimulatedCapture, samples: NDArray[np.complex64], options: ReceiverOptions
) -> tuple[Ints, NDArray[np.bool_], NDArray[np.float64]]:
    """Words (F, Kp) as measured, which frames were found, and how late their instants are."""
    truth = capture.truth
    words = np.zeros((truth.frames, capture.link.layout.payload_index.size), np.int64)
    found = np.zeros(truth.frames, np.bool_)
    delays = np.zeros(truth.frames)
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder) / "echoes"
        write_recording(base, samples, sample_rate=capture.sample_rate)
        recording = open_recording(base.with_suffix(".sigmf-meta"))
        for batch in measure(recording, capture.link, options):
            for i, start in enumerate(batch.columns["start_sample"]):
                f = int(np.argmin(np.abs(truth.starts - start)))
                words[f], found[f] = batch.words_decided[i], True
                delays[f] = (start - truth.starts[f]) / truth.samples_per_symbol
    return words, found, delays


def rows(quick: bool) -> Iterator[tuple[Point, Errors, float, float]]:
    """Every point with its errors, its loss and the loss's standard error by resampling frames."""
    for number, point in enumerate(POINTS):
        frames = point.quick_frames if quick else point.frames
        if not frames:
            continue
        print(f"point {number + 1} of {len(POINTS)} ...", file=sys.stderr, flush=True)
        found = errors(point, point.link, frames, seed=100 + number)
        snr_db = np.array(point.snr_db)
        rng = np.random.default_rng(0)
        draws = [found.loss(snr_db, rng.integers(0, frames, frames)) for _ in range(_RESAMPLINGS)]
        yield point, found, found.loss(snr_db, np.arange(frames)), float(np.nanstd(draws))


def run(quick: bool) -> int:
    """Print the table; 1 when a bar is missed."""
    print("Nt x Nr  spread  decided by  frames missed    SNR   BER: genie  receiver    loss, dB")
    worst = -np.inf
    for point, found, loss, deviation in rows(quick):
        for s, snr_db in enumerate(point.snr_db):
            genie = found.genie[s].mean() / found.frame_bits
            receiver = found.receiver[s].mean() / found.frame_bits
            label = (
                f"{point.transmit} x {point.receive}    {point.spread:4.1f}T   {point.equaliser:9}"
            )
            count = f"{found.genie.shape[1]:6} {found.missed:6}" if s == 0 else " " * 13
            end = f"{loss:7.2f} +- {deviation:.2f}" if s == 0 else ""
            print(f"{label if s == 0 else ' ' * 28}  {count}  {snr_db:5.1f}   {genie:9.2e}  "
                  f"{receiver:9.2e} {end}")  # fmt: skip
        worst = max(worst, loss) if np.isfinite(loss) else np.inf
    met = worst <= LOSS_BAR
    print(f"largest loss at BER {BER:g}: {worst:.2f} dB (bar {LOSS_BAR:g} dB)")
    return 0 if met else 1
