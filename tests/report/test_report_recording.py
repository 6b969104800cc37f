"""A recording's page in a real browser: right figures, no complaints, no requests, no faults."""

import re

import numpy as np
import pytest
from axe_playwright_python.sync_playwright import Axe
from report_cases import HOSTILE, HOSTILE_FILE, repeated, run_spatiq

from spatiq.report.thinning import MOST_DRAWN
from spatiq.results.reader import open_results

WIDTHS = [(1280, "light"), (390, "light"), (1280, "dark"), (390, "dark")]


def drawn(watched, key):
    """Traces of a figure as the drawing library holds them."""
    return watched.page.evaluate(
        "key => document.querySelector(`[data-plot=${key}]`).data.map("
        "t => ({name: t.name, x: [...(t.x || [])], y: [...(t.y || [])], z: t.z, text: t.text}))",
        key,
    )


def test_it_opens_without_complaint_or_request_and_fits(browser, recording_page):
    for width, scheme in WIDTHS:
        watched = browser(width, scheme)
        watched.open(recording_page)
        watched.scroll_through()
        assert watched.complaints == []
        # Plotting makes images of its own; all else comes from the folder of the page.
        folder = recording_page.parent.as_uri()
        asked = [u for u in watched.requests if not u.startswith(("data:", "blob:"))]
        assert len(asked) == 2  # the page, and the script beside it
        assert all(u.startswith(folder) for u in asked)
        assert watched.page.evaluate("document.documentElement.scrollWidth") <= width


def test_figures_hold_what_the_results_file_holds(browser, recording_page, results_file):
    watched = browser()
    watched.open(recording_page)
    watched.scroll_through()
    with open_results(results_file) as results:
        columns = {n: results.column(n) for n in results.column_names}
        total, summary = results.confusion_total, results.summary
        decided, sent = results.words()
    traces = {t["name"]: t for t in drawn(watched, "frames") if t["name"]}
    some = columns["bit_errors"] > 0
    assert some.any()
    np.testing.assert_allclose(traces["measured"]["x"], columns["time_s"], rtol=1e-6)
    shown = np.array(traces["measured"]["y"], float)
    np.testing.assert_allclose(shown[some], columns["ber"][some], rtol=1e-6)
    assert np.isnan(shown[~some]).all()  # no error is no figure of 0
    np.testing.assert_allclose(traces["predicted"]["y"], columns["predicted_ber"], rtol=1e-6)
    evm = drawn(watched, "frames")[3]
    np.testing.assert_allclose(evm["y"], columns["evm_percent"], rtol=1e-6)

    measured, predicted = drawn(watched, "confusion")
    counts = [[int(t.split("<br>")[0].replace(",", "")) for t in row] for row in measured["text"]]
    assert counts == total.tolist()
    shares = 10.0 ** np.array(measured["z"], float)
    np.testing.assert_allclose(shares, total / total.sum(axis=1, keepdims=True), rtol=1e-5)
    np.testing.assert_allclose((10.0 ** np.array(predicted["z"], float)).sum(axis=1), 1, rtol=1e-5)

    bits = {t["name"]: t for t in drawn(watched, "bits")}
    kinds = [summary[k]["value"] for k in ("ber", "ber_spatial", "ber_signal")]
    np.testing.assert_allclose(bits["measured"]["y"], kinds, rtol=1e-6)

    antenna = {t["name"]: t for t in drawn(watched, "positions")}["wrong antenna"]
    rows = watched.page.evaluate(
        "[...document.querySelectorAll('#positions tbody tr')]"
        ".map(r => [...r.cells].map(c => c.textContent.trim()))"
    )
    known = int((sent >= 0).sum())
    assert sum(int(r[1]) for r in rows) == known == summary["antenna_error_ratio"]["compared"]
    assert sum(int(r[2]) for r in rows) == summary["antenna_error_ratio"]["errors"]
    assert sum(int(r[3]) for r in rows) == summary["symbol_error_ratio"]["errors"]
    assert max(antenna["y"]) > 0
    assert decided.shape == sent.shape


def test_the_sentence_tells_measured_and_expected(browser, recording_page, results_file):
    watched = browser()
    watched.open(recording_page)
    text = watched.page.inner_text(".sentence")
    with open_results(results_file) as results:
        summary = results.summary
    assert f"{summary['ber']['value']:.3g}" in text
    assert f"{summary['predicted_ber']:.3g}" in text
    assert "All 24 frames expected were found" in text


def test_a_frame_is_picked_by_keyboard_and_by_click(browser, recording_page, results_file):
    watched = browser()
    page = watched.page
    watched.open(recording_page)
    watched.scroll_through()
    page.evaluate("document.getElementById('one').scrollIntoView()")
    page.focus("#frame")
    page.fill("#frame", "7")
    page.keyboard.press("Enter")
    with open_results(results_file) as results:
        snr, errors = results.column("snr_db"), results.column("bit_errors")
        confusion = results.confusion()
    value = "name => [...document.querySelectorAll('#one-table tbody tr')]"
    value += ".find(r => r.cells[0].textContent === name).cells[1].textContent"
    assert float(page.evaluate(value, "snr_db")) == pytest.approx(snr[7], rel=1e-6)
    page.keyboard.press("Tab")
    page.keyboard.press("Tab")
    page.keyboard.press("Enter")  # "Next"
    assert page.input_value("#frame") == "8"
    page.click("#worst")
    worst = int(page.input_value("#frame"))
    assert errors[worst] == errors.max()
    rows = page.evaluate(
        "[...document.querySelectorAll('#one-table tbody tr')].slice(-40)"
        ".filter(r => r.cells[0].textContent.startsWith('antenna ') && r.cells[0].textContent"
        ".includes('taken for')).map(r => Number(r.cells[1].textContent))"
    )
    assert sum(rows) == confusion[worst].sum() - np.trace(confusion[worst])
    assert page.evaluate("document.getElementById('one-canvas').data.length") == 2
    page.evaluate("document.querySelector('[data-plot=frames]').scrollIntoView()")
    page.locator("[data-plot=frames] .points path").nth(3).click(force=True)
    drawn_fourth = np.flatnonzero(errors > 0)[3]  # frames without a wrong bit have other marks
    assert page.input_value("#frame") == str(drawn_fourth)
    assert watched.complaints == []


def test_hostile_names_stay_text(browser, recording_page):
    watched = browser()
    watched.open(recording_page)
    watched.scroll_through()
    assert watched.page.evaluate("window.hit") is None
    assert HOSTILE_FILE in watched.page.inner_text("h1")
    assert HOSTILE in watched.page.inner_text("footer")
    assert watched.page.evaluate("document.images.length") == 0


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_no_serious_fault_of_accessibility(browser, recording_page, scheme):
    watched = browser(1280, scheme)
    watched.open(recording_page)
    watched.scroll_through()
    watched.page.evaluate("document.querySelectorAll('details').forEach(d => { d.open = true; })")
    found = Axe().run(watched.page).response["violations"]
    serious = [
        (v["id"], v["nodes"][0]["html"][:200])
        for v in found
        if v["impact"] in ("serious", "critical")
    ]
    assert serious == []


def test_it_prints_all_figures(browser, recording_page):
    watched = browser()
    watched.open(recording_page)
    for paper in ("A4", "Letter"):
        printed = watched.page.pdf(format=paper)
        assert len(re.findall(rb"/Type\s*/Page\b", printed)) >= 3
    assert watched.page.evaluate(
        "[...document.querySelectorAll('[data-plot]')].every((c) => c.data)"
    )
    assert watched.complaints == []


def test_a_hundred_thousand_frames_are_thinned_and_what_stands_out_is_kept(
    browser, results_file, tmp_path
):
    long = repeated(results_file, tmp_path / "long.spatiq.h5", 100_000)
    run_spatiq("report", long, "--inline")
    page = tmp_path / "long.html"
    assert page.stat().st_size < 8e6
    with open_results(long) as results:
        errors = results.column("bit_errors")
        evm = results.column("evm_percent")
    watched = browser()
    watched.open(page)
    watched.scroll_through()
    frames = watched.page.evaluate(
        "document.querySelector('[data-plot=frames]').data[0].customdata"
    )
    assert 100 < len(frames) <= MOST_DRAWN
    assert errors.max() in errors[frames]
    assert evm.max() in evm[frames] and evm.min() in evm[frames]
    assert "of 100,000 frames" in watched.page.inner_text("#frames")
    assert watched.complaints == []
    assert [u for u in watched.requests if u.startswith("http")] == []
