"""The page in a real Chromium."""

from __future__ import annotations

import re
from typing import Any

import pytest
from playwright.sync_api import Page, expect

from tests.browser.conftest import Lab, Open, Watch
from tests.dashboard.feeds import WARNING, ended, feed

pytestmark = pytest.mark.browser
NEWS = "**/_dash-update-component*"


def drawn(page: Page, figure: str) -> Any:
    """Return the traces of a figure as the browser holds them."""
    return page.evaluate("(id) => document.querySelector(`#${id} .js-plotly-plot`).data", figure)


def trace(page: Page, figure: str, name: str) -> Any:
    return next(entry for entry in drawn(page, figure) if entry.get("name") == name)


def wait_for_curves(page: Page) -> None:
    for figure in ("night", "pattern", "strip"):
        expect(page.locator(f"#{figure} .scatterlayer path").first).to_be_attached(timeout=15000)


def test_curves_move_when_the_feed_does(lab: Lab, open_page: Open) -> None:
    lab.put(feed(pairs=12))
    page = open_page()
    wait_for_curves(page)
    before = page.locator("#pattern .scatterlayer path.js-line").first.get_attribute("d")

    lab.put(feed(pairs=13, seed=8))

    expect(page.locator(".unit")).to_contain_text("after 13 of 19 pairs")
    expect(page.locator("#pattern .scatterlayer path.js-line").first).not_to_have_attribute("d", str(before))
    assert len(trace(page, "night", "dots")["x"]) == 13


def test_the_drawn_prediction_is_the_signed_sum_of_the_other_openings(lab: Lab, open_page: Open) -> None:
    content = feed()
    lab.put(content)
    page = open_page()
    wait_for_curves(page)

    page.get_by_role("button", name="AB, taken away").click()

    expect(page.locator("#pattern-caption")).to_contain_text("Line: AB as measured")
    none, a, b, _, c, ac, bc, abc = (row[20] for row in content["rates_hz"])
    wanted = (abc - ac - bc + a + b + c - none) / 1000
    assert trace(page, "pattern", "predicted")["y"][20] == pytest.approx(wanted, rel=6e-4)


def test_openings_are_chosen_by_keyboard(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page()
    wait_for_curves(page)
    plate = page.get_by_role("button", name="B, added", exact=True)

    plate.focus()
    page.keyboard.press("Enter")

    expect(plate).to_have_attribute("aria-pressed", "true")
    expect(page.get_by_role("button", name="ABC, added")).to_have_attribute("aria-pressed", "false")
    expect(page.locator("#pattern-image")).to_have_attribute(
        "aria-label", re.compile("^Pattern of B: highest at")
    )


def test_the_tab_key_reaches_every_control(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page()
    wait_for_curves(page)
    reached = []

    for _ in range(13):
        page.keyboard.press("Tab")
        reached.append(page.evaluate("() => document.activeElement.textContent.trim().slice(0, 20)"))

    plates = ["none", "A", "B", "C", "AB", "AC", "BC", "ABC"]
    assert reached[:3] == ["Skip to the verdict", "Room view", "Light or dark"]
    assert reached[3:] == [*plates, "The same as numbers", ""] or reached[3:12] == [
        *plates,
        "The same as numbers",
    ]


def test_the_numbers_behind_the_pattern_are_a_table(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page()
    wait_for_curves(page)

    page.get_by_text("The same as numbers").click()

    rows = page.get_by_role("row")
    expect(rows).to_have_count(42)
    expect(rows.nth(0)).to_contain_text("ABC, thousand counts per second")


def test_a_page_that_knows_everything_gets_an_empty_answer(lab: Lab, open_page: Open) -> None:
    lab.put(ended())
    page = open_page()
    wait_for_curves(page)

    with page.expect_response(lambda answer: "_dash-update" in answer.url and answer.status == 204) as waited:
        pass

    assert waited.value.status == 204


def test_an_empty_answer_is_contact_too(lab: Lab, open_page: Open) -> None:
    lab.put(ended())
    page = open_page(clock=True)
    wait_for_curves(page)

    for _ in range(5):
        with page.expect_response(NEWS):
            page.clock.run_for(3000)

    expect(page.locator("#lost")).to_be_hidden()


def test_a_hidden_tab_asks_nothing_and_a_shown_one_at_once(lab: Lab, open_page: Open, watch: Watch) -> None:
    lab.put(feed())
    page = open_page(clock=True)
    wait_for_curves(page)
    set_hidden = """(hidden) => {
        Object.defineProperty(document, "hidden", { configurable: true, get: () => hidden });
        document.dispatchEvent(new Event("visibilitychange"));
    }"""

    page.evaluate(set_hidden, True)
    page.clock.run_for(2000)
    watch.requests.clear()
    page.clock.run_for(30000)
    while_hidden = list(watch.requests)
    with page.expect_response(NEWS):
        page.evaluate(set_hidden, False)
        page.clock.run_for(1500)

    assert while_hidden == []
    expect(page.locator("#lost")).to_be_hidden()


def test_lost_contact_is_said_within_twelve_seconds_and_clears_itself(
    lab: Lab, open_page: Open, watch: Watch
) -> None:
    lab.put(feed())
    page = open_page(clock=True)
    wait_for_curves(page)

    lab.stop()
    page.clock.run_for(12000)

    expect(page.get_by_role("alert")).to_contain_text("This page lost contact.")
    expect(page.locator("body")).to_have_class("lost")
    lab.serve()
    page.clock.run_for(5000)
    expect(page.locator("#lost")).to_be_hidden()
    unreached = re.compile("ERR_CONNECTION_REFUSED|ERR_CONNECTION_RESET|server did not respond")
    watch.complaints[:] = [text for text in watch.complaints if not unreached.search(text)]


def test_a_run_that_falls_silent_is_said_to_need_someone(lab: Lab, open_page: Open) -> None:
    lab.put(feed(written_utc="2026-12-01T03:07:12+00:00"))

    page = open_page()

    expect(page.get_by_role("status")).to_have_text(
        "No news from the run since 03:07 UTC. Someone is needed."
    )


def test_a_newer_run_takes_the_page_and_the_older_one_keeps_its_address(lab: Lab, open_page: Open) -> None:
    old, new = ended(), feed(slits=4)
    lab.put(old)
    page = open_page()
    expect(page.get_by_role("heading", level=1)).to_have_text(old["title"])

    lab.put(new)
    expect(page.get_by_role("heading", level=1)).to_have_text(new["title"])
    page.get_by_text("Other runs of this lab").click()
    page.get_by_role("link", name=old["run"]).click()

    expect(page).to_have_url(f"{lab.address}runs/{old['run']}")
    expect(page.get_by_role("status")).to_have_text("Done. All 19 pairs are counted.")
    expect(page.locator(".plate")).to_have_count(8)


def test_the_first_run_of_an_empty_lab_appears_by_itself(lab: Lab, open_page: Open) -> None:
    page = open_page()
    expect(page.get_by_role("status")).to_have_text("No run yet.")

    lab.put(feed())

    expect(page.get_by_role("status")).to_have_text("Running. Nobody is needed.")
    wait_for_curves(page)


@pytest.mark.parametrize("kind", ["rehearsal", "replay"])
def test_what_is_not_a_run_is_marked_in_words_and_shape(lab: Lab, open_page: Open, kind: str) -> None:
    lab.put(feed(kind=kind))

    page = open_page()

    expect(page.locator(f".badge.{kind}")).to_have_text(kind.capitalize())
    style = page.locator("#page").evaluate("(page) => getComputedStyle(page).borderTopStyle")
    assert style == {"rehearsal": "dashed", "replay": "double"}[kind]


def test_times_are_offered_in_the_reader_s_own_zone(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page(timezone_id="Asia/Tokyo")

    time = page.locator("#line time")

    expect(time).to_have_attribute("data-here", " (15:08 here)")


def test_light_and_dark_change_the_curves_too_and_are_kept(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page(color_scheme="dark")
    wait_for_curves(page)
    dark = trace(page, "strip", "mean")["line"]["color"]

    page.get_by_role("button", name="Light or dark").click()

    expect(page.locator("html")).to_have_attribute("data-theme", "light")
    expect(page.locator("#strip .js-line").last).to_have_css("stroke", "rgb(26, 32, 37)")
    page.reload()
    expect(page.locator("html")).to_have_attribute("data-theme", "light")
    assert dark == "#e8e4da"


def test_room_view_keeps_only_what_is_read_from_afar(lab: Lab, open_page: Open) -> None:
    lab.put(feed())
    page = open_page()
    wait_for_curves(page)

    page.get_by_role("button", name="Room view").click()

    expect(page.locator(".figure")).to_be_visible()
    expect(page.locator("#rail")).to_be_hidden()
    fits = page.evaluate("() => document.documentElement.scrollHeight <= innerHeight")
    assert fits


def test_a_blinded_page_holds_no_kappa(lab: Lab, open_page: Open) -> None:
    content = feed(blinding="frozen")
    lab.put(content)
    page = open_page()
    expect(page.locator(".figure")).to_contain_text("Hidden")

    text = page.locator("body").inner_text()

    assert f"{content['kappa']['value'] * 1e4:+.1f}".replace("-", "−") not in text
    expect(page.locator("#night-image")).to_be_hidden()


def test_a_cold_page_weighs_less_than_900_kilobytes(lab: Lab, open_page: Open) -> None:
    lab.put(feed(slits=5, warnings=[WARNING]))
    page = open_page(locale="en-GB")
    wait_for_curves(page)

    weight = page.evaluate("""() => ["navigation", "resource"]
        .flatMap((kind) => performance.getEntriesByType(kind))
        .reduce((sum, entry) => sum + entry.transferSize, 0)""")

    assert 300_000 < weight < 900_000
