"""Exact binomial intervals against published values, their own definition, and their coverage."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binom, gamma

from spatiq.errors import InputError
from spatiq.metrics.intervals import clopper_pearson, upper_bound


# Clopper & Pearson, Biometrika 26, 1934 (from memory); values computed by beta quantiles and by the
# root of the binomial tail, agreeing to the digits shown.
@pytest.mark.nojit
@pytest.mark.parametrize(
    ("errors", "trials", "low", "high", "digits"),
    [
        (0, 10, 0.0, 0.308497, 5e-7),
        (1, 10, 0.002529, 0.445016, 5e-7),
        (5, 10, 0.187086, 0.812914, 5e-7),
        (0, 100, 0.0, 0.036217, 5e-7),
        (1, 100, 0.000253, 0.054459, 5e-7),
        (10, 100, 0.049005, 0.176223, 5e-7),
        (100, 100_000, 8.13712e-4, 1.216136e-3, 5e-9),
    ],
)
def test_published_intervals(errors, trials, low, high, digits):
    found = clopper_pearson(errors, trials)
    assert found[0] == pytest.approx(low, abs=digits)
    assert found[1] == pytest.approx(high, abs=digits)


def test_ends_are_the_roots_of_the_binomial_tail():
    low, high = clopper_pearson(7, 50, 0.9)
    assert binom.sf(6, 50, low) == pytest.approx(0.05, rel=1e-9)
    assert binom.cdf(7, 50, high) == pytest.approx(0.05, rel=1e-9)


def test_all_errors_reach_one():
    low, high = clopper_pearson(10, 10)
    assert high == 1.0
    assert low == pytest.approx(0.025**0.1, rel=1e-12)


# Rule of three, common practice; exact one-sided 1 - 0.05^(1/n).
@pytest.mark.nojit
def test_upper_bound_without_errors():
    found = upper_bound(0, [100, 1000])
    np.testing.assert_allclose(found, [0.0295130, 0.00299125], rtol=2e-6)
    np.testing.assert_allclose(found, 1 - 0.05 ** (1 / np.array([100, 1000])), rtol=1e-12)


# n * BER needed to state BER at a level with k errors (common practice: quantiles of the Poisson
# law).
@pytest.mark.parametrize(
    ("level", "products"),
    [
        (0.90, [2.3026, 3.8897, 5.3223, 6.6808, 7.9936, 9.2747]),
        (0.95, [2.9957, 4.7439, 6.2958, 7.7537, 9.1535, 10.513]),
        (0.99, [4.6052, 6.6384, 8.4059, 10.0451, 11.6046, 13.1085]),
    ],
)
def test_upper_bound_at_many_trials(level, products):
    trials = 10**9
    np.testing.assert_allclose(
        upper_bound(np.arange(6), trials, level) * trials, products, rtol=1e-4
    )


def test_relative_width_at_few_and_many_errors():
    """95 % interval over the ratio with 10, 100, 1000 errors (computed, three digits)."""
    errors = np.array([10, 100, 1000])
    low, high = clopper_pearson(errors, 10**9)
    np.testing.assert_allclose(low / (errors / 1e9), [0.480, 0.814, 0.939], atol=5e-4)
    np.testing.assert_allclose(high / (errors / 1e9), [1.839, 1.216, 1.064], atol=5e-4)


def test_end_where_the_library_inverse_fails():
    """1000 errors in 1e9: near the gamma law's quantile; the library's own answer is twice that."""
    low, high = clopper_pearson(np.array([1000]), 10**9)
    assert low[0] * 1e9 == pytest.approx(gamma.ppf(0.025, 1000), rel=1e-5)
    assert high[0] * 1e9 == pytest.approx(gamma.ppf(0.975, 1001), rel=1e-5)
    assert clopper_pearson(1000, 10**9)[0] == low[0]


def test_shapes_broadcast_and_no_trials_give_nan():
    low, high = clopper_pearson([[0, 0, 0], [0, 3, 3]], [0, 10, 20])
    assert low.shape == high.shape == (2, 3)
    assert np.isnan(low[:, 0]).all()
    assert np.isnan(high[:, 0]).all()
    assert np.isfinite(low[:, 1:]).all()
    assert np.isnan(upper_bound(0, 0))


@pytest.mark.parametrize(
    ("errors", "trials"), [(5, 4), (-1, 4), (0.5, 4), (0, np.inf), (0, np.nan)]
)
def test_refuses_what_is_no_count(errors, trials):
    with pytest.raises(InputError, match="whole counts, 0 <= errors <= trials"):
        clopper_pearson(errors, trials)


@pytest.mark.parametrize("level", [0.0, 1.0, 95.0, np.nan])
def test_refuses_a_level_that_is_no_probability(level):
    with pytest.raises(InputError, match="interval: level"):
        clopper_pearson(1, 10, level)


@given(trials=st.integers(1, 400), millionths=st.integers(0, 10**6), level=st.floats(0.5, 0.999))
def test_coverage_is_at_least_the_level(trials, millionths, level):
    """Exact: sum of the probabilities of all counts whose interval holds the true ratio."""
    ratio = millionths / 1e6
    errors = np.arange(trials + 1)
    low, high = clopper_pearson(errors, trials, level)
    inside = (low <= ratio + 1e-12) & (ratio - 1e-12 <= high)
    assert binom.pmf(errors, trials, ratio)[inside].sum() >= level - 1e-9


@given(trials=st.integers(1, 10**6), level=st.floats(0.5, 0.999), data=st.data())
def test_ends_rise_with_errors_and_hold_the_ratio(trials, level, data):
    errors = data.draw(st.integers(0, trials - 1))
    low, high = clopper_pearson([errors, errors + 1], trials, level)
    assert low[0] <= errors / trials <= high[0]
    assert low[0] < low[1]
    assert high[0] < high[1] or high[0] == 1.0
    wider = clopper_pearson(errors, trials, (1 + level) / 2)
    assert wider[0] <= low[0]
    assert wider[1] >= high[0]
