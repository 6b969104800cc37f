"""Collections: one recording per receive channel, put together by their place in time."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

import pytest
from sigmf_files import counting, document, numbers, put

from spatiq.errors import InputError
from spatiq.recording import Recording, open_recording

T0 = "2030-01-01T00:00:00Z"


def capture(start: int = 0, **fields: Any) -> dict[str, Any]:
    return {"core:sample_start": start, **{f"core:{k}": v for k, v in fields.items()}}


def stream(folder: Path, name: str, captures: list[dict[str, Any]], **fields: Any) -> None:
    frames, channels = fields.pop("frames", 60), fields.pop("channels", 1)
    first = fields.pop("first", 0)
    meta = document(captures=captures, channels=channels, **fields)
    put(folder, name, meta, counting(frames, channels, first).tobytes())


def collection(folder: Path, *names: Any, **fields: Any) -> Path:
    streams = []
    for name in names:
        if isinstance(name, str):
            digest = hashlib.sha512((folder / f"{name}.sigmf-meta").read_bytes()).hexdigest()
            streams.append({"name": name, "hash": digest})
        else:
            streams.append(name)
    head = {"core:version": "1.2.0", "core:streams": streams, **fields}
    path = folder / "array.sigmf-collection"
    path.write_text(json.dumps({"collection": head}))
    return path


def rows(recording: Recording, block_size: int = 11) -> list[list[int]]:
    blocks = [numbers(b.samples) for b in recording.blocks(block_size)]
    return [[n for b in blocks for n in b[c]] for c in range(recording.channels)]


@pytest.mark.nojit
def test_channels_are_in_the_order_of_the_streams(tmp_path: Path) -> None:
    stream(tmp_path, "rx1", [capture(datetime=T0, frequency=2.4e9)], first=1000)
    stream(tmp_path, "rx0", [capture(datetime=T0, frequency=2.4e9)], first=2000, channels=2)
    path = collection(tmp_path, "rx1", "rx0")
    for given in (path, tmp_path / "array"):
        recording = open_recording(given, verify_hash=False)
        assert recording.warnings == ()
        assert (recording.name, recording.path) == ("array", path)
        assert (recording.channels, recording.n_samples) == (3, 60)
        assert recording.carrier_hz == 2.4e9
        assert recording.datatype == "ci16_le"
        second = list(range(2000, 2060))
        assert rows(recording) == [list(range(1000, 1060)), second, second]
    data = [counting(60, 1, 1000).tobytes(), counting(60, 2, 2000).tobytes()]
    assert recording.digest() == hashlib.sha256(b"".join(data)).hexdigest()


def test_aligned_by_global_index(tmp_path: Path) -> None:
    # rx0 has stream samples 100..139 and 150..169; rx1 has 110..159; rx2 has 90..119, 130..199.
    stream(tmp_path, "rx0", [capture(global_index=100), capture(40, global_index=150)])
    stream(tmp_path, "rx1", [capture(global_index=110)], frames=50)
    stream(tmp_path, "rx2", [capture(global_index=90), capture(30, global_index=130)], frames=100)
    recording = open_recording(collection(tmp_path, "rx0", "rx1", "rx2"))
    assert [(s.start, s.count, s.global_index) for s in recording.segments] == [
        (0, 10, 110),
        (10, 10, 130),
        (20, 10, 150),
    ]
    assert rows(recording, 4) == [
        [*range(10, 20), *range(30, 40), *range(40, 50)],
        [*range(10), *range(20, 30), *range(40, 50)],
        [*range(20, 30), *range(30, 40), *range(50, 60)],
    ]
    assert rows(recording, 10**6) == rows(recording, 1)
    assert "streams share 30 samples of up to 100" in recording.warnings[0]


def test_start_time_follows_the_common_part(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(global_index=0, datetime=T0)])
    stream(tmp_path, "rx1", [capture(global_index=20, datetime="2030-01-01T00:00:00.000020Z")])
    recording = open_recording(collection(tmp_path, "rx0", "rx1"))
    assert str(recording.segments[0].datetime) == "2030-01-01T00:00:00.000020000Z"
    assert rows(recording)[0][0] == 20
    assert not any("start time" in w for w in recording.warnings)


def test_different_lengths_leave_the_common_part(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(datetime=T0)], frames=60)
    stream(tmp_path, "rx1", [capture(datetime=T0)], frames=57)
    recording = open_recording(collection(tmp_path, "rx0", "rx1"))
    assert recording.n_samples == 57
    assert recording.warnings == (
        f"{tmp_path / 'array.sigmf-collection'}: streams share 57 samples of up to 60; "
        "the rest is left out",
    )


def test_datatypes_may_differ(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(datetime=T0)])
    scaled = (counting(60) / 32768).astype("<f4")
    put(tmp_path, "rx1", document("cf32_le", captures=[capture(datetime=T0)]), scaled.tobytes())
    recording = open_recording(collection(tmp_path, "rx0", "rx1"))
    assert recording.datatype == "ci16_le+cf32_le"
    assert not recording.clipping_known
    assert rows(recording)[0] == rows(recording)[1]


@pytest.mark.parametrize(
    ("first", "second", "fields", "text"),
    [
        (
            {},
            {},
            {"core_sample_rate": 2e6},
            "sample rate of rx1: found 2000000 Hz; expected 1000000",
        ),
        (
            {"frequency": 1e9},
            {"frequency": 2e9},
            {},
            "frequency of rx1: found 2000000000 Hz; expected 1000000000 Hz as rx0 has",
        ),
        (
            {"datetime": T0},
            {"datetime": "2030-01-01T00:00:00.000002Z"},
            {},
            "start time of rx1: found 2030-01-01T00:00:00.000002Z, 2e-06 s from that of rx0; "
            "expected the same start or global_index",
        ),
        ({"global_index": 0}, {"global_index": 60}, {}, "found streams without a sample in common"),
    ],
)
def test_mismatches_are_refused(
    tmp_path: Path,
    first: dict[str, Any],
    second: dict[str, Any],
    fields: dict[str, Any],
    text: str,
) -> None:
    stream(tmp_path, "rx0", [capture(**first)])
    stream(tmp_path, "rx1", [capture(**second)], **fields)
    with pytest.raises(InputError, match=text):
        open_recording(collection(tmp_path, "rx0", "rx1"))


def test_carriers_are_compared_where_both_are_stated(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(frequency=1e9), capture(30, frequency=2e9)])
    stream(tmp_path, "rx1", [capture(), capture(30, frequency=3e9)])
    with pytest.raises(InputError, match="frequency of rx1: found 3000000000 Hz"):
        open_recording(collection(tmp_path, "rx0", "rx1"))
    stream(tmp_path, "rx1", [capture(), capture(30, frequency=2e9)])
    recording = open_recording(collection(tmp_path, "rx0", "rx1"))
    assert [s.frequency for s in recording.segments] == [1e9, 2e9]


def test_start_times_within_half_a_sample_are_the_same(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(datetime=T0)])
    stream(tmp_path, "rx1", [capture(datetime="2030-01-01T00:00:00.0000005Z")])
    assert open_recording(collection(tmp_path, "rx0", "rx1")).warnings == ()
    stream(tmp_path, "rx1", [capture(datetime="2030-01-01T00:00:00.0000006Z")])
    with pytest.raises(InputError, match="6e-07 s from that of rx0; expected the same start"):
        open_recording(collection(tmp_path, "rx0", "rx1"))


def test_unknown_alignment_and_times_that_contradict_the_index_are_warnings(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture()])
    stream(tmp_path, "rx1", [capture(datetime=T0)])
    recording = open_recording(collection(tmp_path, "rx0", "rx1"))
    assert "neither start times nor core:global_index" in recording.warnings[0]
    stream(tmp_path, "rx0", [capture(global_index=5, datetime=T0)])
    stream(tmp_path, "rx1", [capture(global_index=5, datetime="2030-01-01T00:00:01Z")])
    recording = open_recording(collection(tmp_path, "rx0", "rx1"))
    assert "aligned by core:global_index" in recording.warnings[0]


def test_a_global_index_that_steps_back_cannot_align(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(global_index=50), capture(30, global_index=0)])
    with pytest.raises(InputError, match="found core:global_index of rx0 that steps back"):
        open_recording(collection(tmp_path, "rx0"))


def test_stream_tuples_and_edited_streams(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture(datetime=T0)])
    stream(tmp_path, "rx1", [capture(datetime=T0)])
    path = collection(tmp_path, ["rx0", "00"], ["rx1"])
    found = open_recording(path).warnings
    assert "stream 'rx0' has another hash than that of" in found[0]
    assert "no hash for stream 'rx1'" in found[1]
    with pytest.raises(
        InputError, match=r"stream 'rx0': found another hash .*; expected the SHA-512"
    ):
        open_recording(path, verify_hash=True)


@pytest.mark.parametrize(
    ("entry", "text"),
    [
        (
            {"name": "../rx0", "hash": ""},
            r"streams\[0\].name: found '../rx0'; expected the name of",
        ),
        ({"name": "/rx0"}, r"streams\[0\].name: found '/rx0'; expected the name of a file"),
        ({"hash": "ab"}, r"streams\[0\].name: found None; expected the name of a file"),
        (
            {"name": "rx0", "hash": 5},
            r"streams\[0\].hash: found 5; expected 128 hexadecimal digits",
        ),
        (["rx0", "a", "b"], r"streams\[0\]: found an array with 3 elements; expected an object"),
        (7, r"streams\[0\]: found 7; expected an object"),
        (["absent"], r"absent.sigmf-meta: found no such file; expected the recording's metadata"),
    ],
)
def test_hostile_streams(tmp_path: Path, entry: Any, text: str) -> None:
    with pytest.raises(InputError, match=text):
        open_recording(collection(tmp_path, entry))


def test_hostile_collections(tmp_path: Path) -> None:
    stream(tmp_path, "rx0", [capture()])
    with pytest.raises(InputError, match=r"streams\[1\]: found 'rx0' again; expected each"):
        open_recording(collection(tmp_path, "rx0", "rx0"))
    with pytest.raises(InputError, match="streams: found an array with 0 elements"):
        open_recording(collection(tmp_path))
    with pytest.raises(InputError, match=r"found 2000 recordings; expected at most 1024"):
        open_recording(collection(tmp_path, *([["x"]] * 2000)))
    required = [{"name": "zip", "version": "1.0.0", "optional": False}]
    with pytest.raises(InputError, match=r"collection.core:extensions\[0\]: found required"):
        open_recording(collection(tmp_path, "rx0", **{"core:extensions": required}))
    (tmp_path / "array.sigmf-collection").write_text("[]")
    with pytest.raises(InputError, match=r"array\.sigmf-collection: found an array"):
        open_recording(tmp_path / "array")


def test_streams_that_are_links_out_of_the_folder_are_refused(tmp_path: Path) -> None:
    inner = tmp_path / "in"
    inner.mkdir()
    stream(tmp_path, "rx0", [capture()])
    (inner / "rx0.sigmf-meta").symlink_to("../rx0.sigmf-meta")
    with pytest.raises(InputError, match="found a link that leaves its folder"):
        open_recording(collection(inner, ["rx0"]))
