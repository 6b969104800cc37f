"""Annotated copies: a new file beside the user's, which stays as it is to the byte."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
import sigmf
from sigmf_files import counting, document, put, tar

from spatiq.errors import InputError
from spatiq.recording import open_recording
from spatiq.recording.annotating import annotated_copy

NEW = [
    {"core:sample_start": 40, "core:sample_count": 5, "core:label": "frame"},
    {"core:sample_start": 7, "core:sample_count": 5, "core:label": "frame", "link:ber": 0.0},
]


def user_file(folder: Path, **fields: Any) -> Path:
    meta = document(core_version="1.0", **fields)
    meta["vendor extra"] = {"kept": [1, 2.5, None, "ä"]}
    meta["annotations"] = [{"core:sample_start": 30, "vendor:x": True}]
    return put(folder, "x", json.dumps(meta, ensure_ascii=False, indent=7), counting(60).tobytes())


def test_the_users_fields_are_kept_and_the_file_is_not_touched(tmp_path: Path) -> None:
    path = user_file(tmp_path)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}
    target = tmp_path / "x.frames.sigmf-meta"
    assert annotated_copy(open_recording(path), NEW, target, namespaces={"link": "1.0.0"}) == target
    assert {n: (tmp_path / n).read_bytes() for n in before} == before
    assert len(list(tmp_path.iterdir())) == 3
    old, new = json.loads(before["x.sigmf-meta"]), json.loads(target.read_text())
    assert [a["core:sample_start"] for a in new["annotations"]] == [7, 30, 40]
    assert new["annotations"][1] == old["annotations"][0]
    assert new["global"].pop("core:dataset") == "x.sigmf-data"
    assert new["global"].pop("core:extensions") == [
        {"name": "link", "version": "1.0.0", "optional": True}
    ]
    del new["annotations"], old["annotations"]
    assert new == old


def test_the_copy_opens_as_a_recording(tmp_path: Path) -> None:
    path = user_file(tmp_path)
    target = annotated_copy(open_recording(path), NEW, tmp_path / "y.sigmf-meta")
    copy = open_recording(target)
    assert copy.digest() == open_recording(path).digest()
    theirs = sigmf.fromfile(str(target))
    assert len(theirs.get_annotations()) == 3
    # Annotating again adds to what is there; replacing must be asked for.
    with pytest.raises(InputError, match="found a file that exists"):
        annotated_copy(open_recording(path), NEW, target)
    annotated_copy(open_recording(path), NEW[:1], target, overwrite=True)
    assert len(json.loads(target.read_text())["annotations"]) == 2


def test_elsewhere_the_copy_is_metadata_only(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    recording = open_recording(user_file(tmp_path))
    target = annotated_copy(recording, NEW, tmp_path / "out" / "x.sigmf-meta")
    head = json.loads(target.read_text())["global"]
    assert head["core:metadata_only"] is True
    assert "core:dataset" not in head
    with pytest.raises(InputError, match="core:metadata_only, so no samples"):
        open_recording(target)
    both = [(p.name, p.read_bytes()) for p in sorted(tmp_path.glob("x.sigmf-*"))]
    archive = open_recording(tar(tmp_path / "run.sigmf", both))
    target = annotated_copy(archive, NEW, tmp_path / "z.sigmf-meta")
    assert json.loads(target.read_text())["global"]["core:metadata_only"] is True


def test_indices_are_those_of_the_file(tmp_path: Path) -> None:
    captures = [{"core:sample_start": 1000}]
    recording = open_recording(user_file(tmp_path, core_offset=1000, captures=captures))
    target = annotated_copy(recording, NEW[:1], tmp_path / "y.sigmf-meta")
    starts = [a["core:sample_start"] for a in json.loads(target.read_text())["annotations"]]
    assert starts == [30, 1040]


def test_a_collections_recordings_each_have_their_own_indices(tmp_path: Path) -> None:
    for name, first in (("a", 10), ("b", 25)):
        captures = [{"core:sample_start": 0, "core:global_index": first}]
        put(tmp_path, name, document(captures=captures), counting(60).tobytes())
    streams = {"collection": {"core:version": "1.2.0", "core:streams": [["a"], ["b"]]}}
    (tmp_path / "c.sigmf-collection").write_text(json.dumps(streams))
    recording = open_recording(tmp_path / "c")
    for number, expected in ((0, 55), (1, 40)):
        target = tmp_path / f"new{number}.sigmf-meta"
        annotated_copy(recording, NEW[:1], target, dataset=number)
        (annotation,) = json.loads(target.read_text())["annotations"]
        assert annotation["core:sample_start"] == expected
    with pytest.raises(InputError, match=r"dataset: found 2; expected 0\.\.1"):
        annotated_copy(recording, NEW[:1], tmp_path / "d.sigmf-meta", dataset=2)


@pytest.mark.parametrize(
    ("annotation", "text"),
    [
        ({}, r"annotations\[0\].core:sample_start: found nothing"),
        ({"core:sample_start": 60}, r"sample_start: found 60; expected an integer 0\.\.59"),
        ({"core:sample_start": 1.0}, r"sample_start: found 1.0; expected an integer"),
        (
            {"core:sample_start": 50, "core:sample_count": 11},
            r"sample_count: found 11; expected an integer 0\.\.10",
        ),
        (
            {"core:sample_start": 0, "core:freq_lower_edge": 1.0},
            r"annotations\[0\]: found one frequency edge; expected both or neither",
        ),
        ({"core:sample_start": 0, "core:label": 5}, "core:label: found 5; expected a string"),
        ({"core:sample_start": 0, "x:y": float("nan")}, "expected values that JSON can hold"),
    ],
)
def test_annotations_of_no_use(tmp_path: Path, annotation: dict[str, Any], text: str) -> None:
    recording = open_recording(user_file(tmp_path))
    with pytest.raises(InputError, match=text):
        annotated_copy(recording, [annotation], tmp_path / "y.sigmf-meta")
    assert not (tmp_path / "y.sigmf-meta").exists()


def test_targets_of_no_use(tmp_path: Path) -> None:
    path = user_file(tmp_path)
    recording = open_recording(path)
    (tmp_path / "alias.sigmf-meta").symlink_to(path.name)
    for target in (path, tmp_path / "alias.sigmf-meta"):
        with pytest.raises(InputError, match="found the recording's own file"):
            annotated_copy(recording, NEW, target, overwrite=True)
    for name in ("y.json", "x.sigmf-data", ".sigmf-meta"):
        with pytest.raises(InputError, match=r"expected a name ending in \.sigmf-meta"):
            annotated_copy(recording, NEW, tmp_path / name)
    with pytest.raises(InputError, match="found no such folder"):
        annotated_copy(recording, NEW, tmp_path / "absent" / "y.sigmf-meta")
