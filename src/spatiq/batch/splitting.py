"""One recording shared out over workers, with the results of a single pass to the bit.

    index pieces (parallel) -> join the index -> measure shares (parallel) -> put together

(and the index once more, where frames say that the spectrum is inverted)

The index says where all frames are (receiver/frame_index.py). A share is whole batches of a single
pass, so that nothing a batch's make-up decides can differ. Only numbering goes from frame to frame
through the recording: each share numbers its frames by their own evidence; putting together
numbers all of them once more in order, from the bits kept, and a share for which that makes a
difference is measured again with the right numbers.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from spatiq.batch.identity import Content, content_of
from spatiq.batch.spool import NumberingInput, SpoolWriter, read_bases, read_spool
from spatiq.batch.work import (
    Job,
    Outcome,
    finished,
    fit_to_keep,
    is_result,
    looks,
    unchanged,
)
from spatiq.link.description import Link
from spatiq.metrics.frame_table import MeasuredFrames
from spatiq.metrics.measuring import (
    Measuring,
    reference_follower,
    shortest_distance,
    spectrum_of,
)
from spatiq.metrics.reference_following import Numberer, Numbering
from spatiq.metrics.skipped_frames import SkippedFrames, places_in_stream
from spatiq.metrics.summary import Summary
from spatiq.receiver.chain import receive
from spatiq.receiver.frame_index import FindTable, FrameIndexer, PieceIndex
from spatiq.receiver.frame_search import Detection
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.stretches import Find, Place
from spatiq.recording.recording import Recording
from spatiq.recording.safewrite import write_bytes
from spatiq.results.hdf5 import ResultsWriter
from spatiq.results.whole_files import whole_file


@dataclass(frozen=True)
class Plan:
    """How a recording is shared out.

    Attributes:
        folder: for what is kept until all is done.
        cuts: per-channel file samples at which the index is cut.
        share_bytes: samples of one share, at most about.
        spectrum: that the recording is taken to have, once that is known.
    """

    folder: Path
    cuts: tuple[int, ...]
    share_bytes: int
    spectrum: str = "normal"

    def options(self, job: Job) -> ReceiverOptions:
        """How the recording is received, its spectrum being decided on."""
        return replace(job.options, spectrum=self.spectrum)

    def piece(self, k: int) -> Path:
        """Index of piece k."""
        return self.folder / f"piece-{k:05d}-{self.spectrum}.index"

    @property
    def index(self) -> Path:
        """Index of the whole recording."""
        return self.folder / f"frames-{self.spectrum}.npz"

    def share(self, k: int, *, renumbered: bool = False) -> Path:
        """Measured frames of share k; `renumbered`: by the numbers found putting together."""
        return self.folder / f"share-{k:05d}{'-renumbered' if renumbered else ''}.spool"

    def numbers(self, k: int) -> Path:
        """Right numbers of a share's frames."""
        return self.folder / f"numbers-{k:05d}.npz"


def plan_cuts(recording: Recording, share_bytes: int) -> tuple[int, ...]:
    """Even cuts, as far apart as share_bytes at most."""
    size = sum(d.data.size for d in recording.datasets)
    pieces = max(1, -(-size // share_bytes))
    return tuple(recording.n_samples * k // pieces for k in range(1, pieces))


def prepare(job: Job, share_bytes: int, folder: Path) -> Outcome:
    """Where will the recording be cut? The first task, small."""
    recording, _ = job.open()
    folder.mkdir(parents=True, exist_ok=True)
    fixed = job.options.spectrum
    spectrum = "normal" if fixed == "auto" else fixed
    plan = Plan(folder, plan_cuts(recording, share_bytes), share_bytes, spectrum)
    return Outcome(fingerprint=looks(job, recording).text, found=plan)


def take_digest(job: Job, fingerprint: str) -> Outcome:
    """Digests of a recording; in `found`, whether its results are there already."""
    recording, link = job.open()
    _still(job, recording, fingerprint)
    content = job.content or content_of(recording, verify=job.verify)
    target = job.target(job.key(content, link))
    return Outcome(content=content, found=is_result(target, content, link, job.options))


def index_piece(job: Job, plan: Plan, k: int, fingerprint: str) -> Outcome:
    """Search one piece for frames, unless that is done."""
    if not plan.piece(k).exists():
        recording, link = job.open()
        _still(job, recording, fingerprint)
        indexer = FrameIndexer(recording, link, plan.options(job))
        pieces = indexer.pieces(plan.cuts)
        if k < len(pieces):
            index = indexer.search(pieces[k])
            fit_to_keep()
            _write_piece(plan.piece(k), index)
    return Outcome()


def join_index(job: Job, plan: Plan) -> Outcome:
    """One index of all pieces; in `found`, the plan with the spectrum told, and the shares' bounds.

    Without bounds, the pieces are to be searched again: the spectrum is inverted.
    """
    recording, link = job.open()
    indexer = FrameIndexer(recording, link, plan.options(job))
    if not plan.index.exists():
        pieces = indexer.pieces(plan.cuts)
        table = indexer.join(pieces, (_read_piece(plan.piece(k)) for k in range(len(pieces))))
        fit_to_keep()
        with whole_file(plan.index, overwrite=True) as partial, partial.open("wb") as file:
            np.savez(file, rows=table.rows)
    table = _read_table(plan.index)
    told = plan.folder / "spectrum"
    if not told.exists():
        spectrum = spectrum_of(recording, link, job.options)
        fit_to_keep()
        write_bytes(told, spectrum.encode())
    spectrum = told.read_text()
    if spectrum != plan.spectrum:
        return Outcome(found=(replace(plan, spectrum=spectrum), []))
    size = sum(d.data.size for d in recording.datasets)
    shares = max(1, round(size / plan.share_bytes))
    batches = max(1, -(-int(table.entered.sum()) // (indexer.batch_size * shares)))
    return Outcome(found=(plan, indexer.share(table, batches)))


def measure_share(
    job: Job, plan: Plan, k: int, bounds: tuple[int, int], renumbered: bool = False
) -> Outcome:
    """Receive and measure the frames low..high-1 of the index, unless that is done."""
    path = plan.share(k, renumbered=renumbered)
    if path.exists():
        return Outcome()
    recording, link = job.open()
    options = plan.options(job)
    indexer = FrameIndexer(recording, link, options)
    table = _read_table(plan.index)
    follower: _Numbering = _ByItself(reference_follower(recording, link))
    if renumbered:
        with np.load(plan.numbers(k)) as given:
            follower = _Given(given["numbers"], given["resolved"])
    measuring = Measuring(
        recording,
        link,
        options,
        first_frame=int(table.entered[: bounds[0]].sum()),
        follower=follower,
        list_skipped=False,
    )
    share = indexer.frames(table, *bounds)
    with SpoolWriter(path) as spool:
        for batch in receive(recording, link, options, stretch=share):
            frames = measuring(batch)
            assert follower.basis is not None
            spool.add(_without_words(frames, job), follower.basis)
        fit_to_keep()
    return Outcome()


def put_together(job: Job, plan: Plan, shares: int, content: Content, fingerprint: str) -> Outcome:
    """The results file from all shares; or, in `found`, the shares to be measured again."""
    recording, link = job.open()
    again = _differing(recording, link, plan, shares)
    if again:
        return Outcome(found=again)
    look = looks(job, recording)
    _still(job, recording, fingerprint)
    skipped = SkippedFrames(link.period_symbols is not None, shortest_distance(recording, link))
    summary = Summary(link, job.options.confidence)
    target = job.target(job.key(content, link))
    with ResultsWriter(target, link, recording, job.options, overwrite=True) as writer:
        follower = reference_follower(recording, link)
        for frames, basis in _batches(plan, shares):
            numbering = follower.number(basis.plain, basis.crc_ok, basis.position)
            columns = frames.columns
            columns["frame_number"][:] = numbering.numbers
            position = places_in_stream(
                recording.segments, columns["segment"], columns["start_sample"]
            )
            frames.lost += skipped.before(columns, position)
            writer.add(frames)
            summary.add(frames)
        fit_to_keep()
        _still(job, recording, fingerprint)
        writer.close(summary.as_dict(), content.data)
    return finished(job, recording, link, content, look, False)


def clear(folder: Path) -> None:
    """Remove what was kept until all was done."""
    if folder.is_dir():
        for path in folder.iterdir():
            path.unlink(missing_ok=True)
        folder.rmdir()


def _still(job: Job, recording: Recording, fingerprint: str) -> None:
    unchanged(job, recording, replace(looks(job, recording), text=fingerprint))


def _write_piece(path: Path, index: PieceIndex) -> None:
    table = FindTable()
    table.add(index.finds)
    end = FindTable()
    place = index.end
    if place is not None:
        # The place as a find: that it comes from, if from one, with the lag that it scans on from.
        last = place.last if place.last is not None else Detection(-1, -1, 0.0)
        end.add([Find(place.segment, last, place.lag, -1)])
    with whole_file(path, overwrite=True) as partial, partial.open("wb") as file:
        tails = np.array(sorted(index.tails.items()), np.int64).reshape(-1, 2)
        np.savez(file, finds=table.rows, end=end.rows, tails=tails)


def _read_piece(path: Path) -> PieceIndex:
    with np.load(path) as file:
        ends = FindTable(file["end"]).finds()
        end = None
        if ends:
            last = ends[0].found if ends[0].found.lag >= 0 else None
            end = Place(ends[0].segment, ends[0].since, last)
        tails = {int(segment): int(lag) for segment, lag in file["tails"]}
        return PieceIndex(tuple(FindTable(file["finds"]).finds()), end, tails)


def _read_table(path: Path) -> FindTable:
    with np.load(path) as file:
        return FindTable(file["rows"])


def _without_words(frames: MeasuredFrames, job: Job) -> MeasuredFrames:
    """Words are of use only where the results keep them, and take most of the room."""
    if job.options.keep_symbols:
        return frames
    none = np.zeros((frames.count, 0), np.int64)
    return replace(frames, words_decided=none, words_sent=none)


class _Numbering(Numberer):
    basis: NumberingInput | None = None


@dataclass
class _ByItself(_Numbering):
    """Numbers frames by their own evidence, and keeps what it was given."""

    follower: Numberer
    basis: NumberingInput | None = None

    def number(
        self,
        plain: NDArray[np.uint8],
        crc_ok: NDArray[np.bool_] | None,
        position: NDArray[np.float64],
    ) -> Numbering:
        """See ReferenceFollower."""
        numbering = self.follower.number(plain, crc_ok, position)
        self.basis = NumberingInput.of(plain, crc_ok, position, numbering)
        return numbering


@dataclass
class _Given(_Numbering):
    """Numbers that are known, in order."""

    numbers: NDArray[np.int64]
    resolved: NDArray[np.bool_]
    basis: NumberingInput | None = None
    _at: int = field(default=0)

    def number(
        self,
        plain: NDArray[np.uint8],
        crc_ok: NDArray[np.bool_] | None,
        position: NDArray[np.float64],
    ) -> Numbering:
        """See ReferenceFollower."""
        here = slice(self._at, self._at + plain.shape[0])
        self._at = here.stop
        numbering = Numbering(self.numbers[here], self.resolved[here])
        self.basis = NumberingInput.of(plain, crc_ok, position, numbering)
        return numbering


def _batches(plan: Plan, shares: int) -> Iterator[tuple[MeasuredFrames, NumberingInput]]:
    """Batches of all shares in order."""
    for k in range(shares):
        yield from read_spool(_latest(plan, k))


def _latest(plan: Plan, k: int) -> Path:
    renumbered = plan.share(k, renumbered=True)
    return renumbered if renumbered.exists() else plan.share(k)


def _differing(recording: Recording, link: Link, plan: Plan, shares: int) -> list[int]:
    """Shares whose figures rest on other numbers than a single pass's; these are written down."""
    follower = reference_follower(recording, link)
    wrong = []
    for k in range(shares):
        right = []
        same = True
        for basis in read_bases(_latest(plan, k)):
            numbering = follower.number(basis.plain, basis.crc_ok, basis.position)
            right.append(numbering)
            same = same and _same(link, basis, numbering)
        if same:
            continue
        wrong.append(k)
        with whole_file(plan.numbers(k), overwrite=True) as partial, partial.open("wb") as file:
            np.savez(
                file,
                numbers=np.concatenate([n.numbers for n in right]),
                resolved=np.concatenate([n.resolved for n in right]),
            )
    return wrong


def _same(link: Link, basis: NumberingInput, numbering: Numbering) -> bool:
    """Whether figures are the same: numbers may differ by what makes no bit differ."""
    if not np.array_equal(basis.resolved, numbering.resolved):
        return False
    other = np.flatnonzero(basis.numbers != numbering.numbers)
    if not other.size:
        return True
    reference = link.payload.reference
    return np.array_equal(
        reference(np.maximum(basis.numbers[other], 0)),
        reference(np.maximum(numbering.numbers[other], 0)),
    )
