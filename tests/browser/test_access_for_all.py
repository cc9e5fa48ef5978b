"""Anybody can read the page: axe finds nothing, and nothing has to be scrolled sideways."""

from __future__ import annotations

from typing import Any

import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Page, expect

from tests.browser.conftest import Lab, Open, Watch
from tests.dashboard.feeds import WARNING, feed

pytestmark = pytest.mark.browser
RULES = ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]
HELD = {"cause": "interlock", "why": "The pressure is out of band.", "since_utc": "x", "at_bench": True}
STATES: dict[str, dict[str, Any] | None] = {
    "fine": {},
    "look": {"warnings": [WARNING], "kind": "rehearsal", "clock": "virtual", "truth_kappa": 0.0},
    "stopped": {"state": "holding", "holding": HELD, "warnings": [WARNING | {"level": "wake"}]},
    "lost": {},
    "blinded": {"blinding": "blinded", "kind": "replay"},
    "ended": {"pairs": 19, "state": "ended", "ended": {"reason": "complete", "utc": "2026-12-02T06:08:00Z"}},
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


def lose(page: Page, watch: Watch) -> None:
    """Keep every answer from a page until it says that it lost contact."""
    watch.forgiven = ("ERR_FAILED", "did not respond")
    page.route("**/_dash-update-component*", lambda route: route.abort())
    page.clock.fast_forward(12000)
    page.clock.resume()
    expect(page.locator("#lost")).to_be_visible()


@pytest.mark.parametrize(("state", "slits"), [(state, slits) for state in STATES for slits in (3, 5)][:-1])
def test_axe_finds_nothing_in_either_theme_at_either_width(
    lab: Lab, open_page: Open, watch: Watch, state: str, slits: int
) -> None:
    changed = STATES[state]
    if changed is not None:
        lab.put(feed(slits=slits, **changed))
    page = open_page(clock=state == "lost", color_scheme="light", viewport={"width": 1440, "height": 900})
    expect(page.locator("#verdict > *").first).to_be_attached(timeout=15000)
    if changed is not None:
        expect(page.locator("#strip .scatterlayer path").first).to_be_attached(timeout=15000)
    if state == "lost":
        lose(page, watch)
    found = {}

    for width in (1440, 390):
        page.set_viewport_size({"width": width, "height": 844})
        for theme in ("light", "dark"):
            page.emulate_media(color_scheme=theme)  # type: ignore[arg-type]
            expect(page.locator("html")).to_have_attribute("data-theme", theme)
            found[width, theme] = (violations(page), is_wide(page))

    expect(page.locator("#lost")).to_be_visible(visible=state == "lost")
    assert found == dict.fromkeys(found, ([], False))
