"""Predicted BER against exact results, published simulations, and simulated links.

Where simulated links are the reference, tolerances are 4 standard errors of the difference (false
failure 6e-5) plus the systematic part that the module states.
"""

import numpy as np
import pytest
from books import bit_weights, complex_normal, gsm_4_2, qsm, simulate, sm, ssk

from spatiq.errors import InputError
from spatiq.metrics.awgn import bpsk_ber, gaussian_tail, qam_gray_ber
from spatiq.metrics.fading import ssk_rayleigh_bound
from spatiq.metrics.prediction import predict_ber, predicted_confusion
from spatiq.metrics.union_bound import fixed_channel_union_bound


def exact(n, nt):
    """Error variance of a channel known exactly."""
    return np.zeros((n, nt))


@pytest.mark.nojit
@pytest.mark.parametrize("rho_db", [-3.0, 3.0, 8.0, 12.0, 16.0])
def test_two_antenna_ssk_is_exact(rho_db):
    """Q(||h1 - h2|| sqrt(rho/2)) (textbook). 2e-2 where draws stand alone, else the tables'
    5e-4."""
    rng = np.random.default_rng(1)
    h = complex_normal(rng, 20, 2, 2)
    rho = 10 ** (rho_db / 10)
    expected = gaussian_tail(np.linalg.norm(h[..., 0] - h[..., 1], axis=1) * np.sqrt(rho / 2))
    found = predict_ber(h, np.full(20, 1 / rho), exact(20, 2), ssk(2))
    bound = expected <= 0.199
    np.testing.assert_allclose(found.ber[bound], expected[bound], rtol=5e-4)
    assert np.abs(found.ber / expected - 1)[~bound].max(initial=0.0) < 0.15
    assert abs((found.ber / expected - 1).mean()) < 2e-2
    np.testing.assert_array_equal(found.ber, found.spatial)
    assert np.isnan(found.signal).all()


@pytest.mark.parametrize(
    ("name", "eb_n0_db", "expected"),
    [("QPSK", 4.0, bpsk_ber), ("16QAM", 8.0, lambda r: qam_gray_ber(16, r))],
)
def test_single_antenna_meets_the_awgn_closed_forms(name, eb_n0_db, expected):
    """Proakis; Cho & Yoon. 3 %: mean of 64 noise tables of 256 draws, by random phases."""
    book = sm(1, name)
    r = 10 ** (eb_n0_db / 10)
    h = np.exp(2j * np.pi * np.random.default_rng(2).random((200, 1, 1)))
    found = predict_ber(h, np.full(200, 1 / (r * book.bits)), exact(200, 1), book)
    assert found.ber.mean() == pytest.approx(float(expected(r)), rel=0.03)
    assert np.isnan(found.spatial).all()
    np.testing.assert_array_equal(found.ber, found.signal)


def test_ssk_rayleigh_mean_is_exact():
    """G(Nr, rho/2), Jeganathan et al. 2009. 4 standard errors of the mean over channels."""
    h = complex_normal(np.random.default_rng(3), 40_000, 2, 2)
    ber = predict_ber(h, np.full(40_000, 0.1), exact(40_000, 2), ssk(2)).ber
    assert abs(ber.mean() - ssk_rayleigh_bound(2, 2, 10.0)) < 4 * ber.std() / 200


# Monte Carlo over i.i.d. Rayleigh with ML detection and known channel, computed once, three digits
# at most; among them those where the union bound is 32 % and 17 % too high.
@pytest.mark.parametrize(
    ("book", "receivers", "rho_db", "simulated"),
    [
        (sm(2, "BPSK"), 2, 10, 9.06e-3),
        (sm(2, "QPSK"), 2, 10, 1.70e-2),
        (sm(4, "BPSK"), 4, 8, 1.85e-3),
        (sm(4, "QPSK"), 4, 10, 8.3e-4),
        (sm(4, "16QAM"), 4, 12, 5.92e-3),
        (qsm(4, "QPSK"), 4, 10, 5.59e-3),
        (gsm_4_2("QPSK"), 4, 10, 1.40e-3),
    ],
)
def test_rayleigh_mean_meets_published_simulations(book, receivers, rho_db, simulated):
    frames = 8000
    h = complex_normal(np.random.default_rng(4), frames, receivers, book.antennas)
    n0 = np.full(frames, 10 ** (-rho_db / 10))
    ber = predict_ber(h, n0, exact(frames, book.antennas), book).ber
    error = ber.std() / np.sqrt(frames)
    assert abs(ber.mean() - simulated) < 4 * error + 0.03 * simulated


@pytest.mark.parametrize("snr_db", [0.0, 6.0, 12.0])
@pytest.mark.parametrize(
    ("book", "receivers"), [(sm(4, "QPSK"), 2), (sm(8, "16QAM"), 4)], ids=["4x2", "8x4"]
)
def test_known_channels_meet_simulated_links(book, receivers, snr_db):
    """BER from 0.3 to 5e-3, and its spatial and signal parts: 3 % + 4 standard errors."""
    rng = np.random.default_rng(5)
    frames = 400
    h = complex_normal(rng, frames, receivers, book.antennas)
    n0 = np.full(frames, 10 ** (-snr_db / 10))
    found = predict_ber(h, n0, exact(frames, book.antennas), book)
    sent, decided = simulate(rng, book, h, h, n0, 500)
    n_spatial = book.spatial_bits.sum()
    spatial, signal = (w[sent ^ decided].mean(axis=1) for w in bit_weights(book))
    for predicted, measured in (
        (found.ber, (spatial + signal) / book.bits),
        (found.spatial, spatial / n_spatial),
        (found.signal, signal / (book.bits - n_spatial)),
    ):
        error = (predicted - measured).std() / np.sqrt(frames)
        assert abs(predicted.mean() - measured.mean()) < 4 * error + 0.03 * measured.mean()


@pytest.mark.parametrize("still", [False, True], ids=["rayleigh", "still"])
@pytest.mark.parametrize(
    ("book", "receivers", "snr_db"),
    [(sm(4, "QPSK"), 2, 8.0), (sm(4, "QPSK"), 4, 5.0), (sm(2, "BPSK"), 1, 10.0)],
    ids=["4x2", "4x4", "2x1"],
)
def test_noisy_estimates_leave_the_mean_in_place(book, receivers, snr_db, still):
    """Channel estimated from 16 pilots an antenna, receiver uses the estimate: 2.5 % + 4 errors.

    Without the correction the mean lies so far below that this test would fail.
    """
    rng = np.random.default_rng(6)
    frames, pilots = 4000, 16
    h = complex_normal(rng, 1 if still else frames, receivers, book.antennas)
    h = np.broadcast_to(h, (frames, receivers, book.antennas))
    n0 = np.full(frames, 10 ** (-snr_db / 10))
    variance = np.repeat(n0[:, None] / pilots, book.antennas, axis=1)
    estimate = h + np.sqrt(variance)[:, None, :] * complex_normal(rng, *h.shape)
    sent, decided = simulate(rng, book, h, estimate, n0, 150)
    wrong = sum(bit_weights(book))[sent ^ decided].mean(axis=1) / book.bits
    found = predict_ber(estimate, n0, variance, book).ber
    error = (found - wrong).std() / np.sqrt(frames)
    margin = 4 * error + 0.025 * wrong.mean()
    assert abs(found.mean() - wrong.mean()) < margin
    blind = predict_ber(estimate, n0, np.zeros_like(variance), book).ber
    assert blind.mean() < wrong.mean() * 0.97
    if receivers == 4:
        assert wrong.mean() - blind.mean() > margin


def test_low_ber_is_the_union_bound():
    h = complex_normal(np.random.default_rng(7), 5, 4, 4)
    book = sm(4, "QPSK")
    for n0 in (0.02, 0.01):
        expected = [float(fixed_channel_union_bound(book, one, n0)) for one in h]
        assert 1e-300 < min(expected) <= max(expected) < 3e-4
        found = predict_ber(h, np.full(5, n0), exact(5, 4), book).ber
        np.testing.assert_allclose(found, expected, rtol=1e-3)


@pytest.mark.parametrize("seed", [8, 10, 11])
def test_no_jump_where_the_method_changes(seed):
    """BER against noise runs on smoothly through both switches, within the scatter of the draws.

    That scatter is some 5 % (the plain mean of 256 draws at a BER of 0.1) at the upper switch and
    below 4 % elsewhere: 10 % is allowed for one step's break. The grid is 0.008 decades of noise.
    """
    h = np.repeat(complex_normal(np.random.default_rng(seed), 1, 2, 4), 300, axis=0)
    n0 = 10 ** np.linspace(-1.8, 0.5, 300)
    ber = predict_ber(h, n0, np.repeat(n0[:, None] / 32, 4, axis=1), sm(4, "QPSK")).ber
    assert ber[0] < 1e-3
    assert ber[-1] > 0.25
    steps = np.diff(np.log(ber))
    assert steps.min() > -0.05
    assert np.abs(np.diff(steps)).max() < 0.1


@pytest.mark.nojit
def test_a_frame_depends_on_itself_alone():
    rng = np.random.default_rng(9)
    h = complex_normal(rng, 6, 2, 4)
    n0 = 10 ** rng.uniform(-2, 0, 6)
    variance = rng.uniform(0, 0.02, (6, 4))
    variance[2] = 0.0
    book = sm(4, "QPSK")
    whole = predict_ber(h, n0, variance, book)
    for i in range(6):
        one = predict_ber(h[i : i + 1], n0[i : i + 1], variance[i : i + 1], book)
        assert one.ber[0] == whole.ber[i]
        assert one.spatial[0] == whole.spatial[i]
        assert one.signal[0] == whole.signal[i]


@pytest.mark.nojit
def test_frames_that_cannot_be_predicted_are_missing():
    book = sm(2, "BPSK")
    h = complex_normal(np.random.default_rng(10), 7, 2, 2)
    n0 = np.full(7, 0.1)
    variance = np.full((7, 2), 0.01)
    alone = predict_ber(h[:1], n0[:1], variance[:1], book).ber[0]
    h[1, 0, 0] = np.nan
    n0[2:5] = 0.0, -1.0, np.inf
    variance[5, 1] = -0.1
    h[6, 1, 1] = 1e300
    found = predict_ber(h, n0, variance, book).ber
    assert found[0] == alone
    assert np.isnan(found[1:]).all()
    shares = predicted_confusion(h, n0, variance, book)
    np.testing.assert_array_equal(shares, predicted_confusion(h[:1], n0[:1], variance[:1], book))
    assert np.isnan(predicted_confusion(h[1:], n0[1:], variance[1:], book)).all()


@pytest.mark.nojit
def test_no_frames_at_all():
    found = predict_ber(np.empty((0, 2, 2)), np.empty(0), np.empty((0, 2)), sm(2, "BPSK"))
    assert found.ber.shape == found.spatial.shape == found.signal.shape == (0,)


def test_no_signal_is_a_coin_toss():
    ber = predict_ber(np.zeros((3, 2, 4)), np.ones(3), np.full((3, 4), 0.1), sm(4, "QPSK")).ber
    np.testing.assert_allclose(ber, 0.5, rtol=1e-3)


@pytest.mark.parametrize(
    ("h", "n0", "variance", "match"),
    [
        ((3, 2, 3), (3,), (3, 2), r"H: found shape \(3, 2, 3\); expected \(F, Nr, 2\)"),
        ((2, 2), (2,), (2, 2), r"H: found shape \(2, 2\)"),
        ((3, 2, 2), (4,), (3, 2), r"N0: found shape \(4,\); expected \(3,\)"),
        ((3, 2, 2), (3,), (2,), r"error_variance: found shape \(2,\); expected \(3, 2\)"),
    ],
)
def test_refuses_shapes_that_do_not_fit(h, n0, variance, match):
    with pytest.raises(InputError, match=match):
        predict_ber(np.ones(h), np.ones(n0), np.ones(variance), sm(2, "BPSK"))


@pytest.mark.parametrize("snr_db", [0.0, 8.0])
def test_confusion_meets_simulated_links(snr_db):
    """Each share off the diagonal: 5 % + 4 standard errors over frames; rows sum to one."""
    rng = np.random.default_rng(11)
    book = sm(4, "QPSK")
    frames = 600
    h = complex_normal(rng, frames, 2, 4) * np.array([1.0, 0.7, 1.2, 1.0])
    n0 = np.full(frames, 10 ** (-snr_db / 10))
    shares = predicted_confusion(h, n0, exact(frames, 4), book)
    np.testing.assert_allclose(shares.sum(axis=1), 1.0, rtol=1e-12)
    sent, decided = simulate(rng, book, h, h, n0, 400)
    sent, decided = book.set_index[sent], book.set_index[decided]
    for a in range(4):
        for b in {0, 1, 2, 3} - {a}:
            per_frame = np.mean((sent == a) & (decided == b), axis=1) * 4
            error = per_frame.std() / np.sqrt(frames)
            assert abs(shares[a, b] - per_frame.mean()) < 4 * error + 0.05 * per_frame.mean()


def test_confusion_agrees_with_predicted_spatial_errors():
    """Nt = 2: one spatial bit, so that the antenna error ratio is the spatial bit error ratio."""
    h = complex_normal(np.random.default_rng(12), 300, 2, 2)
    n0 = 10 ** np.linspace(-2, 0, 300)
    book = sm(2, "QPSK")
    shares = predicted_confusion(h, n0, exact(300, 2), book)
    spatial = predict_ber(h, n0, exact(300, 2), book).spatial
    assert (shares[0, 1] + shares[1, 0]) / 2 == pytest.approx(spatial.mean(), rel=1e-5)


def test_single_set_is_never_confused():
    shares = predicted_confusion(np.ones((2, 1, 1)), np.ones(2), exact(2, 1), sm(1, "QPSK"))
    np.testing.assert_array_equal(shares, [[1.0]])


def test_more_words_than_are_sent():
    """4096 words: 1024 stand for all. 10 %: choice of words, few draws; 4 binomial sigmas."""
    rng = np.random.default_rng(13)
    book = sm(64, "64QAM")
    h = complex_normal(rng, 1, 8, 64)
    n0 = np.array([0.05])
    found = predict_ber(h, n0, exact(1, 64), book).ber[0]
    sent, decided = simulate(rng, book, h, h, n0, 4000)
    wrong = sum(bit_weights(book))[sent ^ decided] / book.bits
    error = wrong.std() / np.sqrt(wrong.size)
    assert abs(found - wrong.mean()) < 4 * error + 0.1 * wrong.mean()
