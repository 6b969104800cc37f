import re

import h5py
import pytest
from made_results import made_frames, write_results

from spatiq.results import layout_doc


@pytest.mark.nojit
def test_the_shipped_document_agrees_with_the_definitions():
    text = layout_doc.layout_text()
    assert layout_doc.filled(text) == text


def test_a_stale_table_and_a_lost_part_are_noticed():
    text = layout_doc.layout_text()
    stale = text.replace("| `cfo_hz` | f8 | Hz |", "| `cfo_hz` | f8 | kHz |")
    assert stale != text
    assert layout_doc.filled(stale) == text
    with pytest.raises(ValueError, match="lacks the generated part 'marks'"):
        layout_doc.filled(text.replace("<!-- marks: generated -->", ""))


def full_results(folder):
    """A results file with everything in it that can be asked for."""
    frames = made_frames(3, symbols=True, llr=True)
    options = {"keep_symbols": True, "soft_output": "exact", "channel": "dispersive"}
    return write_results(folder / "r.h5", [frames], **options)


def documented(text):
    """Paths of all datasets that the document lists in tables."""
    paths, group = set(), ""
    for line in text.splitlines():
        if heading := re.match(r"## /(\w+)", line):
            group = heading[1] if " and /" not in line else ""
        elif line.startswith("## "):
            group = None
        elif line.startswith("| `") and group is not None:
            for name in re.findall(r"`([\w/]+)`", line.split("|")[1]):
                paths.add(f"{group}/{name}" if group else name)
    return paths


def test_every_dataset_is_documented_and_every_documented_one_is_there(tmp_path):
    path = full_results(tmp_path)
    found = set()

    def visit(name, item):
        if isinstance(item, h5py.Dataset):
            found.add(name)

    with h5py.File(path) as file:
        file.visititems(visit)
    in_prose = {"lost/reasons", "summary/json"}
    text = layout_doc.layout_text()
    assert all(f"`{name}`" in text for name in in_prose)
    listed = documented(text.split("## Tables")[0].split("## /frames")[1].join(["## /frames", ""]))
    assert listed == found - in_prose


def test_types_and_shapes_are_as_documented(tmp_path):
    path = full_results(tmp_path)
    sizes = {"F": 3, "A": 3, "Nr": 2, "Nt": 4, "Kp": 5, "Kw": 5, "B": 20, "L": 16}
    checked = 0
    group = ""
    with h5py.File(path) as file:
        for line in layout_doc.layout_text().splitlines():
            if heading := re.match(r"## /(\w+)", line):
                group = "" if " and /" in line else heading[1] + "/"
            entry = re.match(r"\| (`[^|]+`) \| ([uif]\d) \| \(([\w, ]+)\) \|", line)
            for name in re.findall(r"`([\w/]+)`", entry[1]) if entry else []:
                dataset = file[group + name]
                shape = tuple(sizes[axis] for axis in entry[3].split(", "))
                assert (dataset.dtype.str[1:], dataset.shape) == (entry[2], shape)
                checked += 1
    assert checked == 31
