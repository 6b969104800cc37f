"""What kernels need to know of a link, as bare arrays: known symbols, codewords, Gram matrices."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.link.layout import FrameLayout, Period
from spatiq.signal.codebooks import Codebook


@dataclass(frozen=True, eq=False)
class SparseVectors:
    """Rows of transmit vectors of which only active antennas are kept.

    Row i has antennas `antenna[pointer[i]:pointer[i+1]]` with values `value[...]`.
    """

    pointer: NDArray[np.int64]
    antenna: NDArray[np.int64]
    value: NDArray[np.complex64]

    @property
    def parts(self) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.complex64]]:
        """Pointer, antenna, value: as kernels take them."""
        return self.pointer, self.antenna, self.value


def sparse_vectors(rows: NDArray[np.complex128]) -> SparseVectors:
    """Keep the non-zero entries of an array of shape (n, Nt)."""
    active = rows != 0
    pointer = np.concatenate([[0], np.cumsum(active.sum(axis=1))]).astype(np.int64)
    row, antenna = np.nonzero(active)
    value = rows[row, antenna].astype(np.complex64)
    return SparseVectors(pointer, antenna.astype(np.int64), value)


@dataclass(frozen=True, eq=False)
class LinkTables:
    """Arrays derived from a link once.

    Attributes:
        header: int64 (Kh,); periods of all sync and pilot symbols that are not silent.
        header_vectors: what they send.
        gram_root: complex128 (rank, Nt); W with W^H W the pseudo-inverse of X^H X, X the header.
        header_rank: rank of X.
        header_gram: complex128 (Nt, Nt); sum of x x^H over the header.
        header_centroid: energy-weighted mean period of the header.
        active: int64 (Ka,); all periods in which something is sent, ascending.
        active_word: int64 (Ka,); running index of the payload period, -1 for known symbols.
        payload: int64 (Kp,); indices of the payload among the active periods; in differential form
            with its reference blocks, which are known symbols as well.
        active_vectors: known vectors of the active periods (empty rows at payload).
        known_vectors: complex64 (Ka, Nt); the known vectors of the active periods, zero at payload.
        known_gram: complex128 (Nt, Nt); sum of x x^H over all known vectors.
        active_amplitude: float32 (Ka,); amplitude factor of payload words, 1 elsewhere.
        symbol_amplitude: float32 (Ka,); the same, reference blocks included.
        header_places: int64 (Kh,); indices of the header among the active periods.
        in_header: uint8 (Ka,); 1 where the active period belongs to the header.
        words: codeword vectors, sparse.
    """

    header: NDArray[np.int64]
    header_vectors: SparseVectors
    gram_root: NDArray[np.complex128]
    header_rank: int
    header_gram: NDArray[np.complex128]
    header_centroid: float
    active: NDArray[np.int64]
    active_word: NDArray[np.int64]
    payload: NDArray[np.int64]
    active_vectors: SparseVectors
    known_vectors: NDArray[np.complex64]
    known_gram: NDArray[np.complex128]
    active_amplitude: NDArray[np.float32]
    symbol_amplitude: NDArray[np.float32]
    header_places: NDArray[np.int64]
    in_header: NDArray[np.uint8]
    words: SparseVectors
    codebook: Codebook


def link_tables(link: Link) -> LinkTables:
    """Derive the arrays.

    Raises:
        InputError: when the known symbols cannot tell the channels of all antennas in use apart.
    """
    layout, codebook = link.layout, link.codebook
    is_header = (layout.kind == Period.SYNC) | (layout.kind == Period.PILOT)
    is_header &= np.any(layout.known != 0, axis=1)
    header = np.flatnonzero(is_header).astype(np.int64)
    known = layout.known[header]
    root, rank = gram_root(known)
    _check_identifiable(link, known, root)
    energy = np.sum(np.abs(known) ** 2, axis=1)
    active = active_periods(layout)
    word_of_period = np.full(layout.length, -1, np.int64)
    taken = layout.payload_index
    words = taken[layout.kind[taken] == Period.PAYLOAD]  # without differential reference blocks
    word_of_period[words] = np.arange(words.size)
    amplitude = np.ones(layout.length, np.float32)
    amplitude[taken] = layout.payload_amplitude
    of_words = np.where(word_of_period >= 0, amplitude, np.float32(1.0))
    return LinkTables(
        header=header,
        header_vectors=sparse_vectors(known),
        gram_root=root,
        header_rank=rank,
        header_gram=known.T @ known.conj(),
        header_centroid=float(np.sum(header * energy) / np.sum(energy)),
        active=active,
        active_word=word_of_period[active],
        payload=np.searchsorted(active, taken).astype(np.int64),
        active_vectors=sparse_vectors(layout.known[active]),
        known_vectors=layout.known[active].astype(np.complex64),
        known_gram=layout.known.T @ layout.known.conj(),
        active_amplitude=of_words[active],
        symbol_amplitude=amplitude[active],
        header_places=np.flatnonzero(is_header[active]).astype(np.int64),
        in_header=is_header[active].astype(np.uint8),
        words=sparse_vectors(codebook.vectors),
        codebook=codebook,
    )


def active_periods(layout: FrameLayout) -> NDArray[np.int64]:
    """Periods in which something is sent, ascending."""
    sends = np.any(layout.known != 0, axis=1) | (layout.kind == Period.PAYLOAD)
    return np.flatnonzero(sends).astype(np.int64)


def gram_root(known: NDArray[np.complex128]) -> tuple[NDArray[np.complex128], int]:
    """W (rank, Nt), W^H W the pseudo-inverse of the Gram matrix of vectors (n, Nt); the rank."""
    gram = known.conj().T @ known
    values, vectors = np.linalg.eigh(gram)
    kept = values > 1e-9 * max(values.max(initial=0.0), 1e-300)
    root = (vectors[:, kept] / np.sqrt(values[kept])).conj().T
    return np.ascontiguousarray(root), int(kept.sum())


def _check_identifiable(
    link: Link, known: NDArray[np.complex128], root: NDArray[np.complex128]
) -> None:
    """The projector on the row space of X must leave each antenna in use as it is."""
    projector = root.conj().T @ root @ (known.conj().T @ known)
    used = np.flatnonzero(np.any(link.codebook.vectors != 0, axis=0))
    unit = np.eye(link.antennas)
    for a in used:
        if np.linalg.norm(projector[a] - unit[a]) > 1e-6:
            raise InputError(
                link.path or "link description",
                "frame.section",
                f"no known symbols that tell antenna {a} from the others",
                "sync or pilot sections from which each antenna's channel can be estimated",
            )
