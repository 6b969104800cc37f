"""Linear equalisation against dense algebra and Monte Carlo."""

import numpy as np
import pytest
from dispersive_cases import dense_matrix, fading_taps
from receiver_cases import complex_noise

from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.fir_channel import Window, convolved
from spatiq.receiver.linear_equaliser import LinearEqualiser, as_flat_channel, word_moments
from spatiq.signal.codebooks import space_shift_keying, spatial_modulation
from spatiq.signal.constellations import named

QPSK_2 = spatial_modulation(2, named("QPSK"), [0, 1], [0])
SSK_4 = space_shift_keying(4, [0, 1, 2, 3], [0, 1])


@pytest.mark.nojit
@pytest.mark.parametrize("book", [QPSK_2, SSK_4])
def test_estimate_is_the_linear_minimum(book):
    """x = m + C H^H (H C H^H + N0 I)^-1 (y - H m): the other form of the same estimate."""
    window, periods, noise = Window(-1, 2), 9, 0.3
    rng = np.random.default_rng(1)
    taps = fading_taps(rng, window.size, 3, book.antennas)
    amplitude = np.where(np.arange(periods) == 3, 0.0, 1.2)
    words = rng.integers(0, book.size, periods)
    y = convolved(book.vectors[words] * amplitude[:, None], taps, window)
    y = y + complex_noise(rng, y.shape, noise)
    equaliser = LinearEqualiser(book, maximum_likelihood)
    found, error = equaliser.estimates(y, taps, window, noise, amplitude)
    matrix = dense_matrix(taps, window, periods, np.ones(periods, bool))
    matrix = matrix * np.repeat(amplitude, book.antennas)
    mean = np.tile(book.vectors.mean(axis=0), periods)
    covariance = np.kron(np.eye(periods), word_moments(book.vectors).covariance)
    around = matrix @ covariance @ matrix.conj().T + noise * np.eye(matrix.shape[0])
    gain = covariance @ matrix.conj().T @ np.linalg.inv(around)
    expected = gain @ (y.ravel() - matrix @ mean)
    kept = np.repeat(amplitude != 0, book.antennas)
    np.testing.assert_allclose(found.ravel()[kept], expected[kept], atol=1e-6)
    whole = covariance - gain @ matrix @ covariance
    middle = np.flatnonzero(amplitude)[4] * book.antennas
    block = whole[middle : middle + book.antennas, middle : middle + book.antennas]
    np.testing.assert_allclose(error, block, atol=1e-6)


def test_equalised_words_are_a_flat_channel_with_unit_noise():
    """Residuals of the flat channel: mean power 1 on every output, uncorrelated; 20,000 words.

    Of a sum of 20,000 squares nearly Gaussian; their neighbours in time are correlated, hence ten
    standard errors of independent ones.
    """
    window, periods, noise = Window(0, 2), 20_000, 0.2
    rng = np.random.default_rng(2)
    taps = fading_taps(rng, window.size, 3, 2)
    words = rng.integers(0, QPSK_2.size, periods)
    y = convolved(QPSK_2.vectors[words], taps, window)
    y = y + complex_noise(rng, y.shape, noise)
    equaliser = LinearEqualiser(QPSK_2, maximum_likelihood)
    estimate, error = equaliser.estimates(y, taps, window, noise, np.ones(periods))
    flat, channel = as_flat_channel(estimate, error, word_moments(QPSK_2.vectors))
    left = flat - QPSK_2.vectors[words] @ channel.T
    covariance = left.T @ left.conj() / periods
    np.testing.assert_allclose(covariance, np.eye(2), atol=10 / np.sqrt(periods))


def test_without_echoes_it_is_the_flat_detector():
    """One lag: the same words as maximum likelihood on the flat channel, but for rounding."""
    rng = np.random.default_rng(3)
    taps = fading_taps(rng, 1, 2, 2)
    words = rng.integers(0, QPSK_2.size, 500)
    y = QPSK_2.vectors[words] @ taps[0].T
    y = y + complex_noise(rng, y.shape, 0.3)
    equaliser = LinearEqualiser(QPSK_2, maximum_likelihood)
    found = equaliser(y, taps, Window(0, 0), 0.3, np.ones(500))
    flat = maximum_likelihood(y.astype(np.complex64), taps[0], 0.3, QPSK_2)
    assert np.mean(found != flat) < 0.01
