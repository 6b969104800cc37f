"""Every frame that a link with a frame period sent is found, or listed with its reason."""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import collect, record
from receiver_cases import IN_TURN, SYNC, make_link, payload_section

from spatiq.receiver.frame_search import sync_pattern
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.sync_likeness import likeness_ends
from spatiq.transmit.losses import recorded_index

SPS = 4.0
TEXT = SYNC + IN_TURN + payload_section(200)
LENGTH = make_link(sections=TEXT).layout.length
LINK = make_link(sections=TEXT, frame=f"period_symbols = {LENGTH + 40.5}")
PERIOD = (LENGTH + 40.5) * SPS
CHOICES = {"receive_channels": 2, "snr_db": 18.0, "samples_per_symbol": SPS, "spacing": "link"}
HEADER = 63 + 2 * 16
CHANNEL = np.array([[1.0, 0.5j], [-0.4 + 0.3j, 1.1]])


def without(samples, gaps):
    """Samples with runs left out: (first, count) each."""
    wanted = np.ones(samples.shape[1], np.bool_)
    for first, count in gaps:
        wanted[first : first + count] = False
    return np.ascontiguousarray(samples[:, wanted])


def recorded_starts(starts, gaps):
    """Where frames begin in the file; told by the sync section if the start is lost."""
    end = 62 * SPS
    at = recorded_index(starts, gaps)
    return np.where(np.isnan(at), recorded_index(starts + end, gaps) - end, at)


def found_frames(frames, starts):
    """Simulated frame of each one found; none twice."""
    which = [int(np.nanargmin(np.abs(starts - s))) for s in frames.start]
    assert np.all(np.abs(starts[which] - frames.start) < SPS)
    assert len(set(which)) == len(which)
    return which


@pytest.mark.parametrize("share", [0.5, 0.9])
@pytest.mark.parametrize("count", [41, 200, 403])
def test_the_frame_after_a_silent_loss_is_found(tmp_path, share, count):
    """The next frame comes early, up to 100 symbol periods before this one should have ended."""
    _, capture = record(tmp_path, LINK, frames=8, seed=4, **CHOICES)
    starts = capture.truth.starts
    first = int(starts[3] + share * LENGTH * SPS)
    gaps = np.array([[first, count]])
    recording, _ = record(
        tmp_path, LINK, lambda c: without(c.samples(), gaps), frames=8, seed=4, **CHOICES
    )
    frames = collect(recording, LINK)
    assert found_frames(frames, recorded_starts(starts, gaps)) == list(range(8))
    assert frames.lost == []


@pytest.mark.parametrize("share", [0.55, 0.8, 1.2])
def test_a_loss_above_half_a_period_hides_no_frame(tmp_path, share):
    """From amid frame 3: frame 4 keeps its start, loses its sync section, or nearly all."""
    _, capture = record(tmp_path, LINK, frames=8, seed=5, **CHOICES)
    starts = capture.truth.starts
    gaps = np.array([[int(starts[3] + (HEADER + 60) * SPS), int(share * PERIOD)]])
    gaps[0, 1] = min(gaps[0, 1], int(0.93 * PERIOD))
    recording, _ = record(
        tmp_path, LINK, lambda c: without(c.samples(), gaps), frames=8, seed=5, **CHOICES
    )
    frames = collect(recording, LINK)
    which = found_frames(frames, recorded_starts(starts, gaps))
    assert set(which) >= set(range(8)) - {4}
    assert frames.start.size + len(frames.lost) == 8
    assert {f.reason for f in frames.lost} <= {"not found"}


def mix(rng, starts, samples):
    """Random faults at random frames: samples, losses (first, count, told), frames touched."""
    samples = samples.copy()
    gaps, touched = [], set()
    for frame in np.sort(rng.permutation(np.arange(2, starts.size - 3))[:4]):
        kind = rng.choice(["untold", "told", "dead", "gain", "noise"])
        first = int(starts[frame] + rng.uniform(-0.1, 0.9) * LENGTH * SPS)
        count = int(rng.uniform(10, 0.8 * PERIOD))
        if kind in ("untold", "told"):
            if gaps and first <= gaps[-1][0] + gaps[-1][1]:
                continue
            count = min(count, int(0.45 * PERIOD))
            gaps.append((first, count, kind == "told"))
        stretch = slice(first, first + count)
        if kind == "dead":
            samples[:, stretch] = 0
        elif kind == "gain":
            samples[:, stretch] *= 10 ** (rng.uniform(-10, 10) / 20)
        elif kind == "noise":
            level = np.sqrt(np.mean(np.abs(samples) ** 2)) * 3
            shape = samples[:, stretch].shape
            noise = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
            samples[:, stretch] += level * noise
        begin, end = starts - 16 * SPS, starts + (LENGTH + 16) * SPS
        touched |= set(np.flatnonzero((begin < first + count) & (end > first)).tolist())
    return samples, gaps, touched


def captures_of(gaps):
    """Capture segments of a recorder that knows of the losses told only."""
    captures, gone, known = [{"core:sample_start": 0, "core:global_index": 0}], 0, 0
    for first, count, told in gaps:
        gone += count
        if told:
            known += count
            at = first + count - gone
            captures.append({"core:sample_start": at, "core:global_index": at + known})
    return captures


@pytest.mark.parametrize("seed", range(12))
def test_mixed_faults_leave_no_frame_unlisted(tmp_path, seed):
    """Losses untold and told, dead stretches, gain steps, bursts; every other time, both ends cut.

    Found and listed add up to what was sent, nothing is found twice, and frames that no fault
    touches have the words of the clean recording. The channel stands still: whether a frame whose
    sync section lies outside was sent is told by its neighbour's power.
    """
    choices = {**CHOICES, "channels": CHANNEL, "frames": 14, "seed": 6 + seed}
    recording, capture = record(tmp_path, LINK, **choices)
    clean = collect(recording, LINK)
    starts = capture.truth.starts
    assert clean.start.size == 14
    samples, gaps, touched = mix(np.random.default_rng(seed), starts, capture.samples())
    if seed % 2:
        begin, end = int(starts[0] + 120 * SPS), int(starts[-1] + 120 * SPS)
        samples = samples[:, begin:end]
        gaps = [(first - begin, count, told) for first, count, told in gaps]
        starts = starts - begin
        touched |= {0, 13}
    runs = np.array([gap[:2] for gap in gaps], np.int64).reshape(-1, 2)
    kept = without(samples, runs)
    recording, _ = record(tmp_path, LINK, lambda _: kept, captures_of(gaps), **choices)
    frames = collect(recording, LINK)
    which = found_frames(frames, recorded_starts(starts, runs))
    assert len(which) + len(frames.lost) == 14, [(f.reason, f.start_sample) for f in frames.lost]
    assert all(f.reason for f in frames.lost)
    assert set(which) >= set(range(14)) - touched
    for row, frame in enumerate(which):
        if frame not in touched:
            np.testing.assert_array_equal(frames.words[row], clean.words[frame])


@pytest.mark.nojit
def test_known_symbols_like_the_sync_section_are_noticed():
    options = ReceiverOptions(cfo_range=0.02)
    again = make_link(sections=TEXT + SYNC + payload_section(50))
    for link, ends in ((LINK, 63), (again, LENGTH)):
        found = likeness_ends(link, sync_pattern(link, options, 2))
        assert ends <= found <= ends + 63
