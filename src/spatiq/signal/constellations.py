"""Constellations: complex points indexed by the label (bits, first = most significant) they carry.

To add a named one: write its label -> point table under each labelling in `_NAMED`, and add the
published table to tests/signal/test_constellations.py; the contract tests there run over all.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError

LABELLINGS = ("3gpp", "802.11")
MAX_POINTS = 4096


@dataclass(frozen=True, eq=False)
class Constellation:
    """M points, indexed by label.

    Attributes:
        name: what people call it.
        points: complex128, shape (M,), M a power of two; `points[v]` is sent for the label v, the
            first of its bits being the most significant. M = 1 carries no bits.

    Raises:
        InputError: when M is no power of two, or a point is not finite.
    """

    name: str
    points: NDArray[np.complex128]

    def __post_init__(self) -> None:
        """Refuse what no label can index."""
        points = self.points
        if points.ndim != 1 or not 1 <= points.size <= MAX_POINTS or points.size.bit_count() != 1:
            raise InputError(
                "constellation",
                "points",
                f"shape {points.shape}",
                f"a power of two of points, 1 to {MAX_POINTS}",
            )
        if not np.isfinite(points).all():
            raise InputError(
                "constellation", "points", "a point that is not finite", "finite points"
            )

    @property
    def size(self) -> int:
        """Number of points, M."""
        return int(self.points.size)

    @property
    def bits(self) -> int:
        """Bits per symbol, log2 M."""
        return self.size.bit_length() - 1

    @property
    def mean_power(self) -> float:
        """Mean of |point|^2 over all labels."""
        return float(np.mean(np.abs(self.points) ** 2))


def _label_bits(width: int) -> NDArray[np.int64]:
    """All labels of `width` bits, shape (width, 2^width); row i is bit i, the first bit on top."""
    labels = np.arange(1 << width)
    return np.stack([(labels >> (width - 1 - i)) & 1 for i in range(width)])


def _points(
    in_phase: NDArray[np.int64], quadrature: NDArray[np.int64], power: int
) -> NDArray[np.complex128]:
    """Integer levels scaled to unit mean power, each part divided once so that it is exact."""
    root = np.sqrt(float(power))
    points = np.empty(in_phase.size, np.complex128)
    points.real = in_phase / root
    points.imag = quadrature / root
    return points


def _level_3gpp(bits: NDArray[np.int64]) -> NDArray[np.int64]:
    """Amplitude of one axis from its bits, shape (n, M): 3GPP TS 38.211 clause 5.1, nested form."""
    level: NDArray[np.int64] = 1 - 2 * bits[-1]
    for i in range(bits.shape[0] - 2, -1, -1):
        level = (1 - 2 * bits[i]) * ((1 << (bits.shape[0] - 1 - i)) - level)
    return level


def _level_80211(bits: NDArray[np.int64]) -> NDArray[np.int64]:
    """Amplitude of one axis from its bits, shape (n, M): IEEE 802.11 clause 17.3.5.8, 0...0 lowest.

    The levels count a binary-reflected Gray code upwards, so the code word is decoded to its rank.
    """
    bit = bits[0]
    rank = bit
    for following in bits[1:]:
        bit = bit ^ following
        rank = 2 * rank + bit
    return np.asarray(2 * rank - ((1 << bits.shape[0]) - 1), np.int64)


def _square_3gpp(width: int, power: int) -> NDArray[np.complex128]:
    """QPSK and square QAM: even bits to the in-phase axis, odd bits to the quadrature axis."""
    bits = _label_bits(width)
    return _points(_level_3gpp(bits[0::2]), _level_3gpp(bits[1::2]), power)


def _square_80211(width: int, power: int) -> NDArray[np.complex128]:
    """QPSK and square QAM: first half of the bits to the in-phase axis, the rest to quadrature."""
    bits = _label_bits(width)
    half = width // 2
    return _points(_level_80211(bits[:half]), _level_80211(bits[half:]), power)


def _bpsk(labelling: str) -> NDArray[np.complex128]:
    bit = np.arange(2)
    if labelling == "3gpp":
        return _points(1 - 2 * bit, 1 - 2 * bit, 2)
    return _points(2 * bit - 1, 0 * bit, 1)


def _8psk(labelling: str) -> NDArray[np.complex128]:
    """Points e^(j pi i/4), i = 0..7, labelled with the binary-reflected Gray code of i.

    Neither standard has 8PSK, so both labellings give this table:
    000 0 deg, 001 45, 011 90, 010 135, 110 180, 111 225, 101 270, 100 315 degrees.
    """
    diagonal = np.sqrt(0.5)
    cosine = np.array([1.0, diagonal, 0.0, -diagonal, -1.0, -diagonal, 0.0, diagonal])
    place = np.arange(8)
    points = np.empty(8, np.complex128)
    label = place ^ (place >> 1)
    points.real[label] = cosine
    points.imag[label] = np.roll(cosine, 2)
    return points


def _square(width: int, power: int) -> Callable[[str], NDArray[np.complex128]]:
    tables = {"3gpp": _square_3gpp, "802.11": _square_80211}
    return lambda labelling: tables[labelling](width, power)


_NAMED: dict[str, Callable[[str], NDArray[np.complex128]]] = {
    "BPSK": _bpsk,
    "QPSK": _square(2, 2),
    "8PSK": _8psk,
    "16QAM": _square(4, 10),
    "64QAM": _square(6, 42),
    "256QAM": _square(8, 170),
}
NAMES = tuple(_NAMED)


def named(name: str, labelling: str = "3gpp") -> Constellation:
    """A constellation of the standards, mean power 1.

    Sources: 3GPP TS 38.211 clause 5.1; IEEE 802.11 clause 17.3.5.8 (256QAM continues its rule).

    Args:
        name: one of `NAMES`.
        labelling: one of `LABELLINGS`.

    Raises:
        InputError: unknown name or labelling.
    """
    if name not in _NAMED:
        raise InputError("constellation", "name", repr(name), "one of " + ", ".join(NAMES))
    if labelling not in LABELLINGS:
        raise InputError(
            "constellation", "labelling", repr(labelling), "one of " + ", ".join(LABELLINGS)
        )
    return Constellation(name, _NAMED[name](labelling))


def _label_values(labels: Sequence[str], size: int) -> NDArray[np.int64]:
    """Bit strings -> label values; they must be all `size` words of log2 `size` bits, once each."""
    width = size.bit_length() - 1
    if len(labels) != size:
        raise InputError("constellation", "labels", f"{len(labels)} labels", f"{size}, one a point")
    seen: dict[str, int] = {}
    for i, label in enumerate(labels):
        if len(label) != width or set(label) - {"0", "1"}:
            raise InputError(
                "constellation", f"labels[{i}]", repr(label), f"{width} characters 0 or 1"
            )
        if label in seen:
            raise InputError(
                "constellation",
                f"labels[{i}]",
                f"{label!r} again (first at labels[{seen[label]}])",
                "each label once",
            )
        seen[label] = i
    return np.array([int(label, 2) if label else 0 for label in labels], np.int64)


def explicit(points: ArrayLike, labels: Sequence[str], normalise: bool) -> Constellation:
    """A constellation point by point.

    Args:
        points: complex, shape (M,), M a power of two, all different.
        labels: M bit strings of log2 M characters, a permutation of all words; `labels[i]` is the
            label of `points[i]`, its first character the most significant bit.
        normalise: True scales the points to mean power 1; False leaves them as they are.

    Raises:
        InputError: M no power of two, points not finite or not distinct or without power, labels
            not a permutation.
    """
    given = np.array(points, np.complex128)
    values = Constellation("explicit", given)
    order = _label_values(labels, values.size)
    if np.unique(given).size != given.size:
        raise InputError("constellation", "points", "a point given twice", "points that all differ")
    power = values.mean_power
    if not (np.isfinite(power) and power > np.finfo(float).tiny):
        raise InputError("constellation", "points", f"mean power {power}", "a positive mean power")
    placed = np.empty_like(given)
    placed[order] = given / np.sqrt(power) if normalise else given
    return Constellation("explicit", placed)
