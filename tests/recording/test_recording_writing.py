"""The writer: this reader and the sigmf library read back what it writes; or nothing is there."""

from __future__ import annotations

import errno
import hashlib
import json
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import sigmf
from hypothesis import given, settings
from hypothesis import strategies as st
from sigmf import validate
from sigmf_files import LAYOUTS

from spatiq.errors import InputError
from spatiq.recording import open_recording
from spatiq.recording.times import Instant
from spatiq.recording.writing import Written, write_collection, write_recording


def noise(channels: int, count: int, seed: int = 1) -> np.ndarray:
    rng = np.random.default_rng(seed)
    shape = (channels, count)
    return (rng.uniform(-1, 0.99, shape) + 1j * rng.uniform(-1, 0.99, shape)).astype(np.complex64)


def cut(samples: np.ndarray, *at: int) -> Iterator[np.ndarray]:
    return iter(np.split(samples, at, axis=1))


def written(folder: Path, **options: Any) -> Written:
    return write_recording(folder / "x", noise(2, 100), **{"sample_rate": 1e6, **options})


@pytest.mark.parametrize("datatype", LAYOUTS)
def test_round_trip_within_half_a_step(tmp_path: Path, datatype: str) -> None:
    samples = noise(3, 200)
    result = written_as(tmp_path, samples, datatype)
    recording = open_recording(tmp_path / "x", verify_hash=True)
    (block,) = recording.blocks()
    assert recording.warnings == ()
    assert (recording.channels, result.n_samples) == (3, 200)
    bits = 8 * np.dtype(LAYOUTS[datatype]).itemsize
    # Half a quantisation step, and single precision of the reader's output.
    step = 0.0 if "f" in datatype else 2.0 ** -(bits - 1)
    for part in ("real", "imag"):
        error = np.abs(getattr(block.samples, part) - getattr(samples, part))
        assert error.max() <= step / 2 + 2.0**-24
    document = json.loads(result.meta_path.read_text())
    validate.validate(document)
    assert "core:author" not in document["global"]
    theirs = sigmf.fromfile(str(result.meta_path)).read_samples()
    np.testing.assert_allclose(theirs.T, samples, atol=step / 2 * 1.42 + 2.0**-23)


def written_as(folder: Path, samples: np.ndarray, datatype: str) -> Written:
    return write_recording(folder / "x", samples, sample_rate=1e6, datatype=datatype)


@settings(deadline=None, max_examples=25)
@given(st.lists(st.integers(0, 300), max_size=5), st.sampled_from(["ci16_be", "cf32_le"]))
def test_pieces_give_the_same_files_as_the_whole(cuts: list[int], datatype: str) -> None:
    samples = noise(2, 300)
    options = {"sample_rate": 1e6, "datatype": datatype}
    with tempfile.TemporaryDirectory() as folder:
        whole = write_recording(Path(folder) / "a", samples, **options)
        pieces = write_recording(Path(folder) / "b", cut(samples, *sorted(cuts)), **options)
        assert whole.data_path.read_bytes() == pieces.data_path.read_bytes()
        assert whole.meta_path.read_bytes() == pieces.meta_path.read_bytes()


def test_metadata_fields(tmp_path: Path) -> None:
    instant = Instant(1_900_000_000, 3)
    result = written(
        tmp_path,
        carrier_hz=2.4e9,
        datetime=instant,
        description="bench",
        collection="array",
        annotations=[{"core:sample_start": 5, "core:sample_count": 2}],
        extra={"core:hw": "bench receiver"},
    )
    recording = open_recording(result.meta_path)
    assert recording.carrier_hz == 2.4e9
    assert recording.segments[0].datetime == instant
    head = recording.meta["global"]
    assert (head["core:description"], head["core:hw"]) == ("bench", "bench receiver")
    assert head["core:collection"] == "array"
    assert head["core:sha512"] == hashlib.sha512(result.data_path.read_bytes()).hexdigest()
    assert recording.meta["annotations"] == [{"core:sample_start": 5, "core:sample_count": 2}]


def test_gaps_are_kept(tmp_path: Path) -> None:
    captures = [{"core:sample_start": 0}, {"core:sample_start": 60, "core:global_index": 75}]
    written(tmp_path, captures=captures)
    segments = open_recording(tmp_path / "x").segments
    assert [(s.start, s.count, s.global_index) for s in segments] == [(0, 60, 0), (60, 40, 75)]


def test_full_scale_and_saturation(tmp_path: Path) -> None:
    samples = np.array([[0.5, 1.2, -1.0, 0.1j, 1 - 3j]], np.complex128)
    options = {"sample_rate": 1.0, "datatype": "ci16_le"}
    with pytest.raises(InputError, match=r"sample 1: found a value .* beyond full scale"):
        write_recording(tmp_path / "x", samples, **options)
    result = write_recording(tmp_path / "x", samples, saturate=True, **options)
    assert result.clipped.tolist() == [2]
    raw = np.fromfile(result.data_path, "<i2").reshape(-1, 2)
    assert raw.tolist() == [[16384, 0], [32767, 0], [-32768, 0], [0, 3277], [32767, -32768]]
    result = write_recording(tmp_path / "y", samples, full_scale=1000, **options)
    assert np.fromfile(result.data_path, "<i2")[:4].tolist() == [500, 0, 1200, 0]


@pytest.mark.parametrize("bad", [np.nan, np.inf, 1e39])
@pytest.mark.parametrize("datatype", ["cf32_le", "ci16_le"])
def test_what_a_type_cannot_hold_is_refused(tmp_path: Path, bad: float, datatype: str) -> None:
    samples = np.zeros((2, 70_000), np.complex128)
    samples[1, 69_999] = bad
    with pytest.raises(InputError, match="sample 69999: found a value"):
        write_recording(tmp_path / "x", samples, sample_rate=1.0, datatype=datatype)
    assert list(tmp_path.iterdir()) == []


def failing() -> Iterator[np.ndarray]:
    yield noise(2, 10)
    raise RuntimeError("source failed")


def test_a_failure_half_way_leaves_what_was_there(tmp_path: Path) -> None:
    written(tmp_path)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    with pytest.raises(RuntimeError, match="source failed"):
        write_recording(tmp_path / "x", failing(), sample_rate=1.0, overwrite=True)
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == before


def test_a_full_disk_leaves_what_was_there(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(handle: int) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    written(tmp_path)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(InputError, match=r"x\.sigmf-data: found No space left on device"):
        written(tmp_path, overwrite=True, datatype="ci8")
    with pytest.raises(InputError, match=r"a\.sigmf-collection: found No space left on device"):
        write_collection(tmp_path / "a", ["x"])
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == before


def test_overwriting_is_asked_for(tmp_path: Path) -> None:
    written(tmp_path)
    with pytest.raises(InputError, match=r"x\.sigmf-meta: found a file that exists"):
        written(tmp_path)
    written(tmp_path, overwrite=True, datatype="ci8")
    assert open_recording(tmp_path / "x", verify_hash=True).datatype == "ci8"
    with pytest.raises(InputError, match="found no such folder"):
        written(tmp_path / "absent")


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"sample_rate": 0.0}, "core:sample_rate: found 0.0; expected what the schema asks"),
        ({"sample_rate": float("nan")}, "found"),
        ({"datatype": "cf32"}, "global.core:datatype: found 'cf32' .byte order is missing"),
        ({"datatype": "ri16_le"}, "found real samples"),
        ({"captures": [{"core:sample_start": 100}]}, "captures: found .*no samples|index below"),
        ({"captures": [{"core:sample_start": -1}]}, "captures.0.core:sample_start: found -1"),
        ({"captures": [{"core:frequency": 1.0}]}, "captures.0: found an object with 1 fields"),
        ({"captures": [], "carrier_hz": 1.0}, "captures: found captures together with carrier_hz"),
        ({"captures": [{"core:sample_start": 0, "core:header_bytes": 1}]}, "core:header_bytes"),
        ({"datetime": "2030-01-01"}, "core:datetime"),
        ({"datetime": "2030-01-01T00:00:00+01:00"}, "core:datetime"),
        ({"extra": {"core:num_channels": 5}}, "extra: found core:num_channels"),
        ({"extra": {"lab:x": 5}}, "found .*namespaces that are not declared"),
        ({"extra": {"core:hw": object()}}, "found"),
        ({"annotations": [{"core:label": "a"}]}, "annotations.0: found an object"),
    ],
)
def test_metadata_that_would_not_be_read_back_is_not_written(
    tmp_path: Path, options: dict[str, Any], text: str
) -> None:
    with pytest.raises(InputError, match=text):
        written(tmp_path, **options)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    "samples",
    [
        np.zeros(5, np.complex64),
        np.zeros((1, 5)),
        [[1j]],
        np.zeros((0, 5), np.complex64),
        np.zeros((1, 0), np.complex64),
        [],
        [np.zeros((1, 5), np.complex64), np.zeros((2, 5), np.complex64)],
    ],
)
def test_arrays_of_no_use(tmp_path: Path, samples: Any) -> None:
    with pytest.raises(InputError, match="found"):
        write_recording(tmp_path / "x", samples, sample_rate=1.0)
    assert list(tmp_path.iterdir()) == []


def test_collection(tmp_path: Path) -> None:
    for k in (0, 1):
        write_recording(
            tmp_path / f"rx{k}", noise(1, 50, k), sample_rate=1e6, datetime="2030-01-01T00:00:00Z"
        )
    path = write_collection(tmp_path / "array", ["rx1", tmp_path / "rx0.sigmf-meta"])
    assert path == tmp_path / "array.sigmf-collection"
    recording = open_recording(path, verify_hash=True)
    assert recording.warnings == ()
    (block,) = recording.blocks()
    np.testing.assert_array_equal(block.samples, np.vstack([noise(1, 50, 1), noise(1, 50, 0)]))
    theirs = sigmf.fromfile(str(path))
    assert theirs.get_stream_names() == ["rx1", "rx0"]
    with pytest.raises(InputError, match="found a file that exists"):
        write_collection(path, ["rx0"])
    for bad, text in (
        ([], "found no recording"),
        (["rx0", "rx0"], "found a recording twice"),
        (["absent"], r"absent.sigmf-meta: found no such file"),
        ([tmp_path.parent / "rx0"], "expected recordings of the same folder"),
    ):
        with pytest.raises(InputError, match=text):
            write_collection(tmp_path / "other", bad)
    assert not (tmp_path / "other.sigmf-collection").exists()
