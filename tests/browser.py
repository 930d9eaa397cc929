"""A real browser for tests: the system's chromium, driven by playwright, which fetches none of its own."""

import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager

import pytest

__all__ = ["running_or_skip"]


@contextmanager
def running_or_skip() -> Iterator:
    """A running chromium. Without one: skipped, or failed under BEDLOAD_REQUIRE_BROWSER=1 (CI's)."""
    found = shutil.which("chromium")
    if found is None:
        trouble = "there is no chromium (Debian: apt-get install chromium)"
        if os.environ.get("BEDLOAD_REQUIRE_BROWSER") == "1":
            pytest.fail(f"BEDLOAD_REQUIRE_BROWSER=1, but {trouble}")
        pytest.skip(f"NOT TESTED, for want of a browser: {trouble}")
    from playwright.sync_api import sync_playwright

    as_root = ["--no-sandbox"] if os.geteuid() == 0 else []
    with sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=found, args=as_root)
        try:
            yield browser
        finally:
            browser.close()
