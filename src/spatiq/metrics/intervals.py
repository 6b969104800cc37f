"""Exact confidence intervals of ratios of counts.

They hold for events that are independent: symbols, antenna decisions, frames. Bits of one word err
together, so that for bits the interval is a guide only.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betainc, betaincinv

from spatiq.errors import InputError


def clopper_pearson(
    errors: ArrayLike, trials: ArrayLike, level: float = 0.95
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Two-sided exact binomial interval of the ratio errors/trials.

    C. J. Clopper, E. S. Pearson, Biometrika 26, 1934, in its form by quantiles of the beta
    distribution. Each end is exceeded with probability at most (1 - level)/2, at zero errors too; a
    ratio with zero errors is better shown by `upper_bound`.

    Args:
        errors: counts of errors, 0 to trials; any shape.
        trials: counts of trials; any shape that broadcasts.
        level: confidence level, between 0 and 1.

    Returns:
        low, high: float64 of the broadcast shape; NaN where trials is 0.

    Raises:
        InputError: level outside 0..1, or counts that are not 0 <= errors <= trials, whole.
    """
    wrong, total = _checked(errors, trials, level)
    tail = (1.0 - level) / 2.0
    return _lower(wrong, total, tail), _upper(wrong, total, tail)


def upper_bound(errors: ArrayLike, trials: ArrayLike, level: float = 0.95) -> NDArray[np.float64]:
    """One-sided exact upper bound of the ratio errors/trials: it lies below with probability
    `level`.

    With zero errors this is 1 - (1 - level)^(1/trials), close to 3/trials at 95 %. Arguments, NaN
    and errors as for `clopper_pearson`.
    """
    wrong, total = _checked(errors, trials, level)
    return _upper(wrong, total, 1.0 - level)


def _lower(
    errors: NDArray[np.float64], trials: NDArray[np.float64], tail: float
) -> NDArray[np.float64]:
    """The ratio at which `errors` or more have probability `tail`; 0 when there are none."""
    some = (errors > 0) & (trials > 0)
    safe = np.where(some, errors, 1.0)
    rest = np.where(some, trials - errors + 1.0, 1.0)
    low = np.where(some, _beta_quantile(safe, rest, tail), 0.0)
    return np.asarray(np.where(trials > 0, low, np.nan), dtype=np.float64)


def _upper(
    errors: NDArray[np.float64], trials: NDArray[np.float64], tail: float
) -> NDArray[np.float64]:
    """The ratio at which `errors` or fewer have probability `tail`; 1 when all are errors."""
    some = (errors < trials) & (trials > 0)
    safe = np.where(some, errors + 1.0, 1.0)
    rest = np.where(some, trials - errors, 1.0)
    high = np.where(some, _beta_quantile(safe, rest, 1.0 - tail), 1.0)
    return np.asarray(np.where(trials > 0, high, np.nan), dtype=np.float64)


def _beta_quantile(
    a: NDArray[np.float64], b: NDArray[np.float64], probability: float
) -> NDArray[np.float64]:
    """Quantile of the beta distribution, put to the proof and bisected where it fails.

    The library's inverse is off by a factor of two at single arguments (found: a = 1000 with b
    above 6e8), while its direct function is right there.
    """
    x = np.asarray(betaincinv(a, b, probability), dtype=np.float64)
    wrong = ~(np.abs(betainc(a, b, x) - probability) <= 1e-6 * probability)
    if not wrong.any():
        return x
    bad_a, bad_b = a[wrong], b[wrong]
    low, high = np.full(bad_a.shape, -745.0), np.zeros(bad_a.shape)  # logarithms
    for _ in range(100):
        middle = 0.5 * (low + high)
        above = betainc(bad_a, bad_b, np.exp(middle)) > probability
        high = np.where(above, middle, high)
        low = np.where(above, low, middle)
    x[wrong] = np.exp(0.5 * (low + high))
    return x


def _checked(
    errors: ArrayLike, trials: ArrayLike, level: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Broadcast the counts and refuse what is no count."""
    if not 0.0 < level < 1.0:
        raise InputError("interval", "level", level, "a number between 0 and 1")
    wrong, total = np.broadcast_arrays(
        np.asarray(errors, dtype=np.float64), np.asarray(trials, dtype=np.float64)
    )
    right = (wrong >= 0) & (wrong <= total) & (wrong == np.floor(wrong)) & np.isfinite(total)
    right &= total == np.floor(total)
    if not right.all():
        first = np.argmin(right)
        found = f"{wrong.flat[first]:g} of {total.flat[first]:g}"
        raise InputError("interval", "errors", found, "whole counts, 0 <= errors <= trials")
    return wrong, total
