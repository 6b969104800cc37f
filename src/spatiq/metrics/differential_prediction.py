"""Bit error ratio that the differential form shows on a given channel.

The union bound on the fixed channel, exact pair by pair (`differential_theory`), averaged over what
the block before may be. It stands alone up to `BOUND_ALONE`; above, words are drawn on that channel
and decided, and the bound is multiplied by (wrong bits drawn) / (bits that the bound counts on the
same draws), as in `spatiq.metrics.prediction`. The estimated channel is taken for the true one:
its errors, N0 over the energy of all symbols of a frame, lengthen distances by about 2 Nr / energy.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from spatiq.metrics.differential_theory import added, change_matrices, changes, fixed_pairs
from spatiq.signal.codebooks import DifferentialCodebook

Floats = NDArray[np.float64]

BOUND_ALONE = 3e-4
_MOST_STATES = 512
_DRAWN = 512


@dataclass(frozen=True, eq=False)
class _Plan:
    """Changes as seen from every block before, and what is wrong after them.

    Attributes:
        half: (n, Nt); half the singular values of I - W.
        u, v: complex128 (n, Nt, Nt); its singular vectors, columns.
        shares: (n, 2); wrong spatial and signal bits per word sent.
        states: int64 (T, Nt) vectors carried by blocks that may come before.
    """

    half: Floats
    u: NDArray[np.complex128]
    v: NDArray[np.complex128]
    shares: Floats
    states: NDArray[np.int64]


def _states(codebook: DifferentialCodebook) -> NDArray[np.int64]:
    """Blocks that come before a word, as carried vectors (T, Nt): all of them, or as many drawn."""
    rng = np.random.default_rng(2)
    runs = codebook.carried(rng.integers(0, codebook.size, (4 * _MOST_STATES, 48)))
    seen = np.unique(runs[:, -codebook.block :], axis=0)
    if len(seen) > _MOST_STATES:
        seen = seen[rng.permutation(len(seen))[:_MOST_STATES]]
    return seen


@lru_cache(maxsize=4)
def _plan(codebook: DifferentialCodebook) -> _Plan:
    (place, turn), shares = changes(codebook)
    states, roots, antennas = _states(codebook), codebook.roots, codebook.antennas
    digits = (antennas * roots) ** np.arange(antennas)
    codes, weights = np.zeros(0, np.int64), np.zeros((0, 2))
    for state in states:
        antenna, phase = np.divmod(state, roots)
        # S W S^H takes column s(j) to row s(w(j)), turned by u(j) + phase(w(j)) - phase(j).
        moved, turned = np.empty((2, *place.shape), np.int64)
        moved[:, antenna] = antenna[place]
        turned[:, antenna] = (turn + phase[place] - phase) % roots
        code = (moved * roots + turned) @ digits
        codes, weights = added(codes, weights, code, shares / len(states))
    columns = codes[:, None] // digits % (antennas * roots)
    w = change_matrices((columns // roots, columns % roots), roots)
    u, s, vh = np.linalg.svd(np.eye(antennas) - w)
    return _Plan(s / 2, u, np.asarray(vh.conj().transpose(0, 2, 1)), weights, states)


def predict_wrong_bits(
    h: NDArray[np.complex128], key: int, codebook: DifferentialCodebook
) -> Floats:
    """Wrong spatial and signal bits per word on one channel, (2,).

    Args:
        h: complex, shape (Nr, Nt); channel over the noise's standard deviation.
        key: seed of the draws, a property of the frame.
        codebook: of the differential form.
    """
    plan = _plan(codebook)
    a, b = h @ plan.u, h @ plan.v  # (n, Nr, Nt)
    p = np.sum(np.abs(a + b) ** 2, axis=1) / 2
    q = np.sum(np.abs(a - b) ** 2, axis=1) / 2
    bound = np.asarray(plan.shares.T @ fixed_pairs(plan.half, p, q, h.shape[0]))
    if bound.sum() <= BOUND_ALONE * codebook.bits:
        return bound
    drawn, counted = _draw(h, key, codebook, plan.states)
    if counted.sum() <= 0:
        return bound
    common = drawn.sum() / counted.sum()
    # A quotient of few draws is biased low: a rare kind takes the ratio of all bits.
    return np.asarray(bound * (drawn + common) / (counted + 1.0))


@lru_cache(maxsize=4)
def _matrices(codebook: DifferentialCodebook) -> tuple[NDArray[np.complex128], Floats]:
    """X of each word, (C, Nt, Nt), and the same as real numbers, (C, 2 Nt^2)."""
    x = codebook.matrices()
    rows = x.reshape(len(x), -1)
    return x, np.concatenate([rows.real, rows.imag], axis=1)


def _draw(
    h: NDArray[np.complex128],
    key: int,
    codebook: DifferentialCodebook,
    states: NDArray[np.int64],
) -> tuple[Floats, Floats]:
    """Wrong spatial and signal bits of words drawn, and what the union bound counts of them."""
    rng = np.random.default_rng(key)
    block, size, receivers = codebook.block, codebook.size, h.shape[0]
    x, flat = _matrices(codebook)
    before = codebook.vectors[states[rng.integers(0, len(states), _DRAWN)]] @ h.T
    sent = rng.integers(0, size, _DRAWN)
    noise = rng.standard_normal((2, 2, _DRAWN, block, receivers)) * np.sqrt(0.5)
    now = np.einsum("nir,nij->njr", before, x[sent]) + noise[0, 0] + 1j * noise[0, 1]
    before = before + noise[1, 0] + 1j * noise[1, 1]
    products = np.einsum("njr,nir->nij", now.conj(), before).reshape(_DRAWN, -1)
    score = np.concatenate([products.real, -products.imag], axis=1) @ flat.T
    patterns = codebook.words_to_bits(np.arange(size)[:, None])
    spatial = codebook.spatial_bits
    weights = np.stack([patterns[:, spatial].sum(axis=1), patterns[:, ~spatial].sum(axis=1)])
    decided = np.argmax(score, axis=1)
    drawn = weights[:, decided ^ sent].sum(axis=1).astype(np.float64)
    row, word = np.nonzero(score > np.take_along_axis(score, sent[:, None], axis=1))
    counted = weights[:, word ^ sent[row]].sum(axis=1).astype(np.float64)
    return drawn, counted
