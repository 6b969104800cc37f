"""Exhaustive search over the codebook: one kernel for all schemes.

Source: J. Jeganathan, A. Ghrayeb, L. Szczecinski, "Spatial modulation: optimal detection and
performance analysis", IEEE Commun. Lett. 12(8), 2008.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.detection_kernels import detect_maximum_likelihood


def nearest_vectors(
    y: NDArray[np.complex64], channel: NDArray[np.complex128], vectors: NDArray[np.complex128]
) -> NDArray[np.int64]:
    """argmin over c of ||y - H x[c]||^2 for each period; the lowest index wins a tie.

    Args:
        y: complex64, shape (K, Nr).
        channel: complex128, shape (Nr, Nt).
        vectors: complex128, shape (C, Nt).

    Returns:
        int64, shape (K,).
    """
    received = (channel @ vectors.T).astype(np.complex64)
    nearest = np.empty(y.shape[0], np.int64)
    detect_maximum_likelihood(
        y,
        np.ascontiguousarray(received.real),
        np.ascontiguousarray(received.imag),
        np.sum(np.abs(received) ** 2, axis=0),
        nearest,
    )
    return nearest
