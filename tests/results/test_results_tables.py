import csv
import json
import math

import numpy as np
import pytest
from made_results import made_frames, made_summary, write_results

from spatiq.errors import InputError
from spatiq.metrics.frame_table import COLUMNS
from spatiq.receiver.frame_batch import LostFrame
from spatiq.results import tables
from spatiq.results.plain import json_text, leaves, plain
from spatiq.results.reader import open_results


@pytest.fixture
def frames():
    batch = made_frames(5, lost=[LostFrame(0, 7.5, -1, "not found")])
    batch.columns["ber"][1] = np.nan
    batch.columns["snr_db"][2] = np.inf
    batch.columns["frame_number"][3] = -1
    batch.columns["crc_ok"][4] = -1
    batch.columns["evm_percent"][0] = 0.1 + 0.2  # 17 digits
    return batch


@pytest.fixture
def results(tmp_path, frames):
    with open_results(write_results(tmp_path / "r.h5", [frames])) as opened:
        yield opened


def test_csv_holds_every_figure_exactly_and_missing_ones_as_empty_cells(tmp_path, results, frames):
    tables.write_frames_csv(results, tmp_path / "f.csv")
    with (tmp_path / "f.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 5
    assert list(rows[0]) == [c.name for c in COLUMNS]
    for i, row in enumerate(rows):
        for column in COLUMNS:
            value = frames.columns[column.name][i].item()
            missing = (value == -1 and "-1" in column.meaning) or value != value
            if missing:
                assert row[column.name] == ""
            else:
                assert type(value)(row[column.name]) == value
    assert rows[2]["snr_db"] == "inf"
    assert rows[3]["frame_number"] == rows[4]["crc_ok"] == rows[1]["ber"] == ""
    assert rows[0]["evm_percent"] == "0.30000000000000004"


def test_json_is_strict_and_says_what_its_columns_mean(tmp_path, results, frames):
    tables.write_frames_json(results, tmp_path / "f.json")

    def refuse(constant):
        raise AssertionError(constant)

    document = json.loads((tmp_path / "f.json").read_text(), parse_constant=refuse)
    assert document["columns"]["cfo_hz"] == {"unit": "Hz", "meaning": "carrier offset"}
    assert [f["frame"] for f in document["frames"]] == [0, 1, 2, 3, 4]
    assert document["frames"][1]["ber"] is None
    assert document["frames"][2]["snr_db"] is None
    assert document["frames"][3]["frame_number"] is None
    assert document["frames"][0]["start_sample"] == frames.columns["start_sample"][0]
    assert document["lost"] == [
        {"segment": 0, "start_sample": 7.5, "frame_number": -1, "reason": "not found"}
    ]


def test_json_without_frames_is_still_json(tmp_path):
    with open_results(write_results(tmp_path / "r.h5", [])) as results:
        tables.write_frames_json(results, tmp_path / "f.json")
    document = json.loads((tmp_path / "f.json").read_text())
    assert document["frames"] == document["lost"] == []


def test_summary_tables_agree_with_the_summary(tmp_path, results):
    tables.write_summary_csv(results, tmp_path / "s.csv")
    tables.write_summary_json(results, tmp_path / "s.json")
    assert json.loads((tmp_path / "s.json").read_text()) == made_summary()
    with (tmp_path / "s.csv").open(newline="") as file:
        figures = {row["figure"]: row["value"] for row in csv.DictReader(file)}
    assert figures["ber.high"] == "3.69e-06"
    assert figures["implementation_loss_db"] == ""
    assert figures["frames.found"] == "98"


@pytest.mark.parametrize(
    "write",
    [
        tables.write_frames_csv,
        tables.write_frames_json,
        tables.write_summary_csv,
        tables.write_summary_json,
    ],
)
def test_no_table_replaces_a_file_unasked(tmp_path, results, write):
    path = tmp_path / "taken"
    path.write_text("mine")
    with pytest.raises(InputError, match="already there"):
        write(results, path)
    assert path.read_text() == "mine"
    write(results, path, overwrite=True)
    assert path.read_text() != "mine"
    assert {p.name for p in tmp_path.iterdir()} == {"r.h5", "taken"}


def test_what_the_system_refuses_is_said_with_the_name_asked_for(tmp_path, results, monkeypatch):
    def refuse(path, **_options):
        raise OSError(28, "No space left on device", str(path))

    monkeypatch.setattr(type(tmp_path), "touch", refuse)
    with pytest.raises(InputError, match=r"f\.csv: found No space left on device; expected a file"):
        tables.write_frames_csv(results, tmp_path / "f.csv")


def test_a_table_needs_a_folder_to_stand_in(tmp_path, results):
    with pytest.raises(InputError, match="no such folder"):
        tables.write_frames_csv(results, tmp_path / "none" / "f.csv")
    with pytest.raises(InputError, match="a folder; expected the name of a file"):
        tables.write_frames_csv(results, tmp_path, overwrite=True)


@pytest.mark.nojit
def test_plain_turns_what_is_missing_into_none_and_refuses_what_is_no_figure():
    values = {"a": np.int64(3), "b": (math.nan, math.inf), "c": np.array([1.5, np.nan])}
    assert plain(values) == {"a": 3, "b": [None, None], "c": [1.5, None]}
    assert type(plain(values)["a"]) is int
    assert dict(leaves({"a": {"b": 1, "c": [2]}, "d": None})) == {"a.b": 1, "d": None}
    with pytest.raises(TypeError, match="not JSON serializable"):
        json_text({"a": object()})
