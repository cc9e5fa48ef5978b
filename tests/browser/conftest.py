"""A real Chromium, a served lab, and pages that forgive no console error and no foreign request."""

from __future__ import annotations

import os
import shutil
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, Request, sync_playwright
from waitress.server import create_server

from dashboard.app import build
from tests.dashboard import feeds

FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1",
]
TELL_VIOLATIONS = (
    "document.addEventListener('securitypolicyviolation', (event) =>"
    " console.error('policy: ' + event.violatedDirective + ' ' + event.blockedURI))"
)


@dataclass
class Lab:
    """A lab folder and the page that serves it."""

    folder: Path
    port: int = 0
    _server: Any = None

    def put(self, content: dict[str, Any]) -> None:
        feeds.put(self.folder, content)

    def clear(self) -> None:
        shutil.rmtree(self.folder / "runs", ignore_errors=True)

    def serve(self) -> None:
        self._server = create_server(build(self.folder).server, host="127.0.0.1", port=self.port, threads=8)
        self.port = int(self._server.effective_port)
        threading.Thread(target=self._server.run, daemon=True).start()

    def stop(self) -> None:
        self._server.close()
        self._server.task_dispatcher.shutdown()

    @property
    def address(self) -> str:
        return f"http://127.0.0.1:{self.port}/"


@dataclass
class Watch:
    """What pages did that they must not do."""

    address: str
    complaints: list[str] = field(default_factory=list)
    requests: list[str] = field(default_factory=list)
    forgiven: tuple[str, ...] = ()  # parts of complaints that a test asks for

    def on(self, page: Page) -> None:
        page.on("console", lambda message: self._say(message.text) if message.type == "error" else None)
        page.on("pageerror", lambda error: self._say(str(error)))
        page.on("request", self._asked)

    def _say(self, text: str) -> None:
        if not any(part in text for part in self.forgiven):
            self.complaints.append(text)

    def _asked(self, request: Request) -> None:
        self.requests.append(request.url)
        if not request.url.startswith((self.address, "data:", "blob:")):
            self._say(f"asked {request.url}")


Open = Callable[..., Page]


@pytest.fixture(scope="session")
def chromium() -> Iterator[Browser]:
    path = os.environ.get("TERCET_CHROMIUM", "/usr/bin/chromium")
    if not Path(path).exists():
        raise RuntimeError(
            f"no Chromium at {path}: install it (apt-get install chromium) or name another in TERCET_CHROMIUM"
        )
    with (
        sync_playwright() as playwright,
        playwright.chromium.launch(executable_path=path, args=FLAGS) as browser,
    ):
        yield browser


@pytest.fixture(scope="session")
def served(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Lab]:
    made = Lab(tmp_path_factory.mktemp("lantern-lab"))
    made.serve()
    yield made
    made.stop()


@pytest.fixture
def lab(served: Lab) -> Lab:
    served.clear()
    return served


@pytest.fixture
def watch(lab: Lab) -> Iterator[Watch]:
    """Fail a test whose pages complained; a test may clear what it expects."""
    made = Watch(lab.address)
    yield made
    assert made.complaints == []


@pytest.fixture(scope="session")
def usual(chromium: Browser) -> BrowserContext:
    """Return a context whose cache is warm after the first test."""
    return context_of(chromium)


@pytest.fixture
def open_page(chromium: Browser, usual: BrowserContext, lab: Lab, watch: Watch) -> Iterator[Open]:
    opened: list[Page | BrowserContext] = []

    def open_(path: str = "", clock: bool = False, **own: Any) -> Page:
        context = context_of(chromium, **own) if own else usual
        page = context.new_page()
        opened.append(context if own else page)
        watch.on(page)
        if clock:
            page.clock.install()
        page.goto(lab.address + path)
        return page

    yield open_
    for each in opened:
        each.close()


def context_of(chromium: Browser, **own: Any) -> BrowserContext:
    context = chromium.new_context(**{"viewport": {"width": 1440, "height": 900}, **own})
    context.add_init_script(TELL_VIOLATIONS)
    return context
