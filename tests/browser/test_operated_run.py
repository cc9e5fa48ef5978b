"""An operator holds, resumes and ends a run from the page, and the run does as it is asked."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from playwright.sync_api import Browser, Page, expect

from daq.storage.lab_book import select
from daq.storage.log import read_log
from daq.storage.people import add_person
from tests.browser.conftest import Lab, context_of
from tests.dashboard.doors import PASSWORD

pytestmark = pytest.mark.browser
SLOW_MS = 60_000


@pytest.fixture
def rehearsal(tmp_path: Path) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """Begin a whole night with its page, which asks for a name."""
    add_person(tmp_path, "Night watch", "operator", PASSWORD)
    words = [sys.executable, "-m", "daq", "rehearse", "--page", "--link", "direct", "--into", str(tmp_path)]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    assert process.stdout is not None
    yield process, process.stdout.readline().removeprefix("page: ").strip()
    process.terminate()
    process.communicate(timeout=60)


def log_in(page: Page, address: str) -> None:
    """Open a page as the night watch."""
    page.goto(address)
    page.get_by_label("Name").fill("Night watch")
    page.get_by_label("Password").fill(PASSWORD)
    page.get_by_role("button", name="Log in").click()


def ask(page: Page, label: str) -> None:
    """Press a button of the page, and the same in the question that it asks back."""
    page.locator("#operate").get_by_role("button", name=label, exact=True).click(timeout=SLOW_MS)
    page.get_by_role("dialog").get_by_role("button", name=label).click()


def test_a_run_is_held_gone_on_with_and_ended_from_the_page(
    rehearsal: tuple[subprocess.Popen[str], str], chromium: Browser, tmp_path: Path
) -> None:
    process, address = rehearsal
    context = context_of(chromium)
    page = context.new_page()
    log_in(page, address)
    verdict = page.get_by_role("status").first

    ask(page, "Hold")
    expect(verdict).to_have_text("Holding. As somebody asked.", timeout=SLOW_MS)
    ask(page, "Resume")
    expect(verdict).not_to_contain_text("Holding", timeout=SLOW_MS)
    ask(page, "End and park")

    assert process.wait(timeout=60) == 1
    lab = Lab(tmp_path)  # the run's own page has gone with it
    lab.serve()
    page.goto(lab.address)  # still logged in: sessions live in the lab
    expect(verdict).to_contain_text("Ended early.", timeout=SLOW_MS)
    context.close()
    lab.stop()
    (folder,) = (tmp_path / "runs").iterdir()
    asked = [(row["what"], row["who"]) for row in select(tmp_path, "requests")]
    assert asked == [("hold", "Night watch"), ("resume", "Night watch"), ("park", "Night watch")]
    told = [entry["event"] for entry in read_log(folder)]
    assert [event for event in told if event.endswith("asked")] == [
        "hold asked",
        "resume asked",
        "park asked",
    ]
