"""A headless Chromium (Debian's package, or CHROMIUM=/path) driven by Playwright.

Where it is missing the tests say so and are skipped; under CI=true that is a failure.
"""

import os
import shutil

import pytest

CHROMIUM = os.environ.get("CHROMIUM") or shutil.which("chromium") or shutil.which("chromium-browser")


@pytest.fixture(scope="session")
def browser():
    try:
        from playwright.sync_api import sync_playwright
    except ImportError:
        _lacking("the Python package playwright is not installed (pip install -e '.[browser]')")
    if CHROMIUM is None:
        _lacking("no Chromium found (apt-get install chromium, or set CHROMIUM to its path)")
    with sync_playwright() as play:
        started = play.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield started
        started.close()


def _lacking(what):
    if os.environ.get("CI"):
        pytest.fail(f"the browser tests cannot run: {what}")
    pytest.skip(what)
