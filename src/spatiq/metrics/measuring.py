"""Measuring: received frames in, figures out.

receive -> unpacking (words -> bits -> fields) -> frame numbers -> comparison -> figures
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.metrics.erasures import Erasures, erasures, slips
from spatiq.metrics.figures import as_received, channel_error_variance, fill_figures
from spatiq.metrics.frame_table import MeasuredFrames, empty_columns
from spatiq.metrics.measuring_kernels import compare_words, count_bits, error_vectors
from spatiq.metrics.path_figures import path_figures
from spatiq.metrics.receive_channels import receive_figures
from spatiq.metrics.reference_following import Numberer, Numbering, ReferenceFollower
from spatiq.metrics.skipped_frames import SkippedFrames, places_in_stream
from spatiq.metrics.spectrum import believed_spectrum, look_both_ways
from spatiq.metrics.subcarriers import subcarrier_sums
from spatiq.receiver.chain import Progress, Stage, receive
from spatiq.receiver.exhaustive_search import nearest_vectors
from spatiq.receiver.frame_batch import FrameBatch, channel_runs
from spatiq.receiver.link_tables import sparse_vectors
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording


def measure(
    recording: Recording,
    link: Link,
    options: ReceiverOptions | None = None,
    *,
    stages: Sequence[Stage] | None = None,
    progress: Callable[[Progress], None] | None = None,
) -> Iterator[MeasuredFrames]:
    """Measured frames of a recording, batch by batch, in the order of time.

    Args:
        recording: opened recording.
        link: link description.
        options: how to receive.
        stages: receiver stages of one's own, see `spatiq.receiver.chain`.
        progress: called after each batch.

    Raises:
        InputError: when the link cannot be received from this recording.
    """
    options = options or ReceiverOptions()

    def look(spectrum: str) -> Iterator[MeasuredFrames]:
        chosen = replace(options, spectrum=spectrum)
        measuring = Measuring(recording, link, chosen)
        for batch in receive(recording, link, chosen, stages=stages, progress=progress):
            yield measuring(batch)

    if options.spectrum == "auto" and stages is None:
        yield from look_both_ways(look, link)
    else:
        yield from look(options.spectrum)


def spectrum_of(recording: Recording, link: Link, options: ReceiverOptions) -> str:
    """The spectrum that `measure` takes a recording to have: "normal" or "inverted"."""
    if options.spectrum != "auto":
        return options.spectrum

    def look(spectrum: str) -> Iterator[MeasuredFrames]:
        return measure(recording, link, replace(options, spectrum=spectrum))

    return believed_spectrum(look, link)


def shortest_distance(recording: Recording, link: Link) -> float:
    """Least distance of two frames, samples: half a symbol less, for starts are estimates."""
    return (link.frame_symbols - 0.5) * recording.sample_rate / link.symbol_rate_hz


def reference_follower(recording: Recording, link: Link) -> ReferenceFollower:
    """What numbers the frames of a recording in the order of time."""
    period = link.period_symbols
    samples_per_symbol = recording.sample_rate / link.symbol_rate_hz
    return ReferenceFollower(
        link.payload,
        period * samples_per_symbol if period is not None else None,
        shortest_distance(recording, link),
    )


@dataclass
class Measuring:
    """The stage after the receiver; knows the payload, and uses it to count, never to receive.

    Attributes:
        recording, link, options: as received with.
        first_frame: running index of the first frame it is given.
        follower: numbers the frames; a `ReferenceFollower` when None.
        list_skipped: list frames lost that only the numbers tell of.
    """

    recording: Recording
    link: Link
    options: ReceiverOptions
    first_frame: int = 0
    follower: Numberer | None = None
    list_skipped: bool = True
    _found: int = field(init=False)
    _follower: Numberer = field(init=False)
    _skipped: SkippedFrames = field(init=False)

    def __post_init__(self) -> None:
        """Prepare what does not change from batch to batch."""
        link = self.link
        self._found = self.first_frame
        self._follower = self.follower or reference_follower(self.recording, link)
        shortest = shortest_distance(self.recording, link)
        self._skipped = SkippedFrames(link.period_symbols is not None, shortest)
        self._words = sparse_vectors(link.codebook.vectors)
        self._spatial = np.tile(link.codebook.spatial_bits, link.words_per_frame)
        payload = link.payload
        static = payload.known_mask.copy()
        for span in payload.fields:
            if span.is_running:
                static[span.start : span.stop] = False
        self._static = static

    def __call__(self, batch: FrameBatch) -> MeasuredFrames:
        """Figures of a batch."""
        start = batch.first_sample + batch.t0
        position = places_in_stream(self.recording.segments, batch.segment, start)
        columns = empty_columns(batch.count)
        columns["frame"][:] = self._found + np.arange(batch.count)
        columns["start_sample"][:] = start
        first = self.recording.segments[0].global_index
        columns["time_s"][:] = (position - first) / self.recording.sample_rate
        self._found += batch.count
        bits = self.link.codebook.words_to_bits(batch.words)
        plain = self.link.payload.descramble(bits)
        crc = self.link.payload.crc_ok(plain)
        numbering = self._follower.number(plain, crc, position)
        reference = self._reference(numbering)
        sent = self._sent_words(numbering, reference)
        gone = slips(batch, sent, erasures(batch, self.link), self.link)
        if gone is not None:
            sent = np.where(gone.words, -1, sent)
        self._count_bits(columns, batch, plain, numbering, reference, gone)
        columns["frame_number"][:] = numbering.numbers
        if crc is not None:
            columns["crc_ok"][:] = crc
        seen = as_received(batch)
        confusion, sums = self._compare(columns, seen, sent, gone)
        fill_figures(columns, seen, batch, sums, numbering, self.link, self.recording, self.options)
        lost = list(batch.lost)
        if self.list_skipped:
            lost += self._skipped.before(columns, position)
        with np.errstate(invalid="ignore", divide="ignore"):
            antenna_evm = 100.0 * np.sqrt(sums[:, 0] / sums[:, 1])
        return MeasuredFrames(
            columns=columns,
            confusion=confusion,
            channel=seen.channel,
            antenna_evm_percent=antenna_evm,
            antenna_power=np.mean(np.abs(seen.channel) ** 2, axis=1),
            lost=lost,
            symbols=seen.symbols if self.options.keep_symbols else None,
            channel_error_variance=channel_error_variance(batch),
            white_channel=batch.channel,
            white_noise=batch.noise,
            matched_channels={i: m.channel for i, m in batch.matched.items()},
            antenna_error_energy=sums[:, 0],
            antenna_reference_energy=sums[:, 1],
            words_decided=batch.words,
            words_sent=sent,
            llr=batch.llr,
            subcarriers=subcarrier_sums(batch, self.link, sent),
            taps=None if batch.dispersive is None else batch.dispersive.taps,
            paths=path_figures(batch, seen, self.link, self.recording.sample_rate),
            receive=receive_figures(batch, columns["signal_power"]),
        )

    def _reference(self, numbering: Numbering) -> NDArray[np.uint8]:
        """Plain bits as sent, (F, n_bits), as far as they are known."""
        if numbering.reference is not None:
            return numbering.reference
        return self.link.payload.reference(np.maximum(numbering.numbers, 0))

    def _sent_words(self, numbering: Numbering, reference: NDArray[np.uint8]) -> NDArray[np.int64]:
        """Words as sent, (F, Kw); -1 where any bit of the word is unknown.

        Without reference bits all are: a few words of counter would pass for the whole payload.
        """
        payload, codebook = self.link.payload, self.link.codebook
        count = numbering.numbers.size
        words = np.full((count, self.link.words_per_frame), -1, np.int64)
        if not payload.has_reference:
            return words
        known = np.where(numbering.resolved[:, None], payload.reference_mask, self._static)
        scrambler = payload.scrambler
        if scrambler is not None:
            reference = scrambler.scramble(reference)
            if not hasattr(scrambler, "sequence"):
                # A self-synchronising scrambler spreads an unknown bit over all that follow.
                known = np.logical_and.accumulate(known, axis=1)
        whole = known.reshape(*words.shape, codebook.bits).all(axis=2)
        return np.where(whole, codebook.bits_to_words(reference), words)

    def _count_bits(
        self,
        columns: dict[str, NDArray[np.generic]],
        batch: FrameBatch,
        plain: NDArray[np.uint8],
        numbering: Numbering,
        reference: NDArray[np.uint8],
        gone: Erasures | None,
    ) -> None:
        payload = self.link.payload
        counted = np.where(numbering.resolved[:, None], payload.known_mask, self._static)
        if gone is not None:
            counted &= ~gone.bits
            columns["bits_erased"][:] = gone.bits.sum(axis=1)
        counts = np.zeros((batch.count, 2, 2), np.int64)
        count_bits(plain, reference, counted, self._spatial, counts)
        for kind, name in enumerate(("signal", "spatial")):
            columns[f"{name}_bits_compared"][:] = counts[:, kind, 0]
            columns[f"{name}_bit_errors"][:] = counts[:, kind, 1]
        columns["bits_compared"][:] = counts[:, :, 0].sum(axis=1)
        columns["bit_errors"][:] = counts[:, :, 1].sum(axis=1)
        if batch.words_two_step is not None:
            bits = self.link.codebook.words_to_bits(batch.words_two_step)
            count_bits(payload.descramble(bits), reference, counted, self._spatial, counts)
            columns["two_step_bit_errors"][:] = counts[:, :, 1].sum(axis=1)

    def _compare(
        self,
        columns: dict[str, NDArray[np.generic]],
        batch: FrameBatch,
        sent: NDArray[np.int64],
        gone: Erasures | None,
    ) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Confusion matrices (F, A, A) and error-vector sums (F, 6, Nt)."""
        codebook = self.link.codebook
        sets = len(codebook.antenna_sets)
        confusion = np.zeros((batch.count, sets, sets), np.int64)
        sums = np.zeros((batch.count, 6, codebook.antennas))
        counts, part = np.zeros(3, np.int64), np.zeros((6, codebook.antennas))
        carried = self.link.carried(sent)
        for i in range(batch.count):
            compare_words(
                batch.words[i],
                sent[i],
                codebook.set_index,
                codebook.symbol_index,
                confusion[i],
                counts,
            )
            for name, value in zip(_COUNT_COLUMNS, counts, strict=True):
                columns[name][i] = value
            # A few known words are no measure of a payload that is mostly unknown.
            aided = counts[0] > 0 and 2 * counts[0] >= sent.shape[1]
            columns["evm_data_aided"][i] = aided
            reference = carried[i] if aided else self._decided_vectors(batch, i)
            if gone is not None:
                reference = np.where(gone.periods[i], -1, reference)
            symbols = batch.symbols[i]
            if batch.dispersive is not None:
                symbols = batch.dispersive.symbols(i, reference, batch.channel[i])
            for run, channel in channel_runs(batch, i):
                error_vectors(
                    symbols[run],
                    channel,
                    reference[run],
                    self._words.pointer,
                    self._words.antenna,
                    self._words.value,
                    part,
                )
                sums[i] += part
        return confusion, sums

    def _decided_vectors(self, batch: FrameBatch, i: int) -> NDArray[np.int64]:
        """Which vector each payload period is taken to carry; a wrong block of the differential
        form is no reason to misjudge all that follow: there, each period is decided by itself."""
        if self.link.codebook.block == 1:
            own: NDArray[np.int64] = batch.words[i]
            return own
        vectors = self.link.codebook.vectors
        parts = [
            nearest_vectors(batch.symbols[i, run], channel, vectors)
            for run, channel in channel_runs(batch, i)
        ]
        return np.concatenate(parts)


_COUNT_COLUMNS = ("periods_compared", "antenna_errors", "symbol_errors")
