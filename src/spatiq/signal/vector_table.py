"""The codebook written out: any transmit vector for any word."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.codebook import MAX_SETS, SINGLE, Codebook, check_distinct


def vector_table(
    vectors: NDArray[np.complex128], normalise: bool, spatial_positions: Sequence[int] = ()
) -> Codebook:
    """A codebook given vector by vector: antenna counts that are no power of two, own mappings.

    Args:
        vectors: complex, shape (C, Nt), C = 2^b; entry w is sent for word w.
        normalise: scale to a mean total power of 1; False leaves them as they are.
        spatial_positions: bits counted as spatial ones. In a mapping of one's own, a bit may choose
            the antenna in some words and the symbol in others: that is for its author to say.

    Raises:
        InputError: a word that sends nothing, words that send the same, or too many antenna sets.
    """
    given = np.asarray(vectors, np.complex128)
    size, width = given.shape[0], given.shape[0].bit_length() - 1
    silent = np.flatnonzero(~np.any(given != 0, axis=1))
    if silent.size:
        word = format(int(silent[0]), f"0{width}b")
        raise InputError(
            "codebook", "words", f"word {word} sends nothing", "at least one active antenna"
        )
    check_distinct(given)
    if normalise:
        given = given / np.sqrt(np.mean(np.sum(np.abs(given) ** 2, axis=1)))
    active = [tuple(int(a) for a in np.flatnonzero(v)) for v in given]
    sets = sorted(set(active))
    if len(sets) > MAX_SETS:
        raise InputError("codebook", "words", f"{len(sets)} antenna sets", f"at most {MAX_SETS}")
    set_index = np.array([sets.index(a) for a in active], np.int64)
    symbol_index = np.zeros(size, np.int64)
    for s in range(len(sets)):
        members = np.flatnonzero(set_index == s)
        symbol_index[members] = np.arange(members.size)
    spatial_bits = np.zeros(width, np.bool_)
    spatial_bits[list(spatial_positions)] = True
    return Codebook(
        scheme="vector-table",
        vectors=given,
        antenna_sets=tuple(sets),
        set_index=set_index,
        symbol_index=symbol_index,
        spatial_bits=spatial_bits,
        constellation=SINGLE,
    )
