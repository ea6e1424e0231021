"""A browser for the tests of the page: headless, without a network, and heard in everything that it complains about."""

from __future__ import annotations

import contextlib
import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
LOCAL = ("file:", "data:", "blob:")
HOSTILE = "</script><script>window.broken=1</script><img src=x onerror='window.broken=2'>\n\"<!--script--> &amp; ${a}"
SIZE = {"width": 1280, "height": 900}


def missing(what: str) -> Any:
    """Skip, or fail where nothing may be left out."""
    reason = f"the page cannot be looked at: {what}"
    return pytest.fail(reason) if os.environ.get("CI") == "true" else pytest.skip(reason)


@contextlib.contextmanager
def chromium() -> Iterator[Any]:
    """The system's Chromium, driven from here; none is ever fetched."""
    try:
        from playwright.sync_api import sync_playwright
    except ImportError:
        missing("playwright is not installed")
    path = "/usr/bin/chromium" if Path("/usr/bin/chromium").exists() else shutil.which("chromium")
    if path is None:
        missing("there is no /usr/bin/chromium")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=path, args=list(FLAGS))
        yield browser
        browser.close()


@contextlib.contextmanager
def opened(browser: Any, path: Path, **options: Any) -> Iterator[Any]:
    """A page as a reader opens it from a file share, without a network; any complaint or request elsewhere fails."""
    context = browser.new_context(**{"viewport": SIZE, "offline": True, **options})
    page = context.new_page()
    heard: list[str] = []
    page.on("pageerror", lambda error: heard.append(f"error: {error}"))
    page.on("console", lambda said: heard.append(said.text) if said.type in ("error", "warning") else None)
    page.on("request", lambda asked: None if asked.url.startswith(LOCAL) else heard.append(f"asked for {asked.url}"))
    page.goto(path.absolute().as_uri())
    page.wait_for_selector("html[data-ready=yes]", timeout=20_000)
    yield page
    context.close()
    assert heard == []


def settled(page: Any) -> None:
    """Wait until what was chosen is shown."""
    page.evaluate("() => new Promise(done => requestAnimationFrame(() => requestAnimationFrame(done)))")


def left(page: Any) -> str:
    """Return how many designs the page says are left."""
    settled(page)
    return str(page.inner_text("#count"))
