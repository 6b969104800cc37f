"""Where in a frame known symbols end that may pass for its sync section."""

from __future__ import annotations

import numpy as np

from spatiq.link.description import Link
from spatiq.receiver.frame_search import SyncPattern


def likeness_ends(link: Link, pattern: SyncPattern) -> int:
    """Periods from the sync section's start from which on a search meets nothing of its likeness.

    A stretch as long as the section, at least half of it known, is taken for alike when, for some
    channel and carrier offset searched, more than half the search's threshold of its energy lies in
    the sync section's space: the largest singular value of Q^H U, U an orthonormal basis of the
    stretch's vectors in time. Unknown symbols count as energy outside that space.

    Args:
        link: link description.
        pattern: what is searched for.

    Returns:
        N where nothing behind the section is alike.
    """
    n, known = pattern.length, link.layout.known
    padded = np.concatenate([known, np.zeros((n, known.shape[1]))])
    sent = np.concatenate([[0], np.cumsum(np.any(padded != 0, axis=1))])
    begins = np.arange(link.layout.sync.start + n, link.layout.length)
    share = (sent[begins + n] - sent[begins]) / n
    begins, share = begins[share >= 0.5], share[share >= 0.5]
    if not begins.size:
        return n
    alike = np.zeros(begins.size, np.bool_)
    stretches = padded[begins[:, None] + np.arange(n)]  # (n_begins, N, Nt)
    left, values, _ = np.linalg.svd(stretches, full_matrices=False)
    left = left * (values > 1e-6 * values[:, :1])[:, None, :]
    basis = pattern.basis.conj().astype(np.complex128)
    for shift in pattern.carrier_bins / pattern.transform_size:
        products = (basis * np.exp(2j * np.pi * shift * np.arange(n))) @ left
        if basis.shape[0] == 1:
            inside = np.sum(np.abs(products[:, 0]) ** 2, axis=1)
        else:
            inside = np.linalg.svd(products, compute_uv=False)[:, 0] ** 2
        alike |= inside * share > pattern.threshold / 2
    return int(begins[alike][-1]) - link.layout.sync.start + 1 if alike.any() else n
