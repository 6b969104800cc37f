"""Kernel: posterior of a chain of choices of which each is tied to the two before it.

Compiled only when antennas of different delay are met.
"""

from __future__ import annotations

import numpy as np

from spatiq.kernels import F64, I64, kernel


@kernel
def log_sum(values: F64, count: int) -> float:
    """ln of the sum of exp of the first `count` values."""
    top = float(values[0])
    for i in range(1, count):
        top = max(top, float(values[i]))
    if top == -np.inf:
        return top
    total = 0.0
    for i in range(count):
        total += np.exp(values[i] - top)
    return top + float(np.log(total))


@kernel
def chain_posterior(counts: I64, single: F64, first: F64, second: F64, weight: F64) -> None:
    """Marginals of p(c) ~ exp(sum_k s_k[c_k] + f_k[c_k, c_{k-1}] + g_k[c_k, c_{k-2}]).

    Forward and backward sums over pairs of neighbours (L. R. Bahl, J. Cocke, F. Jelinek, J. Raviv,
    IEEE Trans. Inf. Theory 20(2), 1974), in logarithms.

    Args:
        counts: int64 (n,); choices at each place, at most M.
        single: float64 (n, M).
        first, second: float64 (n, M, M); ties to the place before, and to the one before that.
            Row 0 of `first`, rows 0 and 1 of `second` are not read.
        weight: float64 (n, M); filled with probabilities.
    """
    places, most = single.shape
    ahead = np.full((places, most, most), -np.inf)  # [k, c_k, c_{k-1}]
    room = np.empty(most * most)
    for c in range(counts[0]):
        ahead[0, c, 0] = single[0, c]
    for k in range(1, places):
        for c in range(counts[k]):
            for b in range(counts[k - 1]):
                here = single[k, c] + first[k, c, b]
                if k == 1:
                    ahead[k, c, b] = here + ahead[0, b, 0]
                    continue
                for a in range(counts[k - 2]):
                    room[a] = ahead[k - 1, b, a] + second[k, c, a]
                ahead[k, c, b] = here + log_sum(room, counts[k - 2])
    back = np.zeros((most, most))  # of pair (c_k, c_{k-1}): all that comes after k
    earlier = np.zeros((most, most))
    for k in range(places - 1, -1, -1):
        before = counts[k - 1] if k > 0 else 1
        for c in range(counts[k]):
            for b in range(before):
                room[b] = ahead[k, c, b] + back[c, b]
            weight[k, c] = log_sum(room, before)
        total = log_sum(weight[k], counts[k])
        for c in range(counts[k]):
            weight[k, c] = np.exp(weight[k, c] - total)
        for c in range(counts[k], most):
            weight[k, c] = 0.0
        if k == 0:
            break
        # Pairs (c_{k-1}, c_{k-2}) see the step to k.
        for b in range(counts[k - 1]):
            for a in range(counts[k - 2] if k > 1 else 1):
                for c in range(counts[k]):
                    tie = second[k, c, a] if k > 1 else 0.0
                    room[c] = single[k, c] + first[k, c, b] + tie + back[c, b]
                earlier[b, a] = log_sum(room, counts[k])
        for b in range(most):
            for a in range(most):
                back[b, a] = earlier[b, a]
