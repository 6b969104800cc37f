"""A recording shared out over workers gives the results of a single pass to the bit."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from batch_cases import COUNTER, PERIOD, PRBS, differences, make_job, write_capture, write_link

from spatiq.batch import splitting
from spatiq.batch.splitting import join_index, measure_share, plan_cuts, put_together
from spatiq.batch.steps import SplitSteps
from spatiq.batch.work import Outcome, measure_whole, run_task
from spatiq.receiver import framing
from spatiq.receiver.options import ReceiverOptions

SMALL_BLOCKS = ReceiverOptions(block_size=4096)


@pytest.fixture(autouse=True)
def small_batches(monkeypatch):
    monkeypatch.setattr(framing, "_BATCH_FRAMES", 6)


def share_out(job, tmp_path, seed, share_bytes=1 << 16):
    """All tasks of a job, in an order of chance; which they were, and the results file."""
    rng = np.random.default_rng(seed)
    steps = SplitSteps(job, 1000, share_bytes, tmp_path / f"work-{seed}")
    ready, done = steps.begin(), []
    while ready:
        task = ready.pop(int(rng.integers(len(ready))))
        done.append(task)
        more = steps.done(task, run_task(task))
        if isinstance(more, Outcome):
            assert not ready and not (tmp_path / f"work-{seed}").exists()
            return done, job.target(more.measurement)
        ready += more
    raise AssertionError("no outcome")


def both_ways(tmp_path, meta, link, seed, options=SMALL_BLOCKS, **how):
    whole = make_job(tmp_path / "whole", meta, link, options)
    split = make_job(tmp_path / f"split-{seed}", meta, link, options)
    outcome = measure_whole(whole)
    tasks, target = share_out(split, tmp_path, seed, **how)
    assert differences(whole.target(outcome.measurement), target) == []
    return [t.function for t in tasks]


def cut_at_random(monkeypatch, seed, count):
    rng = np.random.default_rng(seed)

    def cuts(recording, _):
        places = rng.integers(0, recording.n_samples + 1, count)
        return tuple(np.sort(places).tolist())

    monkeypatch.setattr(splitting, "plan_cuts", cuts)


@pytest.mark.parametrize("frame", ["", PERIOD], ids=["no period", "period"])
def test_wherever_it_is_cut(tmp_path, monkeypatch, frame):
    link = write_link(tmp_path, frame)
    spacing = "link" if frame else (5.0, 400.0)
    meta = write_capture(tmp_path, link, "long", frames=40, spacing=spacing)
    for seed in range(4):
        cut_at_random(monkeypatch, seed, 1 + 2 * seed)
        used = both_ways(tmp_path, meta, link, seed)
        assert used.count(measure_share) >= 4


def test_symbols_and_soft_output_too(tmp_path):
    link = write_link(tmp_path, PERIOD)
    meta = write_capture(tmp_path, link, "long")
    options = replace(SMALL_BLOCKS, keep_symbols=True, soft_output="max-log")
    both_ways(tmp_path, meta, link, 1, options)


def test_gaps_and_samples_not_finite(tmp_path):
    def worn(capture):
        samples = capture.samples()
        n = samples.shape[1]
        return np.concatenate([samples[:, : n // 3], samples[:, n // 3 + 1500 :]], axis=1)

    link = write_link(tmp_path, PERIOD)
    whole = write_capture(tmp_path, link, "whole")
    n = whole.with_suffix(".sigmf-data").stat().st_size // 8
    captures = [
        {"core:sample_start": 0, "core:global_index": 0},
        {"core:sample_start": n // 3, "core:global_index": n // 3 + 1500},
    ]
    meta = write_capture(tmp_path, link, "gap", worn, captures, datatype="cf32_le")
    data = meta.with_suffix(".sigmf-data")
    values = np.fromfile(data, "<c8")
    values[np.arange(1000, values.size, values.size // 5)] = np.nan
    values.tofile(data)
    both_ways(tmp_path, meta, link, 2)


def test_numbers_that_a_share_cannot_know_alone(tmp_path):
    """A counter of 8 bits begins anew: what a share takes for frame 44 may be frame 300; figures
    stay, numbers are put right. Where bits hang on the number, shares are measured again."""
    link = write_link(tmp_path, "", COUNTER + PRBS)
    meta = write_capture(
        tmp_path, link, "count", frames=60, spacing=30.0, first_frame=240, snr_db=14.0
    )
    both_ways(tmp_path, meta, link, 3)


def test_shares_that_lose_their_way_are_measured_again(tmp_path):
    """At many errors a PRBS is found again only by following it from the frame before."""

    def noisy_later(capture):
        samples = capture.samples()
        half = samples.shape[1] // 2
        noise = np.random.default_rng(8).standard_normal((2, 2, samples.shape[1] - half))
        samples[:, half:] += 0.5 * (noise[0] + 1j * noise[1])
        return samples

    link = write_link(tmp_path, "", PRBS.replace("PRBS15", "PRBS31"))
    meta = write_capture(
        tmp_path, link, "poor", noisy_later, frames=60, spacing=30.0, datatype="cf32_le"
    )
    used = both_ways(tmp_path, meta, link, 4)
    assert used.count(put_together) == 2  # the first time it asked for shares again


def test_a_recording_without_a_frame(tmp_path):
    link = write_link(tmp_path)
    meta = write_capture(tmp_path, link, "none", frames=3)
    other = write_link(tmp_path, "", name="other")
    other.write_text(other.read_text().replace("order = 6", "order = 7"))
    both_ways(tmp_path, meta, other, 5)


def test_results_that_are_there_are_entered_not_measured_again(tmp_path):
    link = write_link(tmp_path, PERIOD)
    meta = write_capture(tmp_path, link, "long")
    job = make_job(tmp_path / "results", meta, link)
    measure_whole(job)
    tasks, _ = share_out(job, tmp_path, 6)
    assert measure_share not in [t.function for t in tasks]


def test_cuts_are_even_and_follow_from_the_size_alone(tmp_path):
    link = write_link(tmp_path, PERIOD)
    meta = write_capture(tmp_path, link, "long")
    recording, _ = make_job(tmp_path / "results", meta, link).open()
    size = meta.with_suffix(".sigmf-data").stat().st_size
    assert plan_cuts(recording, size) == ()
    assert plan_cuts(recording, size - 1) == (recording.n_samples // 2,)
    assert plan_cuts(recording, size // 3)[0] == recording.n_samples // 4


def test_an_inverted_spectrum_is_told_as_in_a_single_pass(tmp_path):
    link = write_link(tmp_path, PERIOD)
    meta = write_capture(tmp_path, link, "inverted", lambda c: c.samples().conj())
    used = both_ways(tmp_path, meta, link, 7)
    assert used.count(join_index) == 2
    fixed = replace(SMALL_BLOCKS, spectrum="inverted")
    assert both_ways(tmp_path / "fixed", meta, link, 8, fixed).count(join_index) == 1
    normal = write_capture(tmp_path, link, "normal")
    assert both_ways(tmp_path / "normal", normal, link, 9).count(join_index) == 1


def test_a_front_end_at_fault(tmp_path):
    """A constant, an image and an interfering line, taken out while samples are read."""

    def worn(capture):
        samples = capture.samples()
        line = 0.05 * np.exp(2j * np.pi * 0.11 * np.arange(samples.shape[1]))
        return samples + 0.05 * samples.conj() + 0.1 + line

    link = write_link(tmp_path, PERIOD)
    meta = write_capture(tmp_path, link, "worn", worn, frames=60, datatype="cf32_le")
    both_ways(tmp_path, meta, link, 10)
