"""What was really sent and what really happened to it: everything a genie receiver needs."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.transmit.data_bits import random_data_bits
from spatiq.transmit.echoes import Echoes
from spatiq.transmit.frames import frame_words, vectors_of_words
from spatiq.transmit.gain_steps import GainSteps
from spatiq.transmit.losses import recorded_index
from spatiq.transmit.moving_channel import Field
from spatiq.transmit.rotation import CarrierDrift, Rotation, phase_chunks
from spatiq.transmit.transmitter_faults import TransmitterFault


def _no_gaps() -> NDArray[np.int64]:
    return np.zeros((0, 2), np.int64)


@dataclass(frozen=True, eq=False)
class Truth:
    """Truth of a simulated recording of F frames, in the scale of its samples.

    Sample n of frame f on receive channel r, noise aside, is, with m = n - receive_delays[r],
        exp(j (phase + 2 pi cfo_hz (m - start) / sample_rate + common phase of sample n))
        * sum_k sum_a H[r, a] x[k, a] p((m - t[k, a]) / spacing) / sqrt(samples_per_symbol),
        t[k, a] = start + k spacing + antenna_delays[a] samples_per_symbol.
    Instants are on the sampling clock: samples that were lost count (see `recorded_starts`). What
    the front end does after noise is not in it, but for the gain steps.

    Attributes:
        link: the link description.
        frame_numbers: int64 (F,).
        starts: float64 (F,); instant of each frame's first symbol, samples.
        samples_per_symbol: nominal.
        clock_ppm: how much longer than nominal the symbol period is; spacing = nominal * (1 + ppm).
        sample_rate: Hz.
        cfo_hz: float64 (F,); without drift (see `cfo_at_start_hz`).
        phase: float64 (F,); carrier phase at the frame's start, radians; without common phase.
        H: complex128 (F, Nr, Nt); converter gain and receive gains included. Of a channel that
            moves: in the middle of the payload (see `channels`). Of a dispersive one: the sum over
            its paths, which is its response at the carrier.
        N0: noise variance per complex sample and, of white noise, per received symbol; converter
            gain and receive gains included; mean over the receive channels. Rounding noise of the
            converter is not in it.
        gain: converter gain, factor from E|h|^2 = 1 to the samples.
        snr_db: float64 (F,); mean over payload of ||H x||^2 / (Nr N0) for equiprobable words. Of a
            channel that moves: over 16 instants of the payload. Of a dispersive one, the energy
            that a symbol brings over all paths stands for ||H x||^2.
        seed: seed of the simulation.
        antenna_delays: float64 (Nt,), nominal symbol periods; None: none.
        receive_delays: float64 (Nr,), samples; None: none.
        noise_covariance: complex128 (Nr, Nr) of the noise of a sample; None: N0 times the identity.
        rotations: what makes up the common phase.
        moving: the channel as a function of time; None when it stands still in each frame.
        echoes: the paths of a dispersive channel, each as a transmitter of its own that is late by
            the path's delay; None of a flat one.
        gain_steps: gain after noise; None: 1 throughout.
        gaps: int64 (G, 2); first lost sample and count of each run of samples that was lost.
        faults: of the transmitter: what it sends is not what the description says.
    """

    link: Link
    frame_numbers: NDArray[np.int64]
    starts: NDArray[np.float64]
    samples_per_symbol: float
    clock_ppm: float
    sample_rate: float
    cfo_hz: NDArray[np.float64]
    phase: NDArray[np.float64]
    H: NDArray[np.complex128]
    N0: float
    gain: float
    snr_db: NDArray[np.float64]
    seed: int
    antenna_delays: NDArray[np.float64] | None = None
    receive_delays: NDArray[np.float64] | None = None
    noise_covariance: NDArray[np.complex128] | None = None
    rotations: tuple[Rotation, ...] = ()
    moving: Field | None = None
    echoes: Echoes | None = None
    gain_steps: GainSteps | None = None
    gaps: NDArray[np.int64] = field(default_factory=_no_gaps)
    faults: tuple[TransmitterFault, ...] = ()

    @property
    def frames(self) -> int:
        """Number of frames, F."""
        return len(self.frame_numbers)

    @property
    def spacing(self) -> float:
        """Samples per symbol period as received, clock offset included."""
        return self.samples_per_symbol * (1 + self.clock_ppm * 1e-6)

    def data_bits(self, first: int = 0, stop: int | None = None) -> NDArray[np.uint8] | None:
        """Bits of the "data" fields of frames first..stop-1, uint8 (F, n); None without any."""
        stop = self.frames if stop is None else stop
        return random_data_bits(self.link, self.seed, first, stop)

    def sent_bits(self, first: int = 0, stop: int | None = None) -> NDArray[np.uint8]:
        """Payload bits as sent (scrambled) of frames first..stop-1, uint8 (F, n_bits)."""
        numbers = self.frame_numbers[first:stop]
        return self.link.payload.encode(numbers, self.data_bits(first, stop))

    def words(self, first: int = 0, stop: int | None = None) -> NDArray[np.int64]:
        """Payload words sent in frames first..stop-1, int64 (F, Kw)."""
        return frame_words(self.link, self.frame_numbers[first:stop], self.data_bits(first, stop))

    def vectors(self, first: int = 0, stop: int | None = None) -> NDArray[np.complex128]:
        """Transmit vectors of frames first..stop-1, complex128 (F, K, Nt)."""
        vectors = vectors_of_words(self.link, self.words(first, stop))
        for fault in self.faults:
            vectors = fault(vectors, self.link.layout)
        return vectors

    @property
    def drift_hz_per_s(self) -> float:
        """Carrier drift, Hz per second."""
        drifts = (r.rate_hz_per_s for r in self.rotations if isinstance(r, CarrierDrift))
        return float(sum(drifts))

    @property
    def cfo_at_start_hz(self) -> NDArray[np.float64]:
        """Carrier offset at each frame's start, drift included, float64 (F,)."""
        return self.cfo_hz + self.drift_hz_per_s * (self.starts / self.sample_rate)

    @property
    def recorded_starts(self) -> NDArray[np.float64]:
        """Frame starts as sample numbers of the file, float64 (F,); NaN where that was lost."""
        return recorded_index(self.starts, self.gaps)

    def common_phase(self, n_samples: int) -> Iterator[NDArray[np.float64]]:
        """Phase of drift and phase noise at samples 0..n_samples-1, radians, in chunks."""
        return phase_chunks(self.rotations, self.sample_rate, self.seed, n_samples)

    def channels(self, frame: int) -> NDArray[np.complex128]:
        """Channel at each symbol period of a frame, complex128 (K, Nr, Nt)."""
        periods = self.link.layout.length
        self._flat_only()
        if self.moving is None:
            return np.broadcast_to(self.H[frame], (periods, *self.H.shape[1:]))
        return self.moving.along(*self._channel_times(frame), periods)

    def _flat_only(self) -> None:
        if self.echoes is not None:
            raise InputError("truth", "channel", "a dispersive channel", "one path at a time")

    def taps(self, frame: int, lags: NDArray[np.float64]) -> NDArray[np.complex128]:
        """Channel of a frame as sampled behind the matched filter, complex128 (L, Nr, Nt).

        lags: symbol periods after a symbol's own instant. Of a channel that moves: in the middle of
        the payload. A flat channel leaves the pulse's overlap with itself.
        """
        payload = self.link.layout.payload_index
        start, step = self._channel_times(frame)
        middle = start + step * float(payload[0] + payload[-1]) / 2
        echoes = self.echoes
        if echoes is None:
            echoes = Echoes(np.zeros(1), self.H[:, None])
        return echoes.taps(self.link.pulse, frame, middle, np.asarray(lags, np.float64))

    def received_symbols(
        self,
        first: int = 0,
        stop: int | None = None,
        antennas: NDArray[np.bool_] | None = None,
        path: int | None = None,
    ) -> NDArray[np.complex128]:
        """Noise-free received symbols H x, complex128 (F, K, Nr); carrier and clock taken out.

        Args:
            first: first frame.
            stop: frame after the last one; None: all.
            antennas: bool (Nt,); what only these antennas contribute; None: all.
            path: of a dispersive channel, which path; its delay taken out, too.

        Raises:
            InputError: a dispersive channel without a path.
        """
        vectors = self.vectors(first, stop)
        if antennas is not None:
            vectors *= antennas
        if path is None:
            self._flat_only()
            if self.moving is None:
                return vectors @ self.H[first:stop].transpose(0, 2, 1)
        moved = [self._moved(f, frame, path) for f, frame in enumerate(vectors, first)]
        shape = (len(vectors), self.link.layout.length, self.H.shape[1])
        return np.array(moved, np.complex128).reshape(shape)

    def _moved(
        self, frame: int, vectors: NDArray[np.complex128], path: int | None
    ) -> NDArray[np.complex128]:
        times = self._channel_times(frame)
        if path is not None and self.echoes is not None:
            return self.echoes.received(path, frame, *times, vectors)
        assert self.moving is not None
        return self.moving.received(*times, vectors)

    def _channel_times(self, frame: int) -> tuple[float, float]:
        """Instant of a frame's first symbol, and from symbol to symbol, nominal symbol periods."""
        start = float(self.starts[frame]) / self.samples_per_symbol
        return start, self.spacing / self.samples_per_symbol
