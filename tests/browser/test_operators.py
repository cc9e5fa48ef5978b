"""Operators in a real Chromium: log in, be asked back, ask, see that it was heard, log out."""

from __future__ import annotations

import json
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest
from playwright.sync_api import Browser, Page, expect

from daq.storage.feed import DESK, write_feed
from daq.storage.lab_book import select, update
from daq.storage.people import add_person
from daq.storage.sessions import end_sessions
from tests.browser.conftest import Lab, Watch, context_of
from tests.browser.test_access_for_all import is_wide, violations
from tests.dashboard.doors import PASSWORD, PEOPLE
from tests.dashboard.feeds import WARNING, ended, feed
from tests.dashboard.test_desk import DESK_TOLD

pytestmark = pytest.mark.browser


@pytest.fixture(scope="module")
def closed(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Lab]:
    made = Lab(tmp_path_factory.mktemp("lantern-lab"))
    for name, role in PEOPLE.items():
        add_person(made.folder, name, role, PASSWORD)
    made.serve()
    yield made
    made.stop()


@pytest.fixture
def lab(closed: Lab) -> Lab:
    closed.clear()
    return closed


@pytest.fixture
def enter(chromium: Browser, lab: Lab, watch: Watch) -> Iterator[Any]:
    contexts = []

    def enter_(name: str, **own: Any) -> Page:
        contexts.append(context_of(chromium, **own))
        page = contexts[-1].new_page()
        watch.on(page)
        page.goto(lab.address)
        page.get_by_label("Name").fill(name)
        page.get_by_label("Password").fill(PASSWORD)
        page.get_by_role("button", name="Log in").click()
        expect(page.locator(".figure")).to_be_visible(timeout=15000)
        return page

    yield enter_
    for context in contexts:
        context.close()


def asked(folder: Path) -> list[tuple[str, str, str]]:
    return [(row["what"], row["who"], row["about"]) for row in select(folder, "requests")]


def test_an_operator_is_told_what_will_happen_before_anything_is_asked(lab: Lab, enter: Any) -> None:
    lab.put(feed())
    page = enter("Night watch")
    before = len(asked(lab.folder))

    page.get_by_role("button", name="Hold", exact=True).click()
    expect(page.get_by_role("dialog")).to_contain_text("finishes the stand under way")
    expect(page.get_by_role("dialog")).to_contain_text("no safety function")
    page.get_by_role("button", name="Do nothing").click()
    expect(page.get_by_role("dialog")).to_be_hidden()
    unasked = asked(lab.folder)[before:]
    page.get_by_role("button", name="Hold", exact=True).click()
    page.get_by_role("dialog").get_by_role("button", name="Hold").click()

    expect(page.locator("#asked-says")).to_contain_text("Hold: asked at")
    expect(page.locator("#operate")).to_contain_text("not heard yet")
    assert unasked == []
    assert asked(lab.folder)[before:] == [("hold", "Night watch", "")]
    update(lab.folder, "requests", select(lab.folder, "requests")[-1]["id"], outcome="heard at 03:12")
    expect(page.locator("#operate")).to_contain_text("heard at 03:12")


def test_a_warning_is_taken_note_of_by_keyboard(lab: Lab, enter: Any) -> None:
    lab.put(feed(warnings=[WARNING]))
    page = enter("Night watch")
    before = len(asked(lab.folder))

    page.get_by_role("button", name="I have seen this").focus()
    page.keyboard.press("Enter")
    page.get_by_role("dialog").get_by_role("button", name="I have seen this").focus()
    page.keyboard.press("Enter")

    expect(page.locator("#asked-says")).to_contain_text("I have seen this: asked at")
    assert asked(lab.folder)[before:] == [("acknowledge", "Night watch", "level")]


def test_a_run_that_holds_offers_to_go_on(lab: Lab, enter: Any) -> None:
    lab.put(feed(state="holding"))

    page = enter("Night watch")

    expect(page.locator("#operate button")).to_have_text(["Resume", "End and park", "Mute messages"])


def test_a_watcher_and_a_finished_run_have_no_buttons(lab: Lab, enter: Any) -> None:
    lab.put(feed(warnings=[WARNING]))
    watcher = enter("Day watch")
    expect(watcher.locator("#who")).to_contain_text("You may look.")
    buttons = watcher.locator(".act").count()

    lab.put(ended())
    operator = enter("Night watch")

    assert buttons == 0
    expect(operator.locator("#who")).to_contain_text("nothing can be asked of it any more")
    expect(operator.locator(".act")).to_have_count(0)


def test_logging_out_leads_to_the_form(lab: Lab, enter: Any) -> None:
    lab.put(feed())
    page = enter("Day watch")

    page.get_by_role("button", name="Log out").click()

    expect(page.get_by_role("heading", name="Who is there?")).to_be_visible()


def test_a_session_that_was_ended_leads_to_the_form(lab: Lab, enter: Any, watch: Watch) -> None:
    lab.put(feed())
    page = enter("Day watch")

    watch.forgiven = ("401",)
    end_sessions(lab.folder)

    expect(page.get_by_role("heading", name="Who is there?")).to_be_visible(timeout=10000)


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_axe_finds_nothing_in_the_form_the_buttons_and_the_question(
    lab: Lab, enter: Any, theme: Any, chromium: Browser
) -> None:
    lab.put(feed(warnings=[WARNING], state="holding"))
    page = enter("Night watch", color_scheme=theme, viewport={"width": 390, "height": 844})
    expect(page.locator("#strip .scatterlayer path").first).to_be_attached(timeout=15000)

    found = [violations(page), is_wide(page)]
    page.get_by_role("button", name="Resume").click()
    found += [violations(page), is_wide(page)]
    page.keyboard.press("Escape")
    page.get_by_role("button", name="Log out").click()
    expect(page.get_by_role("heading", name="Who is there?")).to_be_visible()
    found += [violations(page), is_wide(page)]

    assert found == [[], False] * 3


def test_a_run_is_booked_once_more_and_a_booking_cancelled(lab: Lab, enter: Any) -> None:
    lab.put(feed())
    write_feed(lab.folder, DESK_TOLD | {"written_utc": datetime.now(UTC).isoformat()}, DESK)
    page = enter("Night watch")
    before = len(asked(lab.folder))

    page.get_by_text("Book once more").click()
    page.get_by_label("Day").fill("2036-12-03")
    page.get_by_label("Start, by the bench's clock").fill("19:00")
    page.get_by_role("button", name="Book", exact=True).click()
    expect(page.get_by_role("dialog")).to_contain_text("if it is armed then")
    found = violations(page)
    page.get_by_role("dialog").get_by_role("button", name="Book").click()
    expect(page.locator("#desk")).to_contain_text("Book: asked by Night watch")
    page.get_by_role("button", name="Cancel").click()
    page.get_by_role("dialog").get_by_role("button", name="Cancel").click()
    expect(page.locator("#desk")).to_contain_text("Cancel: asked by Night watch")

    booked, cancelled = asked(lab.folder)[before:]
    wanted = {"file": "/lab/lantern.toml", "day": "2036-12-03", "at": "19:00", "end_by": ""}
    assert json.loads(booked[2]) == wanted
    assert cancelled == ("cancel", "Night watch", "3")
    assert found == []
