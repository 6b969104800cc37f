"""Posterior of the words when neighbours interfere: soft cancellation, and jointly where in doubt.

First each period's words are weighed with the neighbours' expected part taken away, what is not
sure of it counting as noise. Where that leaves a doubt, the few words that remain are weighed
jointly with those of the two periods before and after (`chain_posterior`); further neighbours enter
by their expectation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.chain_posterior import chain_posterior
from spatiq.receiver.delayed_antennas import Complex, DelayKernels, Floats, convolved

MOST = 16  # words weighed jointly at a period
_SURE = 1e-5  # words below this probability are given up


@dataclass
class Expectation:
    """What is known of the symbols of a frame's K periods, A antennas.

    Attributes:
        mean: complex128 (K, A); E[x], known symbols where known.
        spread: float64 (K, A); variance of x.
        word: int64 (Kp,); likeliest word.
        energy: float64 (C,); expected number of uses of each word, times amplitude squared.
        doubt: complex128 (A, A); sum over periods of the covariance of x.
    """

    mean: Complex
    spread: Floats
    word: NDArray[np.int64]
    energy: Floats
    doubt: Complex


@dataclass(frozen=True, eq=False)
class Sent:
    """What may be sent: constants of a link.

    Attributes:
        vectors: complex128 (C, A); codewords.
        place: int64 (Kp,); payload periods among the K.
        amplitude: float64 (Kp,).
        known: complex128 (K, A); known symbols, zero elsewhere.
    """

    vectors: Complex
    place: NDArray[np.int64]
    amplitude: Floats
    known: Complex


def nothing_known(sent: Sent) -> Expectation:
    """Before any look at the payload: known symbols alone."""
    size, antennas = sent.vectors.shape
    return Expectation(
        sent.known.copy(),
        np.zeros(sent.known.shape),
        np.zeros(sent.place.size, np.int64),
        np.zeros(size),
        np.zeros((antennas, antennas), np.complex128),
    )


class NeighbourDecisions:
    """Weighs the words of one frame for given channel, delays and noise."""

    def __init__(
        self,
        sent: Sent,
        kernels: DelayKernels,
        gram: Complex,
        statistic: Complex,
        noise: float,
        most: int = MOST,
    ) -> None:
        """Prepare.

        Args:
            sent: what may be sent.
            kernels: pulse correlations of the antennas.
            gram: complex128 (A, A); H^H H.
            statistic: complex128 (K, A); z.
            noise: N0.
            most: words weighed jointly at a period.
        """
        self._sent, self._kernels, self._noise, self._most = sent, kernels, noise, most
        self._gram, self._statistic = gram, statistic
        # G_0.
        self.now = gram * kernels.now
        vectors = sent.vectors
        self._power = np.einsum("ca,ab,cb->c", vectors.conj(), self.now, vectors).real
        # Interference per unit variance of a neighbour's antenna, as noise in an average direction.
        rank = max(int(np.linalg.matrix_rank(self.now, hermitian=True)), 1)
        inverse = np.linalg.pinv(self.now, hermitian=True)
        self._leak = {
            d: np.einsum("ab,ac,cb->b", tied.conj(), inverse, tied).real / rank
            for d in (-2, -1, 1, 2)
            for tied in (gram * kernels.neighbour(d),)
        }

    def left(self, mean: Complex) -> Complex:
        """z less all that the expected symbols make of it, their own part included, (K, A)."""
        made = np.empty_like(mean)
        for a in range(mean.shape[1]):
            made[:, a] = convolved(mean, self._kernels.value[a]) @ self._gram[a]
        return self._statistic - made

    def weigh(self, before: Expectation, looked: NDArray[np.bool_]) -> Expectation:
        """Posterior of the payload words looked at (bool, (Kp,)); others stay unknown."""
        sent = self._sent
        log_weight = self._alone(before, looked)
        where = np.flatnonzero(looked)
        top = np.argmax(log_weight, axis=1)
        order = np.argsort(-log_weight, axis=1, kind="stable")[:, : self._most]
        best = np.take_along_axis(log_weight, order, axis=1)
        chance = np.exp(best - best[:, :1])
        chance /= chance.sum(axis=1, keepdims=True)
        counts = np.maximum(np.sum(chance > _SURE, axis=1), 1)
        weight = np.zeros_like(chance)
        weight[:, 0] = 1.0
        if np.any(counts > 1):
            self._jointly(before.mean, where, order, counts, weight)
            top = order[np.arange(where.size), np.argmax(weight, axis=1)]
        result = nothing_known(sent)
        amplitude = sent.amplitude[where]
        mean = np.einsum("kc,kca->ka", weight, sent.vectors[order]) * amplitude[:, None]
        result.mean[sent.place[where]] = mean
        square = np.einsum("kc,kca->ka", weight, np.abs(sent.vectors[order]) ** 2)
        spread = np.maximum(square * amplitude[:, None] ** 2 - np.abs(mean) ** 2, 0.0)
        result.spread[sent.place[where]] = spread
        result.word[where] = top
        np.add.at(result.energy, order, weight * amplitude[:, None] ** 2)
        second = np.einsum("c,ca,cb->ab", result.energy, sent.vectors, sent.vectors.conj())
        result.doubt = second - mean.T @ mean.conj()
        return result

    def _alone(self, before: Expectation, looked: NDArray[np.bool_]) -> Floats:
        """Log weights of all words (n, C), each period by itself."""
        sent = self._sent
        place, amplitude = sent.place[looked], sent.amplitude[looked]
        own = self.left(before.mean)[place] + before.mean[place] @ self.now.T
        unsure = np.zeros(before.mean.shape[0])
        # A payload period that has not been looked at yet may hold anything.
        spread = before.spread.copy()
        blank = np.setdiff1d(sent.place, place)
        typical = np.mean(np.abs(sent.vectors) ** 2, axis=0)
        spread[blank] = typical * np.mean(sent.amplitude**2)
        seen = np.abs(before.mean[place]).sum(axis=1) + before.spread[place].sum(axis=1)
        spread[place[seen == 0]] = typical * np.mean(sent.amplitude**2)
        for d, leak in self._leak.items():
            part = spread @ leak
            low, high = max(0, -d), min(part.size, part.size - d)
            unsure[low:high] += part[low + d : high + d]
        noise = self._noise + unsure[place]
        metric = 2.0 * (own @ sent.vectors.conj().T).real * amplitude[:, None]
        metric -= self._power * amplitude[:, None] ** 2
        return np.asarray(metric / noise[:, None], np.float64)

    def _jointly(
        self,
        mean: Complex,
        where: NDArray[np.int64],
        order: NDArray[np.int64],
        counts: NDArray[np.int64],
        weight: Floats,
    ) -> None:
        """Weights of the remaining words where there is more than one, filled in."""
        sent = self._sent
        place = sent.place[where]
        unsure = np.flatnonzero(counts > 1)
        expected = mean.copy()
        sure = np.flatnonzero(counts == 1)
        expected[place[sure]] = sent.vectors[order[sure, 0]] * sent.amplitude[where[sure], None]
        # Words as differences from what is expected: sure periods have none.
        vectors = sent.vectors[order[unsure]] * sent.amplitude[where[unsure], None, None]
        apart = vectors - expected[place[unsure]][:, None, :]
        left = self.left(expected)[place[unsure]]
        single = 2.0 * np.einsum("nca,na->nc", apart.conj(), left).real
        single -= np.einsum("nca,ab,ncb->nc", apart.conj(), self.now, apart).real
        at = place[unsure]
        ties = {d: self._ties(apart, at, d) for d in (1, 2)}
        begins = np.flatnonzero(np.diff(at, prepend=at[0] - 9) > 2)
        for begin, end in zip(begins, np.append(begins[1:], at.size), strict=True):
            self._cluster(at, unsure, counts, single, ties, slice(begin, end), weight)

    def _ties(self, apart: Complex, at: NDArray[np.int64], d: int) -> dict[int, Floats]:
        """Index of an unsure period -> its tie (M, M) to the unsure one d periods before."""
        back = {int(k): i for i, k in enumerate(at)}
        pairs = [(i, back[int(k) - d]) for i, k in enumerate(at) if int(k) - d in back]
        if not pairs:
            return {}
        here, there = np.array(pairs).T
        coupling = self._gram * self._kernels.neighbour(-d)
        tie = np.einsum("nca,ab,neb->nce", apart[here].conj(), coupling, apart[there]).real
        return {int(i): -2.0 * tie[n] for n, i in enumerate(here)}

    def _cluster(
        self,
        at: NDArray[np.int64],
        unsure: NDArray[np.int64],
        counts: NDArray[np.int64],
        single: Floats,
        ties: dict[int, dict[int, Floats]],
        part: slice,
        weight: Floats,
    ) -> None:
        """One run of unsure periods no more than two apart; sure ones between have one choice."""
        first_period = int(at[part.start])
        places = int(at[part.stop - 1]) - first_period + 1
        number = np.ones(places, np.int64)
        width = single.shape[1]
        alone = np.zeros((places, width))
        first, second = np.zeros((2, places, width, width))
        rows = at[part] - first_period
        index = np.arange(part.start, part.stop)
        number[rows] = counts[unsure[index]]
        alone[rows] = single[index] / self._noise
        for row, i in zip(rows, index, strict=True):
            if int(i) in ties[1]:
                first[row] = ties[1][int(i)] / self._noise
            if int(i) in ties[2]:
                second[row] = ties[2][int(i)] / self._noise
        found = np.zeros((places, width))
        chain_posterior(number, alone, first, second, found)
        weight[unsure[index]] = found[rows]
