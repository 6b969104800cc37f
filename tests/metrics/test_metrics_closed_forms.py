"""Closed forms of error ratios against published values and independent integrals.

Unless another source stands beside it, a value comes from the source named in the function's
docstring, opened from memory, and was computed by two independent means that agree to the digits
shown.
"""

import numpy as np
import pytest
from books import gsm_4_2, qsm, sm, ssk
from scipy.integrate import quad
from scipy.optimize import brentq

from spatiq.errors import InputError
from spatiq.metrics import awgn, fading
from spatiq.metrics.union_bound import fixed_channel_union_bound, rayleigh_union_bound

pytestmark = pytest.mark.nojit


def ratio(db):
    return 10.0 ** (np.asarray(db, dtype=float) / 10.0)


# Digits printed in the table bound the comparison: seven, so 1e-6 relative.
@pytest.mark.parametrize(
    ("function", "eb_n0_db", "values"),
    [
        (
            awgn.bpsk_ber,
            [0, 4, 6, 8, 10],
            [7.864960e-2, 1.250082e-2, 2.388291e-3, 1.909078e-4, 3.872108e-6],
        ),
        (
            awgn.psk8_gray_ber,
            [4, 8, 10, 12],
            [4.589492e-2, 6.181056e-3, 1.011395e-3, 6.337879e-5],
        ),
        (
            lambda r: awgn.qam_gray_ber(16, r),
            [8, 10, 12, 14],
            [9.247214e-3, 1.754151e-3, 1.386587e-4, 2.763208e-6],
        ),
        (
            lambda r: awgn.qam_gray_ber(64, r),
            [10, 14, 16, 18],
            [2.653271e-2, 2.154004e-3, 2.171740e-4, 6.351148e-6],
        ),
        (lambda r: awgn.qam_ser(16, 4 * r), [10], [7.004294e-3]),
        (lambda r: awgn.qam_ser(64, 6 * r), [10], [1.528598e-1]),
        (lambda r: awgn.psk8_ser(3 * r), [10], [3.034186e-3]),
        (lambda r: awgn.orthogonal_ser(2, r), [8, 10], [6.004386e-3, 7.827011e-4]),
        (lambda r: awgn.orthogonal_ser(4, r), [8, 10], [1.625790e-2, 2.238165e-3]),
        (lambda r: awgn.noncoherent_orthogonal_ser(2, r), [8, 10], [2.132375e-2, 3.368973e-3]),
        (lambda r: awgn.noncoherent_orthogonal_ser(4, r), [8, 10], [5.127288e-2, 8.972558e-3]),
        (lambda r: fading.rayleigh_tail(1, r), [10, 20], [2.326871e-2, 2.481405e-3]),
        (lambda r: fading.rayleigh_tail(2, r), [10, 20], [1.599101e-3, 1.844155e-5]),
        (lambda r: fading.rayleigh_tail(4, r), [5, 10], [5.072505e-4, 9.698281e-6]),
        (lambda r: fading.qam_gray_rayleigh_ber(16, 1, r), [20], [4.885449e-3]),
        (lambda r: fading.qam_gray_rayleigh_ber(64, 1, r), [20], [1.061960e-2]),
        (lambda r: fading.qam_rayleigh_ser(16, 1, r), [20], [5.989372e-2]),
        (lambda r: fading.qam_rayleigh_ser(16, 2, r), [20], [4.500419e-3]),
        (lambda r: fading.qam_rayleigh_ser(16, 4, r), [20], [2.870341e-5]),
        (lambda r: fading.ssk_rayleigh_bound(2, 1, r), [10, 20], [4.356454e-2, 4.926229e-3]),
        (lambda r: fading.ssk_rayleigh_bound(2, 2, r), [10], [5.528247e-3]),
        (lambda r: fading.ssk_rayleigh_bound(2, 4, r), [10], [1.133584e-4]),
        (lambda r: fading.ssk_rayleigh_bound(4, 4, r), [10], [2.267167e-4]),
        (lambda r: fading.ssk_rician_ber(2, r, 4.0), [10], [5.805826e-2]),
    ],
)
def test_published_values(function, eb_n0_db, values):
    np.testing.assert_allclose(function(ratio(eb_n0_db)), values, rtol=1e-6)


@pytest.mark.parametrize(
    ("function", "target", "eb_n0_db"),
    [
        (awgn.bpsk_ber, 1e-3, 6.7895),
        (awgn.bpsk_ber, 1e-5, 9.5879),
        (awgn.bpsk_ber, 1e-6, 10.5298),
        (awgn.psk8_gray_ber, 1e-3, 10.0102),
        (lambda r: awgn.qam_gray_ber(16, r), 1e-3, 10.5224),
        (lambda r: awgn.qam_gray_ber(16, r), 1e-5, 13.4345),
        (lambda r: awgn.qam_gray_ber(64, r), 1e-3, 14.7675),
        (lambda r: awgn.qam_gray_ber(64, r), 1e-5, 17.7869),
        (lambda r: fading.bpsk_rayleigh_ber(1, r), 1e-3, 23.9664),
        (lambda r: fading.bpsk_rayleigh_ber(2, r), 1e-3, 11.0936),
        (lambda r: fading.bpsk_rayleigh_ber(4, r), 1e-3, 4.0349),
    ],
)
def test_published_ratios_for_a_given_ber(function, target, eb_n0_db):
    found = brentq(lambda db: function(ratio(db)) / target - 1, -5, 40, xtol=1e-9)
    assert found == pytest.approx(eb_n0_db, abs=6e-5)


@pytest.mark.parametrize("branches", [1, 3, 8])
def test_rayleigh_tail_is_the_mean_of_the_gaussian_tail(branches):
    """Craig's integral, independent of the finite sum; also where 1 - sqrt(g/(1+g)) cancels."""
    for gamma in (0.1, 3.0, 1e5):
        integral, _ = quad(
            lambda t, g=gamma: (np.sin(t) ** 2 / (np.sin(t) ** 2 + g)) ** branches, 0, np.pi / 2
        )
        assert fading.rayleigh_tail(branches, gamma) == pytest.approx(integral / np.pi, rel=1e-7)


@pytest.mark.parametrize("size", [4, 16, 64, 256])
def test_gray_qam_from_decision_regions(size):
    """Bit errors of one Gray-labelled axis, counted region by region."""
    root = int(np.sqrt(size))
    levels = 2.0 * np.arange(root) - root + 1
    gray = np.arange(root) ^ (np.arange(root) >> 1)
    step = np.sqrt(3 * 2.0 / (size - 1))  # Es/N0 = 2
    edges = np.concatenate([[-np.inf], levels[:-1] + 1, [np.inf]])
    wrong = 0.0
    for i in range(root):
        above = awgn.gaussian_tail((edges - levels[i]) * step)
        for j in range(root):
            wrong += int(gray[i] ^ gray[j]).bit_count() * (above[j] - above[j + 1])
    per_bit = wrong / root / np.log2(root)
    assert awgn.qam_gray_ber(size, 2.0 / np.log2(size)) == pytest.approx(per_bit, rel=1e-10)


@pytest.mark.parametrize("size", [2, 8, 32, 15])
def test_refuses_a_size_that_is_no_square_qam(size):
    with pytest.raises(InputError, match="square QAM size"):
        awgn.qam_gray_ber(size, 1.0)


# Union bounds computed by the finite sum and by Craig's integral, Gray labels, natural antenna
# labels.
BOUNDS = [
    (sm(2, "BPSK"), 2, [10, 15], [9.091921e-3, 1.104568e-3]),
    (sm(2, "QPSK"), 2, [10, 15], [1.949356e-2, 2.375479e-3]),
    (sm(4, "BPSK"), 4, [8, 10], [1.890698e-3, 4.188801e-4]),
    (sm(4, "QPSK"), 4, [10, 12], [8.550369e-4, 1.703103e-4]),
    (sm(4, "16QAM"), 4, [12, 15], [7.801041e-3, 9.899866e-4]),
    (qsm(4, "QPSK"), 4, [10], [6.499317e-3]),
    (gsm_4_2("QPSK"), 4, [10], [1.482282e-3]),
    (ssk(4), 4, [10], [2.267167e-4]),
]


@pytest.mark.parametrize(("book", "receivers", "rho_db", "values"), BOUNDS)
def test_rayleigh_union_bound(book, receivers, rho_db, values):
    found = rayleigh_union_bound(book, receivers, ratio(rho_db))
    np.testing.assert_allclose(found, values, rtol=1e-6)


@pytest.mark.parametrize(
    ("book", "receivers", "target", "rho_db"),
    [
        (sm(2, "BPSK"), 2, 1e-3, 15.227),
        (sm(2, "BPSK"), 2, 1e-5, 25.410),
        (sm(2, "QPSK"), 2, 1e-3, 16.956),
        (sm(4, "BPSK"), 4, 1e-5, 14.499),
        (sm(4, "QPSK"), 4, 1e-3, 9.799),
        (sm(4, "16QAM"), 4, 1e-3, 14.986),
        (sm(4, "16QAM"), 4, 1e-5, 20.689),
        (gsm_4_2("QPSK"), 4, 1e-3, 10.538),
    ],
)
def test_rho_at_which_the_bound_meets_a_target(book, receivers, target, rho_db):
    for db, above in ((rho_db - 6e-4, True), (rho_db + 6e-4, False)):
        assert (rayleigh_union_bound(book, receivers, ratio(db)) > target) is np.bool_(above)


def test_same_antenna_pairs_use_the_symbol_distance():
    """Trap: taking |x|^2 + |x'|^2 for pairs of one antenna too gives another, lower bound."""
    book = sm(1, "QPSK")
    rho = ratio(10)
    gray = (2 * fading.rayleigh_tail(2, rho * 2 / 4) + 2 * fading.rayleigh_tail(2, rho * 4 / 4)) / 2
    assert rayleigh_union_bound(book, 2, rho) == pytest.approx(float(gray), rel=1e-12)


def test_two_words_on_a_fixed_channel_are_exact():
    """SSK, Nt = 2: Q(||h1 - h2|| sqrt(rho/2)); orthonormal columns at 8 dB 6.004386e-3
    (textbook)."""
    h = np.eye(2, dtype=complex)
    assert fixed_channel_union_bound(ssk(2), h, 1 / ratio(8)) == pytest.approx(
        6.004386e-3, rel=1e-6
    )


def test_fixed_channel_bound_averages_to_the_rayleigh_bound():
    """4 standard errors of the mean over 4000 channels: false failure 6e-5."""
    rng = np.random.default_rng(5)
    book = sm(2, "QPSK")
    h = (rng.standard_normal((4000, 2, 2)) + 1j * rng.standard_normal((4000, 2, 2))) / np.sqrt(2)
    bounds = np.array([fixed_channel_union_bound(book, one, 0.1) for one in h])
    error = bounds.std() / np.sqrt(bounds.size)
    assert abs(bounds.mean() - rayleigh_union_bound(book, 2, 10.0)) < 4 * error


def test_bound_refuses_a_channel_of_another_shape():
    with pytest.raises(InputError, match=r"union bound: H: found shape \(3, 4\)"):
        fixed_channel_union_bound(ssk(2), np.ones((3, 4)), 1.0)


def test_bound_refuses_a_codebook_without_bits():
    with pytest.raises(InputError, match="no bits per word"):
        rayleigh_union_bound(ssk(1), 2, 1.0)


def test_simulated_two_step_antenna_errors():
    """Largest |h^H y|, orthonormal columns, QPSK. 4 binomial sigmas: false failure 6e-5."""
    rng = np.random.default_rng(6)
    trials, size, rho = 400_000, 4, ratio(8)
    symbol = np.exp(0.5j * np.pi * rng.integers(0, 4, trials))
    noise = rng.standard_normal((trials, size)) + 1j * rng.standard_normal((trials, size))
    y = noise / np.sqrt(2 * rho)
    y[:, 0] += symbol
    wrong = np.mean(np.abs(y).argmax(axis=1) != 0)
    expected = float(awgn.noncoherent_orthogonal_ser(size, rho))
    assert abs(wrong - expected) < 4 * np.sqrt(expected / trials)
