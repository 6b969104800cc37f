"""Sequence detection against exhaustive search, and the causal form against dense algebra."""

import numpy as np
import pytest
from dispersive_cases import cost_of, dense_matrix, exhaustive_search, fading_taps
from receiver_cases import complex_noise

from spatiq.receiver.causal_form import band_matrix, causal_form, normal_equations
from spatiq.receiver.fir_channel import Window, convolved
from spatiq.receiver.sequence_detection import SequenceDetector
from spatiq.receiver.sequence_kernels import nearest_first
from spatiq.signal.codebooks import space_shift_keying, spatial_modulation
from spatiq.signal.constellations import named

BPSK_2 = spatial_modulation(2, named("BPSK"), [0, 1], [0])
QPSK_2 = spatial_modulation(2, named("QPSK"), [0, 1], [0])
SSK_4 = space_shift_keying(4, [2, 0, 3, 1], [0, 1])
# Antenna 1 of three never sends payload.
PART_OF_3 = spatial_modulation(3, named("BPSK"), [0, 2], [1])


def case(seed, book, window, periods, receive=2, noise=0.3):
    """A short run with a silent period, unequal power, and received vectors that do not count."""
    rng = np.random.default_rng(seed)
    taps = fading_taps(rng, window.size, receive, book.antennas)
    amplitude = np.where(np.arange(periods) % 3 == 1, 1.3, 0.8)
    amplitude[periods // 2] = 0.0
    heard = np.ones(periods, bool)
    heard[0] = periods > 4 and window.first < 0
    words = rng.integers(0, book.size, periods)
    received = convolved(book.vectors[words] * amplitude[:, None], taps, window)
    return taps, amplitude, heard, received + complex_noise(rng, received.shape, noise)


@pytest.mark.nojit
@pytest.mark.parametrize("window", [Window(0, 0), Window(0, 2), Window(-1, 1), Window(-2, 0)])
def test_causal_form_is_the_likelihood(window):
    """||y - H x||^2 = ||A x - z||^2 - load ||x||^2 + constant for any x, A causal and banded."""
    rng = np.random.default_rng(1)
    taps, amplitude, heard, received = case(2, QPSK_2, window, 7)
    load = 0.37
    equations = normal_equations(received, taps, window, amplitude, heard)
    z, form = causal_form(equations, load)
    matrix = dense_matrix(taps, window, 7, heard) * np.repeat(amplitude, 2)
    whole = np.zeros((7, 2, 7, 2), complex)
    for k in range(7):
        for lag in range(window.size):
            if k >= lag:
                whole[k, :, k - lag, :] = form[k, lag]
    whole = whole.reshape(14, 14)
    gram = matrix.conj().T @ matrix + load * np.eye(14)
    np.testing.assert_allclose(whole.conj().T @ whole, gram, atol=1e-12)
    band = band_matrix(equations, load * np.eye(2))
    order = np.arange(14).reshape(7, 2)[::-1].ravel()
    backwards = gram[np.ix_(order, order)]
    for offset in range(2 * window.size):
        np.testing.assert_allclose(band[offset, : 14 - offset], np.diag(backwards, -offset))
    heard_only = np.where(heard[:, None], received, 0).ravel()
    differences = []
    for _ in range(5):
        x = complex_noise(rng, (14,), 1.0)
        plain = np.sum(np.abs(heard_only - matrix @ x) ** 2)
        causal = np.sum(np.abs(whole @ x - z.ravel()) ** 2) - load * np.sum(np.abs(x) ** 2)
        differences.append(plain - causal)
    np.testing.assert_allclose(differences, differences[0], atol=1e-10)


@pytest.mark.parametrize(
    ("book", "window", "periods"),
    [
        (BPSK_2, Window(0, 1), 6),
        (BPSK_2, Window(-1, 1), 6),
        (BPSK_2, Window(-2, 0), 6),
        (QPSK_2, Window(0, 2), 5),
        (SSK_4, Window(-1, 2), 6),
        (PART_OF_3, Window(0, 3), 7),
        (QPSK_2, Window(0, 0), 5),
        (QPSK_2, Window(-2, 5), 3),
        (SSK_4, Window(0, 3), 2),
    ],
)
def test_equals_exhaustive_search(book, window, periods):
    """As many survivors as states: the maximum-likelihood sequence, whatever the noise."""
    for seed in range(12):
        taps, amplitude, heard, received = case(seed, book, window, periods)
        detector = SequenceDetector(book, 10_000)
        found = detector(received, taps, window, 0.3, amplitude, heard)
        best, _ = exhaustive_search(received, taps, window, book.vectors, amplitude, heard)
        np.testing.assert_array_equal(found, best)


def test_few_survivors_cost_at_most_a_little():
    """A limited search never does better than the exhaustive one, and loses little; with as many
    survivors as there are sequences it is exhaustive by itself."""
    window, periods = Window(-1, 4), 6
    costs = {1: [], 4: [], 16: [], 5000: []}
    for seed in range(40):
        taps, amplitude, heard, received = case(seed, BPSK_2, window, periods, receive=1, noise=0.5)
        matrix = dense_matrix(taps, window, periods, heard)
        heard_only = np.where(heard[:, None], received, 0)
        arguments = (BPSK_2.vectors, amplitude)
        _, least = exhaustive_search(received, taps, window, *arguments, heard)
        for survivors, excess in costs.items():
            found = SequenceDetector(BPSK_2, survivors)(
                received, taps, window, 0.5, amplitude, heard
            )
            words = tuple(np.maximum(found, 0))
            excess.append(cost_of(heard_only, matrix, *arguments, words) - least)
    means = {survivors: np.mean(excess) for survivors, excess in costs.items()}
    assert min(min(excess) for excess in costs.values()) > -1e-9
    assert means[5000] < 1e-9
    assert means[16] <= means[4] <= means[1]
    assert means[16] < 0.1 * means[1]  # one survivor alone is decision feedback
    assert means[1] > 0.05


def test_result_does_not_depend_on_the_load():
    """`noise` only sets the load, which is taken out again."""
    window = Window(-1, 2)
    taps, amplitude, heard, received = case(3, QPSK_2, window, 40, noise=0.2)
    detector = SequenceDetector(QPSK_2, 512)
    one = detector(received, taps, window, 0.2, amplitude, heard)
    other = detector(received, taps, window, 0.002, amplitude, heard)
    np.testing.assert_array_equal(one, other)


@pytest.mark.nojit
def test_nearest_first():
    rng = np.random.default_rng(4)
    for count in (1, 2, 7, 200):
        for wanted in {1, max(count // 3, 1), count}:
            cost = np.round(rng.standard_normal(count), 1)  # with ties
            order = rng.permutation(count)
            nearest_first(order, cost, count, wanted)
            assert sorted(order) == list(range(count))
            np.testing.assert_array_equal(np.sort(cost[order[:wanted]]), np.sort(cost)[:wanted])


@pytest.mark.nojit
def test_flat_window_is_the_nearest_word():
    """Without memory the sequence is decided word by word: Jeganathan et al. 2008."""
    window = Window(0, 0)
    taps, amplitude, _, received = case(5, QPSK_2, window, 20)
    found = SequenceDetector(QPSK_2, 7)(received, taps, window, 0.3, amplitude)
    images = QPSK_2.vectors @ taps[0].T
    for k in np.flatnonzero(amplitude):
        distance = np.sum(np.abs(received[k] - amplitude[k] * images) ** 2, axis=1)
        assert found[k] == np.argmin(distance)
