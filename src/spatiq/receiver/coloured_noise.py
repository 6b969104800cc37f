"""Any detector under noise that is uneven or correlated over the receive channels.

In the chain, `receiver/whitening.py` finds the covariance out and turns frames to white noise; this
is the same for a covariance that is known.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.signal.codebooks import Codebook


def detect_under_covariance(
    y: NDArray[np.complex64],
    channel: NDArray[np.complex128],
    covariance: NDArray[np.complex128],
    codebook: Codebook,
    detector: Callable[..., NDArray[np.int64]],
) -> NDArray[np.int64]:
    """argmin over c of (y - H x[c])^H R^-1 (y - H x[c]), when the detector is maximum likelihood.

    With R = L L^H, that is the detector's own decision on L^-1 y and L^-1 H.

    Args:
        y: complex64, shape (K, Nr).
        channel: complex128, shape (Nr, Nt).
        covariance: complex128, shape (Nr, Nr); R, Hermitian, positive definite.
        codebook: the words.
        detector: detects under white noise.

    Raises:
        InputError: a covariance of another shape, or not positive definite.
    """
    size = y.shape[1]
    if covariance.shape != (size, size):
        raise InputError("detector", "covariance", f"shape {covariance.shape}", f"{(size, size)}")
    try:
        root = np.linalg.cholesky(covariance)
    except np.linalg.LinAlgError as fault:
        raise InputError("detector", "covariance", str(fault), "a positive definite one") from fault
    white = np.linalg.solve(root, y.T.astype(np.complex128)).T
    columns = np.linalg.solve(root, channel)
    return detector(np.ascontiguousarray(white, np.complex64), columns, 1.0, codebook)
