"""Words of a block with a guard, decided in the frequency domain.

With a prefix as long as the channel's memory, a block's body is convolved with the channel in a
circle; with as much zero padding it is, too, once the tail is folded onto the beginning. The
discrete Fourier transform turns both into N flat channels H[f] (A. Peled and A. Ruiz, "Frequency
domain data transmission using reduced computational complexity algorithms", Int. Conf. Acoustics,
Speech and Signal Processing 1980; B. Muquet et al., "Cyclic prefixing or zero padding for wireless
multicarrier transmissions?", IEEE Trans. Commun. 50(12), 2002; both from memory).

- Multicarrier: each subcarrier's word is decided by the detector of flat channels.
- Single carrier: equalised at each f with least mean-square error (H. Sari, G. Karam, I.
  Jeanclaude, "Transmission techniques for digital terrestrial TV broadcasting", IEEE Commun. Mag.
  33(2), 1995, from memory), transformed back, and decided word by word as in `linear_equaliser`.

Where the guard is shorter than the memory, what is left of the echoes counts as noise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.link.blocks import MULTICARRIER, BlockRun
from spatiq.receiver.detection import Detector
from spatiq.receiver.fir_channel import Complex, FirChannel, subcarrier_channels
from spatiq.receiver.linear_equaliser import as_flat_channel, word_moments
from spatiq.signal.codebooks import Codebook


@dataclass(frozen=True, eq=False)
class BlockDetector:
    """Decides blocks.

    Attributes:
        codebook: the words.
        detector: of flat channels.
    """

    codebook: Codebook
    detector: Detector

    def __call__(
        self, received: Complex, channel: FirChannel, run: BlockRun, body: int, amplitude: float
    ) -> NDArray[np.int64]:
        """Words of one block, int64 (U,).

        Args:
            received: complex128 (K, Nr); a frame's vectors, carrier phase removed.
            channel: impulse responses and N0.
            run: the block's section.
            body: first period of its body.
            amplitude: factor of the words.
        """
        spectrum = block_spectrum(received, channel, run, body)
        responses = subcarrier_channels(channel.taps, channel.window, run.length) * amplitude
        if run.form == MULTICARRIER:
            words = [
                self.detector(
                    spectrum[f : f + 1].astype(np.complex64),
                    responses[f],
                    channel.noise,
                    self.codebook,
                )[0]
                for f in run.slots
            ]
            return np.array(words, np.int64)
        # Folding adds the noise of the tail to that of the beginning: on average so much more.
        folded = 0 if run.has_prefix else channel.window.memory
        noise = channel.noise * (1 + folded / run.length)
        estimate, error = self.estimates(spectrum, responses, noise)
        used = self._used
        flat, seen = as_flat_channel(estimate, error, word_moments(self.codebook.vectors[:, used]))
        whole = np.zeros((used.size, self.codebook.antennas), np.complex128)
        whole[:, used] = seen
        return np.asarray(self.detector(flat, whole, 1.0, self.codebook), np.int64)

    @property
    def _used(self) -> NDArray[np.int64]:
        return np.flatnonzero(np.any(self.codebook.vectors != 0, axis=0))

    def estimates(
        self, spectrum: Complex, responses: Complex, noise: float
    ) -> tuple[Complex, Complex]:
        """Linear estimates of a body's vectors less the mean word (N, A), and their error (A, A).

        A are the antennas in use.
        """
        used = self._used
        moments = word_moments(self.codebook.vectors[:, used])
        part = responses[:, :, used]
        length = len(spectrum)
        left = spectrum.copy()
        # The mean word is a constant: all of it lies at subcarrier 0.
        left[0] -= part[0] @ moments.mean * np.sqrt(length)
        seen = part @ moments.covariance
        power = float(np.mean(np.abs(part) ** 2))
        load = max(noise, 1e-9 * power, 1e-30)
        around = seen @ part.conj().transpose(0, 2, 1) + load * np.eye(part.shape[1])
        gain = np.linalg.solve(around, seen).conj().transpose(0, 2, 1)
        error = moments.covariance - np.mean(gain @ seen, axis=0)
        estimate = np.einsum("far,fr->fa", gain, left)
        return np.fft.ifft(estimate, axis=0) * np.sqrt(length), error


def block_spectrum(received: Complex, channel: FirChannel, run: BlockRun, body: int) -> Complex:
    """Spectrum of a block's body as received, H[f] X[f] and noise: complex128 (N, Nr).

    Lags below 0 end the part that is taken so much before the body's end.
    """
    window, length = channel.window, run.length
    begin = body + window.first
    taken = np.zeros((length, received.shape[1]), np.complex128)
    inside = np.arange(max(begin, 0), min(begin + length, len(received)))
    taken[inside - begin] = received[inside]
    if not run.has_prefix:
        tail = np.arange(begin + length, min(begin + length + window.memory, len(received)))
        np.add.at(taken, (tail - begin) % length, received[tail])
    turn = np.exp(-2j * np.pi * np.arange(length) * window.first / length)
    return np.asarray(np.fft.fft(taken, axis=0) / np.sqrt(length) * turn[:, None], np.complex128)
