"""Schemes in which several antennas may be active in one symbol period."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations, islice
from math import comb

import numpy as np

from spatiq.errors import InputError
from spatiq.signal.codebook import SINGLE, Codebook, assemble
from spatiq.signal.constellations import Constellation

STREAMS = ("same", "independent")


def first_sets(antennas: int, active: int) -> list[tuple[int, ...]]:
    """The stated rule: of all sets of `active` antennas, in lexicographic order, the first 2^k.

    2^k is the largest power of two that the number of sets allows. J. Wang, S. Jia, J. Song,
    "Generalised spatial modulation system with multiple active transmit antennas and low complexity
    detection scheme", IEEE Trans. Wireless Commun. 11(4), 2012, use as many; the order is this
    program's own.
    """
    count = 1 << (comb(antennas, active).bit_length() - 1)
    return list(islice(combinations(range(antennas), active), count))


def generalised_spatial_modulation(
    antennas: int,
    constellation: Constellation,
    antenna_sets: Sequence[Sequence[int]],
    spatial_positions: Sequence[int],
    streams: str = "same",
) -> Codebook:
    """A set of antennas is active; all send one symbol, or each its own.

    Methods: A. Younis, N. Serafimovski, R. Mesleh, H. Haas, "Generalised spatial modulation", Proc.
    Asilomar Conf., 2010 (one symbol); J. Wang, S. Jia, J. Song, IEEE Trans. Wireless Commun. 11(4),
    2012 (own symbols); both from memory. The power of a constellation of unit power is shared: each
    of n active antennas sends its symbol over sqrt n.

    Args:
        antennas: Nt.
        constellation: M points indexed by label.
        antenna_sets: 2^k sets; entry v is the set that spatial value v selects. Its order says
            which antenna takes the first of independent symbols.
        spatial_positions: as in `spatial_modulation`; the symbols' labels take the other positions,
            one symbol after the other.
        streams: "same" or "independent"; sets of different size need "same".

    Raises:
        InputError: sets that do not go together, or words that send the same.
    """
    if streams not in STREAMS:
        raise InputError("codebook", "streams", streams, " or ".join(STREAMS))
    sizes = {len(s) for s in antenna_sets}
    if streams == "independent" and len(sizes) != 1:
        raise InputError(
            "codebook", "antenna_sets", "sets of different size", "sets of one size: own symbols"
        )
    columns = max(sizes) if streams == "independent" else 1
    labels = np.arange(constellation.size**columns)
    mask = constellation.size - 1
    patterns = np.zeros((len(antenna_sets), labels.size, antennas), np.complex128)
    for value, members in enumerate(antenna_sets):
        for i, antenna in enumerate(members):
            shift = (columns - 1 - min(i, columns - 1)) * constellation.bits
            point = constellation.points[(labels >> shift) & mask]
            patterns[value, :, antenna] = point / np.sqrt(len(members))
    kind = "spatial-modulation" if constellation.bits else "space-shift-keying"
    active = [tuple(sorted(int(a) for a in s)) for s in antenna_sets]
    return assemble(f"generalised-{kind}", patterns, active, constellation, spatial_positions)


def generalised_space_shift_keying(
    antennas: int, antenna_sets: Sequence[Sequence[int]], spatial_positions: Sequence[int]
) -> Codebook:
    """Only the set of active antennas carries bits; all of them send 1 / sqrt n.

    Method: J. Jeganathan, A. Ghrayeb, L. Szczecinski, "Generalized space shift keying modulation
    for MIMO channels", Proc. IEEE PIMRC, 2008 (from memory).
    """
    return generalised_spatial_modulation(antennas, SINGLE, antenna_sets, spatial_positions)


def quadrature_spatial_modulation(
    antennas: int,
    constellation: Constellation,
    antenna_order: Sequence[int],
    spatial_positions: Sequence[int],
) -> Codebook:
    """Real part of the symbol from one antenna, imaginary part from another or the same.

    Method: R. Mesleh, S. S. Ikki, H. M. Aggoune, "Quadrature spatial modulation", IEEE Trans. Veh.
    Technol. 64(6), 2015.

    Args:
        antennas: Nt.
        constellation: M points, none of them real or imaginary: where a part is zero, no receiver
            sees which antenna sends it.
        antenna_order: 2^k antenna indices; entry v is the antenna of value v.
        spatial_positions: 2k positions; the first k carry the value of the real part's antenna, the
            others that of the imaginary part's.

    Raises:
        InputError: words that send the same.
    """
    count = len(antenna_order)
    patterns = np.zeros((count * count, constellation.size, antennas), np.complex128)
    active, names = [], []
    for value in range(count * count):
        real, imag = (int(antenna_order[v]) for v in divmod(value, count))
        patterns[value, :, real] += constellation.points.real
        patterns[value, :, imag] += 1j * constellation.points.imag
        active.append((real, imag))
        names.append(f"{real}re+{imag}im")
    return assemble(
        "quadrature-spatial-modulation", patterns, active, constellation, spatial_positions, names
    )
