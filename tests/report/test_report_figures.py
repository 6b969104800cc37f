"""Printed figures: formats, the data beside them, and what is refused; needs no browser."""

import csv

import numpy as np
import pytest
from report_cases import run_spatiq

from spatiq.report.gathered import gather
from spatiq.report.recording_sheet import recording_plots
from spatiq.results.reader import open_results

STARTS = {"svg": b"<?xml", "pdf": b"%PDF", "png": b"\x89PNG"}


@pytest.mark.parametrize("form", sorted(STARTS))
def test_each_format_is_written_with_its_data(results_file, tmp_path, form):
    only = ["--only", "confusion", "--only", "bits"]
    run_spatiq("figures", results_file, "--out", tmp_path, "--format", form, *only)
    names = sorted(p.name for p in tmp_path.iterdir())
    assert names == sorted(f"{k}.{e}" for k in ("bits", "confusion") for e in ("csv", form))
    assert (tmp_path / f"bits.{form}").read_bytes().startswith(STARTS[form])


def test_all_plots_are_drawn_and_their_data_is_that_of_the_results(results_file, tmp_path):
    run_spatiq("figures", results_file, "--out", tmp_path, "--format", "png")
    with open_results(results_file) as results:
        keys = {p.key for p in recording_plots(gather(results)) if p.panels}
        ber, errors = results.column("ber"), results.column("bit_errors")
        time, total = results.column("time_s"), results.confusion_total
    assert {p.stem for p in tmp_path.iterdir()} == keys
    assert len(keys) == 9
    rows = list(csv.DictReader((tmp_path / "frames.csv").open(encoding="utf-8")))
    measured = [r for r in rows if r["series"] == "measured"]
    some = errors > 0
    np.testing.assert_array_equal([float(r["y"]) for r in measured], ber[some])
    np.testing.assert_array_equal([float(r["x"]) for r in measured], time[some])
    rows = list(csv.DictReader((tmp_path / "confusion.csv").open(encoding="utf-8")))
    shares = {(r["y"], r["x"]): float(r["value"]) for r in rows if r["panel"] == "measured"}
    for i, row in enumerate(total):
        for j, n in enumerate(row):
            assert shares[str(i), str(j)] == pytest.approx(n / row.sum(), rel=1e-9)


def test_width_is_that_asked_for(results_file, tmp_path):
    run_spatiq(
        "figures", results_file, "--out", tmp_path, "--width", 120, "--only", "ber"
    )  # fmt: skip
    head = (tmp_path / "ber.svg").read_text(encoding="utf-8")[:2000]
    points = float(head.split('width="')[1].split("pt")[0])
    assert points == pytest.approx(120 / 25.4 * 72, rel=1e-3)


@pytest.mark.parametrize(
    ("option", "value", "says"),
    [
        ("--format", "gif", "svg, pdf, png"),
        ("--width", 3, "40 to 400 mm"),
        ("--only", "spectrum", "frames, confusion"),
    ],
)
def test_what_cannot_be_is_refused_in_one_line(results_file, tmp_path, option, value, says):
    said = run_spatiq("figures", results_file, "--out", tmp_path, option, value, code=2)
    assert says in said
    assert len(said.strip().splitlines()) == 1
    assert list(tmp_path.iterdir()) == []
