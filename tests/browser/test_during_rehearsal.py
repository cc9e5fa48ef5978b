"""The page during a real rehearsal: its own process, its own feed, curves that move."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from playwright.sync_api import BrowserContext, expect

from daq.cli import main
from tests.browser.conftest import Watch

pytestmark = pytest.mark.browser


@pytest.fixture
def rehearsal(tmp_path: Path) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """Begin a whole night with its page, and end it however far it is."""
    words = [sys.executable, "-m", "daq", "rehearse", "--page", "--link", "tcp", "--into", str(tmp_path)]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    assert process.stdout is not None
    address = process.stdout.readline().removeprefix("page: ").strip()
    yield process, address
    process.terminate()
    process.communicate(timeout=60)


def test_curves_move_while_a_night_is_rehearsed_and_nothing_leaves_the_machine(
    rehearsal: tuple[subprocess.Popen[str], str], usual: BrowserContext, tmp_path: Path
) -> None:
    process, address = rehearsal
    watch = Watch(address)
    page = usual.new_page()
    watch.on(page)
    page.goto(address)
    line = page.locator("#pattern .scatterlayer path.js-line").first
    expect(line).to_be_attached(timeout=60_000)
    before = line.get_attribute("d")

    expect(line).not_to_have_attribute("d", before or "", timeout=30_000)

    page.close()
    assert watch.requests
    assert watch.complaints == []
    assert process.poll() is None
    assert main(["end", str(tmp_path)]) == 0
    assert process.wait(timeout=60) == 1
