"""How likely is a metric of the frame search in noise that is uneven over the receive channels?

The search's threshold supposes noise of the same power on all channels, independent from channel to
channel. One weak, dead or correlated channel leaves fewer degrees of freedom than that: with all
noise on one of four channels, 1e-4 becomes 2e-2. The metric of noise with covariance R over the
channels is distributed as

    sum_i l_i A_i / sum_i l_i (A_i + B_i),   A_i ~ Gamma(P), B_i ~ Gamma(N - P),

l_i the eigenvalues of R, all independent. Its tail is the probability that a weighted sum of
exponentials is positive, found by inverting the moment generating function along the line through
its saddle point (S. O. Rice, "Distribution of quadratic forms in normal random variables -
evaluation by numerical integration", SIAM J. Sci. Stat. Comput. 1(4), 1980, from memory).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

_POINTS = 48
_REACH = 6.0  # of the integration variable u; t = sinh(u) / sqrt(K'')
_BISECTIONS = 12  # the line need only pass near the saddle point


def exceeds(
    metric: float, powers: NDArray[np.float64], length: int, rank: int, false_alarm: float
) -> bool:
    """Whether noise alone gives a larger metric with at most the stated probability.

    Arguments as for `tail_probability`. Chernoff's bound decides where it can (H. Chernoff, Ann.
    Math. Statist. 23(4), 1952): it costs a fraction of the integral.
    """
    if not rank / length < metric < 1.0:
        return metric >= 1.0
    up, down = _weights(metric, powers)
    s = _saddle_point(up, down, rank, length - rank)
    bound = -rank * sum(math.log1p(-s * w) for w in up)
    bound -= (length - rank) * sum(math.log1p(s * w) for w in down)
    if bound <= math.log(false_alarm):
        return True
    return tail_probability(metric, powers, length, rank) <= false_alarm


def tail_probability(metric: float, powers: NDArray[np.float64], length: int, rank: int) -> float:
    """Probability that noise alone gives a larger metric.

    Args:
        metric: m, 0 to 1.
        powers: float64 (Nr,); eigenvalues of the noise covariance, in any scale; not all 0.
        length: N, symbol periods of the sync section.
        rank: P, dimensions that its vectors span; below N.

    Returns:
        The probability; 1 for a metric that does not exceed its mean, P/N.
    """
    if metric <= rank / length:
        return 1.0
    if metric >= 1.0:
        return 0.0
    rest = length - rank
    weights = _weights(metric, powers)
    s = _saddle_point(*weights, rank, rest)
    up, down = (np.array(w) for w in weights)
    bend = rank * np.sum((up / (1.0 - s * up)) ** 2) + rest * np.sum((down / (1.0 + s * down)) ** 2)
    u = np.linspace(0.0, _REACH, _POINTS)
    z = s + 1j * np.sinh(u) / np.sqrt(bend)
    exponent = -rank * np.log(1.0 - np.outer(z, up)).sum(axis=1)
    exponent -= rest * np.log(1.0 + np.outer(z, down)).sum(axis=1)
    values = (np.exp(exponent) / z).real * np.cosh(u) / np.sqrt(bend)
    values[0] *= 0.5  # trapezoids; the integrand has died away at the other end
    return float(max(np.sum(values) * u[1] / np.pi, 0.0))


def _weights(metric: float, powers: NDArray[np.float64]) -> tuple[list[float], list[float]]:
    """Weights of the gamma variables: of those for the metric, and of those against it."""
    top = float(powers.max())
    kept = [float(power) / top for power in powers if power > 1e-12 * top]
    return [w * (1.0 - metric) for w in kept], [w * metric for w in kept]


def _saddle_point(up: list[float], down: list[float], rank: int, rest: int) -> float:
    """Where the cumulant generating function is least, roughly; its slope rises to infinity.

    Plain numbers: for a few channels arrays would cost ten times as much.
    """
    low, high = 0.0, 1.0 / max(up)
    for _ in range(_BISECTIONS):
        s = 0.5 * (low + high)
        slope = rank * sum(w / (1.0 - s * w) for w in up)
        slope -= rest * sum(w / (1.0 + s * w) for w in down)
        low, high = (s, high) if slope < 0.0 else (low, s)
    return 0.5 * (low + high)


def noise_powers(residual: NDArray[np.complex128], freedom: int) -> NDArray[np.float64]:
    """Eigenvalues of the noise covariance over the channels, estimated from residuals.

    Those of the sample covariance lie further apart than the true ones. They are drawn together
    until the sum of their squares has no bias: tr(R^2) is estimated by
    (tr(S^2) - tr(S)^2 / n) / (1 - 1/n^2) for a complex Wishart matrix n S (M. S. Srivastava, "Some
    tests concerning the covariance matrix in high dimensional data", J. Japan Statist. Soc. 35(2),
    2005, for real data, from memory; shrinking towards the mean: O. Ledoit and M. Wolf, "A
    well-conditioned estimator for large-dimensional covariance matrices", J. Multivar. Anal. 88(2),
    2004).

    Args:
        residual: complex128 (Nr, Nr); sample covariance S.
        freedom: n, vectors behind it.

    Returns:
        float64 (Nr,), ascending.
    """
    values = np.asarray(np.maximum(np.linalg.eigvalsh(residual), 0.0), np.float64)
    mean = float(values.mean())
    if freedom < 2 or mean <= 0.0:
        return values
    spread = float(np.sum((values - mean) ** 2))
    squares = (np.sum(values**2) - np.sum(values) ** 2 / freedom) / (1.0 - 1.0 / freedom**2)
    wanted = float(squares) - values.size * mean**2
    share = np.sqrt(min(max(wanted / spread, 0.0), 1.0)) if spread > 0.0 else 0.0
    return np.asarray(mean + share * (values - mean), np.float64)
