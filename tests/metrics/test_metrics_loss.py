"""Implementation loss: known shifts recovered, intervals, and counts that set no limit."""

import numpy as np
import pytest
from books import bit_weights, complex_normal, simulate, sm

from spatiq.errors import InputError
from spatiq.metrics import loss as module
from spatiq.metrics.awgn import bpsk_ber
from spatiq.metrics.loss import local_loss, loss_from_curve, pooled_loss, predicted_curve
from spatiq.metrics.prediction import predict_ber

BOOK = sm(4, "QPSK")


def channels(frames, snr_db, seed=1):
    h = complex_normal(np.random.default_rng(seed), frames, 2, 4)
    return h, np.full(frames, 10 ** (-snr_db / 10)), np.zeros((frames, 4))


# Offsets off the grid of the curve. 0.02 dB: error of interpolation in log BER.
@pytest.mark.parametrize("shift_db", [-2.6, -0.5, 0.0, 0.7, 2.3, 5.1])
def test_recovers_a_known_shift(shift_db):
    h, n0, exact = channels(300, 10.0)
    worse = predict_ber(h, n0 * 10 ** (shift_db / 10), exact, BOOK).ber.mean()
    bits = 10**9
    found = pooled_loss(h, n0, exact, BOOK, round(worse * bits), bits)
    assert found.value == pytest.approx(shift_db, abs=0.02)
    assert found.low < found.value < found.high
    assert found.high - found.low < 0.01


@pytest.mark.nojit
def test_closed_curve_of_bpsk():
    """Q(sqrt(2 Eb/N0)) at Eb/N0 = 6 dB (Proakis): measured as at 4.5 dB, so 1.5 dB of loss.

    0.01 dB: interpolation between points 1 dB apart.
    """
    offsets = np.asarray(module.OFFSETS_DB)
    bits = 10**8
    curve = bits * bpsk_ber(10 ** ((6.0 - offsets) / 10))
    errors = round(bits * float(bpsk_ber(10**0.45)))
    assert loss_from_curve(curve, errors, bits).value == pytest.approx(1.5, abs=0.01)


@pytest.mark.nojit
def test_interval_comes_from_the_ends_of_the_measured_ratio():
    """100 errors in 1e5: 95 % from 8.13712e-4 to 1.216136e-3 (Clopper & Pearson 1934)."""
    offsets = np.linspace(-6, 6, 121)
    curve = 1e5 * bpsk_ber(10 ** ((6.8 - offsets) / 10))
    found = loss_from_curve(curve, 100, 100_000, offsets)
    for value, ratio in ((found.low, 8.13712e-4), (found.value, 1e-3), (found.high, 1.216136e-3)):
        assert float(bpsk_ber(10 ** ((6.8 - value) / 10))) == pytest.approx(ratio, rel=1e-4)


@pytest.mark.nojit
def test_no_errors_give_an_upper_limit_only():
    offsets = np.asarray(module.OFFSETS_DB)
    curve = 1e5 * bpsk_ber(10 ** ((6.8 - offsets) / 10))
    found = loss_from_curve(curve, 0, 100_000)
    assert np.isnan(found.value)
    assert found.low == -np.inf
    limit = 1 - 0.05**1e-5  # one-sided, exact
    assert float(bpsk_ber(10 ** ((6.8 - found.high) / 10))) == pytest.approx(limit, rel=0.02)


@pytest.mark.nojit
def test_a_count_beyond_the_curve_is_not_clamped():
    curve = np.linspace(1e3, 2e4, len(module.OFFSETS_DB))
    above = loss_from_curve(curve, 40_000, 100_000)
    assert np.isnan(above.value)
    assert (above.low, above.high) == (module.OFFSETS_DB[-1], np.inf)
    below = loss_from_curve(curve, 10, 100_000)
    assert np.isnan(below.value)
    assert (below.low, below.high) == (-np.inf, module.OFFSETS_DB[0])


@pytest.mark.nojit
def test_nothing_compared_or_nothing_predicted():
    for curve, errors, bits in ((np.ones(14), 0, 0), (np.full(14, np.nan), 3, 10)):
        found = loss_from_curve(curve, errors, bits)
        assert np.isnan(found.value)
        assert (found.low, found.high) == (-np.inf, np.inf)
    h, n0, exact = channels(3, 10.0)
    found = pooled_loss(h * np.nan, n0, exact, BOOK, 3, 10)
    assert np.isnan(found.value)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("curve", "offsets", "match"),
    [
        ([1.0], [0.0], "two or more"),
        ([1.0, 2.0], [1.0, 0.0], "ascending"),
        ([1.0] * 3, [0.0, 1.0], "two"),
    ],
)
def test_refuses_offsets_that_are_no_curve(curve, offsets, match):
    with pytest.raises(InputError, match=match):
        loss_from_curve(curve, 1, 10, offsets)


def test_curves_of_batches_add_up():
    h, n0, exact = channels(20, 10.0)
    bits = np.arange(20) * 100.0
    offsets = [-1.0, 0.0, 2.0]
    whole = predicted_curve(h, n0, exact, BOOK, bits, offsets)
    first = predicted_curve(h[:7], n0[:7], exact[:7], BOOK, bits[:7], offsets)
    second = predicted_curve(h[7:], n0[7:], exact[7:], BOOK, bits[7:], offsets)
    np.testing.assert_allclose(first + second, whole, rtol=1e-12)


def test_an_ideal_receiver_has_no_loss():
    """Simulated link with estimates from 16 pilots: 0 dB within 0.15 dB.

    That is 3 % of systematic error in BER at 1.2 %/0.05 dB, plus 4 standard errors (1 % each) of
    the measured ratio over channels. Without the estimation error's correction the loss would be
    larger.
    """
    rng = np.random.default_rng(2)
    frames = 3000
    h, n0, _ = channels(frames, 8.0, 3)
    variance = np.repeat(n0[:, None] / 16, 4, axis=1)
    estimate = h + np.sqrt(variance)[:, None, :] * complex_normal(rng, *h.shape)
    sent, decided = simulate(rng, BOOK, h, estimate, n0, 150)
    errors = int(sum(bit_weights(BOOK))[sent ^ decided].sum())
    bits = sent.size * BOOK.bits
    found = pooled_loss(estimate, n0, variance, BOOK, errors, bits)
    assert abs(found.value) < 0.15
    blind = pooled_loss(estimate, n0, np.zeros_like(variance), BOOK, errors, bits)
    assert blind.value > 0.3


def test_local_loss_of_each_frame():
    """Curvature of log BER over half a decibel beyond the step, and scatter of the draws."""
    h, n0, exact = channels(200, 10.0)
    for shift_db in (-1.5, -0.5, 0.5, 1.5):
        bits = np.full(200, 10**8)
        shifted = predict_ber(h, n0 * 10 ** (shift_db / 10), exact, BOOK).ber
        found = local_loss(h, n0, exact, BOOK, np.rint(shifted * bits), bits)
        usable = predict_ber(h, n0, exact, BOOK).ber > 1e-4
        assert np.median(np.abs(found[usable] - shift_db)) < 0.1
        assert np.percentile(np.abs(found[usable] - shift_db), 90) < 0.25
    given = predict_ber(h, n0, exact, BOOK).ber
    again = local_loss(h, n0, exact, BOOK, np.rint(shifted * bits), bits, given)
    np.testing.assert_array_equal(again, found)


@pytest.mark.nojit
def test_local_loss_is_missing_where_nothing_was_wrong():
    h, n0, exact = channels(4, 5.0)
    h[3] = np.nan
    found = local_loss(h, n0, exact, BOOK, [0, 100, 0, 100], [1000, 1000, 0, 1000])
    assert np.isnan(found[[0, 2, 3]]).all()
    assert np.isfinite(found[1])
