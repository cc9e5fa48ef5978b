"""Anybody can read the page: axe finds nothing, and nothing has to be scrolled sideways."""

from __future__ import annotations

from typing import Any

import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Page, expect

from tests.browser.conftest import Lab, Open
from tests.dashboard.feeds import WARNING, ended, feed

pytestmark = pytest.mark.browser
RULES = ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]
STATES: dict[str, dict[str, Any] | None] = {
    "fine": feed(),
    "look": feed(slits=5, warnings=[WARNING], kind="rehearsal", clock="virtual", truth_kappa=0.0),
    "ended": ended(),
    "empty": None,
}


def violations(page: Page) -> list[str]:
    found = Axe().run(page, options={"runOnly": RULES, "resultTypes": ["violations"]})
    return [
        f"{violation['id']}: {node['target']}"
        for violation in found.response["violations"]
        for node in violation["nodes"]
    ]


def is_wide(page: Page) -> bool:
    return bool(page.evaluate("() => document.documentElement.scrollWidth > innerWidth"))


@pytest.mark.parametrize("state", STATES)
def test_axe_finds_nothing_in_either_theme_at_either_width(lab: Lab, open_page: Open, state: str) -> None:
    content = STATES[state]
    if content is not None:
        lab.put(content)
    page = open_page(color_scheme="light", viewport={"width": 1440, "height": 900})
    if content is not None:
        expect(page.locator("#strip .scatterlayer path").first).to_be_attached(timeout=15000)
    found = {}

    for width in (1440, 390):
        page.set_viewport_size({"width": width, "height": 844})
        for theme in ("light", "dark"):
            page.emulate_media(color_scheme=theme)  # type: ignore[arg-type]
            expect(page.locator("html")).to_have_attribute("data-theme", theme)
            found[width, theme] = (violations(page), is_wide(page))

    assert found == dict.fromkeys(found, ([], False))


def test_axe_finds_nothing_while_contact_is_lost(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page(viewport={"width": 390, "height": 844})
    expect(page.locator("#strip .scatterlayer path").first).to_be_attached(timeout=15000)

    page.evaluate("() => document.body.classList.add('lost')")

    assert violations(page) == []
