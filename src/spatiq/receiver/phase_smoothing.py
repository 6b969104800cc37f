"""Smoothing of a carrier phase that walks: from symbol to symbol, its variance by evidence.

The phase of a free-running oscillator is Brownian motion (A. Demir, A. Mehrotra, J. Roychowdhury,
IEEE Trans. Circuits Syst. I 47(5), 2000; from memory): its posterior given noisy observations is
one banded system of equations, the same as a Kalman filter's and Rauch-Tung-Striebel smoother's.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class SmoothedPhase:
    """Posterior of a random walk.

    Attributes:
        mean: (n,).
        evidence: log marginal likelihood, up to what does not depend on the walk's variance.
        prior: log density of the mean as a path, times the volume that the posterior leaves it:
            what the path costs before it is held against what was observed.
        freedom: effective number of parameters.
    """

    mean: Floats
    evidence: float
    prior: float
    freedom: float


def smooth_walk(
    observed: Floats, precision: Floats, distance: Floats, walk: float
) -> SmoothedPhase:
    """Posterior of a random walk given noisy values of it.

    Args:
        observed: (n,); noisy values.
        precision: (n,); one over their variances; 0 for none.
        distance: (n - 1,); symbol periods from one to the next.
        walk: variance per symbol period, above 0. Nothing is assumed of the first value.
    """
    inner = 1.0 / (walk * distance)
    banded = np.zeros((2, observed.size))
    banded[0] = precision
    banded[0, :-1] += inner
    banded[0, 1:] += inner
    banded[1, :-1] = -inner
    factor = scipy.linalg.cholesky_banded(banded, lower=True)
    right = precision * observed
    mean = scipy.linalg.cho_solve_banded((factor, True), right)
    volume = 0.5 * float(np.sum(np.log(inner))) - float(np.sum(np.log(factor[0])))
    steps = float(np.sum(np.diff(mean) ** 2 * inner))
    # Variance of a smoothed walk in the steady state: 1 / sqrt(p^2 + 4 p / walk).
    level = max(float(np.mean(precision)), 1e-300)
    share = 1.0 / np.sqrt(1.0 + 4.0 / (level * walk))
    return SmoothedPhase(
        mean=np.asarray(mean, np.float64),
        evidence=0.5 * float(right @ mean) + volume,
        prior=volume - 0.5 * steps,
        freedom=float(1.0 + share * observed.size),
    )
