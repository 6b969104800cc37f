"""The chain: recording and link in, batches of received frames out.

    framing (with frame search) -> acquisition -> tracking -> refit
    -> continuity (front end, interferer, alignment, channel following) -> whitening
    -> detection (-> soft output, when asked for)

On a dispersive channel other stages follow framing, see `spatiq.receiver.dispersive_chain`.

Each stage is a callable that takes a batch and gives a batch. A list of stages of one's own takes
the place of `standard_stages`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.receiver.acquisition import Acquisition
from spatiq.receiver.alignment import Alignment
from spatiq.receiver.channel_following import channel_following
from spatiq.receiver.continuity import Continuity
from spatiq.receiver.detection import Detection, check_detector_applies, find_detector
from spatiq.receiver.differential_whitening import DifferentialWhitening
from spatiq.receiver.dispersive_chain import dispersive_stages
from spatiq.receiver.dispersive_plan import is_dispersive
from spatiq.receiver.echo_test import echo_test
from spatiq.receiver.edge_frames import EdgeFrames
from spatiq.receiver.frame_batch import FrameBatch, LostFrame
from spatiq.receiver.frame_search import SyncPattern, sync_pattern
from spatiq.receiver.framing import Framing
from spatiq.receiver.front_end import FrontEnd
from spatiq.receiver.front_end_figures import expected_correlation
from spatiq.receiver.front_end_survey import LITTLE_CARRIER, Survey, line_share, survey_recording
from spatiq.receiver.interferer import Interferer
from spatiq.receiver.link_tables import LinkTables, link_tables
from spatiq.receiver.matched_filter import FilterBank, filter_bank
from spatiq.receiver.narrow_band_reception import NarrowBandReception
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.refit import Refit
from spatiq.receiver.soft_output import SoftOutput, check_soft_output
from spatiq.receiver.standing_frames import StandingFrames
from spatiq.receiver.stretches import Stretch
from spatiq.receiver.tracking import Tracking
from spatiq.receiver.whitening import Whitening
from spatiq.recording.placement import Segment
from spatiq.recording.recording import Recording
from spatiq.signal.codebooks import DifferentialCodebook

Stage = Callable[[FrameBatch], FrameBatch]


@dataclass(frozen=True)
class Progress:
    """How far the chain is."""

    samples_done: int
    samples_total: int
    frames_found: int
    text: str = ""


@dataclass
class _Report:
    """Keeps what `Progress` needs between calls."""

    progress: Callable[[Progress], None] | None
    total: int
    done: int = 0
    frames: int = 0
    text: str = "preparing (the first run compiles)"

    def read(self, position: int) -> None:
        """Samples up to `position` have been read."""
        self.done = position
        self.tell()

    def received(self, frames: int) -> None:
        """A batch has come through all stages."""
        self.frames += frames
        self.text = ""
        self.tell()

    def tell(self) -> None:
        """Hand the state on."""
        if self.progress is not None:
            self.progress(Progress(self.done, self.total, self.frames, self.text))


@dataclass(frozen=True, eq=False)
class ChainParts:
    """What all stages share: derived once from recording, link and options."""

    bank: FilterBank
    tables: LinkTables
    pattern: SyncPattern
    survey: Survey
    segments: tuple[Segment, ...]


def chain_parts(recording: Recording, link: Link, options: ReceiverOptions) -> ChainParts:
    """Filter bank, link tables and sync pattern.

    Raises:
        InputError: when the link cannot be received from this recording.
    """
    samples_per_symbol = recording.sample_rate / link.symbol_rate_hz
    if not 1.25 <= samples_per_symbol <= 64:
        raise InputError(
            recording.path,
            "sample rate",
            f"{recording.sample_rate:.9g} Hz, {samples_per_symbol:.6g} samples per symbol",
            "1.25 to 64 samples per symbol period",
        )
    if not link.layout.payload_index.size:
        place = link.path or "link description"
        raise InputError(place, "frame.section", "no payload", "a payload section to receive")
    return ChainParts(
        bank=filter_bank(link.pulse, samples_per_symbol),
        tables=link_tables(link),
        pattern=sync_pattern(link, options, recording.channels),
        survey=survey_recording(
            recording,
            link,
            options.cfo_range / samples_per_symbol,
            narrow_band=options.narrow_band and not is_dispersive(link, options),
        ),
        segments=recording.segments,
    )


def standard_stages(link: Link, options: ReceiverOptions, parts: ChainParts) -> list[Stage]:
    """The stages after framing, in order."""
    # Half the permitted range as standard deviation: the range's ends stay likely.
    clock_std = options.max_clock_ppm * 1e-6 / 2
    locked = None
    if link.clock == "locked" and link.carrier_hz is not None:
        locked = link.carrier_hz
        clock_std = 1e-9
    walk = 2 * np.pi * options.phase_noise_hz / link.symbol_rate_hz
    steps = parts.pattern.carrier_bins
    spacing = float(steps[1] - steps[0]) if steps.size > 1 else 1.0
    reach = spacing / parts.pattern.transform_size
    acquisition = Acquisition(parts.bank, parts.tables, reach, link.symbol_rate_hz, locked)
    if is_dispersive(link, options):
        return dispersive_stages(link, options, acquisition, clock_std, walk)
    # In differential form the channel may start from one known symbol an antenna.
    rounds = 2 if link.codebook.block == 1 else 4
    refit = Refit(parts.bank, parts.tables, clock_std, walk, rounds)
    expected = expected_correlation(link.pulse, parts.bank.samples_per_symbol)
    constant, lines = parts.survey.constant, parts.survey.lines
    if options.spectrum == "inverted":
        constant, lines = constant.conj(), tuple(-f for f in lines)
    tracking = Tracking(parts.bank, parts.tables, clock_std, walk)
    reception: list[Stage] = [acquisition, tracking, refit]
    front_end = FrontEnd(refit, constant, expected)
    band = parts.survey.band
    searched = line_share(link) < LITTLE_CARRIER and band is None
    corrections: list[Stage] = [
        front_end,
        Interferer(refit, front_end, lines, searched, parts.segments, expected),
        Alignment(refit, reception),
    ]
    if link.codebook.block > 1:
        corrections = [StandingFrames(corrections, link.layout.payload_index.size)]
    check_detector_applies(options.detector, link.codebook)
    runs = link.layout.payload_runs()
    detector = find_detector(options.detector)
    if band is not None:
        band = band.inverted() if options.spectrum == "inverted" else band
    stages: list[Stage] = [
        *(reception if band is None else [NarrowBandReception(band, acquisition, tracking, refit)]),
        *_against_the_channel(link, acquisition, refit, corrections),
        Detection(link.codebook, detector, options.compare_two_step, runs),
    ]
    if link.codebook.block == 1:
        stages.append(echo_test(link, parts.bank.samples_per_symbol))
    if options.soft_output != "none":
        check_soft_output(link.codebook)
        amplitude = link.layout.payload_amplitude
        stages.append(SoftOutput(link.codebook, amplitude, options.soft_output))
    return stages


def _against_the_channel(
    link: Link, acquisition: Acquisition, refit: Refit, corrections: list[Stage]
) -> list[Stage]:
    """Corrections, breaks, channels that move and noise that is not white.

    In differential form the words follow the channel by themselves, the noise is told without it,
    and breaks are not looked for.
    """
    if isinstance(link.codebook, DifferentialCodebook):
        runs = link.layout.payload_runs()
        return [*corrections, DifferentialWhitening(refit, link.codebook, runs)]
    following = channel_following(refit, link.layout.payload_index.size)
    continuity = Continuity(acquisition, refit, corrections, following, link.layout.sync.start)
    return [continuity, Whitening(following)]


def receive(
    recording: Recording,
    link: Link,
    options: ReceiverOptions | None = None,
    *,
    stages: Sequence[Stage] | None = None,
    progress: Callable[[Progress], None] | None = None,
    stretch: Stretch | None = None,
) -> Iterator[FrameBatch]:
    """Received frames of a recording, batch by batch, in the order of time.

    Args:
        recording: opened recording.
        link: link description.
        options: how to receive.
        stages: stages after framing; `standard_stages` when None.
        progress: called as samples are read and after each batch.
        stretch: which of the frames; all of them when None.

    Raises:
        InputError: when the link cannot be received from this recording.
    """
    options = options or ReceiverOptions()
    parts = chain_parts(recording, link, options)
    chosen = list(stages) if stages is not None else standard_stages(link, options, parts)
    report = _Report(progress, recording.n_samples)
    framing = Framing(
        recording,
        link,
        options,
        parts.bank,
        parts.tables,
        parts.pattern,
        report.read,
        stretch,
        parts.survey,
    )
    report.tell()
    edges = _edge_frames(recording, link, parts)
    last: FrameBatch | None = None
    for batch in framing:
        for stage in chosen:
            batch = stage(batch)
        if edges is not None and batch.count:
            if last is None and (stretch is None or stretch.first):
                batch.lost = _merged(edges.before(batch), batch.lost, edges.period)
            last = batch
        if edges is not None and batch.final and last is not None:
            batch.lost = _merged(edges.after(last), batch.lost, edges.period)
        report.received(batch.count)
        yield batch


def _edge_frames(recording: Recording, link: Link, parts: ChainParts) -> EdgeFrames | None:
    """Looks for frames cut off by the recording's ends; only a frame period says where."""
    if link.period_symbols is None:
        return None
    samples_per_symbol = parts.bank.samples_per_symbol
    period = link.period_symbols * samples_per_symbol
    return EdgeFrames(recording, parts.tables, period, samples_per_symbol, parts.survey)


def _merged(edge: list[LostFrame], listed: list[LostFrame], period: float) -> list[LostFrame]:
    """Lost frames in order of time; one whose sync section was seen is listed by it already."""
    new = [
        e
        for e in edge
        if all(
            e.segment != f.segment or abs(e.start_sample - f.start_sample) > period / 2
            for f in listed
        )
    ]
    return sorted(listed + new, key=lambda f: (f.segment, f.start_sample))
