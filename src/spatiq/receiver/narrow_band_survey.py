"""Narrow-band noise in a recording: recognised from the survey's blocks, excised for the search.

The mean of the blocks' periodograms shows a bump that stands out of the median of its surroundings
(+-0.2 of the symbol rate). It is taken for real where it exceeds both what chance reaches with
probability 1e-6 in a recording (means of exponentially distributed bins follow a Gamma law; frames
are reckoned with that are all alike) and twice what known symbols can raise the signal's own
spectrum to. A line is
none: its power keeps within the lobe of the window, and hardly varies from block to block.

The search works on samples with the bump taken down to the level of its surroundings by a filter
of fixed taps, so that nothing depends on how a recording is read; frames are cut out of the samples
as they came (`narrow_band_noise.py`).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
import scipy.ndimage
import scipy.signal
import scipy.stats
from numpy.typing import NDArray

from spatiq.link.description import Link

_CHANCE = 1e-6  # that a recording without narrow-band noise shows some
_SMOOTH = (5, 41)  # bins of which a mean is taken; those of a Hann window are worth half as many
_BESIDE = 5  # bins whose spectral matrices are added up
_AROUND = 0.2  # of the symbol rate, either side: surroundings
_EDGE = 0.45  # of the symbol rate: beyond, the pulse's own spectrum falls off
_LEAST_BLOCKS = 4
_LOBE = 4  # bins either side within which a line's power lies
_SPREAD = 0.1  # least share of a bump's power beyond them
_UNSTEADY = (
    0.4  # least squared variation of a bump's bins from block to block: 1 in noise, 0 of lines
)
_RAISED = 2.0  # over its surroundings: bins that are excised
_OWN = 2.0  # over the surroundings' mean: directions that are, the signal's own may differ
_REACH = 1024  # taps of the filter either side


@dataclass(frozen=True, eq=False)
class NarrowBand:
    """Narrow-band noise.

    Attributes:
        frequency: centre, cycles per sample.
        width: between the half-power points, cycles per sample.
        taps: complex128 (Nr, Nr, 2 _REACH + 1); the filter that excises it, the middle one at
            delay 0.
    """

    frequency: float
    width: float
    taps: NDArray[np.complex128]

    @property
    def reach(self) -> int:
        """Samples either side that the filter needs."""
        return int(self.taps.shape[2] // 2)

    def inverted(self) -> NarrowBand:
        """The same in conjugated samples."""
        return replace(self, frequency=-self.frequency, taps=self.taps.conj())

    def excised(
        self, samples: NDArray[np.complex64], carrier: float = 0.0
    ) -> NDArray[np.complex64]:
        """Samples (Nr, n) filtered: n - 2 reach. `carrier`: cycles per sample, was removed."""
        taps = self.taps
        if carrier:
            taps = taps * np.exp(-2j * np.pi * carrier * np.arange(-self.reach, self.reach + 1))
        parts = scipy.signal.fftconvolve(
            samples[None], taps.astype(np.complex64), mode="valid", axes=2
        )
        return np.asarray(parts.sum(axis=1), np.complex64)


def own_peak(link: Link) -> float:
    """How far the frames' known symbols may raise a bin of the signal's spectrum over its mean."""
    known, payload = link.layout.known, link.layout.payload_index.size
    vectors = link.codebook.vectors
    spectrum = np.sum(np.abs(scipy.fft.fft(known, 4 * known.shape[0], axis=0)) ** 2, axis=1)
    even = payload * np.mean(np.abs(vectors) ** 2)  # of one antenna
    mean = even + np.mean(spectrum) / known.shape[1]
    return float((even + spectrum.max()) / mean)


def find_narrow_band(
    blocks: NDArray[np.complex64], link: Link, samples_per_symbol: float, carrier_reach: float
) -> NarrowBand | None:
    """The strongest bump in blocks (Nr, B, n) of samples, constants taken out; None: there is none.

    `carrier_reach`: of the signal's carrier offset, cycles per sample.
    """
    size, count = blocks.shape[2], blocks.shape[1]
    reach = _EDGE / samples_per_symbol - carrier_reach
    half = round(_AROUND / samples_per_symbol * size)
    if count < _LEAST_BLOCKS or size < 4 * _REACH or half < 4 * _LOBE or reach <= 0:
        return None
    window = scipy.signal.windows.hann(size, sym=False).astype(np.float32)
    spectra = scipy.fft.fft(blocks * window, axis=2)
    powers = (spectra.real**2 + spectra.imag**2).sum(axis=0)  # (B, n)
    cycles = scipy.fft.fftfreq(size)
    inside = np.abs(cycles) <= reach
    inside[np.abs(cycles) <= _LOBE / size] = False  # the constant's place
    if not powers.any():
        return None
    energy = powers.sum(axis=1, dtype=np.float64)
    several = energy.sum() ** 2 / np.sum(energy**2) / 2
    # Frames may all be alike: then no more averages out than within one of them.
    alike = link.layout.length * samples_per_symbol / size
    for smooth in _SMOOTH:
        freedom = max(min(several, alike) * smooth, 1.0)
        chance = scipy.stats.gamma.isf(_CHANCE / size, freedom) / freedom
        limit = max(2 * own_peak(link), float(chance))
        mean = scipy.ndimage.uniform_filter1d(powers.mean(axis=0), smooth, mode="wrap")
        # Mostly nothing comes near: the median of surroundings is far from cheap.
        if mean[inside].max() < limit * np.quantile(mean[inside], 0.25) / 2:
            continue
        floor = scipy.ndimage.median_filter(mean, 2 * half + 1, mode="wrap")
        above = np.where(inside, mean / np.maximum(floor, 1e-300), 0.0)
        top = int(np.argmax(above))
        if above[top] >= limit:
            return _bump(spectra, mean, floor, top, half)
    return None


def _bump(
    spectra: NDArray[np.complex64],
    mean: NDArray[np.float64],
    floor: NDArray[np.float64],
    top: int,
    half: int,
) -> NarrowBand | None:
    """A bump around bin `top`; None for a line."""
    size = mean.size
    powers = (spectra.real**2 + spectra.imag**2).sum(axis=0)  # (B, n)
    near = (top + np.arange(-half, half + 1)) % size
    beyond = np.maximum(powers.mean(axis=0)[near] - floor[near], 0.0)
    beyond[mean[near] < _RAISED * floor[near]] = 0.0
    total = beyond.sum()
    centre = slice(half - _LOBE, half + _LOBE + 1)
    strong = near[beyond >= beyond.max() / 4]
    varied = powers[:, strong].var(axis=0) / np.maximum(powers[:, strong].mean(axis=0), 1e-300) ** 2
    if beyond[centre].sum() > (1 - _SPREAD) * total or varied.mean() < _UNSTEADY:
        return None
    offsets = np.arange(-half, half + 1)
    smooth = scipy.ndimage.uniform_filter1d(beyond, _SMOOTH[0])
    width = float(np.count_nonzero(smooth >= smooth.max() / 2))
    strongest = np.where(smooth >= smooth.max() / 4, beyond, 0.0)
    middle = float(np.sum(strongest * offsets) / strongest.sum())
    raised = near[mean[near] >= _RAISED * floor[near]]
    taps = _filter(spectra, floor, raised)
    at = ((top + middle + size / 2) % size - size / 2) / size
    return NarrowBand(at, width / size, taps)


def _filter(
    spectra: NDArray[np.complex64], floor: NDArray[np.float64], raised: NDArray[np.int64]
) -> NDArray[np.complex128]:
    """Taps (Nr, Nr, 2 _REACH + 1) that take raised bins down to the floor, direction by direction.

    The eigenvectors of the spectral matrix tell the directions over the receive channels.
    """
    channels, size = spectra.shape[0], spectra.shape[2]
    gain = np.zeros((channels, channels, size), np.complex128)
    gain[np.arange(channels), np.arange(channels)] = 1.0
    around = (raised[:, None] + np.arange(_BESIDE) - _BESIDE // 2) % size
    beside = spectra[:, :, around].astype(np.complex128)  # (Nr, B, bins, _BESIDE)
    matrices = np.einsum("rbns,qbns->nrq", beside, beside.conj())
    values, vectors = np.linalg.eigh(matrices / (spectra.shape[1] * _BESIDE))
    level = floor[raised, None] / channels
    kept = np.where(values > _OWN * level, level / np.maximum(values, 1e-300), 1.0)
    gain[:, :, raised] = np.einsum("nrk,nk,nqk->rqn", vectors, kept, vectors.conj())
    # What is left still comes from the noise's direction first: even over the directions, for sync.
    bins = np.unique((raised[:, None] + np.arange(-raised.size, raised.size + 1)) % size)
    left = np.einsum("rqn,qbn->rbn", gain[:, :, bins], spectra[:, :, bins])
    values, vectors = np.linalg.eigh(np.einsum("rbn,qbn->rq", left, left.conj()))
    root = np.where(values > 1e-9 * values[-1], np.maximum(values, 1e-300), np.inf) ** -0.5
    even = np.sqrt(values[-1]) * (vectors * root) @ vectors.conj().T
    gain = np.einsum("rq,qkn->rkn", even, gain)
    response = np.roll(scipy.fft.ifft(gain, axis=2), _REACH, axis=2)[:, :, : 2 * _REACH + 1]
    return np.asarray(response * scipy.signal.windows.hann(2 * _REACH + 3)[1:-1], np.complex128)
