"""What was really sent and what really happened to it: everything a genie receiver needs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.transmit.data_bits import random_data_bits
from spatiq.transmit.frames import frame_words, vectors_of_words


@dataclass(frozen=True, eq=False)
class Truth:
    """Truth of a simulated recording of F frames, in the scale of its samples.

    Sample n of frame f, noise aside, is
        exp(j (phase + 2 pi cfo_hz (n - start) / sample_rate))
        * sum_k H x_k p((n - start - k spacing) / spacing) / sqrt(samples_per_symbol).

    Attributes:
        link: the link description.
        frame_numbers: int64 (F,).
        starts: float64 (F,); instant of each frame's first symbol, samples.
        samples_per_symbol: nominal.
        clock_ppm: how much longer than nominal the symbol period is; spacing = nominal * (1 + ppm).
        sample_rate: Hz.
        cfo_hz: float64 (F,).
        phase: float64 (F,); carrier phase at the frame's start, radians.
        H: complex128 (F, Nr, Nt); converter gain included.
        N0: noise variance per complex sample and per received symbol, converter gain included;
            rounding noise of the converter is not in it.
        gain: converter gain, factor from E|h|^2 = 1 to the samples.
        snr_db: float64 (F,); mean over payload of ||H x||^2 / (Nr N0) for equiprobable words.
        seed: seed of the simulation.
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
        """Payload words sent in frames first..stop-1, int64 (F, Kp)."""
        return frame_words(self.link, self.frame_numbers[first:stop], self.data_bits(first, stop))

    def vectors(self, first: int = 0, stop: int | None = None) -> NDArray[np.complex128]:
        """Transmit vectors of frames first..stop-1, complex128 (F, K, Nt)."""
        return vectors_of_words(self.link, self.words(first, stop))

    def received_symbols(self, first: int = 0, stop: int | None = None) -> NDArray[np.complex128]:
        """Noise-free received symbols H x, complex128 (F, K, Nr); carrier and clock taken out."""
        return self.vectors(first, stop) @ self.H[first:stop].transpose(0, 2, 1)
