"""Log-likelihood ratios by their definition, in double precision, one period and bit at a time."""

from __future__ import annotations

import numpy as np
from scipy.special import logsumexp


def ratios(y, channel, noise, book, *, exact=True, variance=None, amplitude=None):
    """ln P(0 | y) - ln P(1 | y), float64 (K * b,); arguments as `log_likelihood_ratios`.

    The log density of CN(G x, N) in Nr dimensions is -||y - G x||^2 / N - Nr ln(pi N).
    """
    y = np.asarray(y, complex)
    variance = np.zeros(book.antennas) if variance is None else variance
    amplitude = np.ones(len(y)) if amplitude is None else amplitude
    combine = logsumexp if exact else np.max
    llr = []
    for k in range(len(y)):
        density = np.empty(book.size)
        for c, x in enumerate(book.vectors):
            spread = noise / amplitude[k] ** 2 + np.sum(np.abs(x) ** 2 * variance)
            distance = np.linalg.norm(y[k] - channel @ x) ** 2
            density[c] = -distance / spread - y.shape[1] * np.log(np.pi * spread)
        for j in range(book.bits):
            bit = np.array([(c >> (book.bits - 1 - j)) & 1 for c in range(book.size)])
            llr.append(combine(density[bit == 0]) - combine(density[bit == 1]))
    return np.array(llr)
