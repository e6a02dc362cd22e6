"""For tests in a browser: one Chromium for the tests of a module, and the folder that screenshots go to."""

from __future__ import annotations

import os
from collections.abc import AsyncIterator
from pathlib import Path
from typing import TYPE_CHECKING

import pytest
import pytest_asyncio

if TYPE_CHECKING:
    from playwright.async_api import Browser


@pytest_asyncio.fixture(scope="module", loop_scope="module")
async def launched() -> AsyncIterator[Browser]:
    """A browser; each test opens pages in contexts of their own."""
    from helpers_browser import browser  # noqa: PLC0415  (other tests in this folder need no browser)

    async with browser() as one:
        yield one


@pytest.fixture
def shots(tmp_path: Path) -> Path:
    """Where pictures of pages are kept: $STRANDLINE_SHOTS, else a folder of the test's own."""
    folder = Path(os.environ.get("STRANDLINE_SHOTS") or tmp_path / "shots")
    folder.mkdir(parents=True, exist_ok=True)
    return folder
