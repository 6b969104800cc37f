"""A plain oracle: error vector magnitude (EVM) as sums of energies that pool by adding.

EVM = sqrt(error energy / reference energy). The sums are kept apart by frame and by antenna set;
add over whatever is to be pooled, then call `evm_ratio`. With the words sent the figure is
data-aided; with the words decided it is decision-directed, which is below the truth at low SNR.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.signal.codebooks import Codebook


@dataclass(frozen=True, eq=False)
class EvmSums:
    """Energies by frame and antenna set, float64, shape (F, A); `+` pools equal shapes."""

    error: NDArray[np.float64]
    reference: NDArray[np.float64]

    def __add__(self, other: EvmSums) -> EvmSums:
        """Sums over both."""
        return EvmSums(self.error + other.error, self.reference + other.reference)

    @property
    def per_frame(self) -> NDArray[np.float64]:
        """EVM of each frame over all sets, (F,)."""
        return evm_ratio(self.error.sum(axis=1), self.reference.sum(axis=1))

    @property
    def per_set(self) -> NDArray[np.float64]:
        """EVM of each antenna set over all frames, (A,)."""
        return evm_ratio(self.error.sum(axis=0), self.reference.sum(axis=0))

    @property
    def overall(self) -> float:
        """EVM over everything."""
        return float(evm_ratio(self.error.sum(), self.reference.sum()))


def evm_ratio(error: ArrayLike, reference: ArrayLike) -> NDArray[np.float64]:
    """sqrt(error / reference); NaN where there is no reference."""
    e = np.asarray(error, dtype=np.float64)
    r = np.asarray(reference, dtype=np.float64)
    safe = np.where(r > 0, r, 1.0)
    return np.asarray(np.where(r > 0, np.sqrt(e / safe), np.nan), dtype=np.float64)


def evm_db(ratio: ArrayLike) -> NDArray[np.float64]:
    """20 log10 of an EVM given as a ratio; -inf at 0."""
    with np.errstate(divide="ignore"):
        return np.asarray(20.0 * np.log10(np.asarray(ratio, dtype=np.float64)))


def received_evm(
    y: NDArray[np.complexfloating],
    h: NDArray[np.complexfloating],
    codebook: Codebook,
    words: NDArray[np.integer],
) -> EvmSums:
    """Energies of y - H x and of H x, before any equaliser.

    Args:
        y: (F, K, Nr) received vectors.
        h: (F, Nr, Nt) channels.
        codebook: transmit vectors.
        words: (F, K) words sent or decided.

    Raises:
        InputError: shapes that do not fit each other, or words outside the codebook.
    """
    _check(y, h, codebook, words)
    ideal = _received(h, codebook.vectors, words)
    error = np.sum(np.abs(y - ideal) ** 2, axis=2)
    reference = np.sum(np.abs(ideal) ** 2, axis=2)
    return _by_set(error, reference, codebook, words)


def equalised_symbols(
    y: NDArray[np.complexfloating],
    h: NDArray[np.complexfloating],
    codebook: Codebook,
    words: NDArray[np.integer],
) -> NDArray[np.complex128]:
    """Received symbols z = g^H y / ||g||^2 after the matched combiner of the active antennas.

    g is the received vector of a unit symbol on the set: the column h_a where one antenna is
    active, H x / s in general.

    Arguments and errors as for `received_evm`.

    Returns:
        complex128 (F, K), to be compared with the points of the constellation; NaN where the
        channel of the set is zero.
    """
    _check(y, h, codebook, words)
    g = _received(h, _unit_vectors(codebook), words)
    power = np.sum(np.abs(g) ** 2, axis=2)
    safe = np.where(power > 0, power, 1.0)
    z = np.sum(g.conj() * y, axis=2) / safe
    return np.asarray(np.where(power > 0, z, np.nan), dtype=np.complex128)


def equalised_evm(
    y: NDArray[np.complexfloating],
    h: NDArray[np.complexfloating],
    codebook: Codebook,
    words: NDArray[np.integer],
) -> EvmSums:
    """Energies of z - s, and the constellation's mean power for each symbol period.

    What a transmitter is judged by: normalised to the mean power of the constellation, as IEEE
    802.11 does (17.3.9.8, from memory). Arguments and errors as for `received_evm`; symbol periods
    whose equalised symbol is missing are left out of both sums.
    """
    z = equalised_symbols(y, h, codebook, words)
    sent = codebook.constellation.points[codebook.symbol_index[words]]
    present = np.isfinite(z)
    error = np.where(present, np.abs(z - sent) ** 2, 0.0)
    mean_power = float(np.mean(np.abs(codebook.constellation.points) ** 2))
    return _by_set(error, present * mean_power, codebook, words)


def _unit_vectors(codebook: Codebook) -> NDArray[np.complex128]:
    """What each word's antennas radiate for a unit symbol, (C, Nt)."""
    symbols = codebook.constellation.points[codebook.symbol_index]
    silent = symbols == 0
    unit = codebook.vectors / np.where(silent, 1.0, symbols)[:, None]
    for word in np.flatnonzero(silent):  # nothing to divide by: the set's antennas in equal parts
        active = list(codebook.antenna_sets[codebook.set_index[word]])
        unit[word, active] = 1.0 / np.sqrt(len(active))
    return np.asarray(unit, dtype=np.complex128)


def _received(
    h: NDArray[np.complexfloating],
    vectors: NDArray[np.complex128],
    words: NDArray[np.integer],
) -> NDArray[np.complex128]:
    """H times the vector of each word, (F, K, Nr)."""
    points = vectors @ np.swapaxes(h, 1, 2)  # (F, C, Nr)
    return np.asarray(np.take_along_axis(points, words[..., None], axis=1), dtype=np.complex128)


def _by_set(
    error: NDArray[np.float64],
    reference: NDArray[np.float64],
    codebook: Codebook,
    words: NDArray[np.integer],
) -> EvmSums:
    """Add symbol periods (F, K) into antenna sets (F, A)."""
    frames, sets = words.shape[0], len(codebook.antenna_sets)
    place = codebook.set_index[words] + sets * np.arange(frames)[:, None]

    def added(values: NDArray[np.float64]) -> NDArray[np.float64]:
        sums = np.bincount(place.ravel(), values.ravel(), minlength=frames * sets)
        return np.asarray(sums.reshape(frames, sets), dtype=np.float64)

    return EvmSums(added(error), added(reference))


def _check(
    y: NDArray[np.complexfloating],
    h: NDArray[np.complexfloating],
    codebook: Codebook,
    words: NDArray[np.integer],
) -> None:
    """Refuse shapes that do not fit each other."""
    if y.ndim != 3:
        raise InputError("EVM", "y", f"shape {y.shape}", "(F, K, Nr)")
    frames, periods, receivers = y.shape
    expected = (frames, receivers, codebook.antennas)
    if h.shape != expected:
        raise InputError("EVM", "H", f"shape {h.shape}", f"{expected}")
    if words.shape != (frames, periods):
        raise InputError("EVM", "words", f"shape {words.shape}", f"{(frames, periods)}")
    if words.size and not 0 <= int(words.min()) <= int(words.max()) < codebook.size:
        found = f"{int(words.min())}..{int(words.max())}"
        raise InputError("EVM", "words", found, f"0..{codebook.size - 1}")
