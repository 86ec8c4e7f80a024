"""A real headless browser; tests that need it are skipped where there is none, except in continuous integration."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator

import pytest
from browsing import Opened
from playwright.sync_api import Browser, sync_playwright

NAMES = ("chromium", "chromium-browser")
OPTIONS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


@pytest.fixture(scope="session")
def browser() -> Iterator[Browser]:
    found = next(filter(None, map(shutil.which, NAMES)), None)
    if found is None:
        reason = "no chromium here; install the packages chromium and chromium-driver"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    with sync_playwright() as playwright:
        running = playwright.chromium.launch(executable_path=found, args=OPTIONS)  # with a fresh profile of its own
        yield running
        running.close()


@pytest.fixture
def opened(browser: Browser) -> Iterator[Opened]:
    context = browser.new_context(viewport={"width": 1280, "height": 720}, accept_downloads=True)
    yield Opened(context.new_page())
    context.close()
