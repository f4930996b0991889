"""A real browser without a window: Debian's Chromium, driven by Playwright."""

from __future__ import annotations

import os
import shutil
import subprocess
import tarfile
from contextlib import contextmanager

import pytest

NAMES = ("chromium", "chromium-browser", "google-chrome")
AXE = "axe-core@4.10.3"
FLAGS = ["--no-sandbox", "--disable-gpu", "--disable-background-networking"]


def missing(what: str) -> None:
    """Skip, or fail where everything must be there."""
    if os.environ.get("CI"):
        pytest.fail(what)
    pytest.skip(what)


@pytest.fixture(scope="session")
def browser():
    path = next(filter(None, map(shutil.which, NAMES)), None)
    if path is None:
        missing("no Chromium on this machine (Debian: apt-get install chromium)")
    try:
        from playwright.sync_api import sync_playwright
    except ImportError:
        missing("playwright is not installed (pip install playwright)")
    with sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=path, headless=True, args=FLAGS)
        yield started
        started.close()


@pytest.fixture
def opened(browser, tmp_path):
    """A context: a page from disk; at its end it must not have complained or asked for anything."""

    @contextmanager
    def open_page(text, *, width=1280, height=900, **options):
        path = tmp_path / "report.html"
        path.write_text(text, encoding="utf-8")
        context = browser.new_context(viewport={"width": width, "height": height}, **options)
        page = context.new_page()
        complaints, requests = [], []
        page.on("console", lambda message: complaints.append(message.text))
        page.on("pageerror", lambda error: complaints.append(str(error)))
        page.on("request", lambda request: requests.append(request.url))
        page.goto(path.as_uri())
        page.evaluate("window.explorer.ready")
        try:
            yield page
            assert complaints == []
            assert requests == [path.as_uri()]
        finally:
            context.close()

    return open_page


@pytest.fixture(scope="session")
def axe(pytestconfig):
    """The script of the accessibility checker, from the npm registry, kept between runs."""
    folder = pytestconfig.cache.mkdir("axe-core")
    script = folder / "package" / "axe.min.js"
    if not script.exists():
        npm = shutil.which("npm")
        if npm is None:
            missing("no npm to fetch axe-core with")
        packed = subprocess.run(
            [npm, "pack", AXE, "--silent"], cwd=folder, capture_output=True, text=True, check=False
        )
        if packed.returncode:
            missing(f"npm pack {AXE}: {packed.stderr.strip()[-200:]}")
        with tarfile.open(folder / packed.stdout.split()[-1]) as archive:
            archive.extractall(folder, filter="data")
    return script.read_text(encoding="utf-8")
