"""A night's page in a real browser: leads to its recordings, says what failed, stays light."""

import json

import numpy as np
import pytest
from axe_playwright_python.sync_playwright import Axe
from report_cases import DEMO, HOSTILE, HOSTILE_FILE, run_spatiq

from spatiq.batch.catalogue import open_catalogue
from spatiq.report.page import library_name


@pytest.fixture(scope="module")
def night(tmp_path_factory):
    """Two recordings ten minutes apart, and a file that is none; names are hostile."""
    folder = tmp_path_factory.mktemp("captures")
    for i, name in enumerate((f"{HOSTILE_FILE} 1", "two")):
        run_spatiq(
            "simulate", DEMO, "--samples-per-symbol", 2, "--snr", 11, "--frames", 4, "--seed", i,
            "--out", folder / name,
        )  # fmt: skip
        meta = folder / f"{name}.sigmf-meta"
        told = json.loads(meta.read_text(encoding="utf-8"))
        told["captures"][0]["core:datetime"] = f"2031-05-06T21:{10 * i:02d}:00Z"
        meta.write_text(json.dumps(told), encoding="utf-8")
    broken = {"global": {"core:datatype": HOSTILE, "core:version": "1.2.0"}}
    (folder / "broken.sigmf-meta").write_text(json.dumps(broken))
    (folder / "broken.sigmf-data").write_bytes(b"")
    out = folder.parent / "night"
    run_spatiq("batch", folder, "--link", DEMO, "--out", out, "--settle", 0, "--workers", 1, code=3)
    run_spatiq("report", out)
    return out


def test_it_opens_and_leads_to_its_recordings_and_back(browser, night):
    for width, scheme in ((1280, "light"), (390, "dark")):
        watched = browser(width, scheme)
        watched.open(night / "night.html")
        watched.scroll_through()
        assert watched.page.evaluate("document.documentElement.scrollWidth") <= width
        assert watched.page.evaluate("window.hit") is None
        links = watched.page.locator("#recordings td a")
        assert links.count() == 2
        links.nth(0).click()
        watched.scroll_through()
        assert f"{HOSTILE_FILE} 1" in watched.page.inner_text("h1")
        watched.page.click("text=Back to the night")
        assert watched.page.inner_text("h1") == "night"
        assert watched.page.evaluate("window.hit") is None
        assert watched.complaints == []
        assert all(u.startswith(("file:", "data:", "blob:")) for u in watched.requests)


def test_there_is_one_copy_of_the_drawing_script(night):
    assert [p.relative_to(night).as_posix() for p in night.rglob("plotly*")] == [library_name()]


def test_figures_hold_what_the_catalogue_holds(browser, night):
    watched = browser()
    watched.open(night / "night.html")
    watched.scroll_through()
    with open_catalogue(night) as catalogue:
        rows = catalogue.rows("SELECT * FROM night ORDER BY recorded_at")
        (failed,) = catalogue.rows("SELECT * FROM recordings WHERE state = 'failed'")
    traces = watched.page.evaluate(
        "document.querySelector('[data-plot=strip]').data"
        ".map(t => ({name: t.name, x: [...t.x], y: [...t.y]}))"
    )
    measured = traces[0]
    assert [r["bit_errors"] > 0 for r in rows] == [True, True]
    np.testing.assert_allclose(measured["y"], [r["ber"] for r in rows], rtol=1e-6)
    assert measured["x"][1] - measured["x"][0] == 600_000  # ms, to the last digit
    np.testing.assert_allclose(traces[3]["y"], [r["evm_percent"] for r in rows], rtol=1e-6)
    assert failed["reason"][:60] in watched.page.inner_text("#failed")
    assert "1 failed" in watched.page.inner_text(".word")


def test_no_serious_fault_of_accessibility(browser, night):
    watched = browser()
    watched.open(night / "night.html")
    watched.scroll_through()
    found = Axe().run(watched.page).response["violations"]
    assert [v["id"] for v in found if v["impact"] in ("serious", "critical")] == []
    # A deliberate fault is seen: the check can fail.
    watched.page.evaluate("document.querySelector('h1').style.color = 'var(--band)'")
    found = Axe().run(watched.page).response["violations"]
    assert "color-contrast" in [v["id"] for v in found]


def test_a_thousand_recordings_still_weigh_little(browser, night, tmp_path):
    with open_catalogue(night) as one:
        (recording,) = one.rows("SELECT * FROM recordings WHERE name = 'two'")
        (measured,) = one.rows(
            "SELECT * FROM measurements WHERE measurement = ?", [recording["measurement"]]
        )
    with open_catalogue(tmp_path, create=True) as many:
        for i in range(1000):
            names = {"measurement": f"{i:04d}"}
            path = {"path": f"/captures/{i:04d}", "name": f"run {i:04d}"}
            at = {"recorded_at": f"2031-05-06T{i // 60:02d}:{i % 60:02d}:00Z"}
            many.put(recordings=[recording | names | path], measurements=[measured | names | at])
    run_spatiq("report", tmp_path, "--inline")
    page = tmp_path / "night.html"
    assert page.stat().st_size < 8e6
    watched = browser()
    watched.open(page)
    watched.scroll_through()
    assert watched.page.locator("#recordings tbody tr").count() == 1000
    assert (
        watched.page.evaluate("document.querySelector('[data-plot=strip]').data[0].x.length")
        == 1000
    )
    assert watched.complaints == []
