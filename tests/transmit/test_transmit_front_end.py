"""Front-end impairments against closed forms.

Tolerances of statistical checks are 5 standard errors: a correct model with another seed would fail
with probability below 6e-7 for each figure compared.
"""

import numpy as np
import pytest
from transmit_links import make_link

from spatiq.errors import InputError
from spatiq.transmit.clipping import Clipping
from spatiq.transmit.dc_offset import DcOffset
from spatiq.transmit.dead_channel import DeadChannels
from spatiq.transmit.front_end import Context, InTurn
from spatiq.transmit.gain_steps import GainPlan, GainSteps
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.interferer import Interferer
from spatiq.transmit.inversion import SpectralInversion
from spatiq.transmit.iq_imbalance import IqImbalance
from spatiq.transmit.simulation import simulate

SIGMAS = 5
RATE = 1e6


def context(receive=2, **changes):
    return Context(RATE, receive, 3, 0, **changes)


def gaussian(receive, n, seed=1):
    rng = np.random.default_rng(seed)
    parts = rng.standard_normal((receive, 2 * n)) * np.sqrt(0.5)
    return parts.view(np.complex128).astype(np.complex64)


def quiet(**choices):
    """A noise-free recording through a flat channel, its genie symbols, and those sent."""
    given = {"samples_per_symbol": 4, "frames": 12, "snr_db": np.inf, "seed": 4}
    channels = np.array([[1.0, 1j], [0.8j, 1.0]])
    made = simulate(make_link(payload=600), channels=channels, **given, **choices)
    index = made.link.layout.payload_index
    received = genie_symbols(made.truth, made.samples())[:, index]
    return made, received, made.truth.received_symbols()[:, index]


def evm(received, sent):
    """After one complex gain for each receive channel over all frames."""
    gain = np.sum(received * sent.conj(), axis=(0, 1)) / np.sum(np.abs(sent) ** 2, axis=(0, 1))
    return np.sqrt(np.sum(np.abs(received - gain * sent) ** 2) / np.sum(np.abs(gain * sent) ** 2))


@pytest.mark.parametrize(
    ("gain_db", "phase_deg", "rejection_db"),
    [
        (0.5, 0.0, 30.8199),
        (0.0, 1.0, 41.1828),
        (0.0, 2.0, 35.1616),
        (0.5, 2.0, 29.4591),
        (1.0, 5.0, 22.8294),
    ],
)
def test_image_rejection(gain_db, phase_deg, rejection_db):
    """(1 + 2 g cos phi + g^2) / (1 - 2 g cos phi + g^2), common formula; values recomputed."""
    g, phi = 10 ** (gain_db / 20), np.radians(phase_deg)
    formula = (1 + 2 * g * np.cos(phi) + g**2) / (1 - 2 * g * np.cos(phi) + g**2)
    assert 10 * np.log10(formula) == pytest.approx(rejection_db, abs=1e-4)
    n = 4096
    tone = np.exp(2j * np.pi * 100 * np.arange(n) / n).astype(np.complex64)[None]
    made = IqImbalance(gain_db, phase_deg).begin(context(1))(tone, 0)
    lines = np.abs(np.fft.fft(made[0].astype(np.complex128))) ** 2
    # Single precision leaves -140 dB.
    assert 10 * np.log10(lines[100] / lines[-100]) == pytest.approx(rejection_db, abs=1e-3)


def test_imbalance_acts_on_q():
    """K1 x + K2 conj(x) written out: I stays; Q becomes g (Q cos phi - I sin phi)."""
    samples = gaussian(1, 100)
    made = IqImbalance(2.0, 10.0).begin(context(1))(samples.copy(), 0)
    g, phi = 10**0.1, np.radians(10.0)
    expected = samples.real + 1j * g * (samples.imag * np.cos(phi) - samples.real * np.sin(phi))
    np.testing.assert_allclose(made, expected, atol=1e-6)


def test_imbalance_is_each_channels_own():
    samples = gaussian(2, 100)
    made = IqImbalance([0.0, 1.0], [0.0, 3.0]).begin(context())(samples.copy(), 0)
    np.testing.assert_allclose(made[0], samples[0], atol=1e-6)
    assert np.max(np.abs(made[1] - samples[1])) > 0.05


def test_evm_of_imbalance():
    """Uncorrected EVM = 10^(-rejection / 20): 0.5 dB, 2 degrees: 3.3655 %. Within 2 %.

    QPSK words: conj(s) is uncorrelated with s but for 1 / sqrt(7200) of chance, which moves the EVM
    by its square.
    """
    clean = evm(*quiet()[1:])
    _, received, sent = quiet(impairments=[IqImbalance(0.5, 2.0)])
    assert clean < 0.003, "interference of the truncated pulse"
    assert evm(received, sent) == pytest.approx(0.033655, rel=0.02)


def test_evm_of_carrier_leakage():
    """Leakage of L dBc: EVM 10^(L / 20), an identity: -25 dBc gives 5.6234 %. Within 2 %.

    Relative to the payload's power at E|h|^2 = 1; these two receive channels have power 1 and 0.82.
    """
    made, received, sent = quiet(impairments=[DcOffset([-25.0, -25.0])])
    error = np.mean(np.abs(received - sent) ** 2, axis=(0, 1))
    np.testing.assert_allclose(np.sqrt(error), 0.056234, rtol=0.02)
    assert made.truth.gain == 1.0


def test_dc_offset_is_a_constant():
    samples = np.zeros((2, 10), np.complex64)
    levels = DcOffset([-20.0, -np.inf], [90.0, 0.0]).begin(context(signal_power=4.0))
    np.testing.assert_allclose(levels(samples, 0), [[0.2j] * 10, [0] * 10], atol=1e-7)


def test_inversion_mirrors_the_spectrum():
    samples = gaussian(2, 1000)
    assert np.array_equal(SpectralInversion().begin(context())(samples.copy(), 0), samples.conj())


@pytest.mark.parametrize("level_db", [-3.0, 0.0, 6.0])
def test_clipping_of_a_gaussian(level_db):
    """Bussgang 1952: gain erf(a / sqrt 2); power 1 - 2 (1 - a^2) Q(a) - 2 a phi(a) (textbook).

    n components; standard errors from the sample itself.
    """
    from scipy.stats import norm

    n = 200_000
    before = gaussian(1, n)
    power = 0.25
    before *= np.float32(np.sqrt(power))
    counter = np.zeros(1, np.int64)
    stage = Clipping(level_db, counter).begin(context(1, signal_power=0.2, noise_power=0.05))
    after = stage(before.copy(), 0)
    rms = np.sqrt(power / 2)
    a = 10 ** (level_db / 20)
    assert np.max(np.abs(after.view(np.float32))) == pytest.approx(a * rms, rel=1e-6)
    x, y = before.view(np.float32)[0] / rms, after.view(np.float32)[0] / rms
    expected = {
        "gain": (1 - 2 * norm.sf(a), x * y),
        "power": (1 - 2 * (1 - a**2) * norm.sf(a) - 2 * a * norm.pdf(a), y * y),
    }
    for value, products in expected.values():
        assert abs(products.mean() - value) < SIGMAS * products.std() / np.sqrt(2 * n)
    share = 1 - (1 - 2 * norm.sf(a)) ** 2
    spread = np.sqrt(share * (1 - share) / n)
    assert abs(counter[0] / n - share) < SIGMAS * spread


def test_clipping_is_counted_in_a_recording():
    """Samples with a component at the level, counted anew in each pass."""
    made = simulate(make_link(), samples_per_symbol=4, frames=9, impairments=[Clipping(3.0)])
    parts = np.abs(made.samples().view(np.float32).reshape(2, -1, 2))
    expected = (parts == parts.max()).any(axis=2).sum(axis=1)
    made.samples()
    assert np.all(expected > 0)
    assert np.array_equal(made.limited, expected)
    assert not made.clipped.any()


def test_interferer_is_a_tone_with_a_signature():
    """Frequency, power and signature read off by correlation: exact but for single precision."""
    n = 10_000
    tone = Interferer(1.25e5, -6.0, [2.0, 1j]).begin(context(signal_power=3.0))
    silence = np.zeros((2, n), np.complex64)
    made = np.concatenate([tone(silence[:, :6001].copy(), 0), tone(silence[:, 6001:], 6001)], 1)
    amplitudes = np.mean(made * np.exp(-2j * np.pi * 0.125 * np.arange(n)), axis=1)
    size = np.sqrt(3.0 * 10**-0.6 / 2.5)
    np.testing.assert_allclose(amplitudes, size * np.array([2.0, 1j]), rtol=1e-5)
    drawn = Interferer(1e5, 0.0).begin(context(4))(np.zeros((4, 8), np.complex64), 0)
    np.testing.assert_allclose(np.abs(drawn), 1.0, rtol=1e-5)
    assert len(np.unique(np.round(np.angle(drawn[:, 0]), 3))) == 4


def test_interferer_power_is_relative_to_payload():
    """Same tone with and without a converter: the same ratio to the signal."""
    link = make_link()
    choices = {"samples_per_symbol": 4, "frames": 3, "snr_db": 30.0, "seed": 2}
    tone = [Interferer(-7e5, -3.0, [1, 1])]
    levels = []
    for more in ({}, {"datatype": "ci16_le"}):
        plain = simulate(link, **choices, **more)
        heard = simulate(link, arriving=tone, **choices, **more)
        added = heard.samples() - plain.samples()
        levels.append(np.mean(np.abs(added) ** 2) / plain.truth.gain**2)
    # Payload power 1 at the symbols is 1/4 at the samples.
    np.testing.assert_allclose(levels, 10**-0.3 / 4, rtol=1e-3)


def test_dead_channel_from_an_instant_on():
    samples = gaussian(3, 1000)
    stage = DeadChannels((1,), 0.0007).begin(context(3))
    made = np.concatenate(
        [stage(samples[:, :650].copy(), 0), stage(samples[:, 650:].copy(), 650)], 1
    )
    assert not made[1, 700:].any()
    assert np.array_equal(made[1, :700], samples[1, :700])
    assert np.array_equal(made[[0, 2]], samples[[0, 2]])


def test_gain_steps_between_and_within_frames():
    """Ratio of samples with and without steps, frame by frame."""
    link = make_link(payload=200)
    choices = {"samples_per_symbol": 4, "frames": 5, "spacing": 60.0, "snr_db": 15.0, "seed": 6}
    plain = simulate(link, **choices)
    stepped = simulate(link, gains=GainPlan(((1, 6.0), (2.5, -12.0))), **choices)
    ratio = np.abs(stepped.samples()[0] / plain.samples()[0])
    starts, length = plain.truth.starts, link.layout.length * 4
    places = [0, *(int(np.ceil(p)) for p in (starts[1] - 32, starts[2] + length / 2)), len(ratio)]
    for begin, end, level in zip(places[:-1], places[1:], (0.0, 6.0, -6.0), strict=True):
        np.testing.assert_allclose(ratio[begin + 1 : end - 1], 10 ** (level / 20), rtol=1e-4)
    steps = stepped.truth.gain_steps
    np.testing.assert_allclose(steps.at(np.array([0, places[1] + 1])), [1, 10**0.3])


def test_gain_steps_do_not_see_chunks():
    steps = GainSteps(np.array([10, 60]), np.array([2.0, 0.5]))
    stage = steps.begin(context(1))
    ones = np.ones((1, 100), np.complex64)
    made = np.concatenate([stage(ones[:, :40].copy(), 0), stage(ones[:, 40:].copy(), 40)], axis=1)
    assert np.array_equal(made[0], np.repeat([1, 2, 0.5], [10, 50, 40]))
    none = GainPlan().placed(np.array([5.0]), 10.0, 2.0, np.random.default_rng(0))
    assert np.array_equal(none.at(np.arange(4)), np.ones(4))


def test_each_frame_draws_its_gain():
    """Uniform in +-4 dB: mean square 16 / 3 of 400 frames within 5 standard errors."""
    link = make_link(payload=4)
    plan = GainPlan(each_frame_db=4.0)
    truth = simulate(link, samples_per_symbol=4, frames=400, spacing=40.0, gains=plan).truth
    levels = 20 * np.log10(truth.gain_steps.factors)
    assert np.all(np.abs(levels) <= 4 + 1e-9)
    # Variance of x^2 for uniform x in +-4: 256 (1/5 - 1/9).
    spread = np.sqrt(256 * (1 / 5 - 1 / 9) / 400)
    assert abs(np.mean(levels**2) - 16 / 3) < SIGMAS * spread
    assert np.all(truth.gain_steps.places <= truth.starts)
    assert np.all(truth.gain_steps.places[1:] > truth.starts[:-1])


def test_gain_steps_draw_no_noise_of_their_own():
    """Before the first step nothing changes: the noise keeps its numbers."""
    choices = {"samples_per_symbol": 4, "frames": 4, "seed": 1}
    plain = simulate(make_link(), **choices)
    stepped = simulate(make_link(), gains=GainPlan(((3, 3.0),)), **choices)
    before = int(plain.truth.starts[3]) - 40
    assert np.array_equal(plain.samples()[:, :before], stepped.samples()[:, :before])


def test_parts_in_turn():
    samples = gaussian(2, 50)
    factors = GainSteps(np.array([10]), np.array([2.0]))
    both = InTurn((SpectralInversion(), factors)).begin(context())(samples.copy(), 0)
    expected = samples.conj() * np.where(np.arange(50) < 10, 1, 2)
    np.testing.assert_allclose(both, expected, rtol=1e-6)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("impairment", "message"),
    [
        (DcOffset([1.0, 2.0, 3.0]), "one for each of 2"),
        (DcOffset(np.nan), "DC offset"),
        (DcOffset(61.0), "60 dB"),
        (IqImbalance(21.0), "gain"),
        (IqImbalance(0.0, 50.0), "phase"),
        (IqImbalance(np.inf), "finite"),
        (Clipping(100.0), "clipping"),
        (Interferer(6e5, 0.0), "frequency"),
        (Interferer(0.0, 101.0), "power"),
        (Interferer(0.0, 0.0, [0, 0]), "not all 0"),
        (Interferer(0.0, 0.0, [1]), "signature"),
        (DeadChannels((2,)), "receive channels 0 to 1"),
        (DeadChannels((0,), -1.0), "time"),
    ],
)
def test_bad_values_are_refused(impairment, message):
    with pytest.raises(InputError, match=message):
        impairment.begin(context())


@pytest.mark.parametrize(
    ("plan", "message"),
    [
        (GainPlan(((5, 1.0),)), "below 5 frames"),
        (GainPlan(((-0.1, 1.0),)), "place"),
        (GainPlan(((1, 200.0),)), "100 dB"),
        (GainPlan(each_frame_db=-1.0), "each frame"),
    ],
)
def test_bad_plans_are_refused(plan, message):
    with pytest.raises(InputError, match=message):
        simulate(make_link(), samples_per_symbol=4, frames=5, gains=plan)
