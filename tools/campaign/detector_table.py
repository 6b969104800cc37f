"""Cost of detectors: counted multiplications and measured time, beside published formulas."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.detection import DETECTORS
from spatiq.receiver.tree_search import search_counted
from spatiq.signal.codebooks import (
    Codebook,
    generalised_spatial_modulation,
    quadrature_spatial_modulation,
    spatial_modulation,
)
from spatiq.signal.constellations import named
from spatiq.signal.several_antennas import first_sets

_PERIODS = 4096
_REPEATS = 7
_BER_SNR_DB = 14.0


@dataclass(frozen=True, eq=False)
class Case:
    """A row: what is detected, and by how many receive channels."""

    name: str
    book: Codebook
    receivers: int
    points: int  # M

    @property
    def antennas(self) -> int:
        """Nt."""
        return self.book.antennas


def _sm(antennas: int, receivers: int, points: str) -> Case:
    constellation = named(points)
    spatial = range(antennas.bit_length() - 1)
    book = spatial_modulation(antennas, constellation, range(antennas), spatial)
    return Case("spatial modulation", book, receivers, constellation.size)


def _own(antennas: int, receivers: int, points: str) -> Case:
    sets, constellation = first_sets(antennas, 2), named(points)
    spatial = range(len(sets).bit_length() - 1)
    book = generalised_spatial_modulation(antennas, constellation, sets, spatial, "independent")
    return Case("2 active, own symbols", book, receivers, constellation.size)


def _quadrature(antennas: int, receivers: int, points: str) -> Case:
    spatial = range(2 * (antennas.bit_length() - 1))
    book = quadrature_spatial_modulation(antennas, named(points), range(antennas), spatial)
    return Case("quadrature form", book, receivers, named(points).size)


def cases(quick: bool) -> list[Case]:
    """The rows."""
    rows = [
        _sm(4, 2, "QPSK"),
        _sm(4, 4, "16QAM"),
        _sm(8, 4, "64QAM"),
        _sm(16, 4, "256QAM"),
        _quadrature(8, 4, "64QAM"),
        _own(6, 4, "16QAM"),
    ]
    if quick:
        return rows
    more = [
        _sm(2, 2, "BPSK"),
        _sm(4, 4, "64QAM"),
        _sm(8, 2, "16QAM"),
        _sm(64, 8, "16QAM"),
        _quadrature(4, 4, "16QAM"),
        _own(5, 5, "64QAM"),
        _own(8, 4, "64QAM"),
    ]
    return rows + more


def exhaustive_multiplications(case: Case) -> int:
    """Of `block_metrics`: two for each word and receive channel."""
    return 2 * case.receivers * case.book.size


def slicing_multiplications(case: Case) -> int:
    """Of `detect_by_slicing`: the projection, its division, slicing on a grid, the metric."""
    return case.antennas * (4 * case.receivers + 2 + 2 + 6)


def two_step_multiplications(case: Case) -> int:
    """Of `detect_two_step`: projection and score of each antenna, distances of one antenna."""
    return case.antennas * (4 * case.receivers + 3) + 4 * case.points


def tree_multiplications(case: Case, nodes: float) -> float:
    """Of `search_trees`: projections on each set's directions, and six for each node."""
    sets = len(case.book.antenna_sets)
    levels = max(len(s) for s in case.book.antenna_sets)
    directions = min(case.receivers, levels)
    return sets * directions * (4 * case.receivers + 2) + 2 * case.receivers + 6 * nodes


def received(case: Case) -> tuple[NDArray[np.complex64], NDArray[np.complex128]]:
    """Periods of random words on one Rayleigh channel."""
    rng = np.random.default_rng(case.book.size + case.receivers)

    def normal(*shape: int) -> NDArray[np.complex128]:
        parts = rng.standard_normal((2, *shape)) * np.sqrt(0.5)
        return np.asarray(parts[0] + 1j * parts[1])

    channel = normal(case.receivers, case.antennas)
    sent = rng.integers(0, case.book.size, _PERIODS)
    noise = np.sqrt(10 ** (-_BER_SNR_DB / 10)) * normal(_PERIODS, case.receivers)
    return (case.book.vectors[sent] @ channel.T + noise).astype(np.complex64), channel


def nanoseconds(work: Callable[[], object]) -> float:
    """Median time of a period, after a first call that compiles."""
    work()
    taken = []
    for _ in range(_REPEATS):
        began = time.perf_counter()
        work()
        taken.append(time.perf_counter() - began)
    return float(np.median(taken)) / _PERIODS * 1e9


def _row(case: Case) -> str:
    y, channel = received(case)
    single = case.book.single_antenna
    counts: dict[str, float] = {"maximum-likelihood": exhaustive_multiplications(case)}
    if single:
        counts["project-and-slice"] = slicing_multiplications(case)
        counts["two-step"] = two_step_multiplications(case)
    _, nodes = search_counted(y, channel, case.book)
    counts["tree-search"] = tree_multiplications(case, nodes / _PERIODS)
    cells = []
    for name in ("maximum-likelihood", "project-and-slice", "tree-search", "two-step"):
        if name in counts:
            took = nanoseconds(partial(DETECTORS[name], y, channel, 0.1, case.book))
            cells.append(f"{counts[name]:>9.0f} {took:>8.0f}")
        else:
            cells.append(f"{'-':>9} {'-':>8}")
    n, r, m = case.antennas, case.receivers, case.points
    published = (
        f"{8 * r * n * m:>9} {4 * (2 * r * n + n + m):>7}" if single else f"{'-':>9} {'-':>7}"
    )
    return f"{case.name:<22} {n:>3} {r:>3} {m:>4} {case.book.size:>6}  " + "  ".join(
        [*cells, published]
    )


def run(quick: bool) -> int:
    """Print the table."""
    print(
        "Real multiplications and nanoseconds per symbol period. Published, for spatial modulation:"
        "\n8 Nr Nt M for the exhaustive search (A. Younis et al., arXiv:1305.1478), 4 (2 Nr Nt + Nt"
        " + M)\nfor two steps (four to a complex one; J. Jeganathan et al., 2008); both from"
        " memory. The exhaustive\nsearch here has H x of all words from the frame, so that it needs"
        f" 2 Nr Nt M. Tree search:\nmean over {_PERIODS} periods of one channel at"
        f" {_BER_SNR_DB:g} dB.\n"
    )
    heads = ("exhaustive", "project, slice", "tree search", "two-step")
    print(
        f"{'':<22} {'Nt':>3} {'Nr':>3} {'M':>4} {'words':>6}  "
        + "  ".join(f"{h:>18}" for h in heads)
        + f"  {'published, ML two-st.':>17}"
    )
    for case in cases(quick):
        print(_row(case), flush=True)
    return 0
