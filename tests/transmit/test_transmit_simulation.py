"""Simulated recordings: what truth says is what the samples hold."""

import numpy as np
import pytest
from transmit_links import link_text, make_link

from spatiq.errors import InputError
from spatiq.link.loading import parse_link
from spatiq.recording.datatypes import COMPLEX_DATATYPES
from spatiq.transmit.channel import Given, rayleigh
from spatiq.transmit.front_end import Context
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.pulse_table import pulse_table
from spatiq.transmit.quantisation import Converter
from spatiq.transmit.scenario import FORMAT_BITS, Scenario
from spatiq.transmit.simulation import capture, simulate

SIGMAS = 5


def plain_samples(truth, n):
    """The truth's own definition of the noise-free samples, in double precision."""
    link = truth.link
    out = np.zeros((truth.H.shape[1], n), np.complex128)
    for f, vectors in enumerate(truth.vectors()):
        placed = np.arange(n) - truth.starts[f]
        frame = np.zeros_like(out)
        for k, vector in enumerate(vectors):
            times = (placed - k * truth.spacing) / truth.spacing
            taps = link.pulse.samples(times, truth.samples_per_symbol)
            frame += (truth.H[f] @ vector)[:, None] * taps / np.sqrt(truth.samples_per_symbol)
        turn = truth.phase[f] + 2 * np.pi * truth.cfo_hz[f] * placed / truth.sample_rate
        out += frame * np.exp(1j * turn)
    return out


@pytest.mark.nojit
@pytest.mark.parametrize(
    "choices",
    [
        {"samples_per_symbol": 4.0, "cfo_hz": 900.0, "clock_ppm": 80.0},
        {"sample_rate": 2.7e6, "cfo_hz": (-2e4, 2e4), "spacing": (0.0, 9.0)},
        {"samples_per_symbol": 2.0, "reference_ppm": 15.0, "spacing": 3.25},
        {"samples_per_symbol": 3.1, "spacing": "back-to-back", "start_fraction": 0.47},
    ],
)
def test_samples_are_what_the_truth_says(choices):
    """Kernel, carrier and channel against a plain sum in double precision.

    No start may put the edge of a pulse on a sample: whether that one counts is rounding's choice.
    """
    link = make_link(payload=8, antennas=4)
    made = simulate(link, frames=3, snr_db=np.inf, lead_in=20, lead_out=20, seed=3, **choices)
    expected = plain_samples(made.truth, made.n_samples)
    np.testing.assert_allclose(made.samples(), expected, atol=3e-6)


def test_a_steady_carrier_turns_the_whole_recording():
    """One offset: every sample turned by exp(j 2 pi f n / rate), through frames and gaps alike."""
    choices = {"samples_per_symbol": 4.0, "frames": 4, "snr_db": np.inf, "spacing": 7.3, "seed": 2}
    still = simulate(make_link(), **choices).samples()
    turned = simulate(make_link(), cfo_hz=-12_345.0, **choices).samples()
    turn = np.exp(-2j * np.pi * 12_345.0 / 4e6 * np.arange(still.shape[1]))
    np.testing.assert_allclose(turned, still * turn, atol=2e-6)


def test_one_reference_moves_carrier_and_clock_together():
    """A transmitter fast by p: carrier + p fc, symbol period divided by 1 + p."""
    truth = simulate(make_link(), samples_per_symbol=4.0, reference_ppm=20.0).truth
    assert truth.cfo_hz[0] == pytest.approx(20e-6 * 2.4e9)
    assert truth.spacing == pytest.approx(4.0 / (1 + 20e-6), rel=1e-15)
    steps = np.diff(truth.starts)
    np.testing.assert_allclose(steps, truth.link.layout.length * truth.spacing, rtol=1e-12)


@pytest.mark.parametrize("chunk", [1, 4097, 1 << 20])
def test_blocks_do_not_change_samples(chunk):
    link = make_link(payload=300)
    choices = {"samples_per_symbol": 4.3, "frames": 60, "datatype": "ci8", "cfo_hz": 333.0}
    made = simulate(link, seed=9, **choices)
    assert made.n_samples > 1 << 16, "more than one chunk"
    whole = made.samples()
    if chunk == 1:
        made = simulate(link, seed=9, **{**choices, "frames": 1})
        whole = made.samples()
    blocks = list(made.blocks(chunk))
    assert all(block.shape == (2, chunk) for block in blocks[:-1])
    assert np.array_equal(np.concatenate(blocks, axis=1), whole)
    assert whole.shape == (2, made.n_samples)


def test_same_seed_same_samples_other_seed_others():
    link = make_link()
    first = simulate(link, samples_per_symbol=4, frames=5, seed=1).samples()
    again = simulate(link, samples_per_symbol=4, frames=5, seed=1).samples()
    other = simulate(link, samples_per_symbol=4, frames=5, seed=2).samples()
    assert np.array_equal(first, again)
    assert not np.array_equal(first[:, :1000], other[:, :1000])


def test_noise_draws_do_not_move_the_channel():
    """Each purpose has its own random numbers: a changed SNR leaves channels and starts alone."""
    link = make_link()
    quiet = simulate(link, samples_per_symbol=4, snr_db=50, spacing=(1.0, 5.0)).truth
    loud = simulate(link, samples_per_symbol=4, snr_db=0, spacing=(1.0, 5.0)).truth
    assert np.array_equal(quiet.H, loud.H)
    assert np.array_equal(quiet.starts, loud.starts)


@pytest.mark.parametrize("sps", [2.0, 4.6])
def test_noise_at_the_symbols_is_n0(sps):
    """Residual of the genie's symbols against H x: variance N0, circular, alike on both antennas.

    K F Nr = 2 * 20 * 331 complex residuals; relative standard error of the variance 1/sqrt(that);
    tolerance 5 of them and the interference of the truncated pulse, which is below -45 dB against
    noise at 0 dB. False failure below 6e-7.
    """
    link = make_link(payload=300)
    made = simulate(link, samples_per_symbol=sps, frames=20, snr_db=0.0, cfo_hz=-4e3, seed=5)
    truth = made.truth
    residual = genie_symbols(truth, made.samples()) - truth.received_symbols()
    count = residual.size / 2
    power = np.mean(np.abs(residual) ** 2, axis=(0, 1))
    assert pytest.approx(1.0) == truth.N0
    assert np.all(np.abs(power / truth.N0 - 1) < SIGMAS / np.sqrt(count) + 1e-3)
    assert np.all(np.abs(np.mean(residual**2, axis=(0, 1))) < SIGMAS * np.sqrt(2 / count))


def test_noise_is_white_and_independent_between_antennas():
    """Samples before the first frame: lags and cross-correlation zero to 5 / sqrt(n)."""
    made = simulate(make_link(), samples_per_symbol=4, lead_in=20_000, frames=1, snr_db=3, seed=8)
    noise = next(made.blocks(70_000)) / np.sqrt(made.truth.N0)
    n = noise.shape[1]
    assert np.abs(np.mean(noise[0] * noise[1].conj())) < SIGMAS / np.sqrt(n)
    for lag in (1, 2, 3, 65_536):
        product = noise[:, lag:] * noise[:, :-lag].conj()
        assert np.all(np.abs(product.mean(axis=1)) < SIGMAS / np.sqrt(n - lag))


def test_snr_of_the_average_channel():
    """Mean over frames of the frames' own SNR (as ratios) is the stated one.

    Power over Nr Nt = 8 unit exponentials: relative variance 1 / 8 per frame; 5 standard errors.
    """
    frames = 4000
    link = make_link(antennas=4)
    made = simulate(link, samples_per_symbol=4, frames=frames, snr_db=13.0, seed=2)
    ratio = np.mean(10 ** (made.truth.snr_db / 10)) / 10**1.3
    assert abs(ratio - 1) < SIGMAS / np.sqrt(8 * frames)


def test_snr_of_each_frame_measured_on_the_symbols():
    """Reference "frame": the words actually sent average to the stated SNR within their own spread.

    BPSK words over two antennas: the frame's power is a mix of the two columns' powers; over all
    frames the mean ratio is 1 with a standard error far below the 2 % allowed (measured 0.4 %).
    """
    link = make_link(payload=400, constellation="BPSK")
    made = simulate(
        link, samples_per_symbol=4, frames=60, snr_db=17.0, snr_reference="frame", seed=4
    )
    truth = made.truth
    np.testing.assert_allclose(truth.snr_db, 17.0, atol=1e-9)
    symbols = truth.received_symbols()[:, link.layout.payload_index]
    measured = np.mean(np.abs(symbols) ** 2) / truth.N0
    assert measured == pytest.approx(10**1.7, rel=0.02)


def test_payload_power_counts_in_the_snr():
    """A payload 6 dB down has its noise 6 dB down: SNR is defined over payload."""
    text = link_text().replace("symbols = 64", "symbols = 64\npower_db = -6.0")
    truth = simulate(parse_link(text), samples_per_symbol=4, snr_db=10.0).truth
    assert pytest.approx(10**-1.6) == truth.N0


@pytest.mark.parametrize("bits", [6, 8, 10])
def test_quantisation_noise(bits):
    """Rounding noise of step 2^(1-bits) is step^2 / 12 per component, if nothing clips.

    Textbook, uniform rounding error. Standard error of the variance of n uniform errors is
    sqrt(0.8 / n) of it; 5 of them, plus 1 % because the signal is not spread over infinitely many
    steps.
    """
    link = make_link(payload=300)
    choices = {"samples_per_symbol": 4, "frames": 20, "snr_db": 25, "seed": 6}
    made = simulate(link, datatype="ci16_le", bits=bits, backoff_db=24, **choices)
    exact = simulate(link, **choices).samples() * np.float32(made.truth.gain)
    error = made.samples() - exact
    assert not made.clipped.any()
    n = 2 * error.size
    expected = 2 * (2.0 ** (1 - bits)) ** 2 / 12
    measured = np.mean(np.abs(error) ** 2)
    assert abs(measured / expected - 1) < SIGMAS * np.sqrt(0.8 / n) + 0.01


def test_sine_through_the_converter():
    """SQNR of a full-scale sine is 6.0206 b + 1.7609 dB (textbook); measured within 0.2 dB."""
    n, bits = 1 << 16, 8
    steps = 2 ** (bits - 1)
    sine = np.exp(2j * np.pi * 997 * np.arange(n) / n).astype(np.complex64)[None]
    sine *= np.float32((steps - 1) / steps)
    stage = Converter(bits).begin(Context(1.0, 1, 0, 0))
    error = stage(sine.copy(), 0) - sine
    ratio = 10 * np.log10(np.mean(np.abs(sine) ** 2) / np.mean(np.abs(error) ** 2))
    assert ratio == pytest.approx(6.0206 * bits + 1.7609, abs=0.2)


def test_clipping_is_counted_and_levels_are_integers():
    made = simulate(
        make_link(), samples_per_symbol=4, frames=30, datatype="ci8", backoff_db=3, seed=1
    )
    samples = made.samples()
    levels = samples.view(np.float32) * 128
    assert np.array_equal(levels, np.rint(levels))
    assert levels.min() == -128
    assert levels.max() == 127
    edge = (levels.reshape(2, -1, 2) == 127) | (levels.reshape(2, -1, 2) == -128)
    counted = made.clipped.copy()
    # A sample that rounds to the last level without being beyond it is not clipped.
    assert np.all(counted > 0)
    assert np.all(counted <= edge.any(axis=2).sum(axis=1))
    made.samples()
    assert np.array_equal(made.clipped, counted), "each pass counts anew"


def test_backoff_sets_the_level():
    """Payload and noise at E|h|^2 = 1: component rms is `backoff_db` below full scale."""
    link = make_link(payload=2000, antennas=2)
    h = np.full((2, 2), 1.0) * np.array([[1], [1j]])
    made = simulate(
        link,
        channels=h,
        samples_per_symbol=4,
        frames=4,
        datatype="ci16_le",
        backoff_db=20,
        snr_db=9,
    )
    start = int(made.truth.starts[0]) + 40 * 4
    part = made.samples()[:, start : start + 1900 * 4]
    assert 10 * np.log10(np.mean(np.abs(part) ** 2) / 2) == pytest.approx(-20, abs=0.15)


def test_data_bits_are_the_same_however_asked_for():
    fields = '[[payload.field]]\ntype = "data"\nbits = "rest"'
    truth = simulate(make_link(fields=fields), samples_per_symbol=4, frames=200, seed=3).truth
    everything = truth.data_bits()
    assert everything.shape == (200, truth.link.payload.n_bits)
    assert np.array_equal(truth.data_bits(63, 130), everything[63:130])
    assert len(np.unique(everything, axis=0)) == 200, "no frame repeats another's bits"
    assert np.array_equal(truth.words(70, 71), truth.words()[70:71])
    # 25600 fair bits: 5 standard deviations.
    assert abs(everything.mean() - 0.5) < 2.5 / np.sqrt(everything.size)


def test_link_period_is_kept():
    link = make_link(frame="period_symbols = 120.5")
    truth = simulate(link, samples_per_symbol=4.0, frames=4).truth
    np.testing.assert_allclose(np.diff(truth.starts), 482.0)
    together = simulate(link, samples_per_symbol=4.0, frames=4, spacing="back-to-back").truth
    np.testing.assert_allclose(np.diff(together.starts), 95 * 4.0)


def test_every_complex_format_is_known():
    assert set(FORMAT_BITS) == set(COMPLEX_DATATYPES)


@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"frames": 0}, "frames"),
        ({"frames": 10**9}, "frames"),
        ({"receive_channels": 65}, "receive channels"),
        ({"seed": -1}, "seed"),
        ({"sample_rate": 4e6}, "one of the two"),
        ({"samples_per_symbol": None}, "one of the two"),
        ({"samples_per_symbol": 0.9}, "samples per symbol"),
        ({"snr_db": np.nan}, "SNR"),
        ({"snr_reference": "mean"}, "reference"),
        ({"spacing": "tight"}, "spacing"),
        ({"spacing": -1.0}, "spacing"),
        ({"spacing": (5.0, 1.0)}, "spacing"),
        ({"cfo_hz": 3e6}, "carrier offset"),
        ({"cfo_hz": (5.0, 1.0)}, "lower end"),
        ({"reference_ppm": 1.0, "cfo_hz": 5.0}, "reference offset"),
        ({"reference_ppm": 1e6}, "reference offset"),
        ({"datatype": "ci12"}, "datatype"),
        ({"datatype": "ci8", "bits": 12}, "bits"),
        ({"bits": 1}, "bits"),
        ({"bits": 8, "backoff_db": -1.0}, "backoff"),
        ({"lead_in": -1.0}, "lead-in"),
        ({"start_fraction": 2.0}, "start fraction"),
        ({"channels": np.ones((3, 3))}, "shape"),
        ({"channels": np.zeros((2, 2)), "snr_reference": "frame"}, "without power"),
    ],
)
def test_bad_choices_are_refused(choices, message):
    given = {"samples_per_symbol": 4.0, **choices}
    with pytest.raises(InputError, match=message):
        next(simulate(make_link(), **given).blocks())


def test_reference_needs_a_carrier():
    with pytest.raises(InputError, match="carrier_hz"):
        simulate(make_link(air=""), samples_per_symbol=4, reference_ppm=1.0)


def test_scenario_and_simulate_agree():
    link = make_link()
    model = Given(np.eye(2))
    one = simulate(link, samples_per_symbol=4, channels=model, frames=2).samples()
    two = capture(link, Scenario(samples_per_symbol=4, channels=np.eye(2), frames=2)).samples()
    assert np.array_equal(one, two)
    fading = simulate(link, samples_per_symbol=4, channels=rayleigh(), frames=2).samples()
    assert np.array_equal(fading, simulate(link, samples_per_symbol=4, frames=2).samples())


def test_table_reach_covers_lead_in():
    """The default lead-in leaves room for the first pulse, whatever the test links' span."""
    link = make_link()
    table = pulse_table(link.pulse, 4.0)
    truth = simulate(link, samples_per_symbol=4.0).truth
    assert truth.starts[0] > table.reach
