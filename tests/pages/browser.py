"""A real browser, watched: it may ask nobody but the service, and its console must stay quiet."""

import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from urllib.parse import urlsplit

from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Browser, Page, Playwright, Request

# What a test on an isolated machine needs: no sandbox for root, no look-ups of its own.
FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
NAMES = ("chromium", "chromium-browser", "google-chrome")

# How bad a finding may not be.
SERIOUS = {"serious", "critical"}


def program() -> str:
    """
    The browser of the machine.

    Raises:
        AssertionError: There is none; a skipped test would go unseen.
    """
    found = os.environ.get("SPRT_TEST_BROWSER") or next(filter(None, map(shutil.which, NAMES)), None)
    assert found, "The tests of the pages need Chromium: apt-get install chromium, or SPRT_TEST_BROWSER=its program"
    return found


def launched(playwright: Playwright) -> Browser:
    """The browser, started."""
    return playwright.chromium.launch(executable_path=program(), args=FLAGS)


@dataclass
class Watched:
    """
    A page with what should not have happened on it.

    Attributes:
        unexpected: Words on the console, errors of scripts, requests to other hosts.
        expected: Parts of console words that a test brings about on purpose.
    """

    page: Page
    url: str
    expected: tuple[str, ...] = ()
    unexpected: list[str] = field(default_factory=list)

    def go(self, address: str) -> None:
        """Open an address of the service."""
        self.page.goto(self.url + address)

    def sign_in(self, secret: str) -> None:
        """Fill in the form that is shown."""
        self.page.get_by_label("Access key").fill(secret)
        self.page.get_by_role("button", name="Sign in").click()

    def findings(self) -> list[str]:
        """What axe-core finds serious about the page as it is shown."""
        found = Axe().run(self.page).response["violations"]
        return [
            f"{each['id']}: {each['help']}: {each['nodes'][0]['html'][:200]}"
            for each in found
            if each["impact"] in SERIOUS
        ]

    def width_beyond(self) -> int:
        """By how many pixels the page is wider than the screen."""
        return int(self.page.evaluate("document.documentElement.scrollWidth - document.documentElement.clientWidth"))


@contextmanager
def watched(browser: Browser, url: str, **options: object) -> Iterator[Watched]:
    """A page of its own in a context of its own; at the end nothing unexpected may have happened."""
    context = browser.new_context(base_url=url, **options)  # type: ignore[arg-type]
    seen = Watched(context.new_page(), url)
    host = urlsplit(url).netloc

    def asked(request: Request) -> None:
        where = urlsplit(request.url)
        if where.scheme not in {"data", "blob"} and where.netloc != host:
            seen.unexpected.append(f"asked {request.url}")

    context.on("request", asked)
    seen.page.on("pageerror", lambda error: seen.unexpected.append(f"failed: {error}"))
    seen.page.on(
        "console",
        lambda said: seen.unexpected.append(said.text) if said.type in {"error", "warning"} else None,
    )
    try:
        yield seen
    finally:
        context.close()
    left = [words for words in seen.unexpected if not any(part in words for part in seen.expected)]
    assert left == []


def saved(page: Page, folder: Path, name: str) -> None:
    """A screenshot, for whoever wants to look."""
    page.screenshot(path=folder / f"{name}.png", full_page=True)
