"""Moments of simulated channels against closed forms.

Seeds are fixed; each statistical tolerance is 5 standard errors, so that a test of a correct model
with another seed would fail with probability below 6e-7 for each figure compared.
"""

import numpy as np
import pytest
from scipy.optimize import brentq

from spatiq.errors import InputError
from spatiq.transmit.channel import (
    Fading,
    Given,
    exponential_correlation,
    rayleigh,
    rician,
    steering_line_of_sight,
)

FRAMES = 20_000
SIGMAS = 5


def drawn(model, receive=2, transmit=4, seed=1):
    return model.draw(np.random.default_rng(seed), FRAMES, receive, transmit)


def test_rayleigh_is_circular_with_unit_power():
    h = drawn(rayleigh()).reshape(FRAMES, -1)
    power = np.abs(h) ** 2
    # |h|^2 is exponential: mean 1, variance 1; E|h|^4 = 2 with variance 24 - 4 = 20.
    assert np.all(np.abs(power.mean(axis=0) - 1) < SIGMAS / np.sqrt(FRAMES))
    assert np.all(np.abs((power**2).mean(axis=0) - 2) < SIGMAS * np.sqrt(20 / FRAMES))
    assert np.all(np.abs((h**2).mean(axis=0)) < SIGMAS * np.sqrt(2 / FRAMES))


@pytest.mark.parametrize("k_db", [0.0, 7.0])
def test_fitted_rician_k(k_db):
    """Moment fit: with P = E|h|^2 and V = var |h|^2, K = sqrt(P^2 - V) / (P - sqrt(P^2 - V)).

    Moment-based estimator of L. J. Greenstein et al., IEEE Commun. Lett. 3(6), 1999 (from memory).
    """
    h = drawn(rician(k_db), 2, 2)
    power = np.abs(h) ** 2
    mean, variance = power.mean(), power.var()
    direct = np.sqrt(mean**2 - variance)
    fitted = direct / (mean - direct)
    # Spread of the estimate found from 50 disjoint parts, pooled: an honest standard error.
    parts = power.reshape(50, -1)
    direct_parts = np.sqrt(parts.mean(axis=1) ** 2 - parts.var(axis=1))
    spread = np.std(direct_parts / (parts.mean(axis=1) - direct_parts)) / np.sqrt(50)
    k = 10 ** (k_db / 10)
    assert spread < 0.05 * k
    assert abs(fitted - k) < SIGMAS * spread
    assert abs(mean - 1) < SIGMAS * np.sqrt((2 * k + 1) / (k + 1) ** 2 / power.size)


def test_rician_mean_is_the_line_of_sight():
    """Line of sight at 20 and 40 degrees from broadside: E h = sqrt(K/(K+1)) L."""
    direct = steering_line_of_sight(2, 4, 20, 40)
    h = drawn(rician(6.0, line_of_sight=3j * direct))
    k = 10**0.6
    error = np.abs(h.mean(axis=0) - np.sqrt(k / (k + 1)) * 1j * direct)
    assert np.all(error < SIGMAS * np.sqrt(1 / (k + 1) / FRAMES))
    # Half-wavelength elements: neighbours differ by pi sin(angle).
    assert np.angle(direct[0, 1]) == pytest.approx(np.pi * np.sin(np.radians(40)))


@pytest.mark.parametrize(("r", "determinant"), [(0.5, 0.421875), (0.7, 0.132651), (0.9, 0.006859)])
def test_exponential_correlation_determinant(r, determinant):
    """det = (1 - r^2)^(n-1): S. Loyka, IEEE Commun. Lett. 2001 (from memory, recomputed)."""
    assert np.linalg.det(exponential_correlation(r, 4)).real == pytest.approx(determinant, rel=1e-6)


def test_exponential_correlation_eigenvalues():
    """Eigenvalues (1 - r^2) / (1 - 2 r cos t + r^2), t the roots in (0, pi) of
    sin((n+1) t) - 2 r sin(n t) + r^2 sin((n-1) t): the Kac-Murdock-Szego matrix (from memory).
    """
    r, n = 0.7, 4

    def condition(t):
        return np.sin((n + 1) * t) - 2 * r * np.sin(n * t) + r**2 * np.sin((n - 1) * t)

    grid = np.linspace(1e-3, np.pi - 1e-3, 1000)
    signs = np.sign(condition(grid))
    places = np.flatnonzero(signs[1:] != signs[:-1])
    roots = np.array([brentq(condition, grid[i], grid[i + 1], xtol=1e-14) for i in places])
    expected = np.sort((1 - r**2) / (1 - 2 * r * np.cos(roots) + r**2))
    assert len(expected) == n
    values = np.linalg.eigvalsh(exponential_correlation(r, n))
    np.testing.assert_allclose(values, expected, rtol=1e-9)
    # A complex coefficient only turns phases: D R D^H has the same eigenvalues.
    turned = exponential_correlation(0.7j, n)
    np.testing.assert_allclose(np.linalg.eigvalsh(turned), values, atol=1e-12)


def test_kronecker_covariance_at_both_ends():
    at_receiver = exponential_correlation(0.6 * np.exp(0.5j), 3)
    at_transmitter = exponential_correlation(0.7 * np.exp(-1.1j), 4)
    model = rayleigh(receive_correlation=at_receiver, transmit_correlation=0.7 * np.exp(-1.1j))
    h = drawn(model, 3, 4).reshape(FRAMES, 12)
    covariance = h.T @ h.conj() / FRAMES
    expected = np.kron(at_receiver, at_transmitter)
    # Var of a sample covariance of CN(0, C) is C_ii C_jj / F = 1 / F.
    assert np.max(np.abs(covariance - expected)) < SIGMAS / np.sqrt(FRAMES)
    determinant = np.linalg.det(expected).real
    np.testing.assert_allclose(determinant, (1 - 0.36) ** 8 * (1 - 0.49) ** 9, rtol=1e-9)


def test_frames_are_independent_or_constant():
    h = drawn(rayleigh())
    lag = np.mean(h[1:] * h[:-1].conj(), axis=0)
    assert np.all(np.abs(lag) < SIGMAS / np.sqrt(FRAMES))
    held = drawn(rayleigh(constant=True))
    assert np.array_equal(held[0], held[-1])
    assert held.shape == h.shape


def test_given_channels_are_kept():
    rng = np.random.default_rng(0)
    one = np.array([[1, 2j], [3, 4]])
    assert np.array_equal(Given(one).draw(rng, 3, 2, 2), np.repeat(one[None], 3, axis=0))
    each = rng.standard_normal((3, 2, 2))
    assert np.array_equal(Given(each).draw(rng, 3, 2, 2), each)


@pytest.mark.parametrize(
    ("model", "message"),
    [
        (Given(np.ones((3, 2))), r"shape \(3, 2\)"),
        (Given(np.full((2, 4), np.nan)), "not finite"),
        (Fading(k_factor=-1), "Rician K"),
        (Fading(k_factor=1, line_of_sight=np.ones((2, 3))), "line of sight"),
        (Fading(k_factor=1, line_of_sight=np.zeros((2, 4))), "mean power"),
        (rayleigh(receive_correlation=1.0), "magnitude below 1"),
        (rayleigh(receive_correlation=np.eye(3)), "receive correlation"),
        (rayleigh(transmit_correlation=2 * np.eye(4)), "diagonal"),
        (rayleigh(receive_correlation=[[1, 1j], [1j, 1]]), "Hermitian"),
        (rayleigh(receive_correlation=[[1, 2], [2, 1]]), "eigenvalue"),
    ],
)
def test_bad_models_are_refused(model, message):
    with pytest.raises(InputError, match=message):
        drawn(model)
