"""Noise over the receive channels and its colour, against closed forms.

Tolerances are 5 standard errors (false failure below 6e-7 for each figure), unless stated.
"""

import numpy as np
import pytest
from transmit_links import make_link

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.noise_shape import NoiseShape, ShapedNoise, noise_covariance
from spatiq.transmit.simulation import simulate

SIGMAS = 5
N = 100_000


def noise(covariance, shape=None, n=N, seed=3):
    stage = ShapedNoise(np.asarray(covariance, complex), shape).begin(
        Context(1.0, len(covariance), seed, 0)
    )
    cut = n // 3
    parts = [np.zeros((len(covariance), size), np.complex64) for size in (cut, n - cut)]
    return np.concatenate([stage(parts[0], 0), stage(parts[1], cut)], axis=1)


def autocorrelation(samples, lag):
    n = len(samples)
    return np.mean(samples[lag:] * samples[: n - lag].conj())


def test_covariance_over_the_receive_channels():
    """Var of a sample covariance of CN(0, C) is C_ii C_jj / n."""
    covariance = noise_covariance(3, [0.0, 3.0, -2.0], 0.7 * np.exp(0.4j))
    size = 10 ** (np.array([0.0, 3.0, -2.0]) / 20)
    assert covariance[0, 2] == pytest.approx(size[0] * size[2] * (0.7 * np.exp(0.4j)) ** 2)
    w = noise(covariance).astype(np.complex128)
    measured = w @ w.conj().T / N
    power = np.diag(covariance).real
    assert np.all(np.abs(measured - covariance) < SIGMAS * np.sqrt(np.outer(power, power) / N))
    circular = w @ w.T / N
    assert np.all(np.abs(circular) < SIGMAS * np.sqrt(2 * np.outer(power, power) / N))


@pytest.mark.parametrize("pole", [0.8, -0.5, 0.6j])
def test_first_order_all_pole(pole):
    """Autocorrelation pole^lag at unit power (textbook, Kay 1988).

    By Bartlett's formula the variance of the estimate is at most sum |r|^2 / n, times 2 for lag 0.
    """
    w = noise([[2.0]], NoiseShape(feedback=(-pole,)))[0] / np.sqrt(2.0)
    spread = np.sqrt(2 * (1 + abs(pole) ** 2) / (1 - abs(pole) ** 2) / N)
    for lag in (0, 1, 2, 5):
        assert abs(autocorrelation(w, lag) - pole**lag) < SIGMAS * spread


def test_fir():
    """Autocorrelation sum h[i + lag] conj(h[i]) / sum |h|^2 (textbook); none beyond the taps."""
    taps = np.array([1.0, 0.5 - 0.5j, -0.25])
    w = noise([[1.0]], NoiseShape(tuple(taps)))[0]
    full = np.correlate(taps, taps, "full")[2:] / np.sum(np.abs(taps) ** 2)
    spread = np.sqrt(2 * (1 + 2 * np.sum(np.abs(full[1:]) ** 2)) / N)
    for lag, expected in enumerate([*full, 0, 0]):
        assert abs(autocorrelation(w, lag) - expected) < SIGMAS * spread


def test_coloured_noise_is_stationary_from_the_first_sample():
    """Power of the very first sample over 4000 seeds: exponential, relative spread 1/sqrt(4000)."""
    shape = NoiseShape(feedback=(-0.95,))
    first = [noise([[1.0]], shape, 6, seed)[0, 0] for seed in range(4000)]
    assert abs(np.mean(np.abs(first) ** 2) - 1) < SIGMAS / np.sqrt(4000)


def test_two_equal_poles_settle():
    """(1 - 0.999 z^-1)^-2: what is left of the impulse response is below 1e-6 of its largest."""
    shape = NoiseShape(feedback=(-1.998, 0.998001))
    n = np.arange(2 * shape.settling())
    response = (n + 1) * 0.999**n
    assert response[shape.settling()] < 1e-6 * response.max()
    energy = np.sum(response**2)
    assert shape.scale() == pytest.approx(1 / np.sqrt(energy), rel=1e-6)


def test_response_is_that_of_the_noise():
    """Mean of |response|^2 over frequency is 1; the ratio at two frequencies is the pole's."""
    shape = NoiseShape(feedback=(-0.5,))
    grid = np.arange(512) / 512
    assert np.mean(np.abs(shape.response(grid)) ** 2) == pytest.approx(1.0)
    ratio = np.abs(shape.response(0.0) / shape.response(0.5)) ** 2
    assert ratio == pytest.approx((1.5 / 0.5) ** 2)


def test_coloured_noise_behind_the_matched_filter():
    """N0 times the mean of |P(f)|^2 |shape(f)|^2: here by the pulse's own autocorrelation.

    K F = 331 * 40 symbols on 2 channels, neighbours hardly correlated: 5 standard errors plus the
    1e-3 of the truncated pulse's interference at 0 dB.
    """
    link = make_link(payload=300)
    shape = NoiseShape(feedback=(-0.7,))
    made = simulate(link, samples_per_symbol=4, frames=40, snr_db=0.0, seed=5, noise_shape=shape)
    residual = genie_symbols(made.truth, made.samples()) - made.truth.received_symbols()
    times = np.arange(-32, 33)
    taps = link.pulse.samples(times / 4, 4.0) / 2
    lags = times[:, None] - times[None, :]
    expected = taps @ (0.7 ** np.abs(lags)) @ taps
    measured = np.mean(np.abs(residual) ** 2) / made.truth.N0
    assert expected > 1.5, "in-band noise is raised"
    assert abs(measured / expected - 1) < SIGMAS * np.sqrt(2 / residual.size) + 1e-3


def test_truth_keeps_the_covariance_behind_gains():
    gains = np.array([1.0, 0.5j])
    made = simulate(
        make_link(),
        samples_per_symbol=4,
        snr_db=10.0,
        lead_in=25_000,
        frames=1,
        noise_db=[0.0, 6.0],
        noise_correlation=0.5,
        receive_gains=gains,
        seed=2,
    )
    truth = made.truth
    level = 10**0.3
    unit = np.array([[1, 0.5 * level], [0.5 * level, level**2]])
    expected = 0.1 * np.outer(gains, gains.conj()) * unit
    np.testing.assert_allclose(truth.noise_covariance, expected, rtol=1e-12)
    assert pytest.approx(np.trace(expected).real / 2) == truth.N0
    w = made.samples()[:, :99_000].astype(np.complex128)
    power = np.diag(expected).real
    spread = np.sqrt(np.outer(power, power) / w.shape[1])
    assert np.all(np.abs(w @ w.conj().T / w.shape[1] - expected) < SIGMAS * spread)


def test_receive_gains_move_channel_and_noise_alike():
    """Equal gains leave each frame's SNR as it was."""
    choices = {"samples_per_symbol": 4, "frames": 5, "snr_db": 12.0}
    plain = simulate(make_link(), **choices).truth
    scaled = simulate(make_link(), receive_gains=[2j, 2.0], **choices).truth
    np.testing.assert_allclose(scaled.snr_db, plain.snr_db, atol=1e-9)
    np.testing.assert_allclose(scaled.H, plain.H * np.array([[2j], [2.0]]))


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"noise_shape": NoiseShape(())}, "taps"),
        ({"noise_shape": NoiseShape((0.0,))}, "not all 0"),
        ({"noise_shape": NoiseShape(feedback=(-1.0,))}, "pole"),
        ({"noise_shape": NoiseShape(feedback=(np.nan,))}, "finite"),
        ({"noise_db": [1, 2, 3]}, "one for each of 2"),
        ({"noise_db": 200.0}, "100 dB"),
        ({"noise_correlation": 1.5}, "magnitude below 1"),
        ({"receive_gains": [1, 2, 3]}, "receive gains"),
    ],
)
def test_bad_noise_is_refused(choices, message):
    with pytest.raises(InputError, match=message):
        next(simulate(make_link(), samples_per_symbol=4, **choices).blocks())
