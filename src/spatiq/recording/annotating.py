"""Annotations into a new metadata file; the user's own file is read and never touched."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from spatiq.errors import InputError
from spatiq.recording.dataset import Dataset
from spatiq.recording.inputs import number, shown, text_field, whole_number
from spatiq.recording.recording import Recording, Run
from spatiq.recording.safewrite import json_bytes, refuse_existing, write_bytes
from spatiq.recording.schema import check_schema

_META = ".sigmf-meta"
_TEXTS = ("core:label", "core:comment", "core:generator", "core:uuid")
_EDGES = ("core:freq_lower_edge", "core:freq_upper_edge")


def annotated_copy(
    recording: Recording,
    annotations: Sequence[Mapping[str, Any]],
    target: str | os.PathLike[str],
    *,
    dataset: int = 0,
    namespaces: Mapping[str, str] | None = None,
    overwrite: bool = False,
) -> Path:
    """Write the recording's metadata, as it is in the user's file, plus annotations.

    Beside the data, the copy names them as core:dataset and can be opened as a recording. Anywhere
    else, and for recordings within an archive, it is marked core:metadata_only.

    Args:
        recording: what the annotations are about.
        annotations: objects with core:sample_start and core:sample_count in samples of the
            recording (as Block.start counts); written in indices of the file. They are merged with
            those already there, in order of core:sample_start.
        target: new file, ending in .sigmf-meta.
        dataset: which of a collection's recordings to annotate.
        namespaces: version of each extension namespace used in annotations; declared as optional.
        overwrite: replace an earlier copy; the user's own file is refused even so.

    Returns:
        The path written.

    Raises:
        InputError: an annotation that the standard does not allow, or a target of no use.
    """
    path = Path(target)
    source = str(path)
    if not 0 <= dataset < len(recording.datasets):
        expected = f"0..{len(recording.datasets) - 1}"
        raise InputError(source, "dataset", dataset, expected)
    chosen = recording.datasets[dataset]
    _check_target(path, recording, overwrite)
    added = [
        _placed(item, recording, chosen, dataset, f"annotations[{k}]", source)
        for k, item in enumerate(annotations)
    ]
    raw = chosen.metadata.raw
    head = dict(raw["global"])
    _declare(head, namespaces or {})
    _point_at_data(head, chosen, path)
    _check_forms(added, head, source)
    merged = sorted(raw.get("annotations", []) + added, key=_start)
    # The order of the user's keys is kept; the parsed document itself is shared and stays as it is.
    document = {**raw, "global": head, "annotations": merged}
    write_bytes(path, json_bytes(document, source))
    return path


def _check_target(path: Path, recording: Recording, overwrite: bool) -> None:
    if not path.name.endswith(_META) or path.name == _META:
        raise InputError(path, "", f"name {shown(path.name)}", f"a name ending in {_META}")
    for d in recording.datasets:
        for own in (d.metadata_file.path, d.data.path, recording.path):
            if path.exists() and own.exists() and path.samefile(own):
                raise InputError(path, "", "the recording's own file", "the name of a new file")
    refuse_existing(path, overwrite)


def _start(annotation: Mapping[str, Any]) -> int:
    """Sorting key; damaged annotations of the user's file stay, at the front."""
    value = annotation.get("core:sample_start")
    return value if isinstance(value, int) else -1


def _placed(
    item: Mapping[str, Any],
    recording: Recording,
    dataset: Dataset,
    number_of_dataset: int,
    place: str,
    source: str,
) -> dict[str, Any]:
    """The annotation with its place in indices of the file."""
    start = whole_number(item, "core:sample_start", source, place, high=recording.n_samples - 1)
    rest = recording.n_samples - start
    whole_number(item, "core:sample_count", source, place, default=rest, high=rest)
    for key in _TEXTS:
        text_field(item, key, source, place)
    edges = [number(item, key, source, place, low=-1e12, high=1e12) for key in _EDGES]
    if edges.count(None) == 1:
        raise InputError(source, place, "one frequency edge", "both or neither")
    run = _run_at(recording.runs, start)
    in_file = run.starts[number_of_dataset] + start - run.start
    return {**item, "core:sample_start": in_file + dataset.metadata.index_base}


def _run_at(runs: Sequence[Run], sample: int) -> Run:
    return next(r for r in runs if r.start <= sample < r.start + r.count)


def _declare(head: dict[str, Any], namespaces: Mapping[str, str]) -> None:
    declared = list(head.get("core:extensions", []))
    names = {item["name"] for item in declared}
    declared += [
        {"name": name, "version": version, "optional": True}
        for name, version in namespaces.items()
        if name not in names
    ]
    if declared:
        head["core:extensions"] = declared


def _point_at_data(head: dict[str, Any], dataset: Dataset, path: Path) -> None:
    data = dataset.data
    beside = data.offset == 0 and data.path.parent == path.parent.resolve()
    if beside:
        head["core:dataset"] = data.path.name
        head.pop("core:metadata_only", None)
    else:
        head["core:metadata_only"] = True


def _check_forms(added: Sequence[dict[str, Any]], head: dict[str, Any], source: str) -> None:
    """One annotation of each set of keys against the schema: all of them would take minutes."""
    forms = {frozenset(item): item for item in added}
    document = {
        "global": {"core:datatype": head["core:datatype"], "core:version": "1.2.0"},
        "captures": [],
        "annotations": list(forms.values()),
    }
    check_schema(document, source)
