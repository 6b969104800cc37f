"""Survey: what a front end adds to every sample, looked for before a recording is searched.

A constant offset as strong as the signal, or a line in its band, hides the sync sections. Blocks at
places that follow from the recording's length alone are read, so that the answer does not depend on
how the recording is read afterwards. Only what would hinder the search is taken out of the samples:
a constant of at least 2 % of what is left without it, lines of at least 5 % of a channel's power.
What is weaker is each frame's to find (`front_end.py`, `interferer.py`).

A constant is taken for real when its square exceeds what the scatter of partial means lets chance
exceed with probability 1e-6; a line when the median over blocks of its periodogram (Hann window)
stands 15 dB over its surroundings: a burst in fewer than half of the blocks is none.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.ndimage
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.narrow_band_survey import NarrowBand, find_narrow_band
from spatiq.recording.recording import Recording

CHUNK = 8192  # samples of a block, and of the pieces from which lines are taken out
_BLOCKS = 32  # at most, and a tenth of the recording, but 4 where there are so many
_PART = 512  # samples of a partial mean
_CHANCE = 1e-6
_LEAST_CONSTANT = 0.02
_LEAST_LINE = 0.05
LITTLE_CARRIER = 0.01  # share of the signal's power below which its own carrier is no line
_STANDS_OUT = 10**1.5
MOST_LINES = 4
_LOBE = 3  # bins either side of a line that its main lobe fills


@dataclass(frozen=True, eq=False)
class Survey:
    """What is taken out of all samples.

    Attributes:
        constant: complex128 (Nr,); zero where it is not significant.
        lines: frequencies of interfering lines, cycles per sample, strongest first.
        band: narrow-band noise, which the search works without; it is not taken out of samples.
    """

    constant: NDArray[np.complex128]
    lines: tuple[float, ...] = ()
    band: NarrowBand | None = None

    @property
    def clean(self) -> bool:
        """Nothing has to be taken out."""
        return not self.lines and not self.constant.any()


def survey_recording(
    recording: Recording, link: Link, carrier_reach: float, *, narrow_band: bool = False
) -> Survey:
    """Look at a recording's blocks.

    Args:
        recording: opened recording.
        link: tells how strong a line the signal itself may have.
        carrier_reach: where that line may lie: +- cycles per sample.
        narrow_band: whether narrow-band noise is looked for: frames on a dispersive channel are
            received without regard to it.
    """
    blocks = _survey_blocks(recording)
    own = line_share(link)
    constant = np.array([_constant(channel, own) for channel in blocks])
    steady = blocks - constant[:, None, None].astype(np.complex64) if constant.any() else blocks
    lines = _lines(steady, carrier_reach if own > LITTLE_CARRIER else 0.0)
    band = None
    if own <= LITTLE_CARRIER and link.codebook.block == 1 and narrow_band:
        samples_per_symbol = recording.sample_rate / link.symbol_rate_hz
        band = find_narrow_band(steady, link, samples_per_symbol, carrier_reach)
    if band is not None:
        lines = tuple(f for f in lines if abs(f - band.frequency) > 4 * band.width)
    return Survey(constant, lines, band)


def _survey_blocks(recording: Recording) -> NDArray[np.complex64]:
    """Samples (Nr, blocks, n) of evenly spaced blocks; what is not finite is zero."""
    total = recording.n_samples
    size = min(CHUNK, total)
    there = total // max(size, 1)
    count = max(1, min(_BLOCKS, max(there // 10, 4), there))
    starts = [k * (total - size) // max(count - 1, 1) for k in range(count)]
    out = np.zeros((recording.channels, count, size), np.complex64)
    for k, start in enumerate(starts):
        at = 0
        for block in recording.blocks(max(size, 1), start, start + size):
            out[:, k, at : at + block.samples.shape[1]] = block.samples
            at += block.samples.shape[1]
    return out if np.isfinite(out).all() else np.where(np.isfinite(out), out, np.complex64(0))


def line_share(link: Link) -> float:
    """Largest share of the signal's power that may be an unmodulated carrier.

    Space-shift keying always has one; other frames as far as their known symbols repeat.
    """
    known, payload = link.layout.known, link.layout.payload_index.size
    mean = (known.sum(axis=0) + payload * link.codebook.vectors.mean(axis=0)) / known.shape[0]
    power = np.sum(np.abs(known) ** 2)
    power += payload * np.mean(np.sum(np.abs(link.codebook.vectors) ** 2, axis=1))
    return float(np.sum(np.abs(mean)) ** 2 / (power / known.shape[0]))


def _constant(blocks: NDArray[np.complex64], own: float) -> complex:
    """Constant offset of one channel's blocks (B, n), 0 when it is not significant."""
    part = min(_PART, blocks.shape[1])
    if not part:
        return 0j
    whole = blocks[:, : blocks.shape[1] // part * part]
    means = whole.reshape(-1, part).mean(axis=1, dtype=np.complex128)
    found = complex(means.mean())
    scatter = float(np.sum(np.abs(means - found) ** 2)) / max(means.size - 1, 1) / means.size
    rest = _power(blocks) - abs(found) ** 2
    least = max(_LEAST_CONSTANT, 2 * own) * rest
    certain = -np.log(_CHANCE) * scatter
    return found if means.size > 1 and abs(found) ** 2 > max(least, certain) else 0j


def _power(blocks: NDArray[np.complex64]) -> float:
    """Mean power."""
    return float(np.mean(blocks.real**2 + blocks.imag**2, dtype=np.float64))


def _lines(blocks: NDArray[np.complex64], own_reach: float) -> tuple[float, ...]:
    """Frequencies of lines in blocks (Nr, B, n); the signal's own lie within own_reach."""
    size = blocks.shape[2]
    if blocks.shape[1] < 2 or size < CHUNK:
        return ()
    power = np.array([_power(channel) for channel in blocks])
    alive = power > 0
    if not alive.any():
        return ()
    window = (0.5 - 0.5 * np.cos(2 * np.pi * np.arange(size) / size)).astype(np.float32)
    spectra = scipy.fft.fft(blocks[alive] * window, axis=2)
    spectra = (spectra.real**2 + spectra.imag**2) / (size * np.sum(window**2))
    lobe = 2 * _LOBE + 1
    mean = spectra.mean(axis=1) / power[alive, None]
    # No median is above twice the mean: mostly that is all there is to do.
    if scipy.ndimage.uniform_filter1d(mean, lobe, mode="wrap").max() * lobe < _LEAST_LINE / 2:
        return ()
    shares = np.median(spectra, axis=1) / power[alive, None]
    floor = scipy.ndimage.median_filter(shares, (1, 65), mode="wrap")
    beyond = scipy.ndimage.uniform_filter1d(shares - floor, lobe, axis=1, mode="wrap") * lobe
    beyond[shares < _STANDS_OUT * floor] = 0.0
    frequency = scipy.fft.fftfreq(size)
    beyond[:, np.abs(frequency) <= own_reach + (_LOBE / size if own_reach else 0.0)] = 0.0
    beyond[:, np.abs(frequency) <= _LOBE / size] = 0.0  # the constant's place
    strength = beyond.max(axis=0)
    found: list[float] = []
    while len(found) < MOST_LINES and strength.max() >= _LEAST_LINE:
        top = int(np.argmax(np.where(strength >= strength.max() / 2, shares.max(axis=0), 0.0)))
        found.append(_between_bins(shares.max(axis=0), top))
        near = np.abs((np.arange(size) - top + size // 2) % size - size // 2) <= 2 * _LOBE
        strength[near] = 0.0
    return tuple(found)


def _between_bins(power: NDArray[np.float64], top: int) -> float:
    """Frequency of a line whose largest bin is `top`, from its neighbours under a Hann window.

    With amplitudes 1 and a of two bins next to each other the line lies (2a - 1)/(a + 1) of a bin
    towards the second (D. C. Rife and G. A. Vincent, Bell Syst. Tech. J. 49, 1970; from memory).
    """
    size = power.size
    before, after = power[top - 1], power[(top + 1) % size]
    ratio = np.sqrt(max(before, after) / power[top])
    moved = (2 * ratio - 1) / (ratio + 1) * (1 if after > before else -1)
    return float((top + moved + size / 2) % size - size / 2) / size
