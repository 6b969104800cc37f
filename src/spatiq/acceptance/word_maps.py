"""Ways in which a transmitter can send the wrong word: hypotheses on the mapping.

Each is a permutation of the words: word w is meant, `map[w]` is what a correct description decides.
Hypotheses that come to the same permutation are one, with several names.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import permutations

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.codebook import Codebook
from spatiq.signal.constellations import named

Map = NDArray[np.int64]
_ALL_ORDERS = 4  # antenna sets of which all orders are tried; beyond: swaps, shifts and reversal
_LABELLINGS = ("3gpp", "80211", "gray", "natural")


@dataclass(frozen=True, eq=False)
class WordMap:
    """A hypothesis.

    Attributes:
        names: what it may be, in words; several where they cannot be told apart.
        words: int64 (C,); word decided when word w is meant.
    """

    names: tuple[str, ...]
    words: Map

    @property
    def inverse(self) -> Map:
        """Word meant when word w is decided."""
        return np.argsort(self.words)


def word_maps(book: Codebook) -> list[WordMap]:
    """All hypotheses on a codebook of one period a word, without the identity."""
    found: dict[bytes, WordMap] = {}
    identity = np.arange(book.size)
    for name, words in _candidates(book):
        if np.array_equal(words, identity) or not np.array_equal(np.sort(words), identity):
            continue
        key = words.astype(np.int64).tobytes()
        before = found[key].names if key in found else ()
        if name not in before:
            found[key] = WordMap((*before, name), words.astype(np.int64))
    return list(found.values())


def _candidates(book: Codebook) -> Iterator[tuple[str, Map]]:
    yield from _antenna_orders(book)
    yield from _bit_orders(book)
    yield from _point_maps(book)


def _of_pairs(book: Codebook, sets: Map, symbols: Map) -> Map:
    """Words by antenna set and symbol; -1 where there is none."""
    width = int(book.symbol_index.max()) + 1
    table = np.full((len(book.antenna_sets), width), -1)
    table[book.set_index, book.symbol_index] = np.arange(book.size)
    return np.asarray(table[sets, symbols])


def _antenna_orders(book: Codebook) -> Iterator[tuple[str, Map]]:
    count = len(book.antenna_sets)
    for order in _orders(count):
        words = _of_pairs(book, np.array(order)[book.set_index], book.symbol_index)
        moved = [
            f"{book.set_names[a]} sent by {book.set_names[b]}"
            for a, b in enumerate(order)
            if a != b
        ]
        yield f"antennas permuted between pilots and payload: {', '.join(moved)}", words


def _orders(count: int) -> Iterator[tuple[int, ...]]:
    if count <= _ALL_ORDERS:
        yield from permutations(range(count))
        return
    plain = list(range(count))
    for a in range(count):
        for b in range(a):
            swapped = plain.copy()
            swapped[a], swapped[b] = b, a
            yield tuple(swapped)
    for shift in range(1, count):
        yield tuple(plain[shift:] + plain[:shift])
    yield tuple(reversed(plain))


def _bit_orders(book: Codebook) -> Iterator[tuple[str, Map]]:
    bits = book.words_to_bits(np.arange(book.size)[:, None])
    spatial = np.flatnonzero(book.spatial_bits)
    signal = np.flatnonzero(~book.spatial_bits)

    def taken(order: NDArray[np.int64]) -> Map:
        return book.bits_to_words(np.ascontiguousarray(bits[:, order]))[:, 0]

    def flipped(which: NDArray[np.int64]) -> Map:
        changed = bits.copy()
        changed[:, which] ^= 1
        return book.bits_to_words(changed)[:, 0]

    plain = np.arange(book.bits)
    for name, part in (("spatial", spatial), ("signal", signal)):
        order = plain.copy()
        order[part] = part[::-1]
        yield f"{name} bits reversed", taken(order)
        yield f"{name} bits complemented", flipped(part)
    yield "bits of each word reversed", taken(plain[::-1])
    yield "bits of each word complemented", flipped(plain)
    if spatial.size and signal.size:
        other = np.concatenate([signal, spatial])
        yield "spatial bits taken from the other end of the word", taken(other)


def _point_maps(book: Codebook) -> Iterator[tuple[str, Map]]:
    points = book.constellation.points
    if points.size < 2 or int(book.symbol_index.max()) != points.size - 1:
        return
    changes = [(f"constellation rotated by {90 * k} degrees", points * 1j**k) for k in (1, 2, 3)]
    changes.append(("constellation conjugated", points.conj()))
    changes += [
        (f"constellation rotated by {45 * k} degrees", points * np.exp(1j * np.pi * k / 4))
        for k in (1, 3, 5, 7)
    ]
    for name, moved in changes:
        away = np.abs(moved[:, None] - points[None, :])
        if away.min(axis=1).max() < 1e-6:
            yield name, _relabelled(book, away.argmin(axis=1))
    width = book.constellation.bits
    labels = np.arange(points.size)
    gray = labels ^ (labels >> 1)
    for name, order in (
        ("Gray instead of natural", gray),
        ("natural instead of Gray", np.argsort(gray)),
    ):
        if width > 1:
            yield f"constellation labelled otherwise ({name})", _relabelled(book, order)
    for labelling in _LABELLINGS:
        try:
            other = named(book.constellation.name.split()[0], labelling).points
        except InputError:
            continue
        if other.size != points.size:
            continue
        away = np.abs(other[:, None] - points[None, :])
        if away.min(axis=1).max() < 1e-6:
            name = f"constellation labelled otherwise ({labelling})"
            yield name, _relabelled(book, away.argmin(axis=1))


def _relabelled(book: Codebook, points: Map) -> Map:
    return _of_pairs(book, book.set_index, points[book.symbol_index])
