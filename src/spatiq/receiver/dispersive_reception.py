"""Reception on a dispersive channel: the stage between acquisition and measuring.

Known symbols give carrier and impulse responses (`dispersive_acquisition`), a first pass gives
words and phase (`dispersive_tracking`); then, in rounds, all symbols of the frame give phase,
symbol clock, impulse responses, their length and N0 anew, and the words are decided again.

The words of a part of the frame are decided with the impulse responses that all the rest of it
gives. Fitted to its own words as well they would be drawn towards these, wrong ones included: with
many taps that costs as much as the estimate's error itself. (Leaving a part out is how such bias is
avoided elsewhere, e.g. M. Stone, "Cross-validatory choice and assessment of statistical
predictions", J. R. Statist. Soc. B 36(2), 1974, from memory.)

Noise that is uneven or correlated over the receive channels is made white for the decisions, as in
`whitening`, from the first refit on. The channel is taken to stand still within a frame but for its
common phase, and the frame to be alone: nothing else within the channel's memory
before and behind it. Wrong words make N0 a little small (as they are the words that fit best).
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.acquisition import Acquisition
from spatiq.receiver.dispersive_acquisition import KnownSymbols, sampled
from spatiq.receiver.dispersive_frames import DispersiveFrames, flat_equivalent
from spatiq.receiver.dispersive_plan import WIDEST, DispersivePlan
from spatiq.receiver.fir_channel import (
    Complex,
    FirChannel,
    FirFit,
    Window,
    convolved,
    shifted_vectors,
)
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.frame_deciders import FrameDecider, Part
from spatiq.receiver.matched_filter import FilterBank, derotate
from spatiq.receiver.refit_kernels import refit_phase
from spatiq.receiver.whitening import uneven_beyond, unevenness, whitening_matrix

# Parts of a frame that are decided with the channel of the rest, and words in one at least.
PARTS, LEAST_PART = 8, 32
_WIDE = (10.0, 1.0)  # prior variances of phase and carrier left: nothing is assumed


@dataclass
class _Frame:
    """A frame on its way."""

    received: Complex
    channel: FirChannel
    words: NDArray[np.int64]
    phase: NDArray[np.float32]
    parts: list[Part] = field(default_factory=list)
    covariance: Complex = field(default_factory=lambda: np.zeros((0, 0), np.complex128))
    whitener: Complex | None = None


@dataclass(frozen=True, eq=False)
class DispersiveReception:
    """The stage.

    Attributes:
        plan: the link.
        bank: filter bank.
        decider: decides the words of a frame.
        memory: lags less one; None: chosen by frame.
        acquisition: how carrier and clock hang together.
        clock_std: standard deviation of the clock offset expected, as a ratio.
        walk: variance of the phase's random walk per period.
        rounds: of refitting.
    """

    plan: DispersivePlan
    bank: FilterBank
    decider: FrameDecider
    memory: int | None
    acquisition: Acquisition
    clock_std: float
    walk: float
    rounds: int = 2

    def __call__(self, batch: FrameBatch) -> FrameBatch:
        """Fill everything that detection would, and the frames' impulse responses."""
        plan = self.plan
        fit = KnownSymbols(plan)
        channels, antennas = batch.channel.shape[1:]
        received = np.zeros((batch.count, plan.amplitude.size, channels), np.complex64)
        taps = np.zeros((batch.count, WIDEST.size, channels, antennas), np.complex128)
        for i in range(batch.count):
            frame = self._receive(batch, i, fit)
            received[i] = frame.received
            window = frame.channel.window
            begin = window.first - WIDEST.first
            taps[i, begin : begin + window.size] = frame.channel.taps
            batch.words[i] = frame.words
        frames = DispersiveFrames(plan, received, taps, WIDEST, batch.words)
        for i in range(batch.count):
            batch.channel[i] = flat_equivalent(taps[i])
            batch.symbols[i] = frames.symbols(i, batch.words[i], batch.channel[i])
        batch.dispersive = frames
        unknown = plan.window.size * int(np.any(plan.known != 0, axis=0).sum())
        batch.header_freedom = max(channels * (plan.rows.size - unknown) - 1, 1)
        return batch

    def _receive(self, batch: FrameBatch, i: int, fit: KnownSymbols) -> _Frame:
        plan = self.plan
        found = fit(self._sampled(batch, i))
        self._derotate(batch, i, found.carrier)
        received = self._sampled(batch, i)
        batch.header_noise[i] = found.channel.noise
        words, phase = self.decider.track(received, found)
        frame = _Frame(received, found.channel, words, phase.astype(np.float32))
        for _ in range(self.rounds):
            self._refit(batch, i, frame)
            self._decide(frame)
        energy = np.sum(np.abs(plan.vectors(frame.words)) ** 2, axis=0)
        lags = frame.channel.window.size
        batch.noise[i] = frame.channel.noise
        batch.residual[i], batch.coloured[i] = frame.covariance, frame.whitener is not None
        # The sum over the taps of an antenna is as uncertain as one tap on so much less energy.
        batch.antenna_energy[i] = energy / lags
        slope = float(np.polyfit(np.arange(phase.size), frame.phase, 1)[0])
        batch.carrier_estimate[i] = batch.carrier[i] + slope / (2 * np.pi * batch.step[i])
        return frame

    @property
    def _widest(self) -> Window:
        """Lags that a whole frame can tell; a short one no more than its known symbols."""
        periods, antennas = self.plan.known.shape
        ample = periods >= 4 * WIDEST.size * antennas
        return WIDEST if ample else self.plan.window

    def _sampled(self, batch: FrameBatch, i: int) -> Complex:
        periods = np.arange(self.plan.amplitude.size, dtype=np.int64)
        return sampled(batch.planes[i], batch.t0[i], batch.step[i], periods, self.bank)

    def _derotate(self, batch: FrameBatch, i: int, carrier: float) -> None:
        """Take a carrier (cycles per period) out of the samples."""
        cycles = carrier / batch.step[i]
        origin = batch.t0[i] + self.plan.centre * batch.step[i]
        derotate(batch.planes[i], cycles, origin)
        batch.carrier[i] += cycles
        locked = self.acquisition.locked_carrier
        if locked is not None:
            nominal = self.bank.samples_per_symbol
            offset_hz = batch.carrier[i] * nominal * self.acquisition.symbol_rate
            step = nominal / (1.0 + offset_hz / locked)
            batch.t0[i] += self.plan.centre * (batch.step[i] - step)
            batch.step[i] = step

    def _refit(self, batch: FrameBatch, i: int, frame: _Frame) -> None:
        """Phase, clock, impulse responses and N0 from all symbols; `received` gets them taken out.

        Clock first: it moves the instants. Then phase, then the channel's least squares.
        """
        plan, periods = self.plan, self.plan.amplitude.size
        widest = self._widest
        vectors = plan.vectors(frame.words)
        turned = self._sampled(batch, i) * np.exp(-1j * frame.phase)[:, None]
        rows = np.arange(widest.last, max(periods + widest.first, widest.last + 1))
        rows = rows[rows < periods]
        shifted = shifted_vectors(vectors, rows, widest)
        if self.acquisition.locked_carrier is None:
            self._refit_clock(batch, i, frame, turned, shifted, rows)
            turned = self._sampled(batch, i) * np.exp(-1j * frame.phase)[:, None]
        reference = convolved(vectors, frame.channel.taps, frame.channel.window)
        before = frame.phase.copy()
        priors = np.array([*_WIDE, self.walk])
        batch.frequency_var[i] = refit_phase(
            _planes(turned),
            _planes(reference),
            np.arange(periods, dtype=np.int64),
            frame.channel.noise,
            priors,
            frame.phase,
        )
        frame.received = turned * np.exp(-1j * (frame.phase - before))[:, None]
        fit = FirFit(shifted, frame.received[rows], widest)
        window = fit.best(_identified(widest, self.memory, rows.size))
        frame.channel = fit.solve(window)
        self._weigh(frame, shifted, rows)
        frame.parts = []
        parts = _parts(plan)
        for begin, end in parts:
            inside = (rows >= begin) & (rows < end)
            rest = fit.without(shifted[inside], frame.received[rows[inside]])
            # One part alone would leave the known symbols only.
            channel = rest.solve(window) if len(parts) > 1 else frame.channel
            frame.parts.append((begin, end, channel))

    def _weigh(self, frame: _Frame, shifted: Complex, rows: NDArray[np.int64]) -> None:
        """Covariance of what the channel leaves over the receive channels; W where it is uneven.

        Least squares need no whitening: every receive channel depends on the same symbols.
        """
        channel = frame.channel
        begin = channel.window.first - self._widest.first
        part = shifted[:, begin : begin + channel.window.size]
        left = frame.received[rows] - np.einsum("kla,lra->kr", part, channel.taps)
        covariance = left.T @ left.conj()
        size = covariance.shape[0]
        trace = float(np.trace(covariance).real)
        scale = size * channel.noise / trace if trace > 0 else 0.0
        frame.covariance = covariance * scale
        frame.whitener = None
        freedom = channel.freedom // size
        if size > 1 and unevenness(frame.covariance, freedom) > uneven_beyond(size):
            frame.whitener, _ = whitening_matrix(frame.covariance)

    def _decide(self, frame: _Frame) -> None:
        """Words anew, in white noise."""
        received, parts, noise = frame.received, frame.parts, frame.channel.noise
        if frame.whitener is not None:
            whitener = frame.whitener
            received = received @ whitener.T
            parts = [(b, e, replace(c, taps=whitener @ c.taps)) for b, e, c in parts]
        frame.words = self.decider.decide(received, parts, noise, frame.words)

    def _refit_clock(
        self,
        batch: FrameBatch,
        i: int,
        frame: _Frame,
        turned: Complex,
        shifted: Complex,
        rows: NDArray[np.int64],
    ) -> None:
        """Newton step for the samples per period, about the middle of the frame's energy.

        The channel's own delay is free, so that only the drift of the instants can be told.
        """
        where = (batch.t0[i], batch.step[i], rows)
        slope = sampled(batch.planes[i], *where, self.bank, slopes=True)
        slope *= np.exp(-1j * frame.phase[rows])[:, None]
        window = frame.channel.window
        begin = window.first - self._widest.first
        part = shifted[:, begin : begin + window.size]
        rise = np.einsum("kla,lra->kr", part, FirFit(part, slope, window).solve(window).taps)
        error = turned[rows] - np.einsum("kla,lra->kr", part, frame.channel.taps)
        weight = np.sum(np.abs(rise) ** 2, axis=1)
        score = np.sum((rise.conj() * error).real, axis=1)
        if not weight.sum() > 0:
            return
        centre = float(np.sum(weight * rows) / np.sum(weight))
        k = rows - centre
        gain = 2.0 / frame.channel.noise
        spread = (self.clock_std * self.bank.samples_per_symbol) ** 2
        information = gain * float(weight @ (k * k)) + (1.0 / spread if spread > 0 else 1e30)
        change = -gain * float(score @ k) / information
        batch.step[i] += change
        batch.t0[i] -= change * centre
        batch.step_var[i] = 1.0 / information
        # Start and channel cannot be told apart: how late the first symbol is has no error of
        # its own.
        batch.timing_var[i] = np.nan


def _identified(widest: Window, memory: int | None, rows: int) -> list[Window]:
    return [w for w in widest.inside(memory) if w.size < rows] or [Window(0, 0)]


def _parts(plan: DispersivePlan) -> list[tuple[int, int]]:
    """Periods that hold payload, in up to `PARTS` stretches of about as many words."""
    count = int(np.clip(plan.payload.size // LEAST_PART, 1, PARTS))
    ends = plan.payload[[(plan.payload.size * (p + 1)) // count - 1 for p in range(count)]] + 1
    begins = [int(plan.payload[0]), *(int(end) for end in ends[:-1])]
    return list(zip(begins, (int(end) for end in ends), strict=True))


def _planes(values: Complex) -> NDArray[np.float32]:
    """complex (K, Nr) -> float32 (K, 2, Nr)."""
    return np.stack([values.real, values.imag], axis=1).astype(np.float32)
