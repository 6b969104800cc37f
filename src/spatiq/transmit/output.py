"""Sets of SigMF recordings made in one pass, put in place together or not at all."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from queue import Full, Queue
from typing import Any

import numpy as np

from spatiq.errors import InputError
from spatiq.recording.writing import Written, write_collection, write_recording
from spatiq.transmit.front_end import Samples

# Blocks that may wait for a slow disk.
WAITING = 4
_Feed = Queue[Samples | BaseException | None]


@dataclass(frozen=True)
class RecordingSet:
    """What is to be written.

    Attributes:
        base: folder and base name.
        names: suffixes of the recordings; ("",) writes all channels into one recording, otherwise
            there is one recording per channel, base + suffix, and a collection named base.
        sample_rate: Hz.
        datatype: SigMF sample format.
        carrier_hz: carrier frequency, or None.
        description: for core:description.
        overwrite: replace files of these names.
        captures: objects of the captures array, which then state the carrier; None: one, whole.
    """

    base: Path
    names: tuple[str, ...]
    sample_rate: float
    datatype: str
    carrier_hz: float | None
    description: str
    overwrite: bool
    captures: Sequence[Mapping[str, Any]] | None = None

    @property
    def collected(self) -> bool:
        """True when there is one recording per channel."""
        return self.names != ("",)

    def files(self) -> tuple[str, ...]:
        """File names in the order in which they are put in place."""
        return set_files(self.base.name, self.names)


def set_files(base: str, names: tuple[str, ...]) -> tuple[str, ...]:
    """Files of a set, data before metadata, the collection last; see `RecordingSet.names`."""
    endings = (".sigmf-data", ".sigmf-meta")
    parts = [base + name + ending for name in names for ending in endings]
    return (*parts, *([base + ".sigmf-collection"] if names != ("",) else []))


def check_target(base: Path, files: Sequence[str], overwrite: bool) -> None:
    """Refuse a folder that is not there, an empty name, and files that exist (unless overwrite)."""
    if not base.name:
        raise InputError("--out", "", repr(str(base)), "folder and base name of the recordings")
    if not base.parent.is_dir():
        raise InputError("--out", "", f"{base.parent}, no such folder", "a folder that exists")
    for name in files:
        path = base.parent / name
        if os.path.lexists(path) and not overwrite:
            raise InputError(path, "", "a file that exists", "a new name, or --overwrite")


@contextmanager
def staged(base: Path, files: Sequence[str], overwrite: bool) -> Iterator[Path]:
    """A folder beside the target in which to write `files`; moved into place on success.

    Raises:
        InputError: see `check_target`; or the folder cannot be written to.
    """
    check_target(base, files, overwrite)
    try:
        with tempfile.TemporaryDirectory(
            prefix=f".{base.name[:80]}.", suffix=".part", dir=base.parent
        ) as made:
            folder = Path(made)
            yield folder
            check_target(base, files, overwrite)
            for name in files:
                (folder / name).replace(base.parent / name)
    except OSError as error:
        reason = error.strerror or type(error).__name__
        raise InputError(base.parent, "", reason, "a folder that can be written to") from error


def write_set(
    recordings: RecordingSet, folder: Path, blocks: Iterable[Samples]
) -> tuple[Written, ...]:
    """Write one pass of blocks (D, n) into the files of a set, in `folder` (see `staged`).

    Each recording is written by a thread of its own while the next blocks are made.

    Raises:
        InputError: what the writing refuses; an incomplete set may be left in `folder`.
    """
    collection = recordings.base.name if recordings.collected else None
    feeds: list[_Feed] = [Queue(WAITING) for _ in recordings.names]
    with ThreadPoolExecutor(len(feeds)) as pool:
        writers = [
            pool.submit(
                write_recording,
                folder / (recordings.base.name + name),
                _taken(feed),
                sample_rate=recordings.sample_rate,
                datatype=recordings.datatype,
                captures=recordings.captures,
                carrier_hz=None if recordings.captures is not None else recordings.carrier_hz,
                description=recordings.description,
                collection=collection,
            )
            for name, feed in zip(recordings.names, feeds, strict=True)
        ]
        stopped = _feed_all(blocks, feeds, writers)
    faults = [fault for writer in writers if (fault := writer.exception()) is not None]
    # One writer's fault stops the others: it is the one to tell.
    for fault in sorted(faults, key=lambda fault: fault is stopped):
        raise fault
    written = tuple(writer.result() for writer in writers)
    if collection is not None:
        names = [item.meta_path for item in written]
        write_collection(folder / collection, names, description=recordings.description)
    return written


def _feed_all(
    blocks: Iterable[Samples], feeds: Sequence[_Feed], writers: Sequence[Future[Written]]
) -> BaseException | None:
    """Hand every block to the writers; stop all of them when one, or the source, fails.

    Returns:
        What the others were stopped with when one of them failed; None when all is well.
    """
    ending: BaseException | None = None
    try:
        for block in blocks:
            rows = [block] if len(feeds) == 1 else [block[i : i + 1] for i in range(len(feeds))]
            for feed, writer, row in zip(feeds, writers, rows, strict=True):
                _put(feed, writer, row)
            if any(writer.done() for writer in writers):
                break
    except BaseException as error:
        ending = error
        raise
    finally:
        if ending is None and any(writer.done() for writer in writers):
            ending = InputError("recordings", "", "one that could not be written", "all of them")
        for feed, writer in zip(feeds, writers, strict=True):
            _put(feed, writer, ending)
    return ending


def _put(feed: _Feed, writer: Future[Written], item: Samples | BaseException | None) -> None:
    """Put unless the writer has ended, when nobody would take it."""
    while not writer.done():
        try:
            feed.put(item, timeout=0.2)
        except Full:
            continue
        return


def _taken(feed: _Feed) -> Iterator[Samples]:
    """Blocks from a feed until it ends; raises what made the source fail."""
    while (item := feed.get()) is not None:
        if isinstance(item, BaseException):
            raise item
        yield np.ascontiguousarray(item)
