"""Which recordings files, folders and patterns mean; which rule goes with which of them."""

from __future__ import annotations

import json
import tarfile

import numpy as np
import pytest
from batch_cases import write_link
from hypothesis import given
from hypothesis import strategies as st

from spatiq.batch.inputs import Item, find_items
from spatiq.batch.rules import _folder_fits, load_rules, one_link, with_options
from spatiq.cli.batching import parse_settings, parse_size
from spatiq.errors import InputError
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.writing import write_collection, write_recording

SAMPLES = np.full((1, 64), 0.1 + 0.1j, np.complex64)


def record(folder, name, **more):
    folder.mkdir(parents=True, exist_ok=True)
    return write_recording(folder / name, SAMPLES, sample_rate=4e6, **more).meta_path


def labels(items, folder):
    return [str(i.path.relative_to(folder)) + (f":{i.member}" if i.member else "") for i in items]


@pytest.fixture
def night(tmp_path):
    """Recordings in two folders, a collection of two, an archive of two, data without metadata."""
    folder = tmp_path / "night"
    record(folder / "yard", "one")
    record(folder / "yard" / "deep", "two")
    record(folder, "rx0")
    record(folder, "rx1")
    write_collection(folder / "pair", ["rx0", "rx1"])
    record(tmp_path / "aside", "in-a")
    record(tmp_path / "aside", "in-b")
    with tarfile.open(folder / "box.sigmf", "w") as tar:
        for path in sorted((tmp_path / "aside").iterdir()):
            tar.add(path, f"box/{path.name}")
    (folder / "orphan.sigmf-data").write_bytes(b"\0" * 64)
    (folder / ".hidden.sigmf-meta").write_text("{}")
    (folder / "notes.txt").write_text("cold")
    return folder


ALL = [
    "box.sigmf:box/in-a",
    "box.sigmf:box/in-b",
    "orphan.sigmf-data",
    "pair.sigmf-collection",
    "yard/deep/two.sigmf-meta",
    "yard/one.sigmf-meta",
]


@pytest.mark.nojit
def test_a_folder_means_all_below_each_recording_once(night):
    items = find_items([str(night)])
    assert labels(items, night) == ALL
    assert [bool(i.fault) for i in items] == [False, False, True, False, False, False]
    assert labels(find_items([str(night), str(night / "yard"), str(night / "**/*")]), night) == ALL
    assert labels(find_items([str(night)], [night / "yard"]), night) == ALL[:4]


@pytest.mark.nojit
def test_files_patterns_and_base_names(night):
    assert labels(find_items([str(night / "yard" / "one")]), night) == ["yard/one.sigmf-meta"]
    either = find_items([str(night / "yard" / "one.sigmf-data"), str(night / "yard" / "o*-meta")])
    assert labels(either, night) == ["yard/one.sigmf-meta"]
    assert labels(find_items([str(night / "**" / "t*.sigmf-meta")]), night) == [
        "yard/deep/two.sigmf-meta"
    ]
    # Folders of a rule count from where the pattern begins to be one.
    assert find_items([str(night / "**" / "t*.sigmf-meta")])[0].folder == "yard/deep"
    assert find_items([str(night)])[-1].folder == "yard"
    for nothing in ("absent", "*.wav", "**/nowhere*"):
        with pytest.raises(InputError, match="found nothing; expected a recording, a folder"):
            find_items([str(night / nothing)])


@pytest.mark.nojit
def test_a_broken_archive_is_an_item_with_its_fault(night):
    (night / "torn.sigmf").write_bytes((night / "box.sigmf").read_bytes()[:100])
    torn = next(i for i in find_items([str(night)]) if i.path.name == "torn.sigmf")
    assert "torn.sigmf" in torn.fault


RULES = """
format = 1
[[rule]]
file = "calibration-*"
leave_out = true
[[rule]]
link = "lab.link.toml"
folder = "yard/**"
options = {cfo_range = 0.05}
[[rule]]
link = "lab.link.toml"
field = {"core:sample_rate" = {min = 3e6, max = 5e6}, "captures[*].core:frequency" = [1e9, 2e9]}
[[rule]]
link = "lab.link.toml"
field = {"core:hw" = "bench ?"}
"""


@pytest.mark.nojit
def test_the_first_rule_that_fits_decides(tmp_path):
    write_link(tmp_path)
    (tmp_path / "night.rules.toml").write_text(RULES)
    rules = load_rules(tmp_path / "night.rules.toml", ReceiverOptions(confidence=0.9))
    night = tmp_path / "night"
    record(night, "calibration-1")
    record(night / "yard" / "deep", "a")
    record(night, "b", carrier_hz=2e9)
    record(night, "c", extra={"core:hw": "bench 3"})
    record(night, "d", extra={"core:hw": "bench 33"}, carrier_hz=3e9)
    choices = {}
    for item in find_items([str(night)]):
        if item.stem != "d":
            choices[item.stem] = rules.choice(item, item.open())
    assert choices["calibration-1"].link is None
    assert choices["a"].options == ReceiverOptions(confidence=0.9, cfo_range=0.05)
    assert choices["b"].options == ReceiverOptions(confidence=0.9)
    assert all(choices[n].link == (tmp_path / "lab.link.toml").resolve() for n in "abc")
    (item,) = find_items([str(night / "d")])
    with pytest.raises(
        InputError, match=r"no rule that fits; expected one in .*night\.rules\.toml"
    ):
        rules.choice(item, item.open())
    # What cannot be opened has no fields, but a folder and a name.
    (item,) = find_items([str(night / "yard")])
    assert rules.choice(Item(item.path, base=night), None).link is not None


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("format = 2\n", "rule: found nothing"),
        ("format = 1\n[[rule]]\nfolder = 'a'\n", "neither link nor leave_out"),
        ("format = 1\n[[rule]]\nlink = 'lab.link.toml'\nleave_out = true\n", "both link"),
        ("format = 1\n[[rule]]\nlink = 'other.toml'\n", "a link description that is there"),
        ("format = 1\n[[rule]]\nlinc = 'lab.link.toml'\n", "an unknown key"),
        ("format = 1\n[[rule]]\nlink = 'lab.link.toml'\nfield = {'a[x]' = 1}\n", "elements as"),
        ("format = 1\n[[rule]]\nlink = 'lab.link.toml'\nfield = {a = {mim = 1}}\n", "min and max"),
        ("format = 1\n[[rule]]\nlink = 'lab.link.toml'\noptions = {cfo = 1.0}\n", "unknown option"),
        ("format = 1\n[[rule]]\nlink = 'lab.link.toml'\noptions = {cfo_range = 'a'}\n", "float"),
        ("format = 1\n[[rule]\n", "TOML 1.0"),
    ],
)
def test_rules_that_are_not_as_documented_are_refused(tmp_path, text, says):
    write_link(tmp_path)
    path = tmp_path / "bad.rules.toml"
    path.write_text(text)
    with pytest.raises(InputError, match=r"bad\.rules\.toml") as caught:
        load_rules(path, ReceiverOptions())
    assert says in str(caught.value) and "\n" not in str(caught.value)


STEP = st.text("ab", min_size=1, max_size=3)


@pytest.mark.nojit
@given(st.lists(STEP, max_size=4), st.lists(STEP, max_size=3), st.lists(STEP, max_size=3))
def test_two_stars_stand_for_any_depth(middle, head, tail):
    folder = "/".join(head + middle + tail) or "."
    pattern = "/".join([*head, "**", *tail])
    assert _folder_fits(pattern, folder)
    assert _folder_fits("/".join(head + middle + tail) or ".", folder)
    assert not _folder_fits(pattern + "/c", folder)
    assert _folder_fits("**", folder)


@pytest.mark.nojit
def test_options_by_name(tmp_path):
    settings = parse_settings(["cfo_range=0.05", "detector=two-step", "keep_symbols=true"])
    options = with_options(ReceiverOptions(), settings, "--set")
    assert options == ReceiverOptions(cfo_range=0.05, detector="two-step", keep_symbols=True)
    for bad, says in (
        ("cfo_range", "NAME=VALUE"),
        ("cfo=1", "unknown option"),
        ("keep_symbols=1", "kind bool"),
        ("cfo_range=0.5", "0.25"),
    ):
        with pytest.raises(InputError, match=says):
            with_options(ReceiverOptions(), parse_settings([bad]), "--set")
    assert parse_size("1.5GB", "") == 1_500_000_000 and parse_size("7", "") == 7
    assert parse_size("300kB", "") == 300_000 and parse_size("2M", "") == 2_000_000
    for bad in ("", "GB", "-1", "1KB", "0"):
        with pytest.raises(InputError, match="a size such as"):
            parse_size(bad, "--split-above")


@pytest.mark.nojit
def test_one_link_for_everything(tmp_path):
    link = write_link(tmp_path)
    meta = record(tmp_path / "night", "x")
    (item,) = find_items([str(meta)])
    assert one_link(link, ReceiverOptions()).choice(item, None).link == link.resolve()
    assert json.loads(meta.read_text())["global"]["core:num_channels"] == 1
