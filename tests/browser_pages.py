"""A browser for pages that must need nothing but themselves, and what every page's policy says."""

import base64
import hashlib
import re
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

CHROMIUM = shutil.which("chromium") or "/usr/bin/chromium"
FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)


def assert_own_parts_only(page: str) -> None:
    """The page's policy lets its own style and script pass, by their digests, and nothing else."""
    policy = re.search(r'Content-Security-Policy" content="([^"]+)"', page).group(1)
    policy = policy.replace("&#39;", "'")
    assert "default-src 'none'" in policy
    for tag in ("style", "script"):
        (inside,) = re.findall(rf"<{tag}>(.*?)</{tag}>", page, re.S)
        digest = base64.b64encode(hashlib.sha256(inside.encode()).digest()).decode()
        assert f"{tag}-src 'sha256-{digest}'" in policy
    assert not re.search(r"<[^>]+\s(on\w+|style)\s*=", page)
    assert not re.search(r"(?:src|href)=\"?(?:https?:|//)", page)


@pytest.fixture(scope="module")
def chromium() -> Iterator[Any]:
    """A headless browser."""
    from playwright import sync_api

    assert Path(CHROMIUM).exists(), "-m browser needs Debian's chromium"
    with sync_api.sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=list(FLAGS))
        yield browser
        browser.close()


@pytest.fixture
def opened(chromium: Any) -> Iterator[Callable[..., Any]]:
    """Opens a page offline and fails the test if it asked for anything or said anything."""
    contexts: list[Any] = []
    said: list[str] = []
    asked: list[str] = []
    pages: list[str] = []

    def open_page(path: Path, width: int = 1440, scheme: str = "light") -> Any:
        context = chromium.new_context(
            viewport={"width": width, "height": 900}, color_scheme=scheme, offline=True
        )
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda message: said.append(message.text))
        page.on("pageerror", lambda error: said.append(str(error)))
        page.on("dialog", lambda dialog: said.append(dialog.message))
        page.on("request", lambda request: asked.append(request.url))
        pages.append(path.as_uri())
        page.goto(pages[-1])
        return page

    yield open_page
    for context in contexts:
        context.close()
    assert said == []
    assert contexts
    assert set(asked) == set(pages), asked
