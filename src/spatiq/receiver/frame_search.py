"""Frame search: where in the recording does a sync section sit, at which carrier offset?

The recording is matched-filtered at two instants per symbol period, on a grid that is fixed to the
segment's first sample. At each lag and carrier bin the received vectors are projected on the space
of the sync section's transmit vectors, jointly over all receive channels:

    metric = ||Q^H D_f^H Y||^2 / ||Y||^2,    Q orthonormal basis (N, P), Y (N, Nr)

In white noise the metric follows Beta(P*Nr, (N-P)*Nr) whatever the noise power, which gives the
threshold in closed form (the generalised likelihood ratio of a subspace signal in noise of unknown
power: L. L. Scharf and B. Friedlander, "Matched subspace detectors", IEEE Trans. Signal Process.
42(8), 1994). A metric that passes only because noise is taken to be even over the receive channels
is looked at again with the noise as it is (frame_search_law.py).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.stats
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.receiver.frame_search_kernels import metric_at, raise_peak, window_energy
from spatiq.receiver.frame_search_law import exceeds, noise_powers
from spatiq.receiver.matched_filter import FilterBank, derotate, sample_instants
from spatiq.receiver.narrow_band_survey import NarrowBand
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.sample_stream import SampleStream
from spatiq.recording.placement import Segment

LAGS_PER_SYMBOL = 2
# A carrier off the matched filter's centre by this share of the symbol rate costs below 0.2 dB at
# any usual roll-off, and brings intersymbol interference some 20 dB down.
FILTER_REACH = 0.05
_TRANSFORM_BYTES = 1 << 20  # correlations computed at once: they stay in the cache


@dataclass(frozen=True)
class Detection:
    """A sync section found: lag in half symbol periods from the segment's start, carrier bin."""

    lag: int
    carrier_bin: int
    metric: float


@dataclass(frozen=True, eq=False)
class SyncPattern:
    """What is searched for.

    Attributes:
        basis: complex64 (P, N); orthonormal rows spanning the sync section's transmit vectors.
        transform_size: length of the correlation transforms, symbol periods.
        carrier_bins: transform bins of the carrier offsets tested, ascending, symmetric.
        false_alarm: see `ReceiverOptions`.
        threshold: smallest metric that counts as a detection, noise even over the channels.
        certain: smallest metric that counts whatever the noise's covariance over the channels: the
            threshold of one channel, as if all noise were on it.
        filter_bins: transform bins at which the matched filter is centred; each serves the carrier
            bins within `FILTER_REACH` of it.
        ambiguous: whether the section, shifted in time and carrier, resembles itself so much that a
            place beside the true one may pass the threshold.
    """

    basis: NDArray[np.complex64]
    transform_size: int
    carrier_bins: NDArray[np.int64]
    false_alarm: float
    threshold: float
    certain: float
    filter_bins: NDArray[np.int64]
    ambiguous: bool = False

    @property
    def length(self) -> int:
        """Symbol periods in the sync section, N."""
        return int(self.basis.shape[1])

    @property
    def hop(self) -> int:
        """Lags from one block of the search grid to the next."""
        return LAGS_PER_SYMBOL * (self.transform_size - self.length + 1)

    def served(self, group: int) -> slice:
        """Carrier bins served by a filter, as a slice; filters share them out evenly."""
        bins = self.carrier_bins.size
        each = -(-bins // self.filter_bins.size)
        return slice(group * each, min((group + 1) * each, bins))

    def filter_of(self, carrier_bin: int) -> int:
        """Transform bin of the filter that serves a carrier bin."""
        each = -(-self.carrier_bins.size // self.filter_bins.size)
        return int(self.filter_bins[carrier_bin // each])

    def carrier(self, carrier_bin: int) -> float:
        """Carrier offset of a bin, cycles per symbol period."""
        return float(self.carrier_bins[carrier_bin]) / self.transform_size


def threshold(false_alarm: float, length: int, rank: int, channels: int) -> float:
    """Metric that noise alone exceeds with the stated probability, per lag and carrier bin."""
    return float(scipy.stats.beta.isf(false_alarm, rank * channels, (length - rank) * channels))


def sync_pattern(link: Link, options: ReceiverOptions, channels: int) -> SyncPattern:
    """Basis, carrier grid and threshold of a link's first sync section.

    Carrier bins lie at most 1/(2N) cycles per symbol apart: half way between two the loss is
    0.9 dB.
    """
    span = link.layout.sync
    vectors = link.layout.known[span.start : span.stop]
    left, values, _ = np.linalg.svd(vectors, full_matrices=False)
    rank = int(np.sum(values > 1e-6 * values[0]))
    n = vectors.shape[0]
    size = max(1024, 1 << int(np.ceil(np.log2(8 * n))))
    step = max(1, size // (2 * n))
    reach = int(np.ceil(options.cfo_range * size / step))
    basis = np.ascontiguousarray(left[:, :rank].T)
    limit = threshold(options.false_alarm, n, rank, channels)
    # Half the threshold: what surrounds the section may add to a side lobe.
    shifts = np.arange(2 * reach + 1) * step / size
    carrier_bins = np.arange(-reach, reach + 1, dtype=np.int64) * step
    each = 2 * max(1, int(FILTER_REACH * size / step)) + 1
    groups = -(-carrier_bins.size // each)
    each = -(-carrier_bins.size // groups)
    parts = [carrier_bins[g * each : (g + 1) * each] for g in range(groups)]
    return SyncPattern(
        basis=basis.astype(np.complex64),
        transform_size=size,
        carrier_bins=carrier_bins,
        false_alarm=options.false_alarm,
        threshold=limit,
        certain=threshold(options.false_alarm, n, rank, 1),
        filter_bins=np.array([part[part.size // 2] for part in parts if part.size], np.int64),
        ambiguous=largest_side_lobe(basis, shifts) > limit / 2,
    )


def largest_side_lobe(basis: NDArray[np.complex128], shifts: NDArray[np.float64]) -> float:
    """Largest metric of the pattern against itself, two or more symbol periods off the true place.

    Args:
        basis: complex128 (P, N); orthonormal rows.
        shifts: carrier offsets tried, cycles per symbol period; their negatives give the same.
    """
    n = basis.shape[1]
    size = 1 << int(np.ceil(np.log2(2 * n)))
    spectrum = np.conj(scipy.fft.fft(basis, size, axis=1))
    beside = slice(2, size - 1)  # lags +-2 and beyond, modulo the transform's size
    top = 0.0
    for shift in shifts:
        turned = scipy.fft.fft(basis * np.exp(2j * np.pi * shift * np.arange(n)), size, axis=1)
        lobes = np.abs(scipy.fft.ifft(spectrum[:, None] * turned[None], axis=2)) ** 2
        top = max(top, float(lobes.sum(axis=(0, 1))[beside].max(initial=0.0)))
    return top


def last_lag(samples: int, bank: FilterBank, pattern: SyncPattern) -> int:
    """Last lag at which a sync section ends within a segment of so many samples."""
    count = int(samples / (bank.samples_per_symbol / LAGS_PER_SYMBOL)) + 1
    return count - LAGS_PER_SYMBOL * (pattern.length - 1) - 1


def first_needed_sample(lag: int, bank: FilterBank, pattern: SyncPattern, lead: int) -> int:
    """First sample, from the segment's start, that a search from a lag on may ask for.

    The lag's block of the grid, and before it the lead of a frame and a peak's neighbourhood.
    """
    keep = min(lag, lag // pattern.hop * pattern.hop)
    keep -= LAGS_PER_SYMBOL * (lead + pattern.length)
    return int(keep * (bank.samples_per_symbol / LAGS_PER_SYMBOL)) - 2 * bank.half - 8


def first_needed(
    segment: Segment, lag: int, bank: FilterBank, pattern: SyncPattern, lead: int
) -> int:
    """The same as a file index, not before the segment."""
    return segment.start + max(first_needed_sample(lag, bank, pattern, lead), 0)


class FrameSearch:
    """Finds sync sections in one segment; lags are asked for in rising order.

    `lead`: symbol periods before a sync section that its frame still needs, and the filter that
    excises the narrow-band noise `band`.
    """

    def __init__(
        self,
        stream: SampleStream,
        bank: FilterBank,
        pattern: SyncPattern,
        lead: int = 0,
        band: NarrowBand | None = None,
    ) -> None:
        self._band = band
        self._lead = lead
        self._stream = stream
        self._bank = bank
        self._pattern = pattern
        self._spacing = bank.samples_per_symbol / LAGS_PER_SYMBOL
        self._hop = pattern.hop
        transform = scipy.fft.fft(pattern.basis, pattern.transform_size, axis=-1)
        self._base = np.conj(transform).astype(np.complex64)
        self._kept: dict[bytes, NDArray[np.complex64]] = {}
        self._blocks: dict[int, tuple[NDArray[np.float32], NDArray[np.int32]]] = {}
        self.last_lag = last_lag(stream.stop - stream.start, bank, pattern)
        self.crossed = -1
        self._refused = (-1, -1)

    def _spectra(self, offsets: NDArray[np.int64]) -> NDArray[np.complex64]:
        """Conjugate transforms of the basis at carrier offsets, complex64 (bins, 1, 1, P, size).

        `offsets` are transform bins from the filter's centre; each shifts the transform.
        """
        key = offsets.tobytes()
        if key in self._kept:
            return self._kept[key]
        shifted = np.stack([np.roll(self._base, b, axis=-1) for b in offsets])[:, None, None]
        # For a long section over a wide range all of them would fill the memory.
        if sum(k.nbytes for k in self._kept.values()) + shifted.nbytes <= 4 * _TRANSFORM_BYTES:
            self._kept[key] = shifted
        return shifted

    def instants(self, first: int, count: int, filter_bin: int = 0) -> NDArray[np.complex64]:
        """Matched-filter outputs of the fixed half-symbol grid, complex64 (Nr, count).

        The filter is centred on a transform bin, by turning the samples back by its carrier.
        """
        half = self._bank.half
        origin = int(np.floor(first * self._spacing)) - half
        reach = int(np.ceil(count * self._spacing)) + 2 * half + 3
        begin = self._stream.start + origin
        planes = self._planes(begin, begin + reach)
        if filter_bin:
            planes = planes.copy()
            cycles = filter_bin / self._pattern.transform_size / self._bank.samples_per_symbol
            derotate(planes, cycles, float(-origin))
        out = np.empty((planes.shape[0], count), np.complex64)
        taps, phases = self._bank.taps, self._bank.phases
        sample_instants(planes, origin, first, self._spacing, taps, phases, out)
        return out

    def _planes(self, begin: int, end: int) -> NDArray[np.float32]:
        """Samples begin..end-1 (Nr, 2, n), narrow-band noise excised."""
        if self._band is None:
            return np.ascontiguousarray(self._stream.planes(begin, end))
        reach = self._band.reach
        wider = self._stream.planes(begin - reach, end + reach)
        samples = self._band.excised((wider[:, 0] + 1j * wider[:, 1]).astype(np.complex64))
        return np.stack([samples.real, samples.imag], axis=1)

    def _block(self, index: int) -> tuple[NDArray[np.float32], NDArray[np.int32]]:
        """Best metric over carrier bins, and its bin, for the lags of one block of the grid."""
        if index not in self._blocks:
            self._blocks = {i: b for i, b in self._blocks.items() if i >= index - 1}
            lags = self._pattern.transform_size - self._pattern.length + 1
            best = np.zeros((2, lags), np.float32)
            where = np.zeros((2, lags), np.int32)
            for group in range(self._pattern.filter_bins.size):
                self._raise_block(index, group, best, where)
            self._blocks[index] = (best.T.ravel(), where.T.ravel())  # lags in order
        return self._blocks[index]

    def _raise_block(
        self, index: int, group: int, best: NDArray[np.float32], where: NDArray[np.int32]
    ) -> None:
        """Raise a block's best metrics to those of the carrier bins that one filter serves."""
        pattern = self._pattern
        size, lags = pattern.transform_size, best.shape[1]
        centre = int(pattern.filter_bins[group])
        served = pattern.served(group)
        y = self.instants(index * self._hop, LAGS_PER_SYMBOL * size, centre)
        halves = np.stack([y[:, 0::2], y[:, 1::2]])  # (2, Nr, size)
        inverse = np.empty((2, lags), np.float32)
        window_energy(halves, pattern.length, inverse)
        spectrum = scipy.fft.fft(halves, axis=-1)[:, :, None, :]
        metric = np.empty(lags, np.float32)
        each = spectrum.size * self._base.shape[0] * 8  # bytes of one bin's correlations
        together = max(1, _TRANSFORM_BYTES // each)
        for first in range(served.start, served.stop, together):
            bins = pattern.carrier_bins[first : min(first + together, served.stop)]
            products = spectrum * self._spectra(bins - centre)
            correlations = scipy.fft.ifft(products, axis=-1, overwrite_x=True)
            parts = correlations.reshape(correlations.shape[0], 2, -1, size, 1)
            parts = parts.view(np.float32)
            for b in range(parts.shape[0]):
                raise_peak(parts[b], inverse, first + b, metric, best, where)

    def scan(self, from_lag: int, before: int | None = None) -> Detection | None:
        """First sync section at or after a lag; None when none crosses the threshold `before` one.

        That is the largest metric within one sync length of the first crossing of the threshold,
        which is kept in `crossed`.
        """
        lag = max(from_lag, 0)
        stop = self.last_lag + 1 if before is None else min(before, self.last_lag + 1)
        while lag < stop:
            index, offset = divmod(lag, self._hop)
            self.release(lag)
            best, _ = self._block(index)
            crossing = np.flatnonzero(best[offset:] >= self._pattern.threshold)
            if crossing.size:
                first = lag + int(crossing[0])
                if first >= stop:
                    return None
                place = self._peak(first)
                if place != self._refused:
                    found = self.refine(*place)
                    if self.passes(found):
                        self.crossed = first
                        return found
                    self._refused = place  # for the noise's sake, or by the transforms' rounding
                lag = first + 1  # so that a find does not depend on where the scan began
                continue
            lag = (index + 1) * self._hop
        return None

    def pass_over(self, lag: int | None) -> None:
        """Read on to a lag, or to the segment's end, without searching."""
        before = self._stream.stop
        if lag is not None:
            samples = first_needed_sample(lag, self._bank, self._pattern, self._lead)
            before = self._stream.start + samples
        self._stream.pass_over(before)

    def release(self, lag: int) -> None:
        """Nothing before this lag is searched any more."""
        samples = first_needed_sample(lag, self._bank, self._pattern, self._lead)
        self._stream.release(self._stream.start + samples)

    def _peak(self, first: int) -> tuple[int, int]:
        """Lag and carrier bin of the largest metric within one sync length of a crossing."""
        last = min(first + LAGS_PER_SYMBOL * self._pattern.length, self.last_lag)
        top, at, carrier_bin = -1.0, first, 0
        for index in range(first // self._hop, last // self._hop + 1):
            best, where = self._block(index)
            low = max(first - index * self._hop, 0)
            high = min(last - index * self._hop, self._hop - 1) + 1
            i = low + int(np.argmax(best[low:high]))
            if best[i] > top:
                top, at, carrier_bin = float(best[i]), index * self._hop + i, int(where[i])
        return at, carrier_bin

    def refine(self, lag: int, carrier_bin: int, lags: int = 2, bins: int = 1) -> Detection:
        """Best metric by direct correlation in a neighbourhood: the same however one got there."""
        pattern = self._pattern
        first = max(lag - lags, 0)
        last = min(lag + lags, self.last_lag)
        centre = pattern.filter_of(carrier_bin)
        count = last - first + LAGS_PER_SYMBOL * (pattern.length - 1) + 1
        y = self.instants(first, count, centre)
        low = max(carrier_bin - bins, 0)
        high = min(carrier_bin + bins, pattern.carrier_bins.size - 1)
        carriers = (pattern.carrier_bins[low : high + 1] - centre) / pattern.transform_size
        metric = metric_at(y, pattern.basis, carriers, last - first + 1)
        i, b = np.unravel_index(int(np.argmax(metric)), metric.shape)
        return Detection(first + int(i), low + int(b), float(metric[i, b]))

    def near(self, lag: int, carrier_bin: int, reach: int) -> Detection | None:
        """A sync section expected at a lag, searched +-reach lags and +-1 bin around it."""
        if lag - reach > self.last_lag or lag + reach < 0:
            return None
        found = self.refine(min(max(lag, 0), self.last_lag), carrier_bin, lags=reach)
        if found.metric < self._pattern.threshold:
            return None
        found = self.refine(found.lag, found.carrier_bin)
        return found if self.passes(found) else None

    def passes(self, found: Detection) -> bool:
        """Whether noise, as it is over the receive channels, would hardly give this metric."""
        pattern = self._pattern
        if found.metric < pattern.threshold or found.metric >= pattern.certain:
            return found.metric >= pattern.certain
        rank, length = pattern.basis.shape
        centre = pattern.filter_of(found.carrier_bin)
        y = self.instants(found.lag, LAGS_PER_SYMBOL * (length - 1) + 1, centre)[:, ::2]
        cycles = (pattern.carrier_bins[found.carrier_bin] - centre) / pattern.transform_size
        y = y * np.exp(-2j * np.pi * cycles * np.arange(length))
        basis = pattern.basis.astype(np.complex128)
        y = y - (y @ basis.conj().T) @ basis
        powers = noise_powers(y @ y.conj().T / (length - rank), length - rank)
        return exceeds(found.metric, powers, length, rank, pattern.false_alarm)


def noise_metrics(search: FrameSearch) -> Iterator[NDArray[np.float32]]:
    """Best metric of every lag, block by block: for measuring the false-alarm rate."""
    index = 0
    while index * search._hop <= search.last_lag:
        search.release(index * search._hop)
        best, _ = search._block(index)
        yield best[: max(0, min(search._hop, search.last_lag + 1 - index * search._hop))]
        index += 1
