"""Framing: every frame that was sent is either received or listed with its reason."""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import collect, partner, record
from receiver_cases import IN_TURN, SYNC, make_link, payload_section

from spatiq.receiver.options import ReceiverOptions

SPS = 4.0
TEXT = SYNC + IN_TURN + payload_section(200)
LINK = make_link(sections=TEXT)
LENGTH = LINK.layout.length
PERIODIC = make_link(sections=TEXT, frame=f"period_symbols = {LENGTH + 40.5}")
PERIOD = (LENGTH + 40.5) * SPS
CHOICES = {"receive_channels": 2, "snr_db": 15.0, "samples_per_symbol": SPS, "seed": 4}


def reasons(frames):
    return [f.reason for f in frames.lost]


@pytest.mark.parametrize("spacing", ["back-to-back", 25.25, (0.0, 90.0)])
def test_spaced_in_any_way(tmp_path, spacing):
    recording, capture = record(tmp_path, LINK, frames=40, spacing=spacing, **CHOICES)
    frames = collect(recording, LINK)
    assert partner(frames, capture).size == 40 and frames.lost == []


@pytest.mark.parametrize("sync_last", [False, True])
def test_cut_off_by_start_and_end(tmp_path, sync_last):
    """A frame whose sync section is there and whose other symbols are not is listed."""
    sections = payload_section(200) + IN_TURN + SYNC if sync_last else TEXT
    link = make_link(sections=sections)
    length = link.layout.length

    def cut(capture):
        starts = capture.truth.starts
        first = int(starts[0] + 60 * SPS)
        last = int(starts[-1] + (length - 20) * SPS)
        return capture.samples()[:, first:last]

    recording, capture = record(tmp_path, link, cut, frames=6, spacing=30.0, **CHOICES)
    frames = collect(recording, link)
    # The sync section is at one end: only the frame cut at the other end can be seen.
    reason, which = ("start", 0) if sync_last else ("end", 5)
    assert reasons(frames) == [f"cut off by the {reason}"]
    expected = capture.truth.starts[which] - int(capture.truth.starts[0] + 60 * SPS)
    assert frames.lost[0].start_sample == pytest.approx(expected, abs=SPS)
    assert frames.start.size == 4


@pytest.mark.parametrize("sync_last", [False, True])
def test_with_a_period_both_ends_are_told(tmp_path, sync_last):
    sections = payload_section(200) + IN_TURN + SYNC if sync_last else TEXT
    link = make_link(sections=sections, frame=f"period_symbols = {LENGTH + 40.5}")

    def cut(capture):
        starts = capture.truth.starts
        first = int(starts[0] + 120 * SPS)
        last = int(starts[-1] + 120 * SPS)
        return capture.samples()[:, first:last]

    recording, capture = record(tmp_path, link, cut, frames=6, **CHOICES)
    frames = collect(recording, link)
    assert reasons(frames) == ["cut off by the start", "cut off by the end"]
    assert frames.start.size == 4
    shift = int(capture.truth.starts[0] + 120 * SPS)
    for lost, i in zip(frames.lost, (0, 5), strict=True):
        assert lost.start_sample == pytest.approx(capture.truth.starts[i] - shift, abs=SPS)


def test_no_frame_is_made_up_where_nothing_was_sent(tmp_path):
    """A period alone lists nothing in the noise before the first and after the last frame."""
    recording, _ = record(tmp_path, PERIODIC, frames=5, lead_in=1500.0, lead_out=1500.0, **CHOICES)
    frames = collect(recording, PERIODIC)
    assert frames.start.size == 5 and frames.lost == []


@pytest.mark.parametrize("spacing", ["back-to-back", (10.0, 400.0)])
def test_frames_between_digital_silence(tmp_path, spacing):
    """Without noise, all that is left between frames is the transforms' rounding."""
    choices = CHOICES | {"snr_db": np.inf}
    recording, capture = record(
        tmp_path, LINK, frames=20, spacing=spacing, lead_in=900.0, lead_out=900.0, **choices
    )
    frames = collect(recording, LINK)
    assert partner(frames, capture).size == 20 and frames.lost == []
    np.testing.assert_array_equal(frames.words, capture.truth.words())


def test_a_frame_missing_in_the_middle(tmp_path):
    def silence(capture):
        samples = capture.samples().copy()
        start = int(capture.truth.starts[3])
        noise = samples[:, : int(40 * SPS)]
        for at in range(start - 40, start + int(LENGTH * SPS) + 40, noise.shape[1]):
            stop = min(at + noise.shape[1], start + int(LENGTH * SPS) + 40)
            samples[:, at:stop] = noise[:, : stop - at]
        return samples

    recording, capture = record(tmp_path, PERIODIC, silence, frames=8, **CHOICES)
    frames = collect(recording, PERIODIC)
    assert partner(frames, capture).tolist() == [0, 1, 2, 4, 5, 6, 7]
    assert reasons(frames) == ["not found"]
    assert frames.lost[0].start_sample == pytest.approx(capture.truth.starts[3], abs=0.5)


def segmented(capture, keep):
    """Samples with stretches left out, and the captures that say so."""
    samples, captures, at = [], [], 0
    whole = capture.samples()
    for first, stop in keep:
        captures.append({"core:sample_start": at, "core:global_index": 5000 + first})
        samples.append(whole[:, first:stop])
        at += stop - first
    return np.concatenate(samples, axis=1), captures


@pytest.mark.parametrize("periodic", [False, True])
def test_segments_with_gaps(tmp_path, periodic):
    """Frames across a gap are cut off, those in it are told where there is a period."""
    link = PERIODIC if periodic else make_link(sections=TEXT)
    spacing = "link" if periodic else 40.5
    _, capture = record(tmp_path, link, frames=12, spacing=spacing, **CHOICES)
    starts = capture.truth.starts
    # Frame 3 loses its end, frame 5 its beginning; 4 is left out whole.
    first_stop = int(starts[3] + 0.7 * LENGTH * SPS)
    second = int(starts[5] + 0.4 * LENGTH * SPS)
    end = capture.n_samples
    samples, captures = segmented(capture, [(0, first_stop), (second, end)])
    recording, _ = record(
        tmp_path, link, lambda _: samples, captures, frames=12, spacing=spacing, **CHOICES
    )
    assert len(recording.segments) == 2
    frames = collect(recording, link)
    assert frames.segment.tolist() == [0] * 3 + [1] * 6
    shift = np.where(frames.segment == 0, 0, second - first_stop)
    found = [int(np.argmin(np.abs(starts - s))) for s in frames.start + shift]
    assert found == [0, 1, 2, 6, 7, 8, 9, 10, 11]
    if periodic:
        assert reasons(frames) == ["cut off by a gap", "in a gap", "cut off by a gap"]
        expected = [starts[3], starts[4], starts[5] - (second - first_stop)]
        got = [f.start_sample for f in frames.lost]
        np.testing.assert_allclose(got, expected, atol=SPS)
        assert [f.segment for f in frames.lost] == [0, 0, 1]
    else:
        assert reasons(frames) == ["cut off by a gap"]


def test_segments_without_a_gap_in_the_index_still_end_frames(tmp_path):
    """Two segments told apart by frequency: their samples are not filtered across the border."""
    _, capture = record(tmp_path, LINK, frames=6, spacing=30.0, **CHOICES)
    border = int(capture.truth.starts[2] + 0.5 * LENGTH * SPS)
    captures = [
        {"core:sample_start": 0, "core:frequency": 2.4e9},
        {"core:sample_start": border, "core:frequency": 2.41e9},
    ]
    recording, _ = record(tmp_path, LINK, None, captures, frames=6, spacing=30.0, **CHOICES)
    frames = collect(recording, LINK)
    assert partner(frames, capture).tolist() == [0, 1, 3, 4, 5]
    assert reasons(frames) == ["cut off by a gap"]


def spoil(capture, places):
    samples = capture.samples().copy()
    for n, at in enumerate(places):
        samples[n % 2, at] = (np.nan, np.inf, complex(0, -np.inf))[n % 3]
    return samples


def test_samples_that_are_not_finite_cost_their_frames_only(tmp_path):
    """Frame 2 in the payload, frame 4 in the sync section; the silence after frame 6 costs none."""
    clean, capture = record(tmp_path, LINK, frames=9, spacing=40.0, **CHOICES)
    before = collect(clean, LINK)
    starts = capture.truth.starts
    places = [
        int(starts[2] + 200 * SPS),
        int(starts[4] + 5 * SPS),
        int(starts[6] + (LENGTH + 20) * SPS),
    ]
    recording, _ = record(
        tmp_path, LINK, lambda c: spoil(c, places), frames=9, spacing=40.0, **CHOICES
    )
    frames = collect(recording, LINK)
    assert reasons(frames) == ["samples not finite"] * 2
    np.testing.assert_allclose([f.start_sample for f in frames.lost], starts[[2, 4]], atol=SPS)
    kept = [0, 1, 3, 5, 6, 7, 8]
    assert partner(frames, capture).tolist() == kept
    for name, column in frames.columns.items():
        np.testing.assert_array_equal(column, before.columns[name][kept], err_msg=name)
    small = collect(recording, LINK, ReceiverOptions(block_size=1024))
    assert small.lost == frames.lost
    np.testing.assert_array_equal(small.words, frames.words)


@pytest.mark.parametrize("frame", [0, 3, 7])
def test_a_sync_section_full_of_them_is_told_where_there_is_a_period(tmp_path, frame):
    def wipe(capture):
        samples = capture.samples().copy()
        start = int(capture.truth.starts[frame])
        samples[:, start - 20 : start + int(90 * SPS)] = np.nan
        return samples

    recording, capture = record(tmp_path, PERIODIC, wipe, frames=8, **CHOICES)
    frames = collect(recording, PERIODIC)
    assert partner(frames, capture).tolist() == [i for i in range(8) if i != frame]
    assert reasons(frames) == ["samples not finite"]
    assert frames.lost[0].start_sample == pytest.approx(capture.truth.starts[frame], abs=0.5)


def test_a_recording_of_nothing_finite_is_empty(tmp_path):
    recording, _ = record(
        tmp_path, PERIODIC, lambda c: np.full_like(c.samples(), np.nan), frames=3, **CHOICES
    )
    frames = collect(recording, PERIODIC)
    assert frames.start.size == 0 and frames.lost == []


def test_clipped_samples_are_counted_in_their_frame(tmp_path):
    choices = CHOICES | {"datatype": "ci16_le", "backoff_db": 20.0}

    def clip(capture):
        samples = capture.samples().copy()
        at = int(capture.truth.starts[2] + 100 * SPS)
        samples[0, at : at + 3] = 32767 / 32768
        samples[1, at + 10] = -1.0
        return samples

    recording, _ = record(tmp_path, LINK, clip, frames=5, spacing=30.0, **choices)
    assert recording.clipping_known
    frames = collect(recording, LINK)
    assert frames.clipped.tolist() == [0, 0, 4, 0, 0]
