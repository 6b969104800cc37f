"""Receive channels of different delay: found, taken out, told; clean frames left alone."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from received_frames import bit_errors, genie_words, record
from receiver_cases import IN_TURN, SYNC, complex_noise, make_link, parts_of, payload_section

from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.alignment_kernels import delay_scores
from spatiq.receiver.delay_evidence import CHANCE, EvidenceScale, delay_evidence, evidence_scale
from spatiq.receiver.fractional_delay import advanced
from spatiq.receiver.pulse_correlation import pulse_correlation
from spatiq.signal.pulses import root_raised_cosine

PILOTS = IN_TURN.replace("length = 16", "length = 17")


def link_of(antennas=4, payload=800, rolloff=0.25):
    pulse = f'shape = "root-raised-cosine"\nrolloff = {rolloff}\nspan_symbols = 24'
    return make_link(
        antennas=antennas, pulse=pulse, sections=SYNC + PILOTS + payload_section(payload)
    )


@pytest.mark.nojit
def test_pulse_correlation_is_the_raised_cosine():
    """Raised cosine of roll-off a (Proakis, Digital Communications, ch. 9; from memory): sinc(t)
    cos(pi a t) / (1 - (2 a t)^2); its curvature at 0 is 4 pi^2 xi, xi = 1/12 + a^2 (1/4 - 2/pi^2)
    (Mengali and D'Andrea 1997, from memory). Tolerance: the pulse's truncation to 48 symbols."""
    a = 0.25
    g = pulse_correlation(root_raised_cosine(a, 48.0), 4.0)
    t = np.array([0.0, 0.3, 0.5, 1.0, 1.37, 2.0, 5.5, -0.3])
    expected = np.sinc(t) * np.cos(np.pi * a * t) / (1 - (2 * a * t + 1e-9) ** 2)
    expected[5] = 0.0  # the quotient is 0/0 at t = 2
    np.testing.assert_allclose(g.at(g.value, t), expected, atol=1e-4)
    xi = 1 / 12 + a * a * (0.25 - 2 / np.pi**2)
    assert g.at(g.bend, np.zeros(1))[0] == pytest.approx(4 * np.pi**2 * xi, rel=1e-3)
    slope = (g.at(g.value, t + 1e-4) - g.at(g.value, t - 1e-4)) / 2e-4
    np.testing.assert_allclose(g.at(g.slope, t), slope, atol=1e-5)
    assert g.at(g.value, np.array([60.0]))[0] == 0.0


@pytest.mark.nojit
def test_a_tone_is_advanced_exactly():
    """Away from the window's ends: the tails of the fraction's filter meet zeros there."""
    n = np.arange(2000)
    delays = np.array([0.0, 3.0, -1.37, 0.5])
    tones = np.exp(2j * np.pi * 0.11 * (n - delays[:, None]))
    planes = np.stack([tones.real, tones.imag], axis=1).astype(np.float32)
    moved = advanced(planes, delays)
    seen = moved[:, 0] + 1j * moved[:, 1]
    middle = slice(900, 1100)
    np.testing.assert_allclose(seen[:, middle], tones[[0] * 4][:, middle], atol=2e-3)
    np.testing.assert_array_equal(moved[1, :, 100:-100], planes[0, :, 100:-100])


def plain_scores(y, reference, mean, channel, active, slope):
    """The kernel's definition, one symbol and neighbour at a time."""
    score = np.zeros(channel.shape)
    energy = np.zeros(channel.shape)
    place = {int(k): i for i, k in enumerate(active)}
    for i, k in enumerate(active):
        for m in (-1, 1):
            j = place.get(int(k) + m)
            if j is None:
                continue
            contribution = channel * mean[i]  # (Nr, Nt)
            error = (y - reference)[j]
            score += -slope * m * np.real(contribution.conj() * error[:, None])
            energy += slope**2 * np.abs(contribution) ** 2
    return score, energy


@pytest.mark.nojit
def test_delay_scores_are_those_of_the_definition():
    rng = np.random.default_rng(4)
    active = np.array([0, 1, 2, 5, 6, 9, 10, 11])
    channel = complex_noise(rng, (3, 4), 1.0)
    mean = complex_noise(rng, (8, 4), 1.0) * (rng.random((8, 4)) < 0.4)
    y, reference = complex_noise(rng, (8, 3), 1.0), mean @ channel.T
    score, energy = np.zeros((2, 3, 4))
    delay_scores(
        parts_of(y), parts_of(reference), mean.astype(np.complex64), channel, active, -0.9,
        score, energy,
    )  # fmt: skip
    expected = plain_scores(y, reference, mean, channel, active, -0.9)
    np.testing.assert_allclose(score, expected[0], atol=1e-5)
    np.testing.assert_allclose(energy, expected[1], atol=1e-5)


@pytest.mark.nojit
def test_evidence_has_the_chance_that_it_states():
    """Scores of pure noise: the statistic is chi-square of n - 1. Kolmogorov-Smirnov at 1e-4 on
    3,000 frames: fails once in 10,000 seeds."""
    rng = np.random.default_rng(8)
    energy = rng.uniform(500.0, 2000.0, (3000, 3, 4))
    noise = rng.uniform(0.5, 2.0, (3000, 3))
    score = rng.standard_normal(energy.shape) * np.sqrt(noise[:, :, None] / 2 * energy)
    for axis, freedom in ((1, 2), (2, 3)):
        found = delay_evidence(score, energy, noise, EvidenceScale(1.0, 1000.0), axis)
        assert scipy.stats.kstest(scipy.stats.chi2(freedom).sf(found.loss), "uniform").pvalue > 1e-4
        assert found.significant.mean() < 0.01
        scaled = found.delay / np.sqrt(found.variance)
        assert np.std(scaled) == pytest.approx(1.0, abs=0.05)  # 3,000 x 3 values: 4 sigmas 0.03
    assert CHANCE == 1e-6


@pytest.mark.nojit
def test_evidence_leaves_dead_and_doubtful_channels_out():
    energy = np.full((1, 3, 2), 1000.0)
    energy[0, 1] = 0.0
    noise = np.array([[1.0, 0.0, 1.0]])
    score = energy * np.array([0.2, 0.0, -0.2])[None, :, None]
    found = delay_evidence(score, energy, noise, EvidenceScale(1.0, 1000.0), 1)
    np.testing.assert_allclose(found.delay, [[0.2, np.nan, -0.2]])
    assert found.significant[0]


def test_loss_is_the_interference_of_a_small_delay():
    """Channels d late and early leave d^2 sum g'(m)^2 of interference per unit signal."""
    g = pulse_correlation(root_raised_cosine(0.25, 24.0), 4.0)
    d, periods, noise = 0.01, 1000, 0.1
    energy = np.full((1, 2, 1), 2 * g.slope_at(1.0) ** 2 * periods)
    score = energy * np.array([d, -d])[None, :, None]
    found = delay_evidence(score, energy, np.full((1, 2), noise), evidence_scale(g, periods, 2), 1)
    lags = np.arange(1.0, 24.0)
    left = np.sum(g.at(g.value, lags + d) ** 2 + g.at(g.value, -lags + d) ** 2) / noise
    floor = np.sum(2 * g.at(g.value, lags) ** 2) / noise
    assert found.loss[0] == pytest.approx(left - floor, rel=0.02)


CASES = {
    "quarter of a sample": ((0.0, 0.25), {"snr_db": 14.0}),
    "one and a half": ((0.0, 1.5), {"snr_db": 14.0}),
    "a symbol apart": ((-2.0, 2.0), {"snr_db": 14.0}),
    "low SNR": ((-1.0, 0.3, 2.0), {"snr_db": 4.0}),
    "1.25 samples per symbol": ((-2.0, 2.0), {"snr_db": 14.0, "samples_per_symbol": 1.25}),
}


@pytest.mark.parametrize("case", CASES)
def test_errors_are_nearly_those_of_a_genie_that_knows_the_delays(tmp_path, case):
    """At most 15 % more wrong bits than the genie's, plus four times the square root of their
    number (both err on the same noise, so that their difference scatters far less)."""
    delays, choices = CASES[case]
    settings = {"samples_per_symbol": 4.0} | choices
    link = link_of()
    recording, capture = record(
        tmp_path, link, receive_channels=len(delays), receive_delays=delays, frames=40,
        cfo_hz=(-5e3, 5e3), clock_ppm=11.0, seed=5, **settings,
    )  # fmt: skip
    (measured,) = measure(recording, link)
    truth = capture.truth
    assert measured.count == truth.frames
    wrong = bit_errors(link, measured.words_decided, truth.words())
    best = bit_errors(link, genie_words(capture), truth.words())
    assert best > 50
    assert wrong < 1.15 * best + 4 * np.sqrt(best)
    # Delays as told: against the mean, with the uncertainty stated. 40 frames: four sigmas 0.45.
    paths = measured.paths
    error = paths.receive_delay - (np.array(delays) - np.mean(delays))
    scaled = error[:, 0] / paths.receive_delay_std[:, 0]
    assert np.sqrt(np.mean(scaled**2)) == pytest.approx(1.0, abs=0.45)
    summary = Summary(link)
    summary.add(measured)
    for r, row in enumerate(summary.as_dict()["receive_channels"]):
        off = row["delay_samples"] - (delays[r] - np.mean(delays))
        assert abs(off) < 4.5 * row["delay_std_samples"]
        assert row["delay_ns"] == pytest.approx(row["delay_samples"] * 1e9 / recording.sample_rate)


@pytest.mark.parametrize("choices", [{"snr_db": 12.0}, {"snr_db": 45.0, "clock_ppm": 40.0}])
def test_channels_in_step_are_left_alone(tmp_path, choices):
    """60 frames at 1e-6 each: fails once in 16,000 seeds."""
    link = link_of()
    recording, _ = record(
        tmp_path, link, receive_channels=3, samples_per_symbol=4.0, frames=60, seed=2, **choices
    )
    (measured,) = measure(recording, link)
    assert not np.any(measured.columns["marks"] & Mark.RECEIVE_DELAYS)
    scaled = measured.paths.receive_delay / measured.paths.receive_delay_std
    assert 0.7 < np.sqrt(np.mean(scaled**2)) < 1.2


def test_uneven_gain_and_noise_pass_for_no_delay(tmp_path):
    link = link_of()
    recording, capture = record(
        tmp_path, link, receive_channels=3, receive_gains=(1.0, 0.3, 2.0j), snr_db=12.0,
        samples_per_symbol=4.0, frames=40, seed=4,
    )  # fmt: skip
    (measured,) = measure(recording, link)
    assert not np.any(measured.columns["marks"] & Mark.RECEIVE_DELAYS)
    summary = Summary(link)
    summary.add(measured)
    rows = summary.as_dict()["receive_channels"]
    noise = np.array([row["noise_power"] for row in rows])
    expected = capture.truth.N0 * np.array([1.0, 0.09, 4.0]) * 3 / 5.09
    np.testing.assert_allclose(noise, expected, rtol=0.03)


def test_a_dead_channel_is_named(tmp_path):
    """One channel all zero, one noise alone."""
    link = link_of()

    def spoiled(capture):
        samples = capture.samples()
        rng = np.random.default_rng(1)
        samples[1] = 0
        samples[3] = complex_noise(rng, samples[3].shape, capture.truth.N0)
        return samples

    recording, _ = record(
        tmp_path, link, samples=spoiled, receive_channels=4, snr_db=14.0,
        samples_per_symbol=4.0, frames=20, seed=5,
    )  # fmt: skip
    (measured,) = measure(recording, link)
    summary = Summary(link)
    summary.add(measured)
    rows = summary.as_dict()["receive_channels"]
    assert [row["state"] for row in rows] == ["signal", "nothing at all", "signal", "no signal"]
    assert rows[1]["signal_power"] is None
    assert rows[1]["delay_samples"] is None
    assert rows[3]["snr_db"] is None
    assert not np.any(measured.columns["marks"] & Mark.RECEIVE_DELAYS)
