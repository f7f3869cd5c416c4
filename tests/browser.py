"""A headless browser that can reach nothing but the page under test."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

_NAMES = ("chromium", "chromium-browser", "google-chrome")
_OPTIONS = ["--headless", "--no-sandbox", "--disable-gpu", "--disable-background-networking"]


@dataclass
class Watched:
    """An open page and everything it asked for or complained about."""

    page: Any
    requests: list[str] = field(default_factory=list)
    failed: list[str] = field(default_factory=list)
    complaints: list[str] = field(default_factory=list)


def find_browser() -> str:
    """Path of the system's Chromium. Without one the test is skipped; in continuous integration it fails."""
    found = next((path for path in map(shutil.which, _NAMES) if path), None)
    if found:
        return found
    reason = f"no browser found ({', '.join(_NAMES)}); install Chromium to run the tests of the map page"
    if os.environ.get("CI", "").lower() == "true":
        pytest.fail(reason)
    pytest.skip(reason)


@contextmanager
def open_page(path: Path, *, width: int = 1280, height: int = 800, touch: bool = False) -> Iterator[Watched]:
    """Open a file in headless Chromium with the network off and every other request blocked."""
    executable = find_browser()
    sync_api = pytest.importorskip("playwright.sync_api")
    with sync_api.sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=executable, args=_OPTIONS)
        context = browser.new_context(offline=True, viewport={"width": width, "height": height}, has_touch=touch)
        context.route(lambda url: not url.startswith("file:"), lambda route: route.abort())
        watched = Watched(context.new_page())
        watched.page.on("request", lambda request: watched.requests.append(request.url))
        watched.page.on("requestfailed", lambda request: watched.failed.append(request.url))
        watched.page.on("pageerror", lambda error: watched.complaints.append(str(error)))
        watched.page.on(
            "console",
            lambda message: watched.complaints.append(message.text) if message.type in ("error", "warning") else None,
        )
        watched.page.on("dialog", lambda dialog: (watched.complaints.append(dialog.message), dialog.dismiss()))
        watched.page.goto(path.as_uri())
        watched.page.wait_for_selector("input[name=layer]", state="attached")
        yield watched
        browser.close()
