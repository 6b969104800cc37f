"""DC offset and IQ imbalance: estimated with their uncertainty and set right; else left alone."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from received_frames import bit_errors, collect, genie_words, partner, record
from receiver_cases import complex_noise
from test_receiver_whitening import LINK

from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.chain import chain_parts, receive, standard_stages
from spatiq.receiver.front_end import FrontEnd
from spatiq.receiver.front_end_figures import FrontEndFigures, empty_sums, solve_sums
from spatiq.receiver.front_end_kernels import LAGS, residual_sums, set_right
from spatiq.receiver.front_end_survey import line_share, survey_recording
from spatiq.receiver.interferer import Interferer
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.dc_offset import DcOffset
from spatiq.transmit.iq_imbalance import IqImbalance, imbalance_coefficients
from spatiq.transmit.simulation import simulate

BASE = {"receive_channels": 2, "samples_per_symbol": 4.0, "cfo_hz": (-1e4, 1e4)}


def made_frame(rng, periods, antennas, channels):
    """Received vectors of random QPSK from one antenna at a time; what `residual_sums` takes."""
    active = np.sort(rng.choice(2 * periods, periods, replace=False)).astype(np.int64)
    mean = np.zeros((periods, antennas), np.complex64)
    which = rng.integers(0, antennas, periods)
    mean[np.arange(periods), which] = np.exp(0.5j * np.pi * rng.integers(0, 4, periods))
    channel = complex_noise(rng, (channels, antennas), 1.0).astype(np.complex128)
    phase = np.cumsum(0.01 * rng.standard_normal(periods)).astype(np.float32)
    timing, turn = (7.3, 4.01), (0.0123, 0.41)
    cycles = turn[0] * (timing[0] + timing[1] * active) - turn[1]
    u = np.exp(-2j * np.pi * cycles - 1j * phase.astype(float))
    return active, mean, channel, phase, timing, turn, u


def planes_of(vectors):
    return np.stack([vectors.real, vectors.imag], axis=1).astype(np.float32)


@pytest.mark.nojit
@pytest.mark.parametrize("seed", range(3))
def test_sums_solve_the_whole_least_squares_problem(seed):
    """Against NumPy's lstsq with channel, image and constant as unknowns of one problem."""
    rng = np.random.default_rng(seed)
    periods, antennas, channels = 120, 3, 2
    active, mean, channel, phase, timing, turn, u = made_frame(rng, periods, antennas, channels)
    signal = mean @ channel.T
    c, d = np.array([0.1 - 0.03j, 0.02j]), np.array([0.3, -0.1j])
    noise = complex_noise(rng, (periods, channels), 0.01)
    y = signal + c * signal.conj() * u[:, None] ** 2 + 0.9 * d * u[:, None] + noise
    sums = empty_sums(1, channels, antennas)
    residual_sums(planes_of(y), mean, channel, active, phase, timing, turn, sums.of(0))
    found = solve_sums(
        sums, channel[None], np.array([0.01]), periods, np.array([0.9]), np.zeros(LAGS)
    )
    for r in range(channels):
        image = signal[:, r].conj() * u**2
        table = np.column_stack([mean, image, 0.9 * u])
        best = np.linalg.lstsq(table, y[:, r], rcond=None)[0]
        spread = 0.01 * np.linalg.inv(table.conj().T @ table).diagonal().real
        assert found.image[0, r] == pytest.approx(best[antennas], abs=1e-5)
        assert found.constant[0, r] == pytest.approx(best[antennas + 1], abs=1e-5)
        assert found.image_var[0, r] == pytest.approx(spread[antennas], rel=1e-3)
        assert found.constant_var[0, r] == pytest.approx(spread[antennas + 1], rel=1e-3)
    error = y - signal
    near = active[1:] == active[:-1] + 1
    lag = np.sum(error[1:][near] * error[:-1][near].conj(), axis=0)
    np.testing.assert_allclose(
        found.correlation[0, 0], np.mean(lag / np.sum(np.abs(error) ** 2, axis=0)), rtol=1e-4
    )


@pytest.mark.nojit
def test_what_cannot_be_told_from_the_signal_is_missing():
    """Real symbols without carrier offset: the image is a change of the channel, no more."""
    rng = np.random.default_rng(4)
    active = np.arange(100, dtype=np.int64)
    mean = (2.0 * rng.integers(0, 2, (100, 1)) - 1).astype(np.complex64)
    channel = np.array([[0.8 + 0.3j]])
    y = planes_of(mean @ channel.T + complex_noise(rng, (100, 1), 0.01))
    sums = empty_sums(1, 1, 1)
    still, phase = (0.0, 0.0), np.zeros(100, np.float32)
    residual_sums(y, mean, channel, active, phase, (3.0, 4.0), still, sums.of(0))
    one = np.ones(1)
    found = solve_sums(sums, channel[None], 0.01 * one, 100, one, np.zeros(LAGS))
    assert np.isnan(found.image).all() and np.isnan(found.image_var).all()
    assert abs(found.constant[0, 0]) ** 2 < 20 * found.constant_var[0, 0]


@pytest.mark.nojit
def test_samples_are_set_right_as_the_simulation_made_them_wrong():
    """In two steps, and the two together: y = K1 x + K2 conj(x) + d becomes K1 x, turned."""
    rng = np.random.default_rng(5)
    x = complex_noise(rng, (2, 500), 1.0)
    k1, k2 = imbalance_coefficients((1.0, -0.7), (5.0, 3.0))
    d = np.array([0.4 - 0.2j, 1.0])
    y = k1[:, None] * x + k2[:, None] * x.conj() + d[:, None]
    c = k2 / k1.conj()
    per_sample, start = 0.0371, 12.3
    turned = np.exp(-2j * np.pi * (per_sample * np.arange(500) - start))
    planes = planes_of(y * turned)
    first = (0.7 * c, 0.9 * d)
    set_right(planes, *first, per_sample, start)
    rest = FrontEndFigures(
        image=((c - first[0]) / (1 - first[0].conj() * c))[None],
        image_var=np.ones((1, 2)),
        constant=np.zeros((1, 2), complex),
        constant_var=np.ones((1, 2)),
        correlation=np.zeros((1, LAGS), complex),
        correlation_score=np.zeros(1),
        image_taken=np.zeros((1, 2), complex),
        constant_taken=np.zeros((1, 2), complex),
    )
    # What is left of the constant solves first + rest + image conj(rest) = d.
    left = d - first[1]
    a = first[0]
    rest.constant[0] = (left - a * left.conj()) / (1 - np.abs(a) ** 2)
    set_right(planes, rest.image[0], rest.constant[0], per_sample, start)
    # Steps leave a gain of (1 - c1 conj(c)) of each channel, which is the channel's.
    gain = k1 * (1 - first[0] * c.conj()) / (1 - np.abs(first[0]) ** 2)
    np.testing.assert_allclose(
        planes[:, 0] + 1j * planes[:, 1], gain[:, None] * x * turned, atol=2e-5
    )
    whole = rest.beyond(*first)
    np.testing.assert_allclose(whole.image[0], c, atol=1e-12)
    np.testing.assert_allclose(whole.constant[0], d, atol=1e-12)


@pytest.mark.parametrize(
    ("gain", "phase", "level", "snr"),
    [
        (1.0, 5.0, None, 14.0),
        ((-1.0, 0.5), (-5.0, 5.0), (-10.0, -4.0), 14.0),
        (0.0, 0.0, 10.0, 6.0),
        ((1.0, -1.0), 5.0, (10.0, 0.0), 16.0),
    ],
)
def test_errors_under_a_faulty_front_end_are_nearly_those_of_a_sound_one(
    tmp_path, gain, phase, level, snr
):
    """At most 15 % more bit errors than a genie's with a sound front end on the same noise, plus
    four times the square root of their number. Pooled figures within 4.5 standard deviations of
    the truth: at 4 to 8 figures a case, one seed in 20,000 fails."""
    link = parse_link(LINK)
    impairments = [IqImbalance(gain, phase)]
    if level is not None:
        impairments.append(DcOffset(level))
    choices = {**BASE, "snr_db": snr, "frames": 40, "seed": 11}
    recording, capture = record(tmp_path, link, impairments=impairments, **choices)
    frames = collect(recording, link)
    f = partner(frames, capture)
    assert f.size == 40
    words = capture.truth.words()[f]
    best = bit_errors(link, genie_words(simulate(link, **choices))[f], words)
    assert bit_errors(link, frames.words, words) < 1.15 * best + 4 * np.sqrt(best)
    summary = Summary(link)
    for measured in measure(recording, link):
        summary.add(measured)
    figures = summary.as_dict()
    if gain != 0.0:
        assert figures["marks"]["IQ_CORRECTED"] == 40
    for r, row in enumerate(figures["front_end"]):
        true_gain, true_phase = (np.broadcast_to(v, 2)[r] for v in (gain, phase))
        assert abs(row["iq_gain_db"] - true_gain) < 4.5 * row["iq_gain_std_db"]
        assert abs(row["iq_phase_deg"] - true_phase) < 4.5 * row["iq_phase_std_deg"]
        true = 0.0
        if level is not None:
            size = np.sqrt(capture._signal_power) * 10 ** (np.broadcast_to(level, 2)[r] / 20)
            true = size * np.exp(0.25j * np.pi)
        assert abs(row["dc_real"] + 1j * row["dc_imag"] - true) < 4.5 * row["dc_std"]


def test_a_sound_front_end_is_left_alone(tmp_path):
    """Same bits as without the stages; scores follow their law (Kolmogorov-Smirnov at 1e-4: fails
    once in 10,000 seeds; 160 scores at 1e-6: once in 6,000)."""
    link = parse_link(LINK)
    recording, _ = record(tmp_path, link, snr_db=12.0, frames=80, seed=3, **BASE)
    options = ReceiverOptions()
    parts = chain_parts(recording, link, options)
    assert parts.survey.clean
    stages = standard_stages(link, options, parts)
    without = [s for s in stages if not isinstance(s, FrontEnd | Interferer)]
    plain, full = collect(recording, link, stages=without), collect(recording, link)
    for name, column in plain.columns.items():
        np.testing.assert_array_equal(column, full.columns[name], err_msg=name)
    (batch,) = receive(recording, link)
    found = batch.front_end
    for value, variance in (
        (found.image, found.image_var),
        (found.constant, found.constant_var),
    ):
        score = (np.abs(value) ** 2 / variance).ravel()
        assert scipy.stats.kstest(score, scipy.stats.expon.cdf).pvalue > 1e-4
    # The channel that shows more of the two: the square of the law of one.
    law = scipy.stats.gamma(LAGS)
    uniform = law.cdf(found.correlation_score) ** 2
    assert scipy.stats.kstest(uniform, "uniform").pvalue > 1e-4


SHIFT_KEYING = LINK.replace("spatial-modulation", "space-shift-keying").replace(
    'constellation = { name = "QPSK" }\n', ""
)


def test_survey_tells_an_offset_from_the_carrier_of_the_signal(tmp_path):
    """Space-shift keying always has a carrier: at zero offset it looks like DC, and is not."""
    keyed, modulated = parse_link(SHIFT_KEYING), parse_link(LINK)
    assert line_share(keyed) > 0.5 and line_share(modulated) < 0.01
    choices = {**BASE, "snr_db": 20.0, "frames": 30, "seed": 4}
    for link, cfo in ((keyed, 0.0), (keyed, 3e3), (modulated, 0.0)):
        recording, capture = record(tmp_path, link, **(choices | {"cfo_hz": cfo}))
        assert survey_recording(recording, link, 0.02 / 4).clean
        assert collect(recording, link).start.size == capture.truth.frames


def test_marks_tell_what_was_corrected(tmp_path):
    """An offset too weak for the survey is each frame's own to find."""
    link = parse_link(LINK)
    recording, capture = record(
        tmp_path, link, impairments=[DcOffset(-22.0)], snr_db=15.0, frames=20, seed=6, **BASE
    )
    assert chain_parts(recording, link, ReceiverOptions()).survey.clean
    (measured,) = measure(recording, link)
    marks = measured.columns["marks"]
    assert np.all(marks & Mark.DC_CORRECTED) and not np.any(marks & Mark.IQ_CORRECTED)
    truth = capture.truth
    signal = truth.N0 * 10 ** (truth.snr_db / 10) / truth.samples_per_symbol
    expected = 10 * np.log10(capture._signal_power * 10**-2.2 / signal)
    # The larger of two estimates with a standard deviation of 6 %: 3 dB are beyond 5 of them.
    assert np.all(np.abs(measured.columns["dc_db"] - expected) < 3.0)


def test_an_offset_is_no_frame_cut_off_by_the_end(tmp_path):
    """Silence with an offset as strong as the frames lies behind the last one."""
    link = parse_link(LINK + "\n[frame]\nperiod_symbols = 1000\n")
    choices = {**BASE, "snr_db": 14.0, "frames": 12, "seed": 3, "lead_out": 1500.0}
    recording, _ = record(tmp_path, link, impairments=[DcOffset(3.0)], **choices)
    frames = collect(recording, link)
    assert frames.start.size == 12 and frames.lost == []
