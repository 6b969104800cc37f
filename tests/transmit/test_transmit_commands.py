"""`spatiq simulate` and `spatiq waveform` on real files."""

import json

import numpy as np
import pytest
import typer
from transmit_links import link_text
from typer.testing import CliRunner

from spatiq.cli.simulate import simulate_command
from spatiq.cli.waveform import waveform_command
from spatiq.errors import InputError
from spatiq.link.loading import load_link
from spatiq.recording.opening import open_recording
from spatiq.transmit.channel import rician, steering_line_of_sight
from spatiq.transmit.simulation import simulate

app = typer.Typer()
app.command("simulate")(simulate_command)
app.command("waveform")(waveform_command)


@pytest.fixture
def link_file(tmp_path):
    path = tmp_path / "lab.link.toml"
    path.write_text(link_text())
    return path


def run(*words):
    """Standard output and standard error; what the command raises is raised here."""
    result = CliRunner().invoke(app, [str(word) for word in words], catch_exceptions=False)
    assert result.exit_code == 0, result.output
    return result.stdout, result.stderr


def read(path):
    return np.concatenate([block.samples for block in open_recording(path).blocks()], axis=1)


SHORT = ("--frames", 6, "--samples-per-symbol", 4)


def test_simulate_writes_what_simulate_makes(link_file, tmp_path):
    out = tmp_path / "run"
    words = ("--snr", 12, "--cfo", "-700", "--clock-ppm", 5, "--seed", 9, "--spacing", "2:9")
    stdout, _ = run("simulate", link_file, *SHORT, *words, "--out", out, "--json", "--truth")
    made = simulate(
        load_link(link_file),
        frames=6,
        samples_per_symbol=4.0,
        snr_db=12.0,
        cfo_hz=-700.0,
        clock_ppm=5.0,
        seed=9,
        spacing=(2.0, 9.0),
        datatype="ci16_le",
    )
    assert np.array_equal(read(f"{out}.sigmf-meta"), made.samples())
    summary = json.loads(stdout)
    assert summary["samples_per_channel"] == made.n_samples
    assert summary["clipped_samples"] == made.clipped.tolist()
    names = {"run.truth.json", "run.truth.npz", "run.sigmf-data", "run.sigmf-meta"}
    assert {path.name for path in tmp_path.iterdir()} == names | {link_file.name}
    assert open_recording(f"{out}.sigmf-meta").carrier_hz == 2.4e9


def test_simulate_rician_collection(link_file, tmp_path):
    words = ("--channel", "rician", "--rician-k", 3, "--arrival", 10, "--departure", 30)
    more = ("--receive-correlation", 0.4, "--constant", "--collection", "--datatype", "cf32_le")
    run("simulate", link_file, *SHORT, *words, *more, "--out", tmp_path / "run")
    direct = steering_line_of_sight(2, 2, 10, 30)
    model = rician(3.0, line_of_sight=direct, receive_correlation=0.4, constant=True)
    made = simulate(load_link(link_file), frames=6, samples_per_symbol=4.0, channels=model)
    assert np.array_equal(read(tmp_path / "run.sigmf-collection"), made.samples())


def test_simulate_fixed_channel_from_a_file(link_file, tmp_path):
    h = np.array([[1, 2j], [0.5, 1]])
    np.save(tmp_path / "h.npy", h)
    words = ("--channel", "fixed", "--matrices", tmp_path / "h.npy", "--snr", "inf")
    stdout, _ = run("simulate", link_file, *SHORT, *words, "--out", tmp_path / "run")
    made = simulate(
        load_link(link_file),
        frames=6,
        samples_per_symbol=4.0,
        channels=h,
        snr_db=np.inf,
        datatype="ci16_le",
    )
    assert np.array_equal(read(tmp_path / "run.sigmf-meta"), made.samples())
    assert "snr db lowest frame: none" in stdout


def test_waveform_is_one_recording_per_antenna(link_file, tmp_path):
    stdout, stderr = run("waveform", link_file, *SHORT, "--out", tmp_path / "play", "--json")
    assert stderr.startswith("Caution: ")
    summary = json.loads(stdout)
    assert summary["peak_dbfs"] == pytest.approx(-3.0)
    both = read(tmp_path / "play.sigmf-collection")
    assert both.shape == (2, summary["samples_per_antenna"])
    for antenna in range(2):
        alone = read(tmp_path / f"play-tx{antenna}.sigmf-meta")
        assert np.array_equal(alone[0], both[antenna])
    assert np.max(np.abs(both)) == pytest.approx(10 ** (-3 / 20), abs=1e-4)


@pytest.mark.parametrize("command", ["simulate", "waveform"])
def test_existing_output_needs_overwrite(command, link_file, tmp_path):
    run(command, link_file, *SHORT, "--out", tmp_path / "run")
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    with pytest.raises(InputError, match="--overwrite"):
        run(command, link_file, *SHORT, "--out", tmp_path / "run", "--seed", 5)
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before
    run(command, link_file, *SHORT, "--out", tmp_path / "run", "--seed", 5, "--overwrite")
    assert {path.name for path in tmp_path.iterdir()} == set(before)


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("--cfo", "fast"), "--cfo"),
        (("--cfo", "1:2:3"), "--cfo"),
        (("--spacing", "wide"), "--spacing"),
        (("--channel", "fixed"), "--matrices"),
        (("--matrices", "h.npy"), "--matrices"),
        (("--channel", "fixed", "--matrices", "missing.npy"), "missing.npy"),
        (("--snr", "nan"), "SNR"),
        (("--channel", "rician", "--receive-channels", "1000000000"), "receive channels"),
        (("--sample-rate", "4e6"), "one of the two"),
    ],
)
def test_bad_options_are_refused(words, message, link_file, tmp_path):
    with pytest.raises(InputError, match=message):
        run("simulate", link_file, *SHORT, *words, "--out", tmp_path / "run")
    assert [path.name for path in tmp_path.iterdir()] == [link_file.name]


def test_pickled_matrices_are_refused(link_file, tmp_path):
    path = tmp_path / "h.npy"
    np.save(path, np.array([[object()]]), allow_pickle=True)
    words = ("--channel", "fixed", "--matrices", path)
    with pytest.raises(InputError, match=r"h\.npy"):
        run("simulate", link_file, *SHORT, *words, "--out", tmp_path / "run")


@pytest.mark.parametrize("command", ["simulate", "waveform"])
def test_help_shows_an_example(command):
    stdout, _ = run(command, "--help")
    assert f"Example: spatiq {command}" in " ".join(stdout.split())
