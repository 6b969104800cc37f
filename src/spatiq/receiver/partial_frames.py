"""Part of a frame, received by itself: the periods that are left when others are left out."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import SCORE_BLOCK, SCORES, FrameBatch, no_breaks
from spatiq.receiver.link_tables import LinkTables, gram_root, sparse_vectors

# Arrays that have an entry for each active or payload period.
_PER_PERIOD = ("phase", "erased", "scores", "symbols", "words", "breaks")


def restricted(tables: LinkTables, kept: NDArray[np.bool_]) -> LinkTables:
    """Tables of the active periods that are kept, bool (Ka,); the header stays as it is."""
    known = tables.known_vectors[kept]
    is_payload = np.zeros(kept.size, np.bool_)
    is_payload[tables.payload] = True
    return replace(
        tables,
        active=tables.active[kept],
        active_word=tables.active_word[kept],
        payload=np.flatnonzero(is_payload[kept]).astype(np.int64),
        active_vectors=sparse_vectors(known.astype(np.complex128)),
        known_vectors=known,
        known_gram=known.T.astype(np.complex128) @ known.conj().astype(np.complex128),
        active_amplitude=tables.active_amplitude[kept],
        symbol_amplitude=tables.symbol_amplitude[kept],
        in_header=tables.in_header[kept],
        header_places=np.zeros(0, np.int64),  # delays are told by whole frames
    )


def anchored(tables: LinkTables, sync_start: int) -> LinkTables:
    """Tables whose header is the run of known symbols with the sync section in it.

    Runs after it are added, then runs before it, until the channels of all antennas follow from
    them: the shorter the header, the less likely a break within it.
    """
    header = tables.header
    rows = tables.known_vectors[np.searchsorted(tables.active, header)].astype(np.complex128)
    borders = np.flatnonzero(np.diff(header) > 1) + 1
    runs = np.split(np.arange(header.size), borders)
    first = next((n for n, run in enumerate(runs) if header[run[-1]] >= sync_start), 0)
    taken = runs[first]
    for run in [*runs[first + 1 :], *runs[:first][::-1]]:
        if gram_root(rows[taken])[1] == tables.header_rank:
            break
        taken = np.sort(np.concatenate([taken, run]))
    if taken.size == header.size:
        return tables
    root, rank = gram_root(rows[taken])
    energy = np.sum(np.abs(rows[taken]) ** 2, axis=1)
    return replace(
        tables,
        header=header[taken],
        header_vectors=sparse_vectors(rows[taken]),
        gram_root=root,
        header_rank=rank,
        header_centroid=float(np.sum(header[taken] * energy) / np.sum(energy)),
        in_header=np.isin(tables.active, header[taken]).astype(np.uint8),
    )


def one_frame(batch: FrameBatch, i: int) -> FrameBatch:
    """Frame i of a batch as a batch of its own, sharing nothing with it."""
    arrays: dict[str, Any] = {
        name: value[i : i + 1].copy()
        for name, value in vars(batch).items()
        if isinstance(value, np.ndarray) and name not in ("llr", "words_two_step")
    }
    return FrameBatch(**arrays, header_freedom=batch.header_freedom)


def return_frame(one: FrameBatch, batch: FrameBatch, i: int) -> None:
    """Enter a batch of one as frame i of another."""
    for name, value in vars(one).items():
        if isinstance(value, np.ndarray):
            getattr(batch, name)[i] = value[0]


def part_of(one: FrameBatch, kept: NDArray[np.bool_], tables: LinkTables) -> FrameBatch:
    """A batch of one that holds the kept active periods only; other arrays are shared.

    `tables`: of the kept periods.
    """
    active, payload = int(kept.sum()), tables.payload.size
    return replace(
        one,
        phase=one.phase[:, kept].copy(),
        erased=np.zeros((1, active), np.bool_),
        scores=np.zeros((1, -(-active // SCORE_BLOCK), SCORES)),
        symbols=np.zeros((1, payload, one.symbols.shape[2]), np.complex64),
        breaks=no_breaks(1),
    )


def kept_part(batch: FrameBatch, i: int, tables: LinkTables) -> tuple[FrameBatch, LinkTables]:
    """Frame i without its erased periods, and the tables for it."""
    kept = ~batch.erased[i]
    left = restricted(tables, kept)
    return part_of(one_frame(batch, i), kept, left), left


def return_part(part: FrameBatch, batch: FrameBatch, i: int, tables: LinkTables) -> None:
    """Enter what `kept_part` gave back into frame i; erased periods hold no symbols."""
    kept = ~batch.erased[i]
    for name, value in vars(part).items():
        if isinstance(value, np.ndarray) and name not in _PER_PERIOD:
            getattr(batch, name)[i] = value[0]
    position = np.arange(kept.size)
    batch.phase[i] = np.interp(position, position[kept], part.phase[0].astype(np.float64))
    payload = kept[tables.payload]
    batch.symbols[i] = 0
    batch.symbols[i, payload] = part.symbols[0]
