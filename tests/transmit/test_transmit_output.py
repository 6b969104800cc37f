"""Playback levels, sets of files, truth files."""

import json

import numpy as np
import pytest
from transmit_links import make_link

from spatiq.errors import InputError
from spatiq.recording.opening import open_recording
from spatiq.transmit.output import RecordingSet, set_files, staged, write_set
from spatiq.transmit.playback import playback
from spatiq.transmit.simulation import simulate
from spatiq.transmit.truth_files import write_truth
from spatiq.transmit.waveform import transmit_waveform


def recording_set(base, names=("",), datatype="ci16_le", overwrite=False):
    return RecordingSet(base, names, 4e6, datatype, 2.4e9, "test", overwrite)


def read(path):
    recording = open_recording(path)
    return np.concatenate([block.samples for block in recording.blocks()], axis=1)


@pytest.mark.parametrize("datatype", ["cf32_le", "ci16_le", "ci8", "cu8", "ci16_be"])
def test_playback_peak_and_shape(datatype):
    """One gain for all antennas, the peak where it was asked for, nothing at full scale."""
    link = make_link(antennas=4)
    made = playback(link, frames=5, samples_per_symbol=3.3, datatype=datatype, headroom_db=2.0)
    samples = np.concatenate(list(made.blocks(1000)), axis=1)
    assert samples.shape == (4, made.n_samples)
    step = {"cf32_le": 1e-6, "ci16_le": 2**-15, "ci16_be": 2**-15}.get(datatype, 2**-7)
    assert np.max(np.abs(samples)) == pytest.approx(10 ** (-2 / 20), abs=step)
    assert made.peak == pytest.approx(10 ** (-2 / 20))
    plain = np.concatenate(list(transmit_waveform(link, np.arange(5), made.starts, 3.3)), axis=1)
    np.testing.assert_allclose(samples, plain * made.gain, atol=0.501 * step * np.sqrt(2))
    rms = np.sqrt(np.mean(np.abs(plain * made.gain) ** 2, axis=1))
    np.testing.assert_allclose(made.rms, rms, rtol=1e-4)


@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"frames": 0}, "frames"),
        ({"headroom_db": 0.0}, "headroom"),
        ({"datatype": "ci12"}, "datatype"),
        ({"first_frame": -1}, "first frame"),
        ({"seed": -1}, "seed"),
    ],
)
def test_playback_refuses(choices, message):
    given = {"frames": 2, "samples_per_symbol": 4.0, **choices}
    with pytest.raises(InputError, match=message):
        playback(make_link(), **given)


@pytest.mark.parametrize("datatype", ["cf32_le", "ci16_le", "ci8", "cu16_be", "ci32_le"])
def test_written_recording_reads_back_exactly(tmp_path, datatype):
    made = simulate(make_link(), samples_per_symbol=4, frames=20, datatype=datatype, seed=2)
    target = recording_set(tmp_path / "run", datatype=datatype)
    with staged(target.base, target.files(), False) as folder:
        write_set(target, folder, made.blocks(3000))
        assert not (tmp_path / "run.sigmf-meta").exists()
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(target.files())
    assert np.array_equal(read(tmp_path / "run.sigmf-meta"), made.samples())


def test_collection_reads_back_as_channels(tmp_path):
    made = simulate(make_link(), samples_per_symbol=4, frames=20, datatype="ci16_le", seed=2)
    target = recording_set(tmp_path / "run", ("-a", "-b"))
    with staged(target.base, target.files(), False) as folder:
        write_set(target, folder, made.blocks(3000))
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(target.files())
    assert np.array_equal(read(tmp_path / "run.sigmf-collection"), made.samples())


def test_existing_files_are_kept(tmp_path):
    (tmp_path / "run.sigmf-data").write_bytes(b"precious")
    files = set_files("run", ("",))
    with (
        pytest.raises(InputError, match=r"exists.*--overwrite"),
        staged(tmp_path / "run", files, False),
    ):
        pytest.fail("entered")
    assert (tmp_path / "run.sigmf-data").read_bytes() == b"precious"
    with staged(tmp_path / "run", files[:1], True) as folder:
        (folder / "run.sigmf-data").write_bytes(b"new")
    assert (tmp_path / "run.sigmf-data").read_bytes() == b"new"


@pytest.mark.parametrize("names", [("",), ("-a", "-b")])
def test_a_source_that_fails_leaves_nothing(tmp_path, names):
    def blocks():
        for _ in range(20):
            yield np.zeros((2, 100), np.complex64)
        raise RuntimeError("the source broke")

    target = recording_set(tmp_path / "run", names)
    with (
        pytest.raises(RuntimeError, match="the source broke"),
        staged(target.base, target.files(), False) as folder,
    ):
        write_set(target, folder, blocks())
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("names", [("",), ("-a", "-b")])
def test_a_writer_that_fails_stops_the_source(tmp_path, names):
    """A sample beyond full scale is refused by the writing: the source is not run to its end."""
    drawn = 0

    def blocks():
        nonlocal drawn
        for drawn in range(100_000):
            block = np.zeros((2, 100), np.complex64)
            block[1, 5] = 7.0 if drawn == 3 else 0.0
            yield block

    target = recording_set(tmp_path / "run", names)
    with (
        pytest.raises(InputError, match="full scale"),
        staged(target.base, target.files(), False) as folder,
    ):
        write_set(target, folder, blocks())
    assert drawn < 99_999
    assert list(tmp_path.iterdir()) == []


def test_folder_that_is_not_there(tmp_path):
    with (
        pytest.raises(InputError, match="no such folder"),
        staged(tmp_path / "missing" / "run", ("run.x",), False),
    ):
        pytest.fail("entered")


def test_truth_files_hold_the_truth(tmp_path):
    made = simulate(make_link(), samples_per_symbol=4, frames=7, cfo_hz=(-50.0, 50.0), seed=5)
    truth = made.truth
    write_truth(truth, tmp_path, "run")
    arrays = np.load(tmp_path / "run.truth.npz", allow_pickle=False)
    for name in ("frame_numbers", "starts", "cfo_hz", "phase", "snr_db", "H"):
        assert np.array_equal(arrays[name], getattr(truth, name)), name
    assert np.array_equal(arrays["words"], truth.words())
    summary = json.loads((tmp_path / "run.truth.json").read_text())
    assert summary["N0"] == truth.N0
    assert summary["frames"] == 7
    assert summary["words_kept"] is True
