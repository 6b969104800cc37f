import json

import numpy as np
import pytest
from made_results import made_frames, write_results

from spatiq.errors import InputError
from spatiq.receiver.frame_batch import LostFrame
from spatiq.recording.opening import open_recording
from spatiq.results import annotations
from spatiq.results.annotations import frame_annotations, write_annotations
from spatiq.results.reader import open_results

SAMPLES = 6000  # 4 samples per symbol, 100 symbols per frame: see made_results


def record(folder, name="run", channels=2):
    meta = {
        "global": {
            "core:datatype": "ci16_le",
            "core:sample_rate": 4e6,
            "core:num_channels": channels,
            "core:version": "1.2.0",
        },
        "captures": [{"core:sample_start": 0}],
        "annotations": [{"core:sample_start": 17, "core:sample_count": 2, "core:label": "mine"}],
    }
    (folder / f"{name}.sigmf-meta").write_text(json.dumps(meta))
    np.zeros((SAMPLES, channels, 2), "<i2").tofile(folder / f"{name}.sigmf-data")
    return open_recording(folder / f"{name}.sigmf-meta")


@pytest.fixture
def results(tmp_path):
    batch = made_frames(
        4,
        lost=[
            LostFrame(0, -100.0, -1, "cut off by the start"),
            LostFrame(0, 5800.0, 12, "cut off by the end"),
            LostFrame(0, 99_999.0, 13, "not found"),
        ],
    )
    batch.columns["clock_ppm"][:] = [0.0, np.nan, 1e5, 0.0]
    batch.columns["ber"][0], batch.columns["bit_errors"][0] = 0.0, 0
    batch.columns["ber_high"][0] = 3.7e-4
    batch.columns["bits_compared"][1] = 0
    with open_results(write_results(tmp_path / "r.h5", [batch])) as opened:
        yield opened


def test_frames_are_where_they_were_found_and_lost_ones_where_they_were_expected(results):
    made = list(frame_annotations(results, SAMPLES))
    spans = [(a["core:sample_start"], a["core:sample_count"]) for a in made]
    # First symbol centred on 1000.25 + 500 k; half a symbol is 2 samples; a frame is 400.
    assert spans[:4] == [(998, 400), (1498, 400), (1998, 440), (2498, 400)]
    # A frame from -102 to 298; one from 5798; one wholly behind the end.
    assert spans[4:] == [(0, 298), (5798, 202), (5999, 1)]
    assert [a["core:label"] for a in made[3:5]] == ["frame 3", "lost frame"]
    assert made[4]["core:comment"] == "cut off by the start; expected from sample -100.0"
    assert made[5]["core:comment"].endswith("sample 5800.0; transmitter's number 12")


def test_comments_carry_figures_marks_and_no_invented_ones(results):
    comments = [a["core:comment"] for a in frame_annotations(results, SAMPLES)]
    snr = results.column("snr_db")[0]
    assert comments[0].startswith(f"SNR {snr:.2f} dB; CFO ")
    assert "BER < 0.00037;" in comments[0]
    assert "marked: clipped" in comments[3]
    assert "marked" not in comments[0]


def test_annotations_go_into_a_copy_beside_and_keep_those_already_there(tmp_path, results):
    recording = record(tmp_path)
    before = (tmp_path / "run.sigmf-meta").read_bytes()
    (target,) = write_annotations(results, recording, tmp_path / "run.annotated")
    assert target == tmp_path / "run.annotated.sigmf-meta"
    assert (tmp_path / "run.sigmf-meta").read_bytes() == before
    labels = [a["core:label"] for a in json.loads(target.read_text())["annotations"]]
    assert sorted(labels) == sorted(
        ["mine", *(f"frame {i}" for i in range(4)), *["lost frame"] * 3]
    )
    assert open_recording(target).n_samples == SAMPLES


def test_every_recording_of_a_collection_gets_its_copy(tmp_path, results):
    names = ["a", "b"]
    for name in names:
        record(tmp_path, name, channels=1)
    streams = [{"name": n, "hash": sha512(tmp_path, n)} for n in names]
    collection = {"collection": {"core:version": "1.2.0", "core:streams": streams}}
    (tmp_path / "both.sigmf-collection").write_text(json.dumps(collection))
    recording = open_recording(tmp_path / "both.sigmf-collection")
    written = write_annotations(results, recording, tmp_path / "x")
    assert [p.name for p in written] == ["x-0.sigmf-meta", "x-1.sigmf-meta"]
    assert [open_recording(p).channels for p in written] == [1, 1]


def sha512(folder, name):
    import hashlib

    return hashlib.sha512((folder / f"{name}.sigmf-meta").read_bytes()).hexdigest()


def test_more_frames_than_metadata_can_bear_are_refused(tmp_path, results, monkeypatch):
    monkeypatch.setattr(annotations, "MOST_ANNOTATIONS", 6)
    with pytest.raises(InputError, match="annotations: found 7 frames; expected at most 6"):
        write_annotations(results, record(tmp_path), tmp_path / "x")
    assert not (tmp_path / "x.sigmf-meta").exists()
