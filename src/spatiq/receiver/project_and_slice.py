"""Maximum likelihood for one active antenna at a cost that does not grow with the constellation.

Given the antenna, ||y - h s||^2 = ||y||^2 - |h^H y|^2 / ||h||^2 + ||h||^2 |z - s|^2 with z = h^H y
/ ||h||^2: the nearest point to z is the best symbol, and is found by slicing. The antennas' best
symbols are compared by the full metric. The decision is that of the exhaustive search.

Source: R. Rajashekar, K. V. S. Hari, "Optimal hard-decision detection of spatial modulation",
arXiv:1206.6190 (cost independent of the constellation's size).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import C64, F64, I64, kernel
from spatiq.signal.codebooks import Codebook
from spatiq.signal.slicing import SEARCH, Slicer, searched, sliced, slicer


@dataclass(frozen=True, eq=False)
class _Plan:
    """What depends on the codebook only.

    Attributes:
        antennas: (A,); antenna of each set.
        points: complex64 (A, M); what each sends, ordered by label; rows may be part used.
        words: int64 (A, M); the word of each.
        counts: int64 (A,); how many of a row are used.
        slicer: of the points that all sets have in common, or of none.
    """

    antennas: NDArray[np.int64]
    points: NDArray[np.complex64]
    words: NDArray[np.int64]
    counts: NDArray[np.int64]
    slicer: Slicer


@lru_cache(maxsize=8)
def _plan(codebook: Codebook) -> _Plan:
    if not codebook.single_antenna:
        raise InputError(
            "receiver options", "detector", "project-and-slice", "one active antenna a period"
        )
    antennas = np.array([s[0] for s in codebook.antenna_sets], np.int64)
    members = [np.flatnonzero(codebook.set_index == s) for s in range(antennas.size)]
    counts = np.array([m.size for m in members], np.int64)
    points = np.zeros((antennas.size, counts.max()), np.complex128)
    words = np.zeros(points.shape, np.int64)
    for s, member in enumerate(members):
        ordered = member[np.argsort(codebook.symbol_index[member], kind="stable")]
        words[s, : counts[s]] = ordered
        points[s, : counts[s]] = codebook.vectors[ordered, antennas[s]]
    alike = bool(np.all(points == points[0]) and np.all(counts == counts[0]))
    common = slicer(points[0]) if alike else searched()
    return _Plan(antennas, points.astype(np.complex64), words, counts, common)


def project_and_slice(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], noise: float, codebook: Codebook
) -> NDArray[np.int64]:
    """Words by projection on each antenna's channel and slicing.

    Raises:
        InputError: for codebooks in which a word is more than one symbol from one antenna.
    """
    plan = _plan(codebook)
    columns = np.ascontiguousarray(channel[:, plan.antennas].T).astype(np.complex64)
    words = np.empty(y.shape[0], np.int64)
    cut = plan.slicer
    detect_by_slicing(
        y, columns, plan.points, plan.words, plan.counts, cut.kind, cut.places, cut.counts,
        cut.labels, words,
    )  # fmt: skip
    return words


@kernel
def detect_by_slicing(
    y: C64,
    columns: C64,
    points: C64,
    words_of: I64,
    sizes: I64,
    kind: int,
    places: F64,
    counts: I64,
    labels: I64,
    words: I64,
) -> None:
    """Antenna and symbol of each period.

    Args:
        y: complex64 (K, Nr).
        columns: complex64 (A, Nr); channel column of each antenna.
        points, words_of, sizes: of `_Plan`.
        kind, places, counts, labels: of `Slicer`.
        words: int64 (K,); filled.
    """
    antennas, channels = columns.shape
    norm = np.empty(antennas)
    for a in range(antennas):
        norm[a] = 0.0
        for r in range(channels):
            h = columns[a, r]
            norm[a] += float(h.real) * float(h.real) + float(h.imag) * float(h.imag)
    for k in range(y.shape[0]):
        best, antenna, place = np.inf, 0, 0
        for a in range(antennas):
            re, im = 0.0, 0.0
            for r in range(channels):
                h, v = columns[a, r], y[k, r]
                re += h.real * v.real + h.imag * v.imag
                im += h.real * v.imag - h.imag * v.real
            first, stop = 0, sizes[a]
            if kind != SEARCH and norm[a] > 0.0:
                first = sliced(re / norm[a], im / norm[a], kind, places, counts, labels)
                stop = first + 1
            for m in range(first, stop):
                s = points[a, m]
                metric = norm[a] * (float(s.real) ** 2 + float(s.imag) ** 2)
                metric -= 2.0 * (s.real * re + s.imag * im)
                if metric < best:
                    best, antenna, place = metric, a, m
        words[k] = words_of[antenna, place]
