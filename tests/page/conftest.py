"""A browser for the page's tests, and pages to open in it; everything is skipped where there is no Chromium."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Browser, Page, sync_playwright

from breakstep.profile.run import Profile
from breakstep.profile.store import read_profile
from breakstep.report.page.data import page_data
from breakstep.report.page.render import page_html
from breakstep.report.page.runs import Runs, runs_of
from tests.page.forecasts import FORECAST

PROFILES = Path(__file__).parents[2] / "profiles" / "single_spark"
NAMES = ("chromium", "chromium-browser", "google-chrome")
#: No sandbox, for containers that run as root; the others keep the browser itself from using the network.
OPTIONS = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
SIZES = {"wide": (1280, 900), "phone": (390, 844)}


@pytest.fixture(scope="package")
def browser() -> Iterator[Browser]:
    """One browser for this folder's tests; not longer, since Playwright keeps an event loop running in this thread."""
    found = next((path for path in map(shutil.which, NAMES) if path), None)
    if found is None:
        pytest.skip("no Chromium on this machine: install one (Debian: apt-get install chromium)")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=found, args=list(OPTIONS))
        yield browser
        browser.close()


def recorded(side: str) -> Profile:
    """The small recorded profile of a mode."""
    return read_profile(PROFILES / side)


@dataclass
class Written:
    """A page on disk with the numbers that it was made from."""

    file: Path
    data: dict[str, Any]


@pytest.fixture(scope="session")
def written(tmp_path_factory: pytest.TempPathFactory) -> Written:
    """A page of a pair with invented forecasts."""
    return write_page(runs_of([recorded("lockstep")], [recorded("tasked")]), tmp_path_factory.mktemp("page"))


def write_page(runs: Runs, folder: Path, forecast: dict[str, Any] | None = FORECAST) -> Written:
    """Make a page as the command does."""
    data = page_data(runs, forecast)
    file = folder / "report.html"
    file.write_text(page_html(data), encoding="utf-8")
    return Written(file, json.loads(json.dumps(data)))


@dataclass
class Opened:
    """A page in the browser, and what it asked for and complained about."""

    page: Page
    data: dict[str, Any]
    requests: list[str] = field(default_factory=list)
    complaints: list[str] = field(default_factory=list)


Open = Callable[..., Opened]


@pytest.fixture
def opened(browser: Browser, written: Written) -> Iterator[Open]:
    """Open a page, the usual one unless told otherwise, in a window of its own."""
    contexts = []

    def open_page(size: str = "wide", theme: str = "light", which: Written = written) -> Opened:
        width, height = SIZES[size]
        context = browser.new_context(
            viewport={"width": width, "height": height}, color_scheme=theme, service_workers="block"
        )
        contexts.append(context)
        found = Opened(context.new_page(), which.data)
        found.page.on("request", lambda request: found.requests.append(request.url))
        found.page.on("console", lambda said: said.type in ("error", "warning") and found.complaints.append(said.text))
        found.page.on("pageerror", lambda error: found.complaints.append(str(error)))
        found.page.goto(which.file.as_uri())
        found.page.wait_for_selector("html[data-ready=yes]", state="attached", timeout=30_000)
        return found

    yield open_page
    for context in contexts:
        context.close()
