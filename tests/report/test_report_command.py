"""The command around the pages: what it writes, what it refuses; needs no browser."""

import numpy as np
from report_cases import run_spatiq

from spatiq.metrics.frame_table import empty_columns
from spatiq.report.page import library_name, script_json
from spatiq.report.plots import rounded
from spatiq.report.sentence import verdict
from spatiq.report.thinning import MOST_DRAWN, frames_drawn


def test_an_inlined_page_stands_alone(results_file, tmp_path):
    page = tmp_path / "alone.html"
    assert run_spatiq("report", results_file, "--inline", "--out", page) == f"written: {page}\n"
    assert [p.name for p in tmp_path.iterdir()] == ["alone.html"]
    assert library_name() not in page.read_text(encoding="utf-8")


def test_pages_share_one_copy_of_the_script(results_file, tmp_path):
    for name in ("a.html", "b.html"):
        run_spatiq("report", results_file, "--out", tmp_path / name)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.html", "b.html", library_name()]


def test_a_page_is_not_replaced_unasked(results_file, tmp_path):
    page = tmp_path / "a.html"
    page.write_text("mine")
    said = run_spatiq("report", results_file, "--out", page, code=2)
    assert "already there" in " ".join(said.split())
    assert page.read_text() == "mine"
    run_spatiq("report", results_file, "--out", page, "--overwrite")
    assert page.read_text(encoding="utf-8").startswith("<!doctype html>")


def test_what_is_no_results_file_is_refused(tmp_path):
    text = tmp_path / "notes.txt"
    text.write_text("nothing")
    said = run_spatiq("report", text, code=2)
    assert "no HDF5 file" in said
    assert [p.name for p in tmp_path.iterdir()] == ["notes.txt"]


def test_data_cannot_end_its_script_element():
    text = script_json({"a": "</script><!--&\u2028", "b": float("nan")})
    assert not set(text) & set("<>&\u2028")
    assert '"b":null' in text


def test_thinning_keeps_extremes_worst_and_marked_frames():
    count = 50_000
    columns = empty_columns(count)
    rng = np.random.default_rng(3)
    for name in ("ber", "evm_percent", "cfo_hz", "snr_db"):
        columns[name] = rng.standard_normal(count)
    columns["frame"] = np.arange(count)
    columns["bit_errors"][[17, 40_000]] = 9
    columns["marks"][[123, 49_000]] = 8
    kept = frames_drawn(columns)
    assert kept.size <= MOST_DRAWN
    assert {0, count - 1, 17, 40_000, 123, 49_000} <= set(kept.tolist())
    for name in ("ber", "evm_percent", "cfo_hz", "snr_db"):
        assert columns[name].argmax() in kept
        assert columns[name].argmin() in kept
    assert (np.diff(kept) > 0).all()


def test_values_are_rounded_and_missing_ones_are_null():
    assert rounded([1.23456789e-5, np.nan, np.inf, 0.0]) == [1.234568e-05, None, None, 0.0]


def test_no_frame_found_is_said_first():
    word, sentence = verdict({"frames": {"found": 0, "lost": 0}})
    assert word == "No frame found"
    assert "carrier offset" in sentence


def test_the_word_follows_from_interval_and_loss():
    def word(low, high, predicted, loss):
        ratio = {"value": low, "low": low, "high": high, "errors": 3, "compared": 99}
        figures = {"frames": {"found": 2, "lost": 0}, "ber": ratio, "predicted_ber": predicted}
        return verdict({**figures, "implementation_loss_db": {"value": loss}})[0]

    assert word(1e-3, 3e-3, 2e-3, 0.2) == "As theory expects"
    assert word(1e-3, 3e-3, 9e-4, 0.2) == "Close to what theory expects"
    assert word(1e-3, 3e-3, 1e-4, 1.2) == "Worse than theory expects"
    assert word(1e-3, 3e-3, 1e-2, -1.2) == "Better than theory expects"
