"""Whole against blocks: the same samples for any datatype, block size, range and layout."""

from __future__ import annotations

import tempfile
import tracemalloc
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sigmf_files import LAYOUTS, counting, document, oracle, put, random_components

from spatiq.errors import InputError
from spatiq.recording import Block, Recording, open_recording


def joined(recording: Recording, blocks: list[Block]) -> np.ndarray:
    """Samples of consecutive blocks, with the block rules checked on the way."""
    for a, b in pairwise(blocks):
        assert b.start == a.stop
    for block in blocks:
        assert block.samples.flags.c_contiguous
        assert block.segment.start <= block.start < block.stop <= block.segment.stop
        assert block.segment is recording.segments[block.segment.index]
    empty = np.empty((recording.channels, 0), np.complex64)
    return np.concatenate([empty, *(b.samples for b in blocks)], axis=1)


@st.composite
def layouts(draw: st.DrawFn) -> tuple[str, int, int, list[dict[str, int]]]:
    """Datatype, channels, frames, and captures with gaps and headers."""
    frames = draw(st.integers(1, 120))
    starts = draw(st.sets(st.integers(1, max(1, frames - 1)), max_size=4))
    captures, position, index = [], 0, draw(st.integers(0, 9))
    for start in sorted({0} | {s for s in starts if s < frames}):
        index += start - position + draw(st.sampled_from([0, 0, 7]))
        position = start
        captures.append(
            {
                "core:sample_start": start,
                "core:global_index": index,
                "core:header_bytes": draw(st.sampled_from([0, 0, 1, 12])),
            }
        )
    return draw(st.sampled_from(sorted(LAYOUTS))), draw(st.integers(1, 4)), frames, captures


@settings(max_examples=120, deadline=None)
@given(layouts(), st.integers(1, 130), st.data())
def test_any_block_size_and_range_gives_the_same_samples(
    layout: tuple[str, int, int, list[dict[str, int]]], block_size: int, data: st.DataObject
) -> None:
    datatype, channels, frames, captures = layout
    raw = random_components(datatype, frames, channels, seed=frames)
    parts = b""
    stops = [c["core:sample_start"] for c in captures[1:]] + [frames]
    for capture, stop in zip(captures, stops, strict=True):
        parts += b"\xee" * capture["core:header_bytes"]
        parts += raw[capture["core:sample_start"] : stop].tobytes()
    start = data.draw(st.integers(0, frames))
    stop = data.draw(st.integers(start, frames))
    with tempfile.TemporaryDirectory() as folder:
        meta = document(datatype, channels, captures, core_dataset="x.bin")
        path = put(Path(folder), "x", meta, parts, "x.bin")
        recording = open_recording(path)
        whole = list(recording.blocks(10**6))
        pieces = list(recording.blocks(block_size))
        ranged = list(recording.blocks(block_size, start, stop))
    assert len(whole) == len(recording.segments)
    samples = joined(recording, whole)
    np.testing.assert_array_equal(samples, oracle(raw).astype(np.complex64))
    np.testing.assert_array_equal(joined(recording, pieces), samples)
    np.testing.assert_array_equal(joined(recording, ranged), samples[:, start:stop])
    for blocks in (whole, pieces):
        assert sum(b.clipped for b in blocks).tolist() == sum(b.clipped for b in whole).tolist()
    for block in pieces:
        assert block.samples.shape[1] == min(block_size, block.segment.stop - block.start)


@pytest.mark.nojit
def test_many_channels_equal_each_channel_alone(tmp_path: Path) -> None:
    raw = random_components("ci16_be", 50, 3)
    together = open_recording(put(tmp_path, "all", document("ci16_be", 3), raw.tobytes()))
    (block,) = together.blocks()
    for c in range(3):
        alone = put(tmp_path, f"c{c}", document("ci16_be"), raw[:, c].tobytes())
        (one,) = open_recording(alone).blocks()
        np.testing.assert_array_equal(one.samples[0], block.samples[c])
        assert one.clipped[0] == block.clipped[c]


def test_blocks_given_out_are_not_overwritten(tmp_path: Path) -> None:
    path = put(tmp_path, "x", document(), counting(100).tobytes())
    blocks = list(open_recording(path).blocks(10))
    values = [int(b.samples[0, 0].real * 32768) for b in blocks]
    assert values == list(range(0, 100, 10))


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        ({"block_size": 0}, "block size: found 0; expected at least 1"),
        ({"start": -1}, r"range: found samples -1\.\.100; expected a range within 0\.\.100"),
        ({"start": 5, "stop": 4}, r"range: found samples 5\.\.4;"),
        ({"stop": 101}, r"range: found samples 0\.\.101;"),
    ],
)
def test_impossible_ranges_are_refused_at_once(
    tmp_path: Path, arguments: dict[str, int], text: str
) -> None:
    recording = open_recording(put(tmp_path, "x", document(), counting(100).tobytes()))
    with pytest.raises(InputError, match=text):
        recording.blocks(**arguments)


def test_a_file_that_became_shorter_is_an_error_and_not_a_hang(tmp_path: Path) -> None:
    recording = open_recording(put(tmp_path, "x", document(), counting(100).tobytes()))
    (tmp_path / "x.sigmf-data").write_bytes(b"\0" * 100)
    blocks = recording.blocks(20)
    next(blocks)
    with pytest.raises(InputError, match="found end of file after byte 100; expected 400 bytes"):
        next(blocks)


def test_a_file_that_is_gone_is_an_error(tmp_path: Path) -> None:
    recording = open_recording(put(tmp_path, "x", document(), counting(9).tobytes()))
    (tmp_path / "x.sigmf-data").unlink()
    with pytest.raises(InputError, match="No such file"):
        next(recording.blocks())


def test_memory_follows_the_block_and_not_the_recording(tmp_path: Path) -> None:
    path = put(tmp_path, "x", document(), bytes(40_000_000))
    recording = open_recording(path)
    next(recording.blocks(1000, stop=1000))
    tracemalloc.start()
    for _ in recording.blocks(10_000):
        pass
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    # Per block 40 kB of bytes and two generations of 80 kB of samples; the recording has 40 MB.
    assert peak < 1_000_000
