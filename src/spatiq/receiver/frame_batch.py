"""A batch of frames on its way through the chain: each stage fills in what it finds out."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.dispersive_frames import DispersiveFrames
from spatiq.receiver.front_end_figures import FrontEndFigures, FrontEndSums
from spatiq.receiver.front_end_survey import MOST_LINES
from spatiq.receiver.moving_channel import MovingChannel


@dataclass(frozen=True)
class LostFrame:
    """A frame that was expected and is not in the table, with the reason."""

    segment: int
    start_sample: float  # expected centre of its first symbol, per-channel file index
    frame_number: int  # -1 when unknown
    reason: str  # "cut off by the start", "cut off by the end", "not found", "in a gap", ...


RECEIVE_ALIGNED, ANTENNAS_ALIGNED = 1, 2
MOTION_PARTS = 16  # parts of a frame over which the motion test adds up residuals


@dataclass(frozen=True, eq=False)
class MatchedFrame:
    """Payload of a frame whose antennas differ in delay, as a flat channel would have it.

    Neighbours' interference is taken away, as far as decisions are right.

    Attributes:
        channel: complex128 (Nd, Nt); B with B^H B the Gram matrix of the delayed antennas.
        symbols: complex64 (Kp, Nd); B x + white noise of variance N0.
        refit: refits the frame, delays included, when samples and channel were changed alike.
    """

    channel: NDArray[np.complex128]
    symbols: NDArray[np.complex64]
    refit: Callable[[FrameBatch, int], None]


# What is known of breaks inside a frame; places in symbol periods, NaN and 0 where there is none.
# samples_lost: in all, -1 when the number could not be told; lost_at, lost_std: where the first
# were lost, and its standard deviation; phase_jump: of the recorded carrier there, radians.
# gain_db, gain_at, gain_std: the largest step. noise_db, noise_at: residuals over what they were.
BREAKS = np.dtype(
    [
        ("samples_lost", "i8"),
        *((name, "f8") for name in ("lost_at", "lost_std", "phase_jump")),
        *((name, "f8") for name in ("gain_db", "gain_at", "gain_std")),
        *((name, "f8") for name in ("noise_db", "noise_at")),
    ]
)

# Active periods behind each row of `scores`.
SCORE_BLOCK = 32
SCORES = 6

NOT_FOUND = "not found"
NOT_FINITE = "samples not finite"


@dataclass
class FrameBatch:
    """F frames cut out of the recording, and what is known of them so far.

    Attributes:
        planes: float32 (F, Nr, 2, W); samples, real and imaginary planes; derotated in place as the
            carrier becomes known. Valid until the next batch is asked for.
        first_sample: int64 (F,); per-channel file index of each window's first sample.
        segment: int32 (F,); index of the segment.
        sync_metric: float64 (F,); normalised correlation at the detected lag.
        clipped: int64 (F,); samples at full scale within the frame, all channels.
        t0: float64 (F,); centre of symbol 0 within the window, samples.
        step: float64 (F,); samples per symbol as received.
        carrier: float64 (F,); carrier offset removed from `planes` so far, cycles per sample.
        turns: float64 (F,); what was removed is exp(2 pi j (carrier n - turns)), n in the window.
        line_frequency: float64 (F, MOST_LINES); interfering lines, or the centre of narrow-band
            noise, cycles per sample as received; NaN where there are none.
        line_power: float64 (F, MOST_LINES, Nr); their power.
        corrected: uint8 (F,); what of the front end was set right, see `front_end`.
        lost: frames known to be lost before the last of these.
        final: True for the recording's last batch, which may be empty.

        search_t0: float64 (F,); t0 as the search gave it.

    Filled by acquisition and refined by the refit:
        carrier_estimate: float64 (F,); carrier offset including what the phase track shows.
        channel: complex128 (F, Nr, Nt); phase at the energy-weighted centre of the known symbols.
        noise: float64 (F,); N0.
        residual: complex128 (F, Nr, Nr); covariance of y - H E[x] over the channels, trace Nr N0.
        whitener: complex128 (F, Nr, Nr); W of frames whose noise is not white over the channels:
            planes, channel, symbols and noise then refer to W y. Identity otherwise.
        coloured: bool (F,); whether W is not the identity.
        header_noise: float64 (F,); N0 from the known symbols alone, as acquired.
        header_freedom: complex degrees of freedom behind header_noise.
        phase: float32 (F, Ka); carrier phase left in each active period, radians.
        frequency_var: float64 (F,); variance of the carrier estimate, (radians per symbol)^2.
        timing_var, step_var: float64 (F,); variances of t0 and step.
        antenna_energy: float64 (F, Nt); sum of |x_a|^2 behind the channel estimate.
        delay_score, delay_energy: float64 (F, Nr, Nt); delay score and energy of each pair of
            receive channel and antenna, see `delay_scores`.
        lag_energy: float64 (F, Nt, 3, Nr); see `lag_energies`.

    Filled by alignment, relative to the mean over those measured; NaN where it cannot be told:
        receive_delay, receive_delay_var: float64 (F, Nr); samples.
        antenna_delay, antenna_delay_var: float64 (F, Nt); symbol periods.
        aligned: uint8 (F,); which delays were taken out: `RECEIVE_ALIGNED`, `ANTENNAS_ALIGNED`.
        motion_scores, motion_energy, motion_reference: sums along each frame, see `motion_sums`.
        moving: what moved within each frame, None where nothing did; empty when nothing did in any.
            `channel` is then that in the middle of the payload.
        acquired_timing: float64 (F, 2); t0 and step as acquisition left them.
        acquired_channel: complex128 (F, Nr, Nt); the same of the channel.
        matched: of frames with delayed antennas, what is to be decided on in place of `symbols` and
            `channel`, by index; t0 is then the mean over the antennas.

        front_end_sums: what the front end's figures are estimated from, while it holds.
        front_end: image and constant offset of each receive channel, and the noise's correlation.

    Filled by the refit and by the look for breaks:
        scores: float64 (F, B, 6); see `spatiq.receiver.continuity_kernels`.
        erased: bool (F, Ka); active periods whose samples were lost or cannot be placed.
        breaks: BREAKS (F,).

    Filled by symbol sampling and detection:
        symbols: complex64 (F, Kp, Nr); payload vectors, carrier phase removed.
        words: int64 (F, Kw); decided words.
        words_two_step: the same by the two-step detector, or None.
        llr: float32 (F, Kw * b); log-likelihood ratios of the bits as sent, positive when 0 is
            likelier; None unless asked for.
        echoes: bool (F,); whether symbols reach into their neighbours, see `EchoTest`; or None.
        dispersive: the frames as they were received over a dispersive channel; `channel` and
            `symbols` then are a flat channel of the same energy (`DispersiveFrames.symbols`).
            None on a flat channel.
    """

    planes: NDArray[np.float32]
    first_sample: NDArray[np.int64]
    segment: NDArray[np.int32]
    sync_metric: NDArray[np.float64]
    clipped: NDArray[np.int64]
    t0: NDArray[np.float64]
    step: NDArray[np.float64]
    carrier: NDArray[np.float64]
    turns: NDArray[np.float64]
    line_frequency: NDArray[np.float64]
    line_power: NDArray[np.float64]
    corrected: NDArray[np.uint8]
    carrier_estimate: NDArray[np.float64]
    channel: NDArray[np.complex128]
    noise: NDArray[np.float64]
    residual: NDArray[np.complex128]
    whitener: NDArray[np.complex128]
    coloured: NDArray[np.bool_]
    header_noise: NDArray[np.float64]
    phase: NDArray[np.float32]
    frequency_var: NDArray[np.float64]
    timing_var: NDArray[np.float64]
    step_var: NDArray[np.float64]
    antenna_energy: NDArray[np.float64]
    delay_score: NDArray[np.float64]
    delay_energy: NDArray[np.float64]
    lag_energy: NDArray[np.float64]
    receive_delay: NDArray[np.float64]
    receive_delay_var: NDArray[np.float64]
    antenna_delay: NDArray[np.float64]
    antenna_delay_var: NDArray[np.float64]
    aligned: NDArray[np.uint8]
    acquired_timing: NDArray[np.float64]
    acquired_channel: NDArray[np.complex128]
    motion_scores: NDArray[np.complex128]
    motion_energy: NDArray[np.float64]
    motion_reference: NDArray[np.float64]
    symbols: NDArray[np.complex64]
    words: NDArray[np.int64]
    search_t0: NDArray[np.float64]
    scores: NDArray[np.float64]
    erased: NDArray[np.bool_]
    breaks: NDArray[np.void]
    header_freedom: int = 0
    words_two_step: NDArray[np.int64] | None = None
    matched: dict[int, MatchedFrame] = field(default_factory=dict)
    llr: NDArray[np.float32] | None = None
    echoes: NDArray[np.bool_] | None = None
    dispersive: DispersiveFrames | None = None
    moving: list[MovingChannel | None] = field(default_factory=list)
    front_end_sums: FrontEndSums | None = None
    front_end: FrontEndFigures | None = None
    lost: list[LostFrame] = field(default_factory=list)
    final: bool = False

    @property
    def count(self) -> int:
        """Number of frames, F."""
        return int(self.first_sample.size)


def channel_runs(batch: FrameBatch, i: int) -> Iterator[tuple[slice, NDArray[np.complex128]]]:
    """Runs of payload periods of frame i and their channel (Nr, Nt); one where it is still."""
    moving = batch.moving[i] if batch.moving else None
    if moving is None:
        yield slice(0, batch.symbols.shape[1]), batch.channel[i]
    else:
        yield from moving.runs()


def decision_runs(
    batch: FrameBatch, i: int
) -> Iterator[tuple[slice, NDArray[np.complex64], NDArray[np.complex128]]]:
    """Runs of payload periods of frame i, their vectors and channel that words are decided on."""
    if i in batch.matched:
        matched = batch.matched[i]
        yield slice(0, matched.symbols.shape[0]), matched.symbols, matched.channel
        return
    for run, channel in channel_runs(batch, i):
        yield run, batch.symbols[i, run], channel


def no_breaks(count: int) -> NDArray[np.void]:
    """BREAKS (count,) of frames without any."""
    breaks = np.zeros(count, BREAKS)
    for name in BREAKS.names or ():
        if name != "samples_lost":
            breaks[name] = np.nan
    return breaks


def empty_batch(
    planes: NDArray[np.float32], antennas: int, active: int, payload: int, words: int
) -> FrameBatch:
    """A batch with room for everything, nothing known yet; its samples go into `planes`.

    A frame has so many active periods, periods of payload, and words.
    """
    count, channels = planes.shape[:2]
    return FrameBatch(
        planes=planes,
        first_sample=np.zeros(count, np.int64),
        segment=np.zeros(count, np.int32),
        sync_metric=np.zeros(count),
        clipped=np.zeros(count, np.int64),
        t0=np.zeros(count),
        step=np.zeros(count),
        carrier=np.zeros(count),
        turns=np.zeros(count),
        line_frequency=np.full((count, MOST_LINES), np.nan),
        line_power=np.full((count, MOST_LINES, channels), np.nan),
        corrected=np.zeros(count, np.uint8),
        carrier_estimate=np.zeros(count),
        channel=np.zeros((count, channels, antennas), np.complex128),
        noise=np.zeros(count),
        residual=np.zeros((count, channels, channels), np.complex128),
        whitener=np.tile(np.eye(channels, dtype=np.complex128), (count, 1, 1)),
        coloured=np.zeros(count, np.bool_),
        header_noise=np.zeros(count),
        phase=np.zeros((count, active), np.float32),
        frequency_var=np.zeros(count),
        timing_var=np.zeros(count),
        step_var=np.zeros(count),
        antenna_energy=np.zeros((count, antennas)),
        delay_score=np.zeros((count, channels, antennas)),
        delay_energy=np.zeros((count, channels, antennas)),
        lag_energy=np.zeros((count, antennas, 3, channels)),
        receive_delay=np.full((count, channels), np.nan),
        receive_delay_var=np.full((count, channels), np.nan),
        antenna_delay=np.full((count, antennas), np.nan),
        antenna_delay_var=np.full((count, antennas), np.nan),
        aligned=np.zeros(count, np.uint8),
        acquired_timing=np.zeros((count, 2)),
        acquired_channel=np.zeros((count, channels, antennas), np.complex128),
        motion_scores=np.zeros((count, MOTION_PARTS, channels, antennas), np.complex128),
        motion_energy=np.zeros((count, MOTION_PARTS, antennas)),
        motion_reference=np.zeros((count, MOTION_PARTS)),
        symbols=np.zeros((count, payload, channels), np.complex64),
        words=np.zeros((count, words), np.int64),
        search_t0=np.zeros(count),
        scores=np.zeros((count, -(-active // SCORE_BLOCK), SCORES)),
        erased=np.zeros((count, active), np.bool_),
        breaks=no_breaks(count),
    )
