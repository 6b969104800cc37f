"""Kernels of sequence detection: bare arrays in and out."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F64, I32, I64, U8, kernel


@kernel
def nearest_first(order: I64, cost: F64, count: int, wanted: int) -> None:
    """Reorder order[:count] so that the `wanted` smallest costs stand first, in no given order.

    Quickselect with the middle element as pivot (C. A. R. Hoare, "Algorithm 65: find", Commun. ACM
    4(7), 1961).
    """
    low, high = 0, count - 1
    while low < high:
        pivot = cost[order[(low + high) // 2]]
        i, j = low, high
        while i <= j:
            while cost[order[i]] < pivot:
                i += 1
            while pivot < cost[order[j]]:
                j -= 1
            if i <= j:
                order[i], order[j] = order[j], order[i]
                i += 1
                j -= 1
        if wanted - 1 <= j:
            high = j
        elif wanted - 1 >= i:
            low = i
        else:
            return


@kernel
def word_images(form: C128, words: tuple[I64, I64, C64], images: C128) -> None:
    """form[l] x[c] for all lags and words into images (L, C + 1, Nt); the last row stays zero."""
    pointer, antenna, value = words
    for lag in range(form.shape[0]):
        for c in range(pointer.size - 1):
            for a in range(form.shape[1]):
                v = 0j
                for j in range(pointer[c], pointer[c + 1]):
                    v += form[lag, a, antenna[j]] * value[j]
                images[lag, c, a] = v


@kernel
def place_of(table: I32, stamp: I64, now: int, keys: I64, key: int) -> int:
    """Slot of a key in a hash table of candidates: its own, or the free one where it belongs."""
    mask = table.size - 1
    slot = ((((key ^ (key >> 32)) & 0x7FFFFFFF) * 0x9E3779B1) >> 16) & mask
    while stamp[slot] == now and keys[table[slot]] != key:
        slot = (slot + 1) & mask
    return slot


# Survivors: cost (M,), state (M,), words (M, L), latest first; the codebook's size stands for none.
Survivors = tuple[F64, I64, I32]
# Candidates: key, cost, parent, word; order; hash table and the period that filled each slot.
Candidates = tuple[I64, F64, I32, I32, I64, I32, I64]


@kernel
def extend(
    k: int,
    target: C128,
    images: C128,
    discount: F64,
    none: bool,
    state_bits: tuple[int, int],
    survivors: Survivors,
    alive: int,
    candidates: Candidates,
) -> int:
    """Extend every survivor by all words, or by none; of equal states the best is kept.

    Args: k the period; target (Nt,), z[k]; images of `word_images`; state_bits: bits of a word, and
    the mask of a state. Returns the number of candidates.
    """
    cost, state, history = survivors
    keys, costs, parents, chosen, order, table, stamp = candidates
    size, memory = discount.size, images.shape[0] - 1
    bits, mask = state_bits
    begin, end = (size, size + 1) if none else (0, size)
    left = np.empty(target.size, np.complex128)
    found = 0
    for s in range(alive):
        for a in range(target.size):
            left[a] = target[a]
        for lag in range(1, memory + 1):
            before = history[s, lag - 1]
            if before < size:
                for a in range(target.size):
                    left[a] -= images[lag, before, a]
        for c in range(begin, end):
            total = cost[s] - (discount[c] if c < size else 0.0)
            for a in range(target.size):
                e = left[a] - images[0, c, a]
                total += e.real * e.real + e.imag * e.imag
            key = ((state[s] << bits) | c) & mask
            slot = place_of(table, stamp, k, keys, key)
            if stamp[slot] != k:
                stamp[slot] = k
                table[slot] = found
                order[found] = found
                keys[found] = key
                costs[found] = np.inf
                found += 1
            i = table[slot]
            if total < costs[i]:
                costs[i] = total
                parents[i] = s
                chosen[i] = c
    return found


@kernel
def take_over(
    kept: int,
    candidates: Candidates,
    survivors: Survivors,
    following: I32,
    parent: I32,
    word: I32,
) -> None:
    """Make the first `kept` candidates the survivors; their words go into following (M, L)."""
    cost, state, history = survivors
    keys, costs, parents, chosen, order, _, _ = candidates
    for s in range(kept):
        i = order[s]
        parent[s] = parents[i]
        word[s] = chosen[i]
        following[s, 0] = chosen[i]
        for lag in range(1, history.shape[1]):
            following[s, lag] = history[parents[i], lag - 1]
        cost[s] = costs[i]
        state[s] = keys[i]


@kernel
def trace_back(parent: I32, word: I32, best: int, size: int, decided: I64) -> None:
    """Words of the survivor `best` of the last period into decided (N,); none: -1."""
    for k in range(decided.size - 1, -1, -1):
        decided[k] = word[k, best] if word[k, best] < size else -1
        best = parent[k, best]


@kernel
def survivor_search(
    z: C128,
    form: C128,
    words: tuple[I64, I64, C64],
    discount: F64,
    free: U8,
    survivors: int,
    decided: I64,
) -> float:
    """Words of the sequence that costs least, by a search of limited width.

    The cost of a sequence is sum over k of ||z[k] - sum over l of form[k, l] x[k - l]||^2 -
    discount of its words. Period by period every survivor is extended by all words; of sequences
    that agree in the last L - 1 words the best is kept, and of these the `survivors` best. When
    there are at least as many survivors as states, C^(L - 1), nothing is ever lost: that is the
    Viterbi algorithm (A. J. Viterbi, IEEE Trans. Inform. Theory 13(2), 1967; Forney 1972).
    Otherwise it is the M-algorithm (J. B. Anderson and S. Mohan, "Sequential coding algorithms: a
    survey and cost analysis", IEEE Trans. Commun. 32(2), 1984, from memory).

    Args:
        z: complex128 (N, Nt).
        form: complex128 (N, L, Nt, Nt).
        words: codeword vectors, sparse: pointer, antenna, value.
        discount: (C,).
        free: uint8 (N,); 0 where nothing unknown is sent: no word is chosen there.
        survivors: 1 or more.
        decided: int64 (N,); filled, -1 where nothing is chosen.

    Returns:
        The cost.
    """
    periods, antennas = z.shape
    size, memory = discount.size, form.shape[1] - 1
    bits = 0
    while (1 << bits) < size + 1:
        bits += 1
    # States are told apart by as many words as an integer holds; beyond, by the latest of them.
    mask = (1 << (bits * min(memory, 62 // bits))) - 1
    room = survivors * size
    slots = 2
    while slots < 2 * room:
        slots *= 2
    order, keys, costs = np.empty(room, np.int64), np.empty(room, np.int64), np.empty(room)
    parents, chosen = np.empty(room, np.int32), np.empty(room, np.int32)
    table, stamp = np.zeros(slots, np.int32), np.full(slots, -1, np.int64)
    candidates = (keys, costs, parents, chosen, order, table, stamp)
    parent = np.zeros((periods, survivors), np.int32)
    word = np.zeros((periods, survivors), np.int32)
    history = np.full((survivors, memory + 1), size, np.int32)
    following = np.full((survivors, memory + 1), size, np.int32)
    cost, state = np.zeros(survivors), np.zeros(survivors, np.int64)
    images = np.zeros((memory + 1, size + 1, antennas), np.complex128)
    alive = 1
    for k in range(periods):
        word_images(form[k], words, images)
        here = (cost, state, history)
        none = free[k] == 0
        found = extend(k, z[k], images, discount, none, (bits, mask), here, alive, candidates)
        alive = min(found, survivors)
        if found > survivors:
            nearest_first(order, costs, found, survivors)
        take_over(alive, candidates, here, following, parent[k], word[k])
        history, following = following, history
    best = 0
    for s in range(alive):
        if cost[s] < cost[best]:
            best = s
    trace_back(parent, word, best, size, decided)
    return float(cost[best])
