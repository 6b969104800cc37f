"""Figures of a whole measurement against the truth of the simulation."""

from __future__ import annotations

import json

import numpy as np
import pytest
import scipy.stats
from measured_cases import FIELDS, measured, measured_link

from spatiq.metrics.frame_table import COLUMNS, Mark, empty_columns
from spatiq.metrics.intervals import clopper_pearson
from spatiq.metrics.measuring_kernels import compare_words, error_vectors
from spatiq.metrics.summary import Spread
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.link_tables import sparse_vectors
from spatiq.receiver.options import ReceiverOptions
from spatiq.signal.pulses import isi_floor
from spatiq.transmit.genie import genie_symbols

LINK = measured_link()


@pytest.fixture(scope="module")
def noisy(tmp_path_factory):
    """11 dB, fading, carriers of their own: errors in plenty."""
    return measured(
        tmp_path_factory.mktemp("noisy"),
        LINK,
        frames=80,
        snr_db=11.0,
        cfo_hz=(-1.5e4, 1.5e4),
        spacing=(0.0, 80.0),
    )


@pytest.fixture(scope="module")
def clear(tmp_path_factory):
    """30 dB in each frame, one offset of carrier and clock."""
    return measured(
        tmp_path_factory.mktemp("clear"),
        measured_link(payload=1000),
        frames=40,
        snr_db=30.0,
        snr_reference="frame",
        cfo_hz=4321.0,
        clock_ppm=12.0,
    )


def test_bit_errors_are_counted_exactly(noisy):
    """Against words that the simulation sent and words that were decided: no tolerance."""
    sent = noisy.truth.words()[noisy.index]
    bits = LINK.codebook.words_to_bits
    wrong = bits(noisy.words) != bits(sent)
    assert wrong.sum() > 1000
    np.testing.assert_array_equal(noisy.columns["bit_errors"], wrong.sum(axis=1))
    spatial = np.tile(LINK.codebook.spatial_bits, 256)
    np.testing.assert_array_equal(
        noisy.columns["spatial_bit_errors"], wrong[:, spatial].sum(axis=1)
    )
    np.testing.assert_array_equal(
        noisy.columns["signal_bit_errors"], wrong[:, ~spatial].sum(axis=1)
    )
    assert set(noisy.columns["bits_compared"]) == {1024}
    np.testing.assert_array_equal(noisy.sent, sent)
    assert noisy.summary["ber"]["errors"] == wrong.sum()
    assert noisy.summary["ber"]["compared"] == wrong.size


def test_confusion_matrix_is_the_truths(noisy):
    sent = noisy.truth.words()[noisy.index]
    sets = LINK.codebook.set_index
    expected = np.zeros((4, 4), np.int64)
    np.add.at(expected, (sets[sent].ravel(), sets[noisy.words].ravel()), 1)
    np.testing.assert_array_equal(noisy.summary["confusion"], expected)
    np.testing.assert_array_equal(noisy.confusion.sum(axis=0), expected)
    wrong = sets[sent] != sets[noisy.words]
    np.testing.assert_array_equal(noisy.columns["antenna_errors"], wrong.sum(axis=1))
    symbols = LINK.codebook.symbol_index
    symbol = ~wrong & (symbols[sent] != symbols[noisy.words])
    np.testing.assert_array_equal(noisy.columns["symbol_errors"], symbol.sum(axis=1))


def test_intervals_are_exact_binomial(noisy):
    low, high = clopper_pearson(noisy.columns["bit_errors"], noisy.columns["bits_compared"], 0.95)
    np.testing.assert_allclose(noisy.columns["ber_low"], low)
    np.testing.assert_allclose(noisy.columns["ber_high"], high)
    # From beta quantiles, for one frame.
    k, n = int(noisy.columns["bit_errors"].max()), 1024
    i = int(np.argmax(noisy.columns["bit_errors"]))
    assert noisy.columns["ber_low"][i] == pytest.approx(scipy.stats.beta.ppf(0.025, k, n - k + 1))


def test_no_errors_are_an_upper_bound(clear):
    assert np.all(clear.columns["bit_errors"] == 0)
    ber = clear.summary["ber"]
    assert ber["is_upper_bound"] and ber["low"] == 0.0
    assert ber["high"] == pytest.approx(1 - 0.025 ** (1 / ber["compared"]))


def test_error_vector_magnitude_is_that_of_the_noise(clear):
    """EVM^2 = N0 / (||H x||^2 / Nr): known data, 30 dB, within 2 % over 40 frames of 1000 symbols.

    Of each frame's degrees of freedom a channel of 4 x 2 is fitted to 2 x 1000 complex values.
    """
    symbols = genie_symbols(clear.truth, clear.capture.samples())
    payload = clear.truth.link.layout.payload_index
    exact = clear.truth.received_symbols()[:, payload]
    error = np.sum(np.abs(symbols[:, payload] - exact) ** 2)
    truth = 100 * np.sqrt(error / np.sum(np.abs(exact) ** 2))
    assert clear.summary["evm"]["percent"] == pytest.approx(truth, rel=0.02)
    assert clear.summary["evm"]["data_aided"]
    # Known-data EVM is 1/sqrt(SNR).
    assert clear.summary["evm"]["percent"] == pytest.approx(100 * 10 ** (-30 / 20), rel=0.02)
    for row in clear.summary["antennas"]:
        assert row["evm_percent"] > 0 and row["power"] > 0


def test_equalised_error_vector_is_that_of_combining(clear):
    """z = h^H y/||h||^2: error energy N0 E[1/||h_a||^2] per symbol, by the true channels."""
    gain = np.sum(np.abs(clear.truth.H) ** 2, axis=1)  # (F, Nt)
    expected = 100 * np.sqrt(np.mean(clear.truth.N0 / gain))
    assert clear.summary["equalised_evm"]["percent"] == pytest.approx(expected, rel=0.02)


def test_signal_to_noise_ratio(clear, noisy):
    """Mean over payload of ||Hx||^2/(Nr N0) for the words that were sent.

    Mean error within 4.5 of its stated standard deviations (false failure 7e-6) and 0.02 dB, what
    the cut pulse's interference adds to N0.
    """
    for case in (clear, noisy):
        payload = case.truth.link.layout.payload_index
        exact = case.truth.received_symbols()[case.index][:, payload]
        power = np.mean(np.abs(exact) ** 2, axis=(1, 2))
        error = case.columns["snr_db"] - 10 * np.log10(power / case.truth.N0)
        stated = np.mean(case.columns["snr_std_db"])
        assert abs(np.mean(error)) < 4.5 * stated / np.sqrt(error.size) + 0.02
        assert 0.6 * stated < np.std(error) < 1.4 * stated
    np.testing.assert_allclose(
        clear.columns["noise_power"], clear.truth.N0, rtol=6 / np.sqrt(2 * 1100)
    )


def test_carrier_and_clock(clear, noisy):
    """Errors within 5 stated standard deviations: false failure below 1e-4 over all frames."""
    for case in (clear, noisy):
        error = case.columns["cfo_hz"] - case.truth.cfo_hz[case.index]
        assert np.all(np.abs(error) < 5 * case.columns["cfo_std_hz"])
        assert 0.7 < np.std(error / case.columns["cfo_std_hz"]) < 1.4
        np.testing.assert_allclose(case.columns["cfo_ppm"], case.columns["cfo_hz"] / 2400)
    error = clear.columns["clock_ppm"] - 12.0
    assert np.all(np.abs(error) < 5 * clear.columns["clock_std_ppm"])
    assert abs(np.mean(error)) < 1.0
    assert clear.summary["clock_ppm"]["mean"] == pytest.approx(12.0, abs=1.0)


def test_places_and_times(noisy):
    error = noisy.columns["start_sample"] - noisy.truth.starts[noisy.index]
    assert np.all(np.abs(error) < 6 * noisy.columns["timing_std_samples"])
    np.testing.assert_allclose(
        noisy.columns["time_s"], noisy.columns["start_sample"] / noisy.recording.sample_rate
    )
    assert noisy.columns["frame"].tolist() == list(range(len(noisy.index)))


def test_predicted_bit_error_ratio_is_near_a_genies(noisy):
    """Within 10 % of a receiver with the true channel, timing and carrier.

    The errors of 80 fading frames scatter: three standard deviations of the count are added.
    """
    link = noisy.truth.link
    y = genie_symbols(noisy.truth, noisy.capture.samples())[:, link.layout.payload_index]
    sent = noisy.truth.words()
    wrong = np.zeros(len(sent))
    for i in range(len(sent)):
        words = maximum_likelihood(
            y[i].astype(np.complex64), noisy.truth.H[i], noisy.truth.N0, link.codebook
        )
        bits = link.codebook.words_to_bits
        wrong[i] = np.count_nonzero(bits(words) != bits(sent[i]))
    genie = wrong[noisy.index].sum() / (1024 * len(noisy.index))
    spread = 2 * np.sqrt(wrong[noisy.index].sum()) / (1024 * len(noisy.index))
    predicted = noisy.summary["predicted_ber"]
    assert abs(predicted - genie) < 0.1 * genie + 3 * spread
    assert predicted == pytest.approx(np.mean(noisy.columns["predicted_ber"]))
    loss = noisy.summary["implementation_loss_db"]
    assert loss["low"] < loss["value"] < loss["high"]
    assert abs(loss["value"]) < 0.5


def test_two_step_is_counted_beside(noisy):
    assert np.all(noisy.columns["two_step_bit_errors"] >= 0)
    assert noisy.summary["two_step_ber"]["value"] > 1.5 * noisy.summary["ber"]["value"]


def test_without_two_step_its_columns_are_missing(tmp_path):
    case = measured(tmp_path, LINK, ReceiverOptions(compare_two_step=False), frames=4)
    assert np.all(case.columns["two_step_bit_errors"] == -1)
    assert np.all(np.isnan(case.columns["two_step_ber"]))
    assert case.summary["two_step_ber"] is None


def test_nothing_found_leaves_figures_missing(tmp_path):
    case = measured(tmp_path, LINK, frames=1, samples=lambda c: c.samples()[:, :200] * 0)
    assert case.columns["frame"].size == 0
    absent = ("ber", "evm", "cfo_hz", "snr_db", "predicted_ber", "implementation_loss_db", "crc")
    assert all(case.summary[name] is None for name in absent)
    assert case.summary["frames"]["found"] == 0


def test_summary_is_plain_and_adds_up(noisy):
    text = json.dumps(noisy.summary, allow_nan=False)
    assert json.loads(text)["frames"]["found"] == len(noisy.index)
    frames = noisy.summary["frames"]
    assert frames["expected"] == frames["found"] + frames["lost"]
    assert noisy.summary["cfo_hz"]["mean"] == pytest.approx(np.mean(noisy.columns["cfo_hz"]))
    assert noisy.summary["cfo_hz"]["std"] == pytest.approx(np.std(noisy.columns["cfo_hz"], ddof=1))


def test_space_shift_keying_has_no_signal_bits(tmp_path):
    link = measured_link(constellation=None, antennas=4)
    case = measured(tmp_path, link, frames=20, snr_db=12.0)
    assert np.all(case.columns["signal_bits_compared"] == 0)
    assert np.all(np.isnan(case.columns["ber_signal"]))
    assert case.summary["ber_signal"] is None
    assert case.summary["ber_spatial"]["errors"] == case.summary["ber"]["errors"]
    sent = case.truth.words()[case.index]
    assert case.summary["antenna_error_ratio"]["errors"] == np.count_nonzero(case.words != sent)
    assert case.summary["symbol_error_ratio"]["errors"] == 0


def test_data_only_payload_counts_nothing(tmp_path):
    link = measured_link(fields='[[payload.field]]\ntype = "data"\nbits = 1024\n')
    case = measured(tmp_path, link, frames=6, snr_db=20.0)
    assert np.all(case.columns["bits_compared"] == 0) and np.all(case.sent == -1)
    assert np.all(np.isnan(case.columns["ber"]))
    assert case.summary["ber"] is None and not case.summary["evm"]["data_aided"]
    assert case.summary["predicted_ber"] is not None
    # Decided words stand in: at 20 dB with few errors the EVM is nearly the known-data one.
    snr = np.mean(10 ** (-case.truth.snr_db / 20))
    assert case.summary["evm"]["percent"] / 100 == pytest.approx(snr, rel=0.5)


DATA = '[[payload.field]]\ntype = "data"\nbits = {bits}\n'


def test_padding_is_no_reference(tmp_path):
    """Zeros that fill a payload up are no bits to count, and no known symbols for the EVM."""
    link = measured_link(DATA.format(bits=600))
    assert link.payload.fields[-1].padding
    case = measured(tmp_path, link, snr_db=15.0, frames=4)
    assert np.all(case.columns["bits_compared"] == 0)
    assert np.all(case.columns["evm_data_aided"] == 0)
    assert case.summary["ber"] is None and case.summary["evm"]["percent"] > 0


@pytest.mark.parametrize(("known", "aided"), [(496, 0), (512, 1)])
def test_a_few_known_words_do_not_make_the_evm_data_aided(tmp_path, known, aided):
    """256 words of 4 bits: 124 known words are less than half, 128 are half."""
    value = "01" * (known // 2)
    fixed = f'[[payload.field]]\ntype = "fixed"\nvalue = "{value}"\n'
    case = measured(tmp_path, measured_link(fixed + DATA.format(bits='"rest"')), frames=3)
    assert np.all(case.columns["bits_compared"] == known)
    assert np.all(case.columns["evm_data_aided"] == aided)
    assert case.summary["evm"]["data_aided"] == bool(aided)


def test_the_chain_itself_adds_next_to_nothing(tmp_path):
    """Without noise, at a ratio that is no whole number, what is left is the pulse's truncation."""
    link = measured_link()
    ratio = 4.0690104
    case = measured(
        tmp_path, link, frames=8, snr_db=np.inf, samples_per_symbol=ratio, cfo_hz=7e3, clock_ppm=11
    )
    timings = np.arange(4) / 4
    pulse = max(isi_floor(link.pulse, ratio, timing=t) for t in timings)
    assert case.summary["evm"]["db"] < min(pulse + 3.0, -55.0)


def test_payload_power_is_in_signal_but_not_in_channel(tmp_path):
    """+6 dB of payload power: SNR as the simulation states it, channel as without."""
    text = "power_db = 6.0"
    link = measured_link(payload=600, extra=text)
    case = measured(tmp_path, link, frames=30, snr_db=25.0)
    assert abs(np.mean(case.columns["snr_db"] - case.truth.snr_db[case.index])) < 0.1
    scale = np.linalg.norm(case.channel, axis=(1, 2)) / np.linalg.norm(
        case.truth.H[case.index], axis=(1, 2)
    )
    assert np.mean(scale) == pytest.approx(1.0, abs=0.01)


def test_lost_track_is_marked_and_sound_frames_are_not(noisy, clear):
    for case in (noisy, clear):
        assert np.all(case.columns["marks"] == 0)


def test_a_disturbed_payload_is_marked(tmp_path):
    """Noise 10 dB up over the second half of one payload."""

    def disturb(capture):
        samples = capture.samples().copy()
        start = int(capture.truth.starts[2] + 250 * 4)
        rng = np.random.default_rng(3)
        burst = rng.standard_normal((2, 2, 500)) * np.sqrt(5 * capture.truth.N0)
        samples[:, start : start + 500] += (burst[0] + 1j * burst[1]).astype(np.complex64)
        return samples

    case = measured(tmp_path, LINK, frames=6, snr_db=20.0, samples=disturb)
    both = Mark.TRACKING_LOST | Mark.NOISE_STEP
    assert case.columns["marks"].tolist() == [0, 0, both, 0, 0, 0]
    assert case.summary["marks"] == {"TRACKING_LOST": 1, "NOISE_STEP": 1}


@pytest.mark.nojit
def test_compare_words_kernel():
    book = LINK.codebook
    rng = np.random.default_rng(4)
    sent, decided = rng.integers(-1, 16, 300), rng.integers(0, 16, 300)
    confusion, counts = np.zeros((4, 4), np.int64), np.zeros(3, np.int64)
    compare_words(decided, sent, book.set_index, book.symbol_index, confusion, counts)
    known = sent >= 0
    expected = np.zeros((4, 4), np.int64)
    row, column = book.set_index[sent[known]], book.set_index[decided[known]]
    np.add.at(expected, (row, column), 1)
    np.testing.assert_array_equal(confusion, expected)
    symbol = book.symbol_index[sent[known]] != book.symbol_index[decided[known]]
    wrong = row != column
    assert counts.tolist() == [known.sum(), wrong.sum(), (symbol & ~wrong).sum()]


@pytest.mark.nojit
def test_error_vectors_kernel():
    book = LINK.codebook
    rng = np.random.default_rng(5)

    def noise(*shape):
        return rng.normal(size=shape) + 1j * rng.normal(size=shape)

    y, channel = noise(200, 2).astype(np.complex64), noise(2, 4)
    words = rng.integers(-1, 16, 200)
    sums = np.empty((6, 4))
    error_vectors(y, channel, words, *sparse_vectors(book.vectors).parts, sums)
    expected = np.zeros((6, 4))
    for k in np.flatnonzero(words >= 0):
        x = book.vectors[words[k]]
        a = int(np.flatnonzero(x)[0])
        h = channel[:, a]
        z = h.conj() @ y[k] / np.linalg.norm(h) ** 2
        sent = np.linalg.norm(channel @ x) ** 2
        expected[:, a] += [
            np.linalg.norm(y[k] - channel @ x) ** 2,
            sent,
            abs(z - x[a]) ** 2,
            1,
            sent,
            abs(x[a]) ** 2,
        ]
    np.testing.assert_allclose(sums, expected, rtol=1e-5)


@pytest.mark.nojit
def test_spread_adds_up_like_one_array():
    rng = np.random.default_rng(6)
    values = rng.normal(5e6, 3.0, 1000)
    values[::7] = np.nan
    spread = Spread()
    for part in np.array_split(values, 13):
        spread.add(part)
    spread.add(np.array([np.nan, np.inf]))
    finite = values[np.isfinite(values)]
    got = spread.as_dict()
    assert got["mean"] == pytest.approx(finite.mean(), rel=1e-12)
    assert got["std"] == pytest.approx(finite.std(ddof=1), rel=1e-9)
    assert (got["min"], got["max"]) == (finite.min(), finite.max())
    assert Spread().as_dict() is None


@pytest.mark.nojit
def test_empty_columns_are_missing_not_zero():
    columns = empty_columns(3)
    assert set(columns) == {c.name for c in COLUMNS}
    assert np.all(np.isnan(columns["ber"])) and np.all(columns["crc_ok"] == -1)
    assert np.all(columns["frame_number"] == -1) and np.all(columns["bit_errors"] == 0)


def test_counter_and_crc_in_the_table(tmp_path):
    case = measured(tmp_path, measured_link(FIELDS["counter, crc"]), frames=10, snr_db=25.0)
    assert case.summary["crc"]["passed"] + case.summary["crc"]["failed"] == 10
    good = case.columns["bit_errors"] == 0
    np.testing.assert_array_equal(case.columns["crc_ok"][good], 1)
    assert case.columns["frame_number"].tolist() == list(range(10))
