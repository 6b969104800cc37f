"""Captures, gaps, offsets, headers: where each sample is in the file and in time (SigMF 1.2)."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sigmf_files import counting, document, numbers, put

from spatiq.errors import InputError
from spatiq.recording import Recording, open_recording

FRAMES = 100


def capture(start: int, **fields: Any) -> dict[str, Any]:
    named = {f"core:{k}": v for k, v in fields.items() if v is not None}
    return {"core:sample_start": start, **named}


def opened(folder: Path, captures: list[dict[str, Any]], **fields: Any) -> Recording:
    meta = document(captures=captures, **fields)
    return open_recording(put(folder, "x", meta, counting(FRAMES).tobytes()))


def spans(recording: Recording) -> list[tuple[int, int, int]]:
    return [(s.start, s.count, s.global_index) for s in recording.segments]


@pytest.mark.parametrize(
    ("captures", "expected"),
    [
        ([], [(0, 100, 0)]),
        ([capture(0)], [(0, 100, 0)]),
        ([capture(0, global_index=5000)], [(0, 100, 5000)]),
        # Contiguous in the original stream: merged.
        ([capture(0), capture(40), capture(60)], [(0, 100, 0)]),
        ([capture(0, global_index=7), capture(40, global_index=47)], [(0, 100, 7)]),
        # Dropped samples: a larger step in global_index than in sample_start.
        (
            [capture(0), capture(40, global_index=50), capture(60, global_index=70)],
            [(0, 40, 0), (40, 60, 50)],
        ),
        ([capture(0, global_index=100), capture(40)], [(0, 40, 100), (40, 60, 40)]),
        # The carrier changes.
        ([capture(0, frequency=1e9), capture(40, frequency=2e9)], [(0, 40, 0), (40, 60, 40)]),
        ([capture(0, frequency=1e9), capture(40, frequency=1e9)], [(0, 100, 0)]),
        # Fields do not carry over: the second carrier is unknown.
        ([capture(0, frequency=1e9), capture(40)], [(0, 40, 0), (40, 60, 40)]),
    ],
)
def test_segments(
    tmp_path: Path, captures: list[dict[str, Any]], expected: list[tuple[int, int, int]]
) -> None:
    recording = opened(tmp_path, captures)
    assert spans(recording) == expected
    assert recording.n_samples == FRAMES
    values = [n for b in recording.blocks() for n in numbers(b.samples)[0]]
    assert values == list(range(FRAMES))


def test_equal_captures_are_one_and_empty_ones_none(tmp_path: Path) -> None:
    twice = capture(40, global_index=90, header_bytes=4)
    captures = [capture(0), twice, dict(twice), capture(100), capture(130)]
    data = counting(40).tobytes() + b"HEAD" + counting(60, first=40).tobytes()
    meta = document(captures=captures, core_dataset="x.iq")
    recording = open_recording(put(tmp_path, "x", meta, data, "x.iq"))
    assert spans(recording) == [(0, 40, 0), (40, 60, 90)]
    assert [w.partition(": ")[2] for w in recording.warnings] == [
        "captures that point at no samples: 2; ignored"
    ]
    values = [n for b in recording.blocks(7) for n in numbers(b.samples)[0]]
    assert values == list(range(100))


def test_samples_before_the_first_capture_are_a_segment_of_their_own(tmp_path: Path) -> None:
    recording = opened(tmp_path, [capture(10, frequency=1e9)])
    assert spans(recording) == [(0, 10, 0), (10, 90, 10)]
    assert [s.frequency for s in recording.segments] == [None, 1e9]
    assert "no capture says anything of the first 10 samples" in recording.warnings[0]


@pytest.mark.parametrize(
    ("offset", "starts", "expected", "base", "warned"),
    [
        (1000, [1000, 1040], [(0, 40, 1000), (40, 60, 2000)], 1000, False),
        (1000, [], [(0, 100, 1000)], 1000, False),
        (1000, [0, 40], [(0, 40, 0), (40, 60, 2000)], 0, True),
        # One start below the offset: all are relative to the file, though the other is above.
        (30, [0, 40], [(0, 40, 0), (40, 60, 2000)], 0, True),
    ],
)
def test_offset_rule(
    tmp_path: Path,
    offset: int,
    starts: list[int],
    expected: list[tuple[int, int, int]],
    base: int,
    warned: bool,
) -> None:
    captures = [capture(s, global_index=2000 if k else None) for k, s in enumerate(starts)]
    recording = opened(tmp_path, captures, core_offset=offset)
    assert spans(recording) == expected
    assert recording.datasets[0].metadata.index_base == base
    assert any("below core:offset" in w for w in recording.warnings) == warned


def test_headers_and_trailer_of_a_non_conforming_dataset(tmp_path: Path) -> None:
    data = (
        b"H" * 10 + counting(30).tobytes() + b"J" * 3 + counting(70, first=30).tobytes() + b"T" * 17
    )
    captures = [capture(0, header_bytes=10), capture(30, header_bytes=3)]
    meta = document(captures=captures, core_dataset="take 1.raw", core_trailing_bytes=17)
    recording = open_recording(put(tmp_path, "x", meta, data, "take 1.raw"))
    assert recording.warnings == ()
    # Contiguous in time though not in the file: one segment, and a block spans the header.
    (block,) = recording.blocks()
    assert numbers(block.samples) == [list(range(100))]


def test_headers_without_dataset_are_honoured_with_a_warning(tmp_path: Path) -> None:
    meta = document(captures=[capture(0, header_bytes=5)])
    recording = open_recording(put(tmp_path, "x", meta, b"HHHHH" + counting(9).tobytes()))
    assert numbers(next(recording.blocks()).samples) == [list(range(9))]
    assert "header or trailing bytes without core:dataset" in recording.warnings[0]


@pytest.mark.parametrize("extra", [1, 3, 7])
def test_partial_frame_at_the_end_is_left_out_with_a_warning(tmp_path: Path, extra: int) -> None:
    data = counting(20, channels=2).tobytes() + b"\x11" * extra
    recording = open_recording(put(tmp_path, "x", document(channels=2), data))
    assert recording.n_samples == 20
    name = str(tmp_path / "x.sigmf-data")
    assert recording.warnings == (
        f"{name}: {extra} bytes after the last whole frame of 8 bytes are left out",
    )


def test_a_recording_cut_off_within_an_earlier_capture(tmp_path: Path) -> None:
    captures = [capture(0), capture(50, global_index=80), capture(90, global_index=190)]
    data = counting(70).tobytes() + b"\0"
    recording = open_recording(put(tmp_path, "x", document(captures=captures), data))
    assert spans(recording) == [(0, 50, 0), (50, 20, 80)]
    assert len(recording.warnings) == 2


def test_sub_microsecond_start_times_are_exact(tmp_path: Path) -> None:
    recording = opened(
        tmp_path,
        [
            capture(0, datetime="2030-01-31T23:59:59.123456789012Z"),
            capture(40, global_index=50),
            capture(60, global_index=80, datetime="2030-02-01T00:00:00.5Z"),
        ],
        core_sample_rate=4e6,
    )
    first = recording.segments[0].datetime
    assert first is not None
    assert str(first) == "2030-01-31T23:59:59.123456789012Z"
    assert first.seconds % 60 == 59 + Fraction(123456789012, 10**12)
    # 30 samples of 250 ns after the first.
    assert str(recording.time_at(30)) == "2030-01-31T23:59:59.123464289012Z"
    # No time of its own: by the global index, 55 samples after the first.
    assert recording.segments[1].datetime is None
    assert str(recording.time_at(45)) == "2030-01-31T23:59:59.123470539012Z"
    assert str(recording.time_at(61)) == "2030-02-01T00:00:00.500000250Z"
    with pytest.raises(InputError, match=r"sample: found 100; expected 0\.\.99"):
        recording.time_at(100)


def test_an_index_that_steps_back_has_no_time(tmp_path: Path) -> None:
    start = "2030-01-01T00:00:00Z"
    captures = [capture(0, global_index=50, datetime=start), capture(40, global_index=0)]
    recording = opened(tmp_path, [*captures, capture(60, global_index=500)])
    assert str(recording.time_at(39)) == "2030-01-01T00:00:00.000039000Z"
    assert recording.time_at(40) is None
    assert recording.time_at(70) is None


def test_times_that_do_not_follow_split_where_no_index_says_better(tmp_path: Path) -> None:
    # 40 samples at 1 MHz take 40 us.
    times = ["2030-01-01T00:00:00Z", "2030-01-01T00:05:00Z"]
    stopped = opened(
        tmp_path, [capture(s, datetime=t) for s, t in zip([0, 40], times, strict=True)]
    )
    assert spans(stopped) == [(0, 40, 0), (40, 60, 40)]
    assert "gaps of unknown length" in stopped.warnings[0]
    late_stamp = ["2030-01-01T00:00:00Z", "2030-01-01T00:00:00.05004Z"]
    jitter = opened(
        tmp_path, [capture(s, datetime=t) for s, t in zip([0, 40], late_stamp, strict=True)]
    )
    assert spans(jitter) == [(0, 100, 0)]


def test_a_global_index_that_steps_back_splits_with_a_warning(tmp_path: Path) -> None:
    recording = opened(tmp_path, [capture(0, global_index=50), capture(40, global_index=0)])
    assert spans(recording) == [(0, 40, 50), (40, 60, 0)]
    assert "steps back 1 times" in recording.warnings[0]


def test_carrier_is_the_one_that_all_captures_state(tmp_path: Path) -> None:
    same = opened(tmp_path, [capture(0, frequency=2.4e9), capture(40, frequency=2.4e9)])
    assert same.carrier_hz == 2.4e9
    differ = opened(tmp_path, [capture(0, frequency=2.4e9), capture(40, frequency=2.5e9)])
    assert differ.carrier_hz is None
    assert "2 different frequencies" in differ.warnings[0]
    assert opened(tmp_path, []).carrier_hz is None


def test_thousands_of_captures_open_fast_and_in_order(tmp_path: Path) -> None:
    count = 20_000
    captures = [capture(k, global_index=2 * k) for k in range(count)]
    data = np.zeros((count, 1, 2), "<i2").tobytes()
    recording = open_recording(put(tmp_path, "x", document(captures=captures), data))
    assert len(recording.segments) == count
    assert sum(b.samples.shape[1] for b in recording.blocks(start=9_000, stop=9_500)) == 500
