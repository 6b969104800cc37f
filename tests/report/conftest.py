"""A small link simulated, measured and reported once; a browser that notes what goes wrong."""

import shutil
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from playwright.sync_api import sync_playwright
from report_cases import DEMO, HOSTILE, HOSTILE_FILE, run_spatiq

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")


def pytest_collection_modifyitems(items):
    if CHROMIUM is None:
        mark = pytest.mark.skipif(True, reason="no Chromium on this machine")
        for item in items:
            if "browser" in getattr(item, "fixturenames", ()):
                item.add_marker(mark)


@pytest.fixture(scope="session")
def results_file(tmp_path_factory):
    """24 frames at 11 dB, some with errors, measured with symbols; names are hostile."""
    folder = tmp_path_factory.mktemp("recording")
    link = folder / "yard.link.toml"
    text = DEMO.read_text(encoding="utf-8").replace('"hook yard"', f"'{HOSTILE}'")
    link.write_text(text, encoding="utf-8")
    base = folder / HOSTILE_FILE
    run_spatiq(
        "simulate", link, "--samples-per-symbol", 3, "--snr", 11, "--frames", 24, "--seed", 5,
        "--out", base,
    )  # fmt: skip
    out = folder / "run.spatiq.h5"
    meta = folder / f"{HOSTILE_FILE}.sigmf-meta"
    run_spatiq("measure", meta, link, "--symbols", "--rows", 0, "--out", out)
    return out


@pytest.fixture(scope="session")
def recording_page(results_file):
    run_spatiq("report", results_file)
    return results_file.with_name("run.html")


@dataclass
class Watched:
    """A page in the browser, and all that it should not have done."""

    page: object
    complaints: list = field(default_factory=list)
    requests: list = field(default_factory=list)

    def open(self, path, anchor=""):
        self.page.goto(f"{Path(path).as_uri()}{anchor}")

    def scroll_through(self):
        """Bring each figure into sight: they are drawn when they come near."""
        count = self.page.locator("[data-plot]").count()
        for i in range(count):
            canvas = f"document.querySelectorAll('[data-plot]')[{i}]"
            self.page.evaluate(f"{canvas}.scrollIntoView()")
            for _ in range(200):  # the page forbids the eval that the driver's own waiting needs
                if self.page.evaluate(f"Boolean({canvas}.data)"):
                    break
                self.page.wait_for_timeout(50)
            else:
                raise AssertionError(f"figure {i} was not drawn within 10 s")


@pytest.fixture(scope="session")
def chromium():
    with sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield browser
        browser.close()


@pytest.fixture
def browser(chromium):
    """Opens watched pages: browser(width=..., scheme=...)."""
    opened = []

    def new(width=1280, scheme="light"):
        page = chromium.new_page(viewport={"width": width, "height": 900}, color_scheme=scheme)
        watched = Watched(page)
        page.on("console", lambda m: watched.complaints.append((m.type, m.text)))
        page.on("pageerror", lambda e: watched.complaints.append(("error", str(e))))
        page.on("request", lambda r: watched.requests.append(r.url))
        opened.append(page)
        return watched

    yield new
    for page in opened:
        page.close()
