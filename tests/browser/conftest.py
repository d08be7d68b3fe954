"""Chromium without a screen, and pages that fail their test on an error, a warning or a request to elsewhere."""

import shutil
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

HERE = Path(__file__).parent
for _folder in (HERE, HERE.parent / "process"):
    if str(_folder) not in sys.path:
        sys.path.insert(0, str(_folder))

import pytest  # noqa: E402
from playwright.sync_api import Browser, Page, sync_playwright  # noqa: E402
from rig import Service  # noqa: E402
from screen import FLAGS, Screen  # noqa: E402
from sea import Sea, sea  # noqa: E402

Opener = Callable[..., Screen]


@pytest.fixture(scope="session")
def chromium() -> Iterator[Browser]:
    """Debian's Chromium. It must be there: deploy/test installs it where it can."""
    path = shutil.which("chromium")
    assert path, "chromium is missing. On Debian: apt-get install chromium"
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=path, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture(scope="session")
def watched(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Service, Sea]]:
    """A service with its sea, hydrophone 17 dead; a test that stops the sea lets it go on again."""
    with sea(tmp_path_factory.mktemp("sea"), dead=(17,)) as running:
        yield running


@pytest.fixture
def opened(chromium: Browser) -> Iterator[Opener]:
    """Opens pages; at the end none of them has reported what it should not."""
    pages: list[tuple[Page, Screen]] = []

    def open_page(url: str, **keys: object) -> Screen:
        screen = Screen(chromium, url, **keys)  # type: ignore[arg-type]
        pages.append((screen.page, screen))
        return screen

    yield open_page
    faults = [fault for _, screen in pages for fault in screen.faults]
    for page, _ in pages:
        page.context.close()
    assert faults == []
