"""Options of `spatiq simulate` for impairments: each says what the Python choice says."""

import json

import numpy as np
import pytest
import typer
from transmit_links import link_text
from typer.testing import CliRunner

from spatiq.cli.simulate import simulate_command
from spatiq.errors import InputError
from spatiq.link.loading import load_link
from spatiq.recording.opening import open_recording
from spatiq.transmit.channel import rician, steering_line_of_sight
from spatiq.transmit.clipping import Clipping
from spatiq.transmit.dc_offset import DcOffset
from spatiq.transmit.dead_channel import DeadChannels
from spatiq.transmit.gain_steps import GainPlan
from spatiq.transmit.interferer import Interferer
from spatiq.transmit.inversion import SpectralInversion
from spatiq.transmit.iq_imbalance import IqImbalance
from spatiq.transmit.losses import Losses
from spatiq.transmit.moving_channel import Doppler
from spatiq.transmit.narrow_band import NarrowBandNoise
from spatiq.transmit.noise_shape import NoiseShape
from spatiq.transmit.phase_noise_mask import PhaseNoiseMask
from spatiq.transmit.rotation import WienerPhaseNoise
from spatiq.transmit.second_transmitter import OtherTransmitter
from spatiq.transmit.simulation import simulate

app = typer.Typer()
app.command("simulate")(simulate_command)
app.command("other")(lambda: None)

SHORT = ("--frames", "4", "--samples-per-symbol", "4", "--datatype", "cf32_le")


@pytest.fixture
def link_file(tmp_path):
    path = tmp_path / "lab.link.toml"
    path.write_text(link_text())
    return path


def run(*words):
    """What the command raises is raised here."""
    result = CliRunner().invoke(app, [str(word) for word in words], catch_exceptions=False)
    assert result.exit_code == 0, result.output
    return result.stdout


CASES = {
    "--doppler 1e-3 --channel rician --rician-k 3": {
        "channels": Doppler(
            1e-3,
            rician(3.0, line_of_sight=lambda r, t: steering_line_of_sight(r, t, 0, 0)),
        )
    },
    "--antenna-delay 0,-0.25": {"antenna_delays": [0, -0.25]},
    "--receive-delay 0,1.5": {"receive_delays": [0, 1.5]},
    "--receive-gain 0,-6@90": {"receive_gains": [1, 10**-0.3 * 1j]},
    "--pause 2:500 --spacing 3": {"pause": (2, 500.0), "spacing": 3.0},
    "--other seed=2,delay=30.5,power=-3,cfo=100,clock-ppm=4,doppler=1e-4,spacing=20,frames=3": {
        "others": [
            OtherTransmitter(
                seed=2,
                delay=30.5,
                power_db=-3.0,
                cfo_hz=100.0,
                clock_ppm=4.0,
                channels=Doppler(1e-4),
                spacing=20.0,
                frames=3,
            )
        ]
    },
    "--cfo -250000 --cfo-drift -3e5": {"cfo_hz": -250000.0, "drift_hz_per_s": -3e5},
    "--linewidth 50 --phase-noise 5e3:-80,1e5:-110": {
        "phase_noise": [WienerPhaseNoise(50.0), PhaseNoiseMask(((5e3, -80.0), (1e5, -110.0)))]
    },
    "--noise-power 0,3 --noise-correlation 0.5": {
        "noise_db": [0, 3],
        "noise_correlation": 0.5,
    },
    "--noise-taps 1,0.5 --noise-feedback -0.7": {
        "noise_shape": NoiseShape((1.0, 0.5), (-0.7,)),
    },
    "--interferer 1e5:-10 --interferer -2e5:-20:0@0,-inf": {
        "arriving": [Interferer(1e5, -10.0), Interferer(-2e5, -20.0, [1, 0])]
    },
    "--interferer 1e5/2e4:-10 --interferer -2e5/500:-20:0@0,-inf": {
        "arriving": [
            NarrowBandNoise(1e5, 2e4, -10.0),
            NarrowBandNoise(-2e5, 500.0, -20.0, [1, 0]),
        ]
    },
    "--gain-step 2.5:-6 --gain-step 3:1 --frame-gain 1": {
        "gains": GainPlan(((2.5, -6.0), (3.0, 1.0)), 1.0)
    },
    "--iq-gain 0.5,0 --iq-phase 2 --dc -25 --invert --clip 3 --dead 1@1e-5": {
        "impairments": [
            IqImbalance([0.5, 0.0], 2.0),
            DcOffset(-25.0),
            SpectralInversion(),
            Clipping(3.0),
            DeadChannels((1,), 1e-5),
        ]
    },
    "--lose 100:50 --lose-random 2:10:20": {"losses": Losses(((100, 50),), 2, (10, 20))},
    "--lose-random 3:15 --silent-loss": {"losses": Losses((), 3, 15, False)},
}


@pytest.mark.parametrize("words", CASES)
def test_options_are_choices(link_file, tmp_path, words):
    out = tmp_path / "run"
    run("simulate", link_file, *SHORT, *words.split(), "--out", out, "--truth")
    link = load_link(link_file)
    made = simulate(link, frames=4, samples_per_symbol=4.0, **CASES[words])
    recording = open_recording(f"{out}.sigmf-meta")
    read = np.concatenate([b.samples for b in recording.blocks()], axis=1)
    assert np.array_equal(read, made.samples())
    plain = simulate(link, frames=4, samples_per_symbol=4.0).samples()
    assert plain.shape != read.shape or not np.array_equal(plain, read)
    told = made.captures() or [0]
    assert len(recording.segments) == len(told)


def test_truth_files_hold_what_a_genie_needs(link_file, tmp_path):
    """The moving channel rebuilt from the file alone, in plain NumPy; gaps, gains, the other."""
    out = tmp_path / "run"
    words = [
        *("--doppler", "1e-3", "--lose", "100:50", "--gain-step", "1:3"),
        *("--receive-gain", "0,-6", "--antenna-delay", "0,0.1", "--noise-power", "0,1"),
        *("--cfo-drift", "1e4", "--linewidth", "3", "--other", "seed=5,delay=7"),
    ]
    stdout = run("simulate", link_file, *SHORT, *words, "--out", out, "--truth", "--json")
    kept = np.load(f"{out}.truth.npz")
    truth = simulate(
        load_link(link_file),
        frames=4,
        samples_per_symbol=4.0,
        channels=Doppler(1e-3),
        receive_gains=[1, 10**-0.3],
    ).truth
    times = (kept["starts"][2] + 4.0 * np.arange(95)) / 4.0
    turns = kept["field_doppler"][..., None] * times
    phase = 2 * np.pi * turns + kept["field_phases"][..., None]
    scattered = np.exp(1j * phase).sum(axis=2) / np.sqrt(phase.shape[2])
    channels = kept["field_gain"][..., None] * kept["field_scale"] * scattered
    np.testing.assert_allclose(channels.transpose(2, 0, 1), truth.channels(2), atol=1e-9)
    assert kept["gaps"].tolist() == [[100, 50]]
    assert kept["recorded_starts"][1] == kept["starts"][1] - 50
    assert kept["gain_factors"] == pytest.approx(10**0.15)
    assert kept["antenna_delays"].tolist() == [0, 0.1]
    assert kept["noise_covariance"].shape == (2, 2)
    summary = json.loads((tmp_path / "run.truth.json").read_text())
    assert summary["cfo_drift_hz_per_s"] == 1e4
    assert summary["lost_samples"] == 50
    assert "linewidth_hz=3.0" in summary["common_phase"][0]
    other = json.loads((tmp_path / "run-other0.truth.json").read_text())
    assert other["seed"] == 5
    printed = json.loads(stdout)
    assert printed["lost_samples"] == 50
    assert {str(tmp_path / f"run{e}") for e in (".truth.npz", "-other0.truth.npz")} < set(
        printed["files"]
    )


def test_a_collection_tells_the_gaps_in_each_recording(link_file, tmp_path):
    out = tmp_path / "run"
    run("simulate", link_file, *SHORT, "--lose", "100:50", "--collection", "--out", out)
    recording = open_recording(f"{out}.sigmf-collection")
    assert recording.channels == 2
    assert [s.global_index for s in recording.segments] == [0, 150]


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("words", "message"),
    [
        ("--doppler 1e-3 --constant", "--doppler"),
        ("--antenna-delay 0,x", "--antenna-delay"),
        ("--receive-gain 3@", "--receive-gain"),
        ("--pause 5", "--pause"),
        ("--pause 1.5:3", "--pause"),
        ("--other delay", "--other"),
        ("--other delay=3,delay=4", "--other"),
        ("--other level=3", "keys: seed"),
        ("--other seed=1.5", "whole number"),
        ("--other cfo=x", "cfo=number"),
        ("--phase-noise 1e3", "--phase-noise"),
        ("--phase-noise 1e3:-80,1e2:-90", "ascending"),
        ("--interferer 1e5", "--interferer"),
        ("--interferer 1e5:-3:0", "signature"),
        ("--interferer 1e5/:-3", "--interferer"),
        ("--interferer 1e5/0:-3", "width"),
        ("--gain-step 2", "--gain-step"),
        ("--dead first", "--dead"),
        ("--dead 1@", "--dead"),
        ("--lose 5", "--lose"),
        ("--lose 5:1.5", "whole"),
        ("--lose-random 5", "--lose-random"),
        ("--lose-random 1:2:3:4", "--lose-random"),
        ("--lose-random 1:inf", "--lose-random"),
        ("--silent-loss", "--silent-loss"),
        ("--iq-gain 1,2,3", "IQ imbalance"),
    ],
)
def test_bad_options_are_refused(link_file, tmp_path, words, message):
    with pytest.raises(InputError, match=message):
        run("simulate", link_file, *SHORT, *words.split(), "--out", tmp_path / "run")
    assert [path.name for path in tmp_path.iterdir()] == [link_file.name]


def test_help_is_in_panels():
    """Every option but help itself stands in a named panel, and no text became a picture."""
    stdout = run("simulate", "--help")
    for title in ("Recording", "Carrier and clock", "Noise and interference", "Lost samples"):
        assert f" {title} " in stdout
    plain = stdout.split(" Options ")[1].split("╰")[0]
    assert plain.count("--") == 1
    assert "EVERY:SILENCE" in stdout
    assert all(ord(character) < 0x2700 for character in stdout)
