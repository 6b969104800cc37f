"""Tree search: maximum likelihood for large codebooks, without looking at every word.

For each antenna set, H B = Q R, B being the directions in which the set's vectors differ (the
antennas; one direction where all of them send the same). Then

    ||y - H x||^2 = ||y||^2 - ||Q^H y||^2 + sum over d of |(Q^H y - R t)_d|^2,   x = B t

and the terms, from the last coordinate of t on, only add up. Sets are taken in the order of what
they leave of y at best, branches in the order of their sum; what is not below the best word so far
is cut off with all that hangs on it. The decision is that of the exhaustive search.

Sources: sphere detection for spatial modulation, A. Younis et al., arXiv:1305.1478; tree search
with maximum-likelihood decisions, I. Al-Nahhal et al., arXiv:1905.09401; order of branches after
C. P. Schnorr, M. Euchner, Math. Program. 66, 1994 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import C64, C128, F64, I64, kernel
from spatiq.signal.codebooks import Codebook

Room = tuple[C128, F64, I64, F64]


@dataclass(frozen=True, eq=False)
class _Tree:
    """Trees of all sets; nodes are values of one coordinate, the last coordinate at the root.

    Attributes:
        basis: complex128 (A, L, Nt); directions of the coordinates of each set.
        root: int64 (A, 2); first root node of each set, and how many.
        value: complex128 (N,); of each node.
        child: int64 (N, 2); its first child and how many; of a leaf its word, and 0.
        widest: most children of a node, or roots of a set.
    """

    basis: NDArray[np.complex128]
    root: NDArray[np.int64]
    value: NDArray[np.complex128]
    child: NDArray[np.int64]
    widest: int


def _coordinates(
    vectors: NDArray[np.complex128],
) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """Coordinates t (n, L) and directions (L, Nt) with vectors = t @ directions."""
    active = np.flatnonzero(np.any(vectors != 0, axis=0))
    lead = vectors[np.argmax(np.abs(vectors).max(axis=1))]
    direction = lead / np.linalg.norm(lead)
    along = vectors @ direction.conj()
    if np.allclose(along[:, None] * direction, vectors, rtol=0, atol=1e-12 * np.abs(lead).max()):
        return along[:, None], direction[None]
    return vectors[:, active], np.eye(vectors.shape[1], dtype=np.complex128)[active]


@lru_cache(maxsize=4)
def _tree(codebook: Codebook) -> _Tree:
    if codebook.block > 1:
        raise InputError(
            "receiver options", "detector", "tree-search", "words of one symbol period"
        )
    sets = [np.flatnonzero(codebook.set_index == s) for s in range(len(codebook.antenna_sets))]
    parts = [_coordinates(codebook.vectors[members]) for members in sets]
    levels = max(d.shape[0] for _, d in parts)
    basis = np.zeros((len(sets), levels, codebook.antennas), np.complex128)
    root = np.zeros((len(sets), 2), np.int64)
    growing = _Growing()
    for s, (members, (t, directions)) in enumerate(zip(sets, parts, strict=True)):
        basis[s, : directions.shape[0]] = directions
        padded = np.zeros((members.size, levels), np.complex128)
        padded[:, : t.shape[1]] = t
        root[s] = growing.grow(padded, members, levels - 1)
    child = np.array(growing.child, np.int64).reshape(-1, 2)
    widest = int(max(child[:, 1].max(), root[:, 1].max()))
    return _Tree(basis, root, np.array(growing.value, np.complex128), child, widest)


class _Growing:
    """Nodes of a tree that is being built; siblings stand side by side."""

    def __init__(self) -> None:
        self.value: list[complex] = []
        self.child: list[list[int]] = []

    def grow(
        self, t: NDArray[np.complex128], words: NDArray[np.int64], level: int
    ) -> tuple[int, int]:
        """Enter the values of coordinate `level` and what hangs on them: first node, how many."""
        values, which = np.unique(t[:, level], return_inverse=True)
        first = len(self.value)
        self.value += values.tolist()
        self.child += [[0, 0] for _ in values]
        for i in range(values.size):
            under = which == i
            if level:
                self.child[first + i] = list(self.grow(t[under], words[under], level - 1))
            else:
                self.child[first + i] = [int(words[under][0]), 0]
        return first, int(values.size)


def tree_search(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], noise: float, codebook: Codebook
) -> NDArray[np.int64]:
    """Words by tree search.

    Raises:
        InputError: for the differential form.
    """
    return search_counted(y, channel, codebook)[0]


def search_counted(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], codebook: Codebook
) -> tuple[NDArray[np.int64], int]:
    """Words, and how many nodes of the trees were looked at for them.

    Args:
        y: complex64, shape (K, Nr).
        channel: complex128, shape (Nr, Nt).
        codebook: words of one symbol period.

    Raises:
        InputError: for the differential form.
    """
    tree = _tree(codebook)
    q, r = np.linalg.qr(channel @ tree.basis.transpose(0, 2, 1))
    words = np.empty(y.shape[0], np.int64)
    looked = np.zeros(1, np.int64)
    search_trees(
        np.ascontiguousarray(y),
        np.ascontiguousarray(q),
        np.ascontiguousarray(r),
        tree.root,
        tree.value,
        tree.child,
        np.empty((tree.basis.shape[1], tree.widest)),
        words,
        looked,
    )
    return words, int(looked[0])


@kernel
def _sums_of_children(
    target: complex, factor: complex, base: float, value: C128, first: int, count: int, sums: F64
) -> None:
    """base + |target - factor value|^2 of sibling nodes, into sums."""
    for c in range(count):
        left = target - factor * value[first + c]
        sums[c] = base + left.real * left.real + left.imag * left.imag


@kernel
def _projections(y: C64, q: C128, z: C128, least: F64) -> None:
    """z = Q^H y (A, D) of one period y (Nr,), and what each set leaves of y at best (A,)."""
    energy = 0.0
    for i in range(y.size):
        energy += float(y[i].real) ** 2 + float(y[i].imag) ** 2
    for s in range(q.shape[0]):
        least[s] = energy
        for d in range(q.shape[2]):
            v = 0j
            for i in range(y.size):
                v += np.conj(q[s, i, d]) * y[i]
            z[s, d] = v
            least[s] -= v.real * v.real + v.imag * v.imag


@kernel
def _search_set(
    z: C128, r: C128, least: float, best: float, tree: tuple[I64, C128, I64], room: Room
) -> tuple[float, int, int]:
    """Depth first, best branch first, through one set's tree.

    Args:
        z: complex128 (D,); Q^H y.
        r: complex128 (D, L).
        least: what the set leaves at best.
        best: metric of the best word so far.
        tree: roots of the set, value, child.
        room: chosen (L,), base (L + 1,), first and count (2, L), sums (L, widest).

    Returns:
        Metric of the best word, its number or -1 if none of this set is better, nodes looked at.
    """
    root, value, child = tree
    chosen, base, span, sums = room
    rows, levels = r.shape
    d, word, looked, enter = levels - 1, -1, 0, True
    base[levels] = least
    span[0, d], span[1, d] = root[0], root[1]
    while d < levels:
        if enter:
            target, factor = 0j, 0j
            if d < rows:
                target, factor = z[d], r[d, d]
                for m in range(d + 1, levels):
                    target -= r[d, m] * chosen[m]
            _sums_of_children(target, factor, base[d + 1], value, span[0, d], span[1, d], sums[d])
            looked += span[1, d]
        at, smallest = -1, best
        for c in range(span[1, d]):
            if sums[d, c] < smallest:
                at, smallest = c, sums[d, c]
        enter = False
        if at < 0:
            d += 1
        elif d == 0:
            best, word = smallest, child[span[0, 0] + at, 0]
            d += 1
        else:
            node = span[0, d] + at
            sums[d, at] = np.inf
            chosen[d], base[d] = value[node], smallest
            d -= 1
            span[0, d], span[1, d] = child[node, 0], child[node, 1]
            enter = True
    return best, word, looked


@kernel
def search_trees(
    y: C64, q: C128, r: C128, root: I64, value: C128, child: I64, sums: F64, words: I64, looked: I64
) -> None:
    """The trees of all sets, the most promising first, for each period.

    Args:
        y: complex64 (K, Nr).
        q: complex128 (A, Nr, D), r: (A, D, L), D = min(Nr, L); of H times each set's directions.
        root, value, child: of `_Tree`.
        sums: float64 (L, widest); room.
        words: int64 (K,); filled.
        looked: int64 (1,); nodes looked at, added to.
    """
    sets, rows, levels = r.shape
    z = np.empty((sets, rows), np.complex128)
    least = np.empty(sets)
    room = (
        np.empty(levels, np.complex128),
        np.empty(levels + 1),
        np.empty((2, levels), np.int64),
        sums,
    )
    for k in range(y.shape[0]):
        _projections(y[k], q, z, least)
        best = np.inf
        words[k] = 0
        while True:
            s, smallest = -1, best
            for i in range(sets):
                if least[i] < smallest:
                    s, smallest = i, least[i]
            if s < 0:
                break
            least[s] = np.inf
            tree = (root[s], value, child)
            best, word, nodes = _search_set(z[s], r[s], smallest, best, tree, room)
            looked[0] += nodes
            if word >= 0:
                words[k] = word
