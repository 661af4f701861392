"""The browser that tests of a report.html share, and the page that each of them opens."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from browsing import Page, start


@pytest.fixture(scope="module")
def downloads(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the browser saves."""
    return tmp_path_factory.mktemp("downloads")


@pytest.fixture(scope="module")
def driver(downloads: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Any]:
    """A headless Chromium that logs what it asks the network for."""
    browser = start(tmp_path_factory.mktemp("profile"), downloads)
    yield browser
    browser.quit()


@pytest.fixture
def page(driver: Any, report_page: Path) -> Iterator[Page]:
    """The test module's `report_page`, freshly opened; afterwards nothing may have been complained of."""
    fresh = Page(driver)
    fresh.open(report_page)
    yield fresh
    assert fresh.complaints() == []
    assert fresh.script("return window.hacked") is None
