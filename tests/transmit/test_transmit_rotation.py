"""Drift and phase noise against closed forms.

Tolerances are 5 standard errors (false failure below 6e-7 for each figure), unless stated.
"""

import numpy as np
import pytest
from scipy.signal import welch
from transmit_links import make_link

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.phase_noise_mask import PhaseNoiseMask
from spatiq.transmit.rotation import CarrierDrift, Rotated, WienerPhaseNoise, phase_chunks
from spatiq.transmit.simulation import simulate

SIGMAS = 5
RATE = 1e6
MASK = PhaseNoiseMask(((2e3, -70.0), (2e4, -90.0), (2e5, -100.0)))


def phases(rotation, n, seed=1):
    return np.concatenate(list(phase_chunks([rotation], RATE, seed, n)))


def test_drift_turns_the_whole_recording():
    """exp(j pi rate t^2) on every sample, through frames and silences alike."""
    choices = {"samples_per_symbol": 4.0, "frames": 4, "snr_db": np.inf, "spacing": 7.3, "seed": 2}
    still = simulate(make_link(), cfo_hz=500.0, **choices)
    moved = simulate(make_link(), cfo_hz=500.0, drift_hz_per_s=4e7, **choices)
    seconds = np.arange(still.n_samples) / 4e6
    turn = np.exp(1j * np.pi * 4e7 * seconds**2)
    np.testing.assert_allclose(moved.samples(), still.samples() * turn, atol=2e-6)
    truth = moved.truth
    assert truth.drift_hz_per_s == 4e7
    np.testing.assert_allclose(truth.cfo_at_start_hz, 500 + 4e7 * truth.starts / 4e6)


@pytest.mark.parametrize("share", [0.25, -0.25])
def test_offset_of_a_quarter_of_the_symbol_rate(share):
    """With the true carrier taken out nothing is left but the pulse's own interference, -49 dB."""
    choices = {"samples_per_symbol": 2.0, "frames": 4, "snr_db": np.inf, "seed": 2}
    made = simulate(make_link(), cfo_hz=share * 1e6, drift_hz_per_s=1e6, **choices)
    sent = made.truth.received_symbols()
    error = genie_symbols(made.truth, made.samples()) - sent
    assert np.mean(np.abs(error) ** 2) < 10**-4.5 * np.mean(np.abs(sent) ** 2)


@pytest.mark.parametrize("ppm", [100.0, -100.0])
@pytest.mark.parametrize("common", [True, False])
def test_clock_offset_of_100_ppm(ppm, common):
    """Alone, or from one reference with the carrier: 100 ppm of 2.4 GHz are 240 kHz.

    By the end of 2031 symbols the instants have moved by a fifth of a symbol.
    """
    offsets = {"reference_ppm": -ppm} if common else {"clock_ppm": ppm, "cfo_hz": 1e4}
    choices = {"samples_per_symbol": 2.0, "frames": 2, "snr_db": np.inf, "seed": 2}
    made = simulate(make_link(payload=2000), **offsets, **choices)
    truth = made.truth
    assert truth.cfo_hz[0] == pytest.approx(-ppm * 2400 if common else 1e4)
    assert truth.spacing == pytest.approx(2 * (1 + ppm * 1e-6), abs=1e-7)
    sent = truth.received_symbols()
    error = genie_symbols(truth, made.samples()) - sent
    assert np.mean(np.abs(error) ** 2) < 10**-4.5 * np.mean(np.abs(sent) ** 2)


@pytest.mark.parametrize("lag", [1, 1000])
def test_wiener_increments(lag):
    """Variance 2 pi linewidth t (Demir et al. 2000), with chunk borders in between."""
    n, linewidth = 400_000, 40.0
    phase = phases(WienerPhaseNoise(linewidth), n)
    assert phase[0] == 0.0
    moved = np.diff(phase[::lag])
    expected = 2 * np.pi * linewidth * lag / RATE
    assert abs(np.mean(moved**2) / expected - 1) < SIGMAS * np.sqrt(2 / len(moved))
    assert abs(np.mean(moved)) < SIGMAS * np.sqrt(expected / len(moved))


def test_wiener_coherence():
    """Mean of exp(j (phase(t) - phase(0))) is exp(-pi linewidth t): the Lorentzian line."""
    n, linewidth, t = 400_000, 2e3, 100
    phase = phases(WienerPhaseNoise(linewidth), n, seed=4)
    turned = np.cos(np.diff(phase[::t]))
    spread = turned.std() / np.sqrt(len(turned))
    assert abs(turned.mean() - np.exp(-np.pi * linewidth * t / RATE)) < SIGMAS * spread


def test_mask_density():
    """Welch estimate in bands of +-10 % against the mask, between and beyond its points.

    Relative standard error 1 / sqrt(bins * segments) for unwindowed segments, at most 1.5 times
    that with a Hann window; 3 % for the density's bend inside a band and the window's leakage.
    """
    n, size = 1 << 21, 1 << 14
    phase = phases(MASK, n)
    frequency, density = welch(phase, RATE, "hann", size, 0, detrend=False)
    expected = {
        800.0: -70.0,
        6e3: -70 - 20 * np.log10(3),
        6e4: -90 - 10 * np.log10(3),
        4e5: -100.0,
    }
    for place, level in expected.items():
        band = np.abs(frequency / place - 1) <= 0.1
        # Welch's density is one-sided: twice the L of the mask.
        measured = np.mean(density[band]) / 2
        tolerance = SIGMAS * 1.5 / np.sqrt(np.count_nonzero(band) * (n // size)) + 0.03
        assert abs(measured / 10 ** (level / 10) - 1) < tolerance


def test_mask_power():
    """Variance = twice the integral of L: straight lines over log f integrate in closed form."""

    def line(f1, f2, l1, l2):
        p = -(l2 - l1) / 10 / np.log10(f2 / f1)
        start = 10 ** (l1 / 10)
        if abs(p - 1) < 1e-12:
            return start * f1 * np.log(f2 / f1)
        return start * f1**p * (f2 ** (1 - p) - f1 ** (1 - p)) / (1 - p)

    one_side = 2e3 * 1e-7 + line(2e3, 2e4, -70, -90) + line(2e4, 2e5, -90, -100) + 3e5 * 1e-10
    taps = MASK.taps(RATE)
    # 1 %: the sum over bins of 244 Hz against the integral; the corner at 2 kHz is 8 bins away.
    assert np.sum(taps**2) == pytest.approx(2 * one_side, rel=0.01)
    np.testing.assert_allclose(taps, taps[::-1], atol=1e-12)


def test_mask_is_stationary_and_seamless():
    """Power of the first sample over seeds; chunks joined equal the direct convolution."""
    deviation = np.sqrt(np.sum(MASK.taps(RATE) ** 2))
    first = [MASK.begin(Context(RATE, 1, seed, 0))(0, 4)[0] for seed in range(800)]
    assert abs(np.mean(np.square(first)) / deviation**2 - 1) < SIGMAS * np.sqrt(2 / 800)
    context = Context(RATE, 1, 7, 0)
    turning = MASK.begin(context)
    made = np.concatenate([turning(0, 3000), turning(3000, 500)])
    taps = MASK.taps(RATE)
    driven = [
        context.generator(1 << 62).standard_normal(len(taps) - 1),
        context.generator(0).standard_normal(3000),
        context.generator(3000).standard_normal(500),
    ]
    expected = np.convolve(np.concatenate(driven), taps, "valid")
    np.testing.assert_allclose(made, expected, atol=1e-12)


@pytest.mark.parametrize(("degrees", "value"), [(1.0, 0.0174526), (3.0, 0.0523419)])
def test_error_of_gaussian_phase(degrees, value):
    """rms |exp(j phi) - 1| = sqrt(2 - 2 exp(-sigma^2 / 2)), derived; flat mask of that power.

    Relative standard error of the mean square of n Gaussian phases sqrt(2 / n).
    """
    sigma = np.radians(degrees)
    assert np.sqrt(2 - 2 * np.exp(-(sigma**2) / 2)) == pytest.approx(value, rel=1e-5)
    level = 10 * np.log10(sigma**2 / RATE)
    stage = Rotated([PhaseNoiseMask(((1e3, level),))]).begin(Context(RATE, 2, 3, 0))
    made = stage(np.ones((2, 60_000), np.complex64), 0)
    error = np.sqrt(np.mean(np.abs(made - 1) ** 2))
    assert abs(error / value - 1) < SIGMAS * np.sqrt(2 / 60_000) / 2
    assert np.array_equal(made[0], made[1]), "common to all receive channels"


def test_genie_takes_phase_noise_out():
    choices = {"samples_per_symbol": 4.0, "frames": 10, "snr_db": np.inf, "seed": 3}
    rotations = [WienerPhaseNoise(300.0), MASK]
    made = simulate(make_link(), phase_noise=rotations, cfo_hz=1e3, **choices)
    sent = made.truth.received_symbols()
    error = genie_symbols(made.truth, made.samples()) - sent
    assert np.mean(np.abs(error) ** 2) < 10**-4.5 * np.mean(np.abs(sent) ** 2)
    still = simulate(make_link(), cfo_hz=1e3, **choices)
    turned = np.angle(np.sum(made.samples() * still.samples().conj(), axis=0))
    kept = np.sum(np.abs(still.samples()) ** 2, axis=0) > 1e-3
    common = np.concatenate(list(made.truth.common_phase(made.n_samples)))
    error = np.angle(np.exp(1j * (turned - common)))
    assert np.max(np.abs(error[kept])) < 1e-4


def test_phase_noise_leaves_noise_alone():
    """Before the first frame there is only noise, and that has its own random numbers."""
    choices = {"samples_per_symbol": 4.0, "frames": 2, "lead_in": 500, "seed": 3}
    plain = simulate(make_link(), **choices).samples()
    turned = simulate(make_link(), phase_noise=[WienerPhaseNoise(1e3)], **choices).samples()
    assert np.array_equal(plain[:, :1900], turned[:, :1900])
    assert not np.array_equal(plain[:, 2000:], turned[:, 2000:])


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"drift_hz_per_s": np.inf}, "drift"),
        ({"drift_hz_per_s": 1e13}, "drift"),
        ({"drift_hz_per_s": 5e9}, "in the end"),
        ({"phase_noise": [WienerPhaseNoise(-1.0)]}, "linewidth"),
        ({"phase_noise": [PhaseNoiseMask(())]}, "mask"),
        ({"phase_noise": [PhaseNoiseMask(((1e3, -80.0), (1e2, -90.0)))]}, "ascending"),
        ({"phase_noise": [PhaseNoiseMask(((1e3, 3.0),))]}, "dBc"),
        ({"phase_noise": [PhaseNoiseMask(((1e3, -80.0), (3e6, -90.0)))]}, "half the sample rate"),
        ({"phase_noise": [PhaseNoiseMask(((1.0, -80.0), (1e3, -90.0)))]}, "offsets from"),
    ],
)
def test_bad_rotations_are_refused(choices, message):
    with pytest.raises(InputError, match=message):
        next(simulate(make_link(), samples_per_symbol=4, **choices).blocks())
    with pytest.raises(InputError, match="drift"):
        CarrierDrift(np.nan).begin(Context(RATE, 1, 0, 0))
