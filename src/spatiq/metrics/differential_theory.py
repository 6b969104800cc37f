"""Error probabilities of the differential form: block against block, channel unknown.

The receiver prefers X' to X, sent, when D = Re tr(Y_t^H Y_{t-1} (X - X')) < 0. Turned by X and by
the block before, that is D = Re tr(Z'^H Z (I - W)), Z and Z' two looks at the channel H in noise
and W the change S X' X^H S^H. With the singular values of I - W, s_i, and its singular vectors,

    D = sum over i of s_i / 2 (|p_i|^2 - |q_i|^2)

with independent complex Gaussian vectors p_i, q_i of Nr entries and variance N0 each: a quadratic
form, whose moment generating function is known. P(D < 0) follows from it by Gauss-Chebyshev
quadrature on a line in the complex plane: E. Biglieri, G. Caire, G. Taricco, J. Ventura-Traveset,
"Computing error probabilities over fading channels: a unified approach", Eur. Trans. Telecommun.
9(1), 1998 (from memory). Union bounds sum it over all W, as in `spatiq.metrics.union_bound`.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.signal.codebooks import DifferentialCodebook

Floats = NDArray[np.float64]
LogMgf = Callable[[NDArray[np.int64], NDArray[Any]], NDArray[Any]]
Changes = tuple[NDArray[np.int64], NDArray[np.int64]]

_NODES = 64
_MOST_ROWS = 256  # words sent that stand for all of them
_PLACES = (np.arange(16) + 0.5) / 16  # where the line may cross, over the first pole
_REACH = 1e-7


def _negative(log_mgf: LogMgf, pole: Floats) -> Floats:
    """P(D < 0) from ln E exp(-t D), which holds for real parts of t between 0 and `pole` (n,).

    Pairs whose Chernoff bound lies below `_REACH` of the largest one are left at 0.

    Args:
        log_mgf: which pairs (indices), t (n, k) -> (n, k).
    """
    every = np.arange(pole.size)
    trial = pole[:, None] * _PLACES
    on_axis = log_mgf(every, trial).real
    # Where the function is least on the real axis, it falls off fastest along the line.
    least = np.argmin(on_axis, axis=1)
    bound = on_axis[every, least]
    near = np.flatnonzero(bound > bound.max() + np.log(_REACH))
    c = trial[near, least[near]][:, None]
    tau = np.tan((2 * np.arange(1, _NODES // 2 + 1) - 1) * np.pi / (2 * _NODES))
    value = np.exp(log_mgf(near, c * (1 + 1j * tau)))
    probability = np.zeros(pole.size)
    probability[near] = np.sum(value.real + tau * value.imag, axis=1) / _NODES
    return probability


def fading_pairs(half: Floats, receivers: int, es_n0: float) -> Floats:
    """P(D < 0) over i.i.d. Rayleigh channels, (n,).

    Args:
        half: (n, Nt); s_i / 2 of each change.
        receivers: Nr.
        es_n0: rho, mean ratio per receive antenna.
    """

    def log_mgf(n: NDArray[np.int64], t: NDArray[Any]) -> NDArray[Any]:
        square = half[n, :, None] ** 2
        at = t[:, None, :]
        inside = 1 + 2 * es_n0 * square * at - (1 + 2 * es_n0) * square * at**2
        return np.asarray(-receivers * np.sum(np.log(inside), axis=1))

    largest = half.max(axis=1)
    # Zero of 1 + 2 rho h^2 t - (1 + 2 rho) h^2 t^2, h the largest: the first pole.
    a, b = (1 + 2 * es_n0) * largest**2, es_n0 * largest**2
    return _negative(log_mgf, (b + np.sqrt(b**2 + a)) / a)


def fixed_pairs(half: Floats, p: Floats, q: Floats, receivers: int) -> Floats:
    """P(D < 0) on one channel, (n,).

    Args:
        half: (n, Nt); s_i / 2 of each change.
        p, q: (n, Nt); |mean of p_i|^2 and |mean of q_i|^2 over N0.
        receivers: Nr.
    """

    def log_mgf(n: NDArray[np.int64], t: NDArray[Any]) -> NDArray[Any]:
        x = half[n, :, None] * t[:, None, :]
        terms = x * q[n, :, None] / (1 - x) - x * p[n, :, None] / (1 + x)
        return np.asarray(np.sum(terms - receivers * np.log(1 - x * x), axis=1))

    return _negative(log_mgf, 1 / half.max(axis=1))


def added(
    codes: NDArray[np.int64], sums: Floats, more: NDArray[np.int64], terms: Floats
) -> tuple[NDArray[np.int64], Floats]:
    """Different codes, ascending, with the sums (n, 2) of all terms that came with each."""
    kept, which = np.unique(np.concatenate([codes, more]), return_inverse=True)
    total = np.zeros((kept.size, 2))
    np.add.at(total, which.ravel(), np.concatenate([sums, terms]))
    return kept, total


@lru_cache(maxsize=8)
def changes(codebook: DifferentialCodebook) -> tuple[Changes, Floats]:
    """All W = X' X^H other than I, and the wrong bits they come with.

    Of codebooks of more than `_MOST_ROWS` words, a fixed random part stands for the words sent.

    Returns:
        Rows and turns of each W's columns, int64 (n, Nt) each; wrong spatial and signal bits per
        word sent, float64 (n, 2).
    """
    size, antennas, roots = codebook.size, codebook.antennas, codebook.roots
    rows = np.arange(size)
    if size > _MOST_ROWS:
        rows = np.random.default_rng(1).permutation(size)[:_MOST_ROWS]
    bits = codebook.words_to_bits(np.arange(size)[:, None])
    spatial = codebook.spatial_bits
    wrong = np.stack([bits[:, spatial].sum(axis=1), bits[:, ~spatial].sum(axis=1)], axis=1)
    permutation = codebook.permutations[codebook.set_index]
    digits = (antennas * roots) ** np.arange(antennas)
    codes, shares = np.zeros(0, np.int64), np.zeros((0, 2))
    for x in rows:
        # W takes column P(j) of the identity to row P'(j), turned by u'(j) - u(j).
        place, turn = np.empty((2, size, antennas), np.int64)
        place[:, permutation[x]] = permutation
        turn[:, permutation[x]] = (codebook.turns - codebook.turns[x]) % roots
        code = np.delete((place * roots + turn) @ digits, x)
        errors = np.delete(wrong[np.arange(size) ^ x], x, axis=0) / len(rows)
        codes, shares = added(codes, shares, code, errors)
    columns = codes[:, None] // digits % (antennas * roots)
    return (columns // roots, columns % roots), shares


def change_matrices(where: Changes, roots: int) -> NDArray[np.complex128]:
    """The W themselves, complex128 (n, Nt, Nt)."""
    place, turn = where
    w = np.zeros((*place.shape, place.shape[1]), np.complex128)
    columns = np.arange(place.shape[1])
    w[np.arange(len(place))[:, None], place, columns] = np.exp(2j * np.pi * turn / roots)
    return w


def differential_rayleigh_bound(
    codebook: DifferentialCodebook, receivers: int, es_n0: ArrayLike
) -> Floats:
    """Union bound of the bit error ratio over i.i.d. Rayleigh channels.

    Args:
        codebook: of the differential form.
        receivers: Nr.
        es_n0: rho, mean ratio per receive antenna; any shape.

    Returns:
        float64, shape of `es_n0`.
    """
    where, shares = changes(codebook)
    w = change_matrices(where, codebook.roots)
    half = np.linalg.svd(np.eye(codebook.antennas) - w, compute_uv=False) / 2
    rho = np.asarray(es_n0, np.float64)
    each = [float(shares.sum(axis=1) @ fading_pairs(half, receivers, r)) for r in rho.ravel()]
    return np.asarray(np.reshape(each, rho.shape) / codebook.bits)
