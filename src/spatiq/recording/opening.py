"""Opening a recording by any of its files, or one out of an archive."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path, PurePosixPath

from spatiq.errors import InputError
from spatiq.recording.archives import ArchiveFolder, archive_members
from spatiq.recording.collection import CollectionFile, combine, read_collection, single
from spatiq.recording.dataset import Dataset, load_dataset
from spatiq.recording.inputs import shown
from spatiq.recording.recording import Recording
from spatiq.recording.stores import ByteRange, Folder, Store, cannot_read

_META, _DATA, _COLLECTION, _ARCHIVE = (
    ".sigmf-meta",
    ".sigmf-data",
    ".sigmf-collection",
    ".sigmf",
)


def open_recording(
    path: str | os.PathLike[str],
    *,
    full_scale: float | None = None,
    verify_hash: bool = False,
    recording: str | None = None,
) -> Recording:
    """Open a SigMF recording, collection or archive; samples are read later, in blocks.

    Args:
        path: X.sigmf-meta, X.sigmf-data, X.sigmf-collection, X.sigmf, or X for any of these.
        full_scale: sample value that is to become 1.0. None: 2^(bits-1) for integers, 1 for floats.
        verify_hash: read the data once and compare with core:sha512.
        recording: which recording or collection of an archive, as `recordings_in` names them.

    Raises:
        InputError: anything that cannot be read without guessing.
    """
    folder, name, kind = _locate(Path(path))
    if kind == _ARCHIVE:
        return _from_archive(folder / (name + kind), full_scale, verify_hash, recording)
    if recording is not None:
        expected = f"no name: only archives ({_ARCHIVE}) hold several recordings"
        raise InputError(path, "recording", shown(recording), expected)
    store = Folder(folder)
    if kind == _COLLECTION:
        file = store.find(name + kind)
        if file is None:
            raise InputError(folder / (name + kind), "", "no such file", "a collection")
        streams: dict[str, Store] = {}
        return _collection(
            folder / (name + kind), name, file, store, streams, full_scale, verify_hash
        )
    dataset = load_dataset(store, name, full_scale, verify_hash)
    if kind == _DATA and dataset.metadata.dataset not in (None, name + kind):
        found = f"core:dataset {shown(dataset.metadata.dataset)}"
        raise InputError(dataset.metadata.source, "global", found, f"{name + kind}, as was asked")
    return single(folder / f"{name}{_META}", dataset)


def recordings_in(path: str | os.PathLike[str]) -> tuple[str, ...]:
    """Names of the recordings of an archive (folders included), or the one name of anything else.

    Recordings that are streams of the archive's collection are listed, too, after the collection.

    Raises:
        InputError: no such recording, or not an archive that can be read.
    """
    folder, name, kind = _locate(Path(path))
    if kind != _ARCHIVE:
        return (name,)
    collections, recordings = _contents(archive_members(folder / (name + kind)))
    return (*collections, *(r for r in recordings if r not in collections))


def _locate(path: Path) -> tuple[Path, str, str]:
    """Folder, base name and kind (file ending) of what the user named.

    The endings are those of the standard only: no other format is ever guessed at.
    """
    folder, name = path.parent, path.name
    for kind in (_META, _DATA, _COLLECTION, _ARCHIVE):
        if name.endswith(kind) and name != kind:
            if kind == _ARCHIVE and not _is_file(path):
                break
            if kind != _DATA and not _is_file(path):
                raise InputError(path, "", "no such file", f"a {kind} file")
            return folder, name[: -len(kind)], kind
    for kind in (_META, _COLLECTION, _ARCHIVE):
        if name and _is_file(folder / (name + kind)):
            return folder, name, kind
    endings = ", ".join((_META, _DATA, _COLLECTION, _ARCHIVE))
    raise InputError(path, "", "no such recording", f"a file ending in {endings}, or its base name")


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except OSError as error:
        raise cannot_read(path, error) from error


def _contents(members: Mapping[str, ByteRange]) -> tuple[list[str], list[str]]:
    collections = [m[: -len(_COLLECTION)] for m in members if m.endswith(_COLLECTION)]
    recordings = [m[: -len(_META)] for m in members if m.endswith(_META)]
    return collections, recordings


def _from_archive(
    path: Path, full_scale: float | None, verify_hash: bool, wanted: str | None
) -> Recording:
    members = archive_members(path)
    collections, recordings = _contents(members)
    if len(collections) > 1:
        raise InputError(path, "", f"{len(collections)} collections", "at most one in an archive")
    key = _select(path, collections, recordings, wanted)
    store, name = _in_archive(path, members, key)
    if key not in collections:
        return single(path, load_dataset(store, name, full_scale, verify_hash))
    # The standard leaves open in which folders of the archive a collection's recordings are.
    by_name: dict[str, list[str]] = {}
    for other in recordings:
        by_name.setdefault(PurePosixPath(other).name, []).append(other)
    stores: dict[str, Store] = {}
    for base, keys in by_name.items():
        if store.find(base + _META) is None and len(keys) == 1:
            stores[base] = _in_archive(path, members, keys[0])[0]
    file = members[key + _COLLECTION]
    return _collection(path, name, file, store, stores, full_scale, verify_hash)


def _select(path: Path, collections: list[str], recordings: list[str], wanted: str | None) -> str:
    names = [*collections, *(r for r in recordings if r not in collections)]
    listed = ", ".join(shown(n) for n in names[:10]) + (", ..." if len(names) > 10 else "")
    if not names:
        raise InputError(path, "", "no recording", "an archive with at least one recording")
    if wanted is None:
        if collections or len(recordings) == 1:
            return names[0]
        found = f"{len(recordings)} recordings and no choice among them"
        raise InputError(path, "recording", found, f"one of {listed}")
    matches = [n for n in names if n == wanted]
    matches = matches or [n for n in names if PurePosixPath(n).name == wanted]
    if len(matches) != 1:
        raise InputError(path, "recording", shown(wanted), f"one of {listed}")
    return matches[0]


def _in_archive(
    path: Path, members: Mapping[str, ByteRange], key: str
) -> tuple[ArchiveFolder, str]:
    prefix, _, name = key.rpartition("/")
    return ArchiveFolder(path, f"{prefix}/" if prefix else "", dict(members)), name


def _collection(
    path: Path,
    name: str,
    file: ByteRange,
    store: Store,
    elsewhere: Mapping[str, Store],
    full_scale: float | None,
    verify_hash: bool,
) -> Recording:
    collection = read_collection(file.metadata_bytes(), file.label)
    datasets = [
        load_dataset(elsewhere.get(s.name, store), s.name, full_scale, verify_hash)
        for s in collection.streams
    ]
    remarks = _check_hashes(file.label, collection, datasets, verify_hash)
    collection = CollectionFile(
        collection.raw, collection.streams, (*collection.warnings, *remarks)
    )
    return combine(name, path, file.label, collection, datasets)


def _check_hashes(
    source: str, collection: CollectionFile, datasets: list[Dataset], strict: bool
) -> list[str]:
    """Streams whose metadata is not what the collection was made of: remarks, or a refusal."""
    remarks = []
    for stream, dataset in zip(collection.streams, datasets, strict=True):
        if stream.sha512 is None:
            remarks.append(f"{source}: no hash for stream {shown(stream.name)}")
        elif dataset.metadata_file.hash("sha512") != stream.sha512.lower():
            found = f"another hash than that of {dataset.metadata_file.label}"
            if strict:
                expected = "the SHA-512 of the stream's metadata"
                raise InputError(source, f"stream {shown(stream.name)}", found, expected)
            remarks.append(f"{source}: stream {shown(stream.name)} has {found}; it was edited")
    return remarks
