"""Archives: plain tar, read in place; and what is not one."""

from __future__ import annotations

import bz2
import gzip
import hashlib
import io
import json
import lzma
import tarfile
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sigmf_files import counting, document, numbers, tar

from spatiq.errors import InputError
from spatiq.recording import open_recording, recordings_in
from spatiq.recording.archives import archive_members


def files(
    name: str, first: int = 0, frames: int = 20, channels: int = 1
) -> list[tuple[str, bytes]]:
    meta = document(channels=channels)
    return [
        (f"{name}.sigmf-meta", json.dumps(meta).encode()),
        (f"{name}.sigmf-data", counting(frames, channels, first).tobytes()),
    ]


FORMS = [tarfile.PAX_FORMAT, tarfile.GNU_FORMAT, tarfile.USTAR_FORMAT]


@pytest.mark.nojit
@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("name", ["x", "x/x", "./x/x", "a folder/b/x"])
def test_one_recording(tmp_path: Path, name: str, form: int) -> None:
    path = tar(tmp_path / "run.sigmf", files(name), form)
    for given_path in (path, tmp_path / "run"):
        recording = open_recording(given_path)
        assert recording.name == "x"
        assert recording.path == path
        blocks = list(recording.blocks(7))
        assert [n for b in blocks for n in numbers(b.samples)[0]] == list(range(20))
    assert recording.digest() == hashlib.sha256(counting(20).tobytes()).hexdigest()
    # In place: nothing is unpacked beside it.
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize("form", [tarfile.PAX_FORMAT, tarfile.GNU_FORMAT])
@pytest.mark.parametrize("name", ["n" * 150, "ä/ö", "d" * 90 + "/" + "e" * 120])
def test_names_in_extended_headers(tmp_path: Path, name: str, form: int) -> None:
    path = tar(tmp_path / "run.sigmf", files(name), form)
    assert recordings_in(path) == (name,)
    assert open_recording(path).n_samples == 20


def test_several_recordings(tmp_path: Path) -> None:
    # Data first, other order, other files between: each metadata finds its own data.
    a, b = files("a/x", first=100), files("b/y", first=200)
    other = [("README", b"text"), ("b/notes.txt", b"")]
    path = tar(tmp_path / "run.sigmf", [a[1], b[0], *other, b[1], a[0]])
    assert recordings_in(path) == ("b/y", "a/x")
    for key, first in (("a/x", 100), ("x", 100), ("b/y", 200), ("y", 200)):
        block = next(open_recording(path, recording=key).blocks())
        assert numbers(block.samples)[0][0] == first
    with pytest.raises(InputError) as caught:
        open_recording(path)
    assert str(caught.value) == (
        f"{path}: recording: found 2 recordings and no choice among them; "
        "expected one of 'b/y', 'a/x'"
    )
    with pytest.raises(InputError, match=r"recording: found 'z'; expected one of 'b/y', 'a/x'"):
        open_recording(path, recording="z")


def test_a_name_is_for_archives_only(tmp_path: Path) -> None:
    for name, data in files("x"):
        (tmp_path / name).write_bytes(data)
    assert recordings_in(tmp_path / "x") == ("x",)
    with pytest.raises(InputError, match="recording: found 'x'; expected no name"):
        open_recording(tmp_path / "x", recording="x")


def test_non_conforming_dataset_in_an_archive(tmp_path: Path) -> None:
    meta = document(
        captures=[{"core:sample_start": 0, "core:header_bytes": 9}], core_dataset="raw.bin"
    )
    data = b"123456789" + counting(20).tobytes()
    both = [("d/x.sigmf-meta", json.dumps(meta).encode()), ("d/raw.bin", data)]
    recording = open_recording(tar(tmp_path / "run.sigmf", both))
    assert numbers(next(recording.blocks()).samples) == [list(range(20))]


@pytest.mark.parametrize("where", ["", "all/"])
def test_a_collection_is_opened_by_default(tmp_path: Path, where: str) -> None:
    a, b = files("one/a", first=10), files("two/b", first=50, channels=2)
    streams = [
        {"name": n, "hash": hashlib.sha512(f[0][1]).hexdigest()} for n, f in (("b", b), ("a", a))
    ]
    meta = {"collection": {"core:version": "1.2.0", "core:streams": streams}}
    collection = (f"{where}array.sigmf-collection", json.dumps(meta).encode())
    path = tar(tmp_path / "run.sigmf", [*a, collection, *b])
    assert recordings_in(path) == (f"{where}array", "one/a", "two/b")
    recording = open_recording(path, verify_hash=True)
    assert (recording.name, recording.channels) == ("array", 3)
    (block,) = recording.blocks()
    assert [row[0] for row in numbers(block.samples)] == [50, 50, 10]
    assert open_recording(path, recording="a").channels == 1


def test_a_stream_found_in_two_folders_is_not_guessed_at(tmp_path: Path) -> None:
    meta = {"collection": {"core:version": "1.2.0", "core:streams": [["a"]]}}
    collection = ("array.sigmf-collection", json.dumps(meta).encode())
    path = tar(tmp_path / "run.sigmf", [*files("one/a"), *files("two/a"), collection])
    with pytest.raises(InputError, match=r"run.sigmf\(a.sigmf-meta\): found no such file"):
        open_recording(path)


def test_two_collections_are_refused(tmp_path: Path) -> None:
    both = [("a.sigmf-collection", b"{}"), ("b.sigmf-collection", b"{}")]
    with pytest.raises(InputError, match="found 2 collections; expected at most one"):
        open_recording(tar(tmp_path / "run.sigmf", files("x") + both))


def test_an_archive_without_end_mark_is_read(tmp_path: Path) -> None:
    path = tar(tmp_path / "run.sigmf", files("x"))
    path.write_bytes(path.read_bytes()[: 4 * 512])
    assert open_recording(path).n_samples == 20


@pytest.mark.parametrize("pack", [gzip.compress, bz2.compress, lzma.compress])
def test_compressed_archives_are_refused(tmp_path: Path, pack: Callable[[bytes], bytes]) -> None:
    path = tar(tmp_path / "run.sigmf", files("x"))
    path.write_bytes(pack(path.read_bytes()))
    with pytest.raises(InputError, match=r"found a \w+-compressed file; expected a plain tar"):
        open_recording(path)


def damaged(change: Callable[[bytes], bytes]) -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        path = tar(folder / "run.sigmf", files("x"))
        path.write_bytes(change(path.read_bytes()))
        return path

    return make


def special(kind: bytes, name: str = "y.sigmf-data") -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        path = folder / "run.sigmf"
        with tarfile.open(path, "w") as archive:
            for file_name, data in files("x"):
                info = tarfile.TarInfo(file_name)
                info.size = len(data)
                archive.addfile(info, io.BytesIO(data))
            info = tarfile.TarInfo(name)
            info.type = kind
            info.linkname = "/etc/passwd"
            archive.addfile(info)
        return path

    return make


def members(*names: str) -> Callable[[Path], Path]:
    return lambda folder: tar(folder / "run.sigmf", [(n, b"{}") for n in names])


def extended(body: bytes) -> Callable[[Path], Path]:
    """A POSIX extended header with this content before a member."""

    def make(folder: Path) -> Path:
        info = tarfile.TarInfo("x.sigmf-data")
        info.type = tarfile.XHDTYPE
        info.size = len(body)
        padded = body + bytes(-len(body) % 512)
        path = tar(folder / "run.sigmf", files("x"))
        path.write_bytes(info.tobuf(tarfile.USTAR_FORMAT) + padded + path.read_bytes())
        return path

    return make


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (damaged(lambda d: b""), "found an empty file; expected a plain tar archive"),
        (damaged(lambda d: bytes(2048)), "found an empty file; expected a plain tar archive"),
        (damaged(lambda d: b"RIFF" + d[4:]), "found no tar header at byte 0 "),
        (damaged(lambda d: d[:1600]), "found the end of the file inside 'x.sigmf-data'"),
        (damaged(lambda d: d[:1100]), "found no tar header at byte 1024 "),
        (special(tarfile.SYMTYPE), "found 'y.sigmf-data' stored as a link or special file"),
        (special(tarfile.LNKTYPE), "found 'y.sigmf-data' stored as a link or special file"),
        (special(tarfile.FIFOTYPE), "found 'y.sigmf-data' stored as a link or special file"),
        (members("../x.sigmf-meta"), r"found member '\.\./x.sigmf-meta'; expected names that stay"),
        (members("/x.sigmf-meta"), "found member '/x.sigmf-meta'; expected names that stay"),
        (members("a/../../x"), r"found member 'a/\.\./\.\./x'; expected names that stay"),
        (members("x\x1b[2J.sigmf-meta"), r"found member 'x\\x1b\[2J.sigmf-meta'; expected names"),
        (members("x.sigmf-meta", "./x.sigmf-meta"), "found 'x.sigmf-meta' twice; expected each"),
        (members("README"), "found no recording; expected an archive with at least one"),
        (extended(b"garbage"), "found a damaged extended header"),
        (extended(b"999999 path=x\n"), "found a damaged extended header"),
        (extended(b"11 size=-1\n"), "found a damaged extended header"),
        (extended(b"15 size=999999\n"), "found the end of the file inside"),
        (extended(b"22 GNU.sparse.major=1\n"), "found a sparse member"),
        (extended(b"x" * 70_000), "found an extended header of 70000 bytes"),
    ],
)
def test_damaged_and_hostile_archives(
    tmp_path: Path, make: Callable[[Path], Path], text: str
) -> None:
    path = make(tmp_path)
    with pytest.raises(InputError, match=text) as caught:
        open_recording(path)
    assert str(caught.value).startswith(f"{path}: ")


def test_a_folder_entry_with_a_size_has_no_data(tmp_path: Path) -> None:
    folder = tarfile.TarInfo("d")
    folder.type, folder.size = tarfile.DIRTYPE, 4096
    path = tar(tmp_path / "run.sigmf", files("d/x"))
    path.write_bytes(folder.tobuf(tarfile.USTAR_FORMAT) + path.read_bytes())
    assert open_recording(path).n_samples == 20


def test_links_that_are_no_recording_are_ignored(tmp_path: Path) -> None:
    assert open_recording(special(tarfile.SYMTYPE, "latest")(tmp_path)).n_samples == 20


@settings(max_examples=200, deadline=None)
@given(st.data())
def test_any_damage_is_read_or_refused(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    folder = tmp_path_factory.mktemp("damage")
    path = tar(folder / "run.sigmf", files("n" * 120))
    content = bytearray(path.read_bytes())
    for _ in range(data.draw(st.integers(1, 6))):
        content[data.draw(st.integers(0, 3000))] = data.draw(st.integers(0, 255))
    path.write_bytes(content[: data.draw(st.integers(0, len(content)))])
    try:
        found = archive_members(path)
    except InputError:
        return
    size = path.stat().st_size
    assert all(m.offset > 0 and m.offset + m.size <= size for m in found.values())
