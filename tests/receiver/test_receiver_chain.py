"""The chain on real SigMF files: block sizes, segments, stages of one's own, refusals."""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import FIGURES, collect, partner, record
from receiver_cases import IN_TURN, SYNC, MemoryRecording, make_link, payload_section

from spatiq.errors import InputError
from spatiq.receiver.chain import chain_parts, receive, standard_stages
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.writing import write_recording

LINK = make_link(sections=SYNC + IN_TURN + payload_section(200))
CHOICES = {
    "receive_channels": 2,
    "snr_db": 14.0,
    "samples_per_symbol": 4.0690104,
    "frames": 60,
    "cfo_hz": (-1.5e4, 1.5e4),
    "spacing": (0.0, 300.0),
    "seed": 3,
}


def assert_same(one, other):
    for name, column in one.columns.items():
        np.testing.assert_array_equal(column, other.columns[name], err_msg=name)
    assert one.lost == other.lost


@pytest.fixture(scope="module")
def recorded(tmp_path_factory):
    return record(tmp_path_factory.mktemp("chain"), LINK, **CHOICES)


@pytest.fixture(scope="module")
def whole(recorded):
    return collect(recorded[0], LINK, ReceiverOptions(block_size=1 << 22))


@pytest.mark.parametrize("block_size", [1024, 4096, 5003, 1 << 16])
def test_block_size_changes_no_bit_of_any_figure(recorded, whole, block_size):
    assert_same(collect(recorded[0], LINK, ReceiverOptions(block_size=block_size)), whole)


def test_all_frames_are_received(recorded, whole):
    found = partner(whole, recorded[1])
    assert found.tolist() == list(range(60))
    assert whole.lost == []


def test_received_twice_is_received_the_same(recorded, whole):
    assert_same(collect(recorded[0], LINK, ReceiverOptions(block_size=1 << 22)), whole)


def test_each_channel_alone_is_received_too(recorded, whole, tmp_path):
    """Frames that one channel carries alone lie where both say, within the timing's spread."""
    samples = recorded[1].samples()[:1]
    written = write_recording(tmp_path / "one", samples, sample_rate=recorded[0].sample_rate)
    alone = collect(open_recording(written.meta_path), LINK)
    assert alone.channel.shape[1:] == (1, 2)
    common = [np.argmin(np.abs(whole.start - s)) for s in alone.start]
    assert len(common) > 40  # deep fades on one channel hide some
    assert np.abs(whole.start[common] - alone.start).max() < 1.0


def test_a_longer_recording_gives_the_same_frames_first(recorded, whole, tmp_path):
    """What comes later changes nothing before: frames well inside the shorter one are equal."""
    samples = recorded[1].samples()
    half = samples.shape[1] // 2
    written = write_recording(
        tmp_path / "half", samples[:, :half], sample_rate=recorded[0].sample_rate
    )
    short = collect(open_recording(written.meta_path), LINK)
    assert 20 < short.start.size < 40
    for name in FIGURES:
        np.testing.assert_array_equal(short.columns[name], whole.columns[name][: short.start.size])
    assert [f.reason for f in short.lost] in ([], ["cut off by the end"])


def test_stages_of_ones_own(recorded, whole):
    """The standard list, with one stage in front that watches."""
    recording = recorded[0]
    seen = []

    def watch(batch):
        seen.append(batch.count)
        return batch

    options = ReceiverOptions()
    parts = chain_parts(recording, LINK, options)
    stages = [watch, *standard_stages(LINK, options, parts)]
    assert_same(collect(recording, LINK, options, stages=stages), whole)
    assert sum(seen) == 60


def test_progress_reaches_the_end(recorded):
    steps = []
    for _ in receive(recorded[0], LINK, progress=steps.append):
        pass
    assert steps[0].samples_done == 0 and steps[0].text
    assert steps[-1].samples_done == steps[-1].samples_total == recorded[0].n_samples
    assert steps[-1].frames_found == 60


def test_noise_yields_an_empty_last_batch():
    rng = np.random.default_rng(5)
    noise = (rng.normal(size=(2, 50_000)) + 1j * rng.normal(size=(2, 50_000))).astype(np.complex64)
    batches = list(receive(MemoryRecording(noise, 4e6), LINK))
    assert [b.count for b in batches] == [0] and batches[0].final and batches[0].lost == []


@pytest.mark.nojit
@pytest.mark.parametrize("length", [0, 3, 100])
def test_recordings_shorter_than_a_sync_section(length):
    batches = list(receive(MemoryRecording(np.zeros((2, length), np.complex64), 4e6), LINK))
    assert [b.count for b in batches] == [0]


@pytest.mark.nojit
@pytest.mark.parametrize("rate", [1.0e6, 1.24e6, 65e6])
def test_sample_rates_that_do_not_fit_are_refused(rate):
    recording = MemoryRecording(np.zeros((1, 100), np.complex64), rate)
    with pytest.raises(InputError, match=r"sample rate: found .* 1\.25 to 64 samples per symbol"):
        list(receive(recording, LINK))


@pytest.mark.nojit
def test_a_link_without_payload_is_refused():
    link = make_link(sections=SYNC + IN_TURN, fields="")
    with pytest.raises(InputError, match=r"frame.section: found no payload"):
        list(receive(MemoryRecording(np.zeros((1, 100), np.complex64), 4e6), link))


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("option", "value"),
    [("cfo_range", 0.3), ("false_alarm", 0.0), ("confidence", 1.0), ("block_size", 10)],
)
def test_options_out_of_range_are_refused(option, value):
    with pytest.raises(InputError, match=option):
        ReceiverOptions(**{option: value})
