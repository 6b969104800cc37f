"""Linear equalisation of a dispersive channel: minimum mean-square error, then word by word.

With codewords of mean m and covariance C, the linear estimate of least mean-square error of all
words of a run is x = m + (H^H H + N0 C^-1)^-1 H^H (y - H m), one band system for the whole run
(e.g. S. M. Kay, "Fundamentals of Statistical Signal Processing: Estimation Theory", ch. 12; from
memory). With E the covariance of its error in one period, the estimate reads m + B (x - m) + n, B =
I - E C^-1, n of covariance E - E C^-1 E: a flat channel B with coloured noise. White again, it is
handed to the detector of flat channels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from spatiq.receiver.causal_form import band_matrix, normal_equations
from spatiq.receiver.detection import Detector
from spatiq.receiver.fir_channel import Complex, Window, convolved
from spatiq.signal.codebooks import Codebook


@dataclass(frozen=True, eq=False)
class WordMoments:
    """Mean (Nt,), covariance (Nt, Nt) and its inverse, of equiprobable codewords."""

    mean: Complex
    covariance: Complex
    inverse: Complex


def word_moments(vectors: Complex) -> WordMoments:
    """Moments of codeword vectors (C, Nt).

    A direction in which words do not differ (the sum over the antennas in space-shift keying) has
    no variance; a millionth of the mean variance stands for it.
    """
    mean = vectors.mean(axis=0)
    centred = vectors - mean
    covariance = centred.T @ centred.conj() / len(vectors)
    least = 1e-6 * float(np.trace(covariance).real) / covariance.shape[0]
    covariance = covariance + max(least, 1e-30) * np.eye(covariance.shape[0])
    return WordMoments(mean, covariance, np.linalg.inv(covariance))


def as_flat_channel(
    estimate: Complex, error: Complex, moments: WordMoments
) -> tuple[NDArray[np.complex64], Complex]:
    """Equalised words as received over a flat channel with unit white noise.

    Args:
        estimate: complex128 (n, Nt); linear estimates, less the mean word.
        error: complex128 (Nt, Nt); covariance of their error.
        moments: of the words.

    Returns:
        Vectors (n, Nt) and the channel (Nt, Nt).
    """
    bias = np.eye(error.shape[0]) - error @ moments.inverse
    noise = error - error @ moments.inverse @ error
    values, vectors = np.linalg.eigh((noise + noise.conj().T) / 2)
    floor = 1e-12 * max(float(values[-1]), 1e-300)
    whitener = (vectors / np.sqrt(np.maximum(values, floor))) @ vectors.conj().T
    flat = (estimate + bias @ moments.mean) @ whitener.T
    return flat.astype(np.complex64), np.asarray(whitener @ bias, np.complex128)


@dataclass(frozen=True, eq=False)
class LinearEqualiser:
    """Decides runs of words on a dispersive channel, as `SequenceDetector` does.

    Attributes:
        codebook: the words.
        detector: of flat channels.
    """

    codebook: Codebook
    detector: Detector

    def __call__(
        self,
        received: Complex,
        taps: Complex,
        window: Window,
        noise: float,
        amplitude: NDArray[np.float64],
        heard: NDArray[np.bool_] | None = None,
    ) -> NDArray[np.int64]:
        """Words of N symbol periods, int64 (N,), -1 where nothing unknown is sent."""
        estimate, error = self.estimates(received, taps, window, noise, amplitude, heard)
        used = np.flatnonzero(np.any(self.codebook.vectors != 0, axis=0))
        moments = word_moments(self.codebook.vectors[:, used])
        flat, seen = as_flat_channel(estimate, error, moments)
        channel = np.zeros((used.size, self.codebook.antennas), np.complex128)
        channel[:, used] = seen
        words = self.detector(flat, channel, 1.0, self.codebook)
        return np.where(amplitude != 0, words, -1)

    def estimates(
        self,
        received: Complex,
        taps: Complex,
        window: Window,
        noise: float,
        amplitude: NDArray[np.float64],
        heard: NDArray[np.bool_] | None = None,
    ) -> tuple[Complex, Complex]:
        """Estimates less the mean word, (N, A), and the covariance of their error, (A, A).

        A are the antennas in use. The covariance is that of the period in the middle of those that
        carry words, and stands for all: it differs only within the memory of the run's ends.
        """
        heard = np.ones(amplitude.size, np.bool_) if heard is None else heard
        used = np.flatnonzero(np.any(self.codebook.vectors != 0, axis=0))
        moments = word_moments(self.codebook.vectors[:, used])
        part = taps[:, :, used]
        power = float(np.mean(np.sum(np.abs(part) ** 2, axis=(0, 1))))
        load = max(noise, 1e-9 * power, 1e-30)
        left = received - convolved(amplitude[:, None] * moments.mean, part, window)
        equations = normal_equations(left, part, window, amplitude, heard)
        band = band_matrix(equations, load * moments.inverse)
        factor = scipy.linalg.cholesky_banded(band, lower=True, check_finite=False)
        periods, antennas = equations.cross.shape
        middle = _middle(amplitude)
        right = np.zeros((periods * antennas, 1 + antennas), np.complex128)
        right[:, 0] = equations.cross[::-1].reshape(-1)
        # Time runs backwards in the band matrix.
        at = (periods - 1 - middle) * antennas
        right[at : at + antennas, 1:] = np.eye(antennas)
        solved = scipy.linalg.cho_solve_banded((factor, True), right, check_finite=False)
        estimate = solved[:, 0].reshape(periods, antennas)[::-1]
        return estimate, load * solved[at : at + antennas, 1:]


def _middle(amplitude: NDArray[np.float64]) -> int:
    carrying = np.flatnonzero(amplitude)
    return int(carrying[carrying.size // 2]) if carrying.size else 0
