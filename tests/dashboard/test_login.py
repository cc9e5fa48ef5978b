"""Logging in: what a stranger gets, what a password opens, and how often it may be wrong."""

from __future__ import annotations

from pathlib import Path

import pytest
from flask.testing import FlaskClient

from daq.storage.people import remove_person
from daq.storage.sessions import end_sessions
from dashboard.login import SESSION, TRIES_OF_A_NAME, TRIES_OF_AN_ADDRESS, WITHIN_S, Limiter
from tests.dashboard.doors import HOST, SAME, client_of, cookie, csrf_matches, lab_with_people, log_in

BASE = f"http://{HOST}"


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    return lab_with_people(tmp_path)


@pytest.fixture
def client(lab: Path) -> FlaskClient:
    return client_of(lab)


def test_a_stranger_is_sent_to_the_form_and_back_to_where_they_wanted(client: FlaskClient) -> None:
    wanted = "/runs/20261201T201500Z-lantern-3"

    turned = client.get(wanted, headers={"Host": HOST})
    entered = log_in(client, "Day watch", to=wanted)

    assert (turned.status_code, turned.location) == (302, f"/login?to={wanted}")
    assert (entered.status_code, entered.location) == (303, wanted)
    assert client.get(wanted, base_url=BASE).status_code == 200


@pytest.mark.parametrize("to", ["https://evil.example/", "//evil.example", "/logout", "/runs/../x"])
def test_logging_in_leads_nowhere_else(client: FlaskClient, to: str) -> None:
    assert log_in(client, "Day watch", to=to).location == "/"


def test_the_session_cookie_is_out_of_reach_of_scripts_and_other_sites(client: FlaskClient) -> None:
    entered = log_in(client, "Day watch")

    session, csrf = entered.headers.getlist("Set-Cookie")
    assert "HttpOnly" in session
    assert "SameSite=Strict" in session
    assert "HttpOnly" not in csrf
    assert csrf_matches(client, SESSION)


def test_behind_tls_the_cookies_are_never_sent_in_the_clear(lab: Path) -> None:
    client = client_of(lab, names={"bench.example"}, closed=True)
    headers = {"Host": "bench.example", "Origin": "https://bench.example", "Sec-Fetch-Site": "same-origin"}
    form = {"name": "Day watch", "password": "four lamps in a row"}

    entered = client.post("/login", data=form, headers=headers, base_url="https://bench.example")

    assert entered.status_code == 303
    assert all("Secure" in cookie for cookie in entered.headers.getlist("Set-Cookie"))


@pytest.mark.parametrize("name", ["Day watch", "Nobody"])
def test_a_wrong_password_and_an_unknown_name_are_answered_alike(client: FlaskClient, name: str) -> None:
    answer = log_in(client, name, "four lamps in a box")

    assert answer.status_code == 401
    assert "do not belong together" in answer.text
    assert not cookie(client, SESSION)


def test_a_form_from_another_site_logs_nobody_in(client: FlaskClient) -> None:
    form = {"name": "Day watch", "password": "four lamps in a row"}

    other = client.post("/login", data=form, headers={"Host": HOST, "Origin": "http://evil.example"})
    unsaid = client.post("/login", data=form, headers={"Host": HOST})

    assert (other.status_code, unsaid.status_code) == (403, 403)


def test_guessing_is_stopped_before_a_password_is_looked_at(client: FlaskClient) -> None:
    codes = [log_in(client, "Day watch", f"guess number {n} of many").status_code for n in range(7)]

    assert codes == [401] * TRIES_OF_A_NAME + [429, 429]
    right = log_in(client, "Day watch")
    assert right.status_code == 429
    assert "Try again in 15 min" in right.text


def test_a_log_in_that_succeeds_is_not_counted(client: FlaskClient) -> None:
    codes = {log_in(client, "Day watch").status_code for _ in range(TRIES_OF_A_NAME + 2)}

    assert codes == {303}


def test_names_at_one_address_are_counted_together_and_forgotten_after_a_while() -> None:
    now = [0.0]
    limiter = Limiter(lambda: now[0])

    for number in range(TRIES_OF_AN_ADDRESS):
        limiter.failed(f"name {number}", "10.0.0.1")

    assert limiter.wait_s("another", "10.0.0.1") == WITHIN_S
    assert limiter.wait_s("another", "10.0.0.2") == 0
    now[0] = WITHIN_S
    assert limiter.wait_s("another", "10.0.0.1") == 0


def test_no_more_than_two_passwords_are_checked_at_once(client: FlaskClient) -> None:
    limiter = Limiter()

    held = [limiter.checking.acquire(blocking=False) for _ in range(3)]

    assert held == [True, True, False]


def test_logging_out_ends_the_session_for_every_copy_of_the_cookie(client: FlaskClient, lab: Path) -> None:
    log_in(client, "Day watch")
    stolen = client_of(lab)
    stolen.set_cookie(SESSION, cookie(client, SESSION), domain="127.0.0.1")
    before = stolen.get("/", base_url=BASE).status_code

    left = client.post("/logout", headers=SAME, base_url=BASE)

    assert (before, left.status_code) == (200, 303)
    assert stolen.get("/", base_url=BASE).status_code == 302


def test_ended_sessions_and_removed_people_are_out_at_once(client: FlaskClient, lab: Path) -> None:
    log_in(client, "Day watch")
    other = client_of(lab)
    log_in(other, "Night watch")

    end_sessions(lab, "Day watch")
    remove_person(lab, "Night watch")

    assert client.get("/", base_url=BASE).status_code == 302
    assert other.get("/", base_url=BASE).status_code == 302


def test_a_page_reached_from_afar_is_closed_even_while_the_lab_knows_nobody(tmp_path: Path) -> None:
    client = client_of(tmp_path, names=frozenset(), closed=True)

    assert client.get("/", headers={"Host": "192.168.1.7:8050"}).status_code == 302
    assert client.get("/_dash-layout", headers={"Host": "192.168.1.7:8050"}).status_code == 401


@pytest.mark.parametrize(
    ("host", "status"),
    [("bench.example", 302), ("192.168.1.7:8050", 302), ("[fe80::1]", 302), ("evil.example", 421)],
)
def test_from_afar_the_page_answers_to_its_names_and_to_addresses_in_digits(
    lab: Path, host: str, status: int
) -> None:
    client = client_of(lab, names={"bench.example"}, closed=True)

    assert client.get("/", headers={"Host": host}).status_code == status
