"""EVM that impairments cause, and bounds of estimators: published values and independent means."""

import numpy as np
import pytest
from scipy.integrate import quad

from spatiq.errors import InputError
from spatiq.metrics import estimator_bounds as bounds
from spatiq.metrics import evm_theory as theory
from spatiq.signal.constellations import named

pytestmark = pytest.mark.nojit


# Common formula, computed independently to the digits shown.
@pytest.mark.parametrize(
    ("gain_db", "phase_deg", "rejection_db"),
    [(0.5, 0, 30.8199), (0, 1, 41.1828), (0, 2, 35.1616), (0.5, 2, 29.4591), (1, 5, 22.8294)],
)
def test_image_rejection(gain_db, phase_deg, rejection_db):
    found = 10 * np.log10(theory.image_rejection(gain_db, phase_deg))
    assert found == pytest.approx(rejection_db, abs=6e-5)


def test_no_imbalance_has_no_image():
    assert theory.image_rejection(0.0, 0.0) == np.inf
    assert theory.imbalance_evm(0.0, 0.0) == 0.0


def test_impairments():
    """Derived in closed form from the definitions; percent to the digits shown."""
    assert 100 * theory.imbalance_evm(0.5, 2) == pytest.approx(3.3655, abs=6e-5)
    assert 100 * theory.leakage_evm(-25) == pytest.approx(5.6234, abs=6e-5)
    np.testing.assert_allclose(100 * theory.phase_noise_evm([1, 3]), [1.74526, 5.23419], atol=6e-6)
    found = 100 * theory.residual_offset_evm([0.05, 0.1])
    np.testing.assert_allclose(found, [9.0914, 18.3189], atol=6e-5)
    assert 100 * theory.data_aided_evm(100.0) == pytest.approx(10.0, rel=1e-12)
    assert theory.data_aided_evm(100.0, 4) == pytest.approx(0.1 * np.sqrt(0.75), rel=1e-12)
    assert theory.sine_quantisation_snr_db(8) == pytest.approx(6.0206 * 8 + 1.7609, abs=5e-4)


@pytest.mark.parametrize(("size", "name"), [(4, "QPSK"), (16, "16QAM"), (64, "64QAM")])
@pytest.mark.parametrize("snr_db", [0.0, 8.0, 15.0, 30.0])
def test_decision_directed_evm_by_integration(size, name, snr_db):
    """Mahmoud & Arslan against the integral of the squared distance to the nearest point, per
    axis."""
    snr = 10 ** (snr_db / 10)
    levels = np.unique(np.round(named(name).points.real, 12))
    sigma = np.sqrt(0.5 / snr)
    edges = np.concatenate([[-np.inf], (levels[1:] + levels[:-1]) / 2, [np.inf]])
    total = 0.0
    for sent in levels:
        for nearest, lower, upper in zip(levels, edges[:-1], edges[1:], strict=True):
            low, high = max(lower, sent - 9 * sigma), min(upper, sent + 9 * sigma)
            if low < high:
                total += quad(
                    lambda v, s=sent, d=nearest: (
                        (v - d) ** 2 * np.exp(-0.5 * ((v - s) / sigma) ** 2)
                    ),
                    low,
                    high,
                )[0] / (sigma * np.sqrt(2 * np.pi))
    expected = np.sqrt(2 * total / levels.size)
    assert theory.decision_directed_evm(size, snr) == pytest.approx(expected, rel=1e-6)


def test_decision_directed_evm_is_optimistic_at_low_snr_only():
    """Trap: below some SNR it lies under the data-aided figure, above they agree."""
    assert theory.decision_directed_evm(16, 10.0) < 0.9 * theory.data_aided_evm(10.0)
    assert theory.decision_directed_evm(16, 1e3) == pytest.approx(1e-1 / np.sqrt(10), rel=1e-6)
    with pytest.raises(InputError, match="square QAM size"):
        theory.decision_directed_evm(8, 10.0)


# Rife & Boorstyn 1974; D'Andrea, Mengali & Reggiannini 1994; computed values to the digits shown.
def test_published_standard_deviations():
    snr = 10.0
    assert np.sqrt(bounds.tone_frequency(64, snr)) == pytest.approx(2.408124e-4, rel=1e-6)
    assert np.sqrt(bounds.modified_offset(100, snr)) == pytest.approx(1.232809e-4, rel=1e-6)
    assert np.sqrt(bounds.modified_phase(100, snr)) == pytest.approx(2.236068e-2, rel=1e-6)
    assert np.sqrt(bounds.modified_timing(100, snr, 0.25)) == pytest.approx(1.211482e-2, rel=1e-6)


def test_tone_bounds_by_inverting_the_fisher_information():
    n, snr = 64, 10.0
    t = np.arange(n)
    tone = np.ones(n)
    gradient = np.array([1j * tone, 2j * np.pi * t * tone])  # phase, frequency
    information = 2 * snr * np.real(gradient @ gradient.conj().T)
    inverse = np.linalg.inv(information)
    assert bounds.tone_phase(n, snr) == pytest.approx(inverse[0, 0], rel=1e-9)
    assert bounds.tone_frequency(n, snr) == pytest.approx(inverse[1, 1], rel=1e-9)
    known = bounds.tone_phase(n, snr, frequency_known=True)
    assert known == pytest.approx(1 / information[0, 0], rel=1e-9)


# Mengali & D'Andrea 1997, closed form and spectral integral.
@pytest.mark.parametrize(
    ("rolloff", "xi"),
    [(0.22, 0.0856254), (0.25, 0.0862932), (0.35, 0.0891346), (0.5, 0.0951727)],
)
def test_mean_square_bandwidth(rolloff, xi):
    def spectrum(f):
        flat, end = (1 - rolloff) / 2, (1 + rolloff) / 2
        if f <= flat:
            return 1.0
        return 0.5 * (1 + np.cos(np.pi / rolloff * (f - flat))) if f < end else 0.0

    corner = (1 - rolloff) / 2
    integral, _ = quad(lambda f: 2 * f * f * spectrum(f), 0, 1, points=[corner, 1 - corner])
    found = bounds.rrc_mean_square_bandwidth(rolloff)
    assert found == pytest.approx(xi, abs=6e-8)
    assert found == pytest.approx(integral, rel=1e-7)


def test_two_block_estimator_lies_four_thirds_above_its_bound():
    """Moose 1994: 1/(4 pi^2 L^3 SNR) against 2L samples of a tone, many samples."""
    quotient = bounds.two_block_offset(1000, 10.0) / bounds.tone_frequency(2000, 10.0)
    assert quotient == pytest.approx(4 / 3, rel=1e-5)


def test_least_squares_channel_and_noise_variance():
    """Biguesh & Gershman 2006. 4000 trials; 5 sigmas of a chi-square mean: false failure 6e-7."""
    rng = np.random.default_rng(8)
    trials, n0 = 4000, 0.3
    pilots = rng.choice([-1.0, 1.0], (2, 8)) + 1j * rng.choice([-1.0, 1.0], (2, 8))
    expected = bounds.least_squares_channel(pilots, n0)
    noise = rng.standard_normal((trials, 8)) + 1j * rng.standard_normal((trials, 8))
    noise *= np.sqrt(n0 / 2)
    error = noise @ np.linalg.pinv(pilots)
    np.testing.assert_allclose(
        np.mean(np.abs(error) ** 2, axis=0), expected, rtol=5 / np.sqrt(trials)
    )
    residual = noise - error @ pilots
    estimate = np.sum(np.abs(residual) ** 2, axis=1) / (8 - 2)
    assert estimate.mean() == pytest.approx(n0, abs=5 * n0 / np.sqrt(6 * trials))
    # Variance of a sample variance of a gamma(6) law: kurtosis 3 + 1 -> relative std
    # sqrt(3/trials).
    expected_variance = bounds.noise_variance(n0, 8, 2)
    assert estimate.var() == pytest.approx(expected_variance, rel=5 * np.sqrt(3 / trials))
    single = bounds.least_squares_channel(np.ones((1, 16)), n0)
    assert single[0] == pytest.approx(n0 / 16, rel=1e-12)
