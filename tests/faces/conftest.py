"""What tests of the faces share: one browser."""

import os
import shutil

import pytest

# Set where a test that needs the browser may not be skipped.
MUST_RUN = "PINLIGHT_TEST_BROWSER"


@pytest.fixture(scope="session")
def browser():
    program = shutil.which("chromium") or shutil.which("chromium-browser")
    if program is None and not os.environ.get(MUST_RUN):
        pytest.skip("there is no Chromium; apt-get install chromium")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        opened = playwright.chromium.launch(executable_path=program, args=["--no-sandbox"])
        yield opened
        opened.close()
