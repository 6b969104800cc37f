"""Dispersive channels: profiles against their table, realisations and samples against the truth."""

import numpy as np
import pytest
from scipy.special import j0
from transmit_links import make_link
from typer.testing import CliRunner

from spatiq.cli.main import app
from spatiq.errors import InputError
from spatiq.transmit.channel import rayleigh, rician
from spatiq.transmit.delay_profiles import PROFILES, delay_profile
from spatiq.transmit.echoes import pulse_overlap, symbol_power
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import simulate
from spatiq.transmit.tapped_delay_line import TappedDelayLine

SIGMAS = 5  # of a mean's own standard error: false failure below 6e-7 for each figure
ONE = np.ones((2, 1), complex)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("name", "rms", "rows"), [("tdl-a", 1.00006, 23), ("tdl-c", 1.0, 24), ("tdl-d", 0.99372, 13)]
)
def test_rms_delay_of_the_table(name, rms, rows):
    """3GPP TR 38.901 clause 7.7.2 normalises to an rms delay of 1; computed from its tables.

    Of TDL-D, copies with the powers shifted by a row give 1.044, without the fading path at delay
    0 they give 1.014.
    """
    profile = delay_profile(name)
    assert len(profile.paths) == rows
    assert profile.rms_delay == pytest.approx(rms, abs=6e-6)
    fading, direct = profile.shares
    assert fading.sum() + direct == pytest.approx(1)


def test_line_of_sight_of_tdl_d():
    """K of the path at delay 0 is 13.3 dB (TR 38.901 table 7.7.2-4)."""
    fading, direct = delay_profile("tdl-d").shares
    assert 10 * np.log10(direct / fading[0]) == pytest.approx(13.3, abs=1e-9)


@pytest.mark.nojit
@pytest.mark.parametrize("name", PROFILES)
def test_powers_and_delays_of_a_realisation(name):
    """Mean power of each path over 2000 frames, four pairs of antennas."""
    profile = delay_profile(name)
    fading, direct = profile.shares
    model = TappedDelayLine(name, 0.5)
    echoes = model.draw(np.random.default_rng(1), 2000, 2, 2, ONE)
    np.testing.assert_allclose(echoes.delays, 0.5 * profile.delays)
    power = np.abs(echoes.matrices) ** 2
    expected = fading.copy()
    expected[0] += direct
    mean = power.mean(axis=(0, 2, 3))
    spread = power.std(axis=(0, 2, 3)) / np.sqrt(power[:, 0].size)
    assert np.all(np.abs(mean - expected) < SIGMAS * spread)
    assert abs(mean.sum() - 1) < SIGMAS * np.sqrt(np.sum(spread**2))


@pytest.mark.nojit
def test_correlation_over_antennas_in_every_path():
    """E[h_ra conj(h_sb)] = Rr[r, s] Rt[a, b] times the path's power (Kronecker), paths apart."""
    fading = rayleigh(receive_correlation=0.6, transmit_correlation=0.3j)
    model = TappedDelayLine("tdl-c", 1.0, fading)
    echoes = model.draw(np.random.default_rng(2), 6000, 2, 2, ONE)
    shares, _ = delay_profile("tdl-c").shares
    at_receiver = np.array([[1, 0.6], [0.6, 1]])
    at_transmitter = np.array([[1, 0.3j], [-0.3j, 1]])
    expected = np.kron(at_receiver, at_transmitter)
    for path in (0, 5, 12):
        h = echoes.matrices[:, path].reshape(-1, 4) / np.sqrt(shares[path])
        found = h.T @ h.conj() / len(h)
        assert np.abs(found - expected).max() < SIGMAS / np.sqrt(len(h))
    crossed = np.mean(echoes.matrices[:, 0] * echoes.matrices[:, 1].conj(), axis=0)
    limit = SIGMAS * np.sqrt(shares[0] * shares[1] / 6000)
    assert np.abs(crossed).max() < limit


def test_autocorrelation_of_each_path_is_clarkes():
    """J0(2 pi f tau), Clarke 1968 (from memory): 23 paths of 8 x 8 pairs, 40 instants each."""
    rate, turns = 1e-3, 0.2
    model = TappedDelayLine("tdl-a", 1.0, doppler=rate)
    echoes = model.draw(np.random.default_rng(3), 1, 8, 8, np.ones((8, 1), complex))
    shares, _ = delay_profile("tdl-a").shares
    means = []
    for share, field in zip(shares, echoes.fields, strict=True):
        early, late = (field.along(start, 3.7 / rate, 40) for start in (0.0, turns / rate))
        means.append((late * early.conj()).mean(axis=0).ravel() / share)
    each = np.concatenate(means)
    spread = np.std(each) / np.sqrt(each.size)
    assert spread < 0.01
    assert abs(each.mean() - j0(2 * np.pi * turns)) < SIGMAS * spread


@pytest.mark.nojit
def test_pulse_overlap_is_nyquist():
    """A root-raised-cosine pulse and its matched filter: raised cosine (Proakis, ch. 9), with
    (pi/4) sinc(1/(2 r)) at t = 1/(2 r); cut off at 8 symbols either side."""
    pulse = make_link().pulse
    overlap = pulse_overlap(pulse, np.array([0.0, 1.0, -3.0, 2.0, 0.3, -0.3]))
    assert overlap[0] == pytest.approx(1, abs=1e-6)
    np.testing.assert_allclose(overlap[1:3], 0, atol=3e-3)
    assert overlap[3] == pytest.approx(np.pi / 4 * np.sinc(2.0), abs=3e-3)
    assert overlap[4] == pytest.approx(overlap[5])


@pytest.mark.parametrize("doppler", [0.0, 2e-4])
def test_samples_are_what_the_truth_says(doppler):
    """Matched-filtered samples against the sum over taps of the truth, no noise."""
    link = make_link(antennas=2, payload=40)
    made = simulate(
        link, samples_per_symbol=3.3, frames=3, snr_db=np.inf, lead_in=30, cfo_hz=2e4, seed=4,
        channels=TappedDelayLine("tdl-a", 0.7, doppler=doppler), clock_ppm=20.0,
        spacing=60.0,
    )  # fmt: skip
    truth = made.truth
    found = genie_symbols(truth, made.samples())
    lags = np.arange(-12, 25)
    for f, vectors in enumerate(truth.vectors()):
        taps = truth.taps(f, lags.astype(float))
        sent = np.zeros((len(vectors) + len(lags) - 1, truth.H.shape[1]), complex)
        for i, tap in enumerate(taps):
            sent[i : i + len(vectors)] += vectors @ tap.T
        expected = sent[-lags[0] : -lags[0] + len(vectors)]
        error = np.sum(np.abs(found[f] - expected) ** 2) / np.sum(np.abs(expected) ** 2)
        # Standing: the pulse's cut-off and its table. Moving: the taps are those of one instant,
        # and the channel has turned by up to 2 pi * 2e-4 * 36 = 0.045 rad away from it.
        assert error < (3e-5 if doppler == 0 else 2e-3)


@pytest.mark.parametrize("doppler", [0.0, 1e-4])
def test_snr_is_the_energy_of_a_symbol(doppler):
    """N0 from the stated SNR; the frame's own SNR averages to it over 200 channels (50 moving)."""
    frames = 200 if doppler == 0 else 50
    made = simulate(
        make_link(payload=8, sync_order=3), samples_per_symbol=2, frames=frames, snr_db=10, seed=5,
        channels=TappedDelayLine("tdl-a", 1.0, doppler=doppler), spacing=(4000.0, 9000.0),
        datatype="cf32_le",
    )  # fmt: skip
    ratio = 10 ** (made.truth.snr_db / 10)
    spread = ratio.std() / np.sqrt(len(ratio))
    # A moving channel keeps its sinusoids for the recording: frames 4000 periods apart are not
    # quite independent, hence the wider bound there.
    assert abs(ratio.mean() - 10) < (SIGMAS if doppler == 0 else 3 * SIGMAS) * spread


@pytest.mark.nojit
def test_energy_of_paths_close_together_adds_in_amplitude():
    link = make_link()
    paths = np.ones((1, 2, 1, 2), complex) / np.sqrt(2)
    together = symbol_power(link, np.array([0.0, 0.0]), paths)
    apart = symbol_power(link, np.array([0.0, 3.0]), paths)
    assert together[0] == pytest.approx(2, rel=1e-6)
    assert apart[0] == pytest.approx(1, rel=5e-3)


def test_choices_out_of_range():
    for model, match in (
        (TappedDelayLine("tdl-b", 1.0), "tdl-a, tdl-c, tdl-d"),
        (TappedDelayLine("tdl-a", 0.0), "delay spread"),
        (TappedDelayLine("tdl-a", 1.0, rician(3.0)), "Rician K"),
        (TappedDelayLine("tdl-a", 1.0, rayleigh(constant=True), 1e-4), "Doppler"),
    ):
        with pytest.raises(InputError, match=match):
            simulate(make_link(), samples_per_symbol=4, frames=2, channels=model)
    flat = simulate(make_link(), samples_per_symbol=4, frames=2)
    dispersive = simulate(
        make_link(), samples_per_symbol=4, frames=2, channels=TappedDelayLine("tdl-a", 1.0)
    )
    assert flat.truth.taps(0, np.zeros(1)).shape == (1, 2, 2)
    with pytest.raises(InputError, match="one path at a time"):
        dispersive.truth.received_symbols()


def test_simulate_command(tmp_path):
    link = tmp_path / "a.link.toml"
    link.write_text(make_link().text)
    run = CliRunner().invoke
    base = ["simulate", str(link), "--samples-per-symbol", "4", "--frames", "3", "--truth"]
    echo = ["--channel", "tdl-a", "--delay-spread", "0.5"]
    done = run(app, [*base, *echo, "--out", str(tmp_path / "one")])
    assert done.exit_code == 0, done.output
    with np.load(tmp_path / "one.truth.npz") as truth:
        assert truth["path_matrices"].shape == (3, 23, 2, 2)
        np.testing.assert_allclose(truth["path_delays"], 0.5 * PROFILES["tdl-a"].delays)
    moving = run(app, [*base, *echo, "--doppler", "1e-4", "--out", str(tmp_path / "two")])
    assert moving.exit_code == 0, moving.output
    with np.load(tmp_path / "two.truth.npz") as truth:
        assert truth["path_doppler"].shape == (23, 2, 2, 64)
    for wrong in (["--channel", "tdl-a"], ["--delay-spread", "1"]):
        refused = run(app, [*base, *wrong, "--out", str(tmp_path / "x")])
        assert refused.exit_code == 2
        assert "--delay-spread" in refused.output
