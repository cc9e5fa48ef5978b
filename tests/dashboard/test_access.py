"""The gate before every route, with Flask's own test client."""

from __future__ import annotations

import pytest
from flask.testing import FlaskClient

from dashboard.access import LONGEST_BODY
from dashboard.app import build
from dashboard.senders import is_loopback
from tests.dashboard import feeds

HOST = "127.0.0.1:8050"
SAME = {"Host": HOST, "Origin": f"http://{HOST}", "Sec-Fetch-Site": "same-origin"}
READ_ROUTES = (
    "/",
    "/runs/20261201T201500Z-lantern-3",
    "/_dash-layout",
    "/_dash-dependencies",
    "/assets/page.css",
    "/assets/page.js",
)


@pytest.fixture(scope="module")
def client(tmp_path_factory: pytest.TempPathFactory) -> FlaskClient:
    lab = tmp_path_factory.mktemp("lab")
    feeds.put(lab, feeds.feed())
    made: FlaskClient = build(lab).server.test_client()
    return made


def ask_news(client: FlaskClient, **more: object) -> dict[str, object]:
    """Return the body with which the page's own script asks for news."""
    dependency = client.get("/_dash-dependencies", headers=SAME).get_json()[0]
    outputs = dependency["output"].strip(".").split("...")
    return {
        "output": dependency["output"],
        "outputs": [dict(zip(("id", "property"), output.split("."), strict=True)) for output in outputs],
        "inputs": [
            {"id": "tick", "property": "n_intervals", "value": 1},
            {"id": "chosen", "property": "data", "value": None},
        ],
        "state": [
            {"id": "address", "property": "pathname", "value": "/"},
            {"id": "seen", "property": "data", "value": None},
        ],
        "changedPropIds": ["tick.n_intervals"],
        **more,
    }


@pytest.mark.parametrize("route", READ_ROUTES)
@pytest.mark.parametrize("host", [HOST, "localhost:9000", "[::1]:8050"])
def test_every_route_of_the_page_answers_to_the_names_of_this_computer(
    client: FlaskClient, route: str, host: str
) -> None:
    answer = client.get(route, headers={"Host": host})

    assert answer.status_code == 200


@pytest.mark.parametrize("route", READ_ROUTES)
@pytest.mark.parametrize(
    "host", ["evil.example", "127.0.0.1.evil.example:8050", "192.168.1.7:8050", "10.0.0.1"]
)
def test_another_name_for_this_computer_is_misdirected(client: FlaskClient, route: str, host: str) -> None:
    answer = client.get(route, headers={"Host": host})

    assert answer.status_code == 421


@pytest.mark.parametrize("route", READ_ROUTES)
@pytest.mark.parametrize(
    "headers",
    [
        {"Origin": "http://evil.example"},
        {"Origin": "http://127.0.0.1:9999"},
        {"Origin": "null"},
        {"Sec-Fetch-Site": "cross-site", "Sec-Fetch-Mode": "no-cors"},
        {"Sec-Fetch-Site": "same-site", "Sec-Fetch-Mode": "cors"},
    ],
)
def test_another_site_reads_nothing(client: FlaskClient, route: str, headers: dict[str, str]) -> None:
    answer = client.get(route, headers={"Host": HOST, **headers})

    assert answer.status_code == 403


def test_a_link_in_a_mail_opens_the_page(client: FlaskClient) -> None:
    answer = client.get(
        "/", headers={"Host": HOST, "Sec-Fetch-Site": "cross-site", "Sec-Fetch-Mode": "navigate"}
    )

    assert answer.status_code == 200


@pytest.mark.parametrize(
    "route",
    [
        "/favicon.ico",
        "/admin",
        "/runs/",
        "/runs/nothing-here",
        "/runs/..",
        "/runs/%2e%2e",
        "/runs/20261201T201500Z-lantern-3/live.json",
        "/_reload-hash",
        "/_dash-update-component/more",
    ],
)
def test_other_routes_and_unknown_runs_do_not_exist(client: FlaskClient, route: str) -> None:
    answer = client.get(route, headers={"Host": HOST})

    assert answer.status_code == 404


@pytest.mark.parametrize("route", ["/assets/../app.py", "/assets/%2e%2e/app.py", "/assets/..%2fapp.py"])
def test_no_file_outside_the_assets_is_given(client: FlaskClient, route: str) -> None:
    answer = client.get(route, headers={"Host": HOST})

    assert answer.status_code == 404


@pytest.mark.parametrize("method", ["POST", "PUT", "DELETE", "PATCH", "OPTIONS", "TRACE"])
@pytest.mark.parametrize("route", READ_ROUTES)
def test_the_page_is_only_read(client: FlaskClient, route: str, method: str) -> None:
    answer = client.open(route, method=method, headers=SAME)

    assert answer.status_code == 405


@pytest.mark.parametrize("method", ["GET", "PUT", "OPTIONS"])
def test_news_is_asked_for_with_post(client: FlaskClient, method: str) -> None:
    answer = client.open("/_dash-update-component", method=method, headers=SAME)

    assert answer.status_code == 405


def test_the_page_itself_gets_its_news(client: FlaskClient) -> None:
    answer = client.post("/_dash-update-component", json=ask_news(client), headers=SAME)

    assert answer.status_code == 200
    assert "verdict" in answer.get_json()["response"]


def test_news_that_was_seen_is_not_sent_again(client: FlaskClient) -> None:
    first = client.post("/_dash-update-component", json=ask_news(client), headers=SAME)
    question = ask_news(client)
    question["state"][1]["value"] = first.get_json()["response"]["seen"]["data"]  # type: ignore[index]

    second = client.post("/_dash-update-component", json=question, headers=SAME)

    assert (second.status_code, second.data) == (204, b"")


@pytest.mark.parametrize(
    ("headers", "status"),
    [
        ({"Host": HOST}, 403),
        ({"Host": HOST, "Origin": "http://evil.example"}, 403),
        ({"Host": "evil.example", "Origin": "http://evil.example"}, 421),
        ({"Host": HOST, "Sec-Fetch-Site": "cross-site", "Sec-Fetch-Mode": "navigate"}, 403),
    ],
)
def test_news_is_given_to_the_page_alone(client: FlaskClient, headers: dict[str, str], status: int) -> None:
    answer = client.post("/_dash-update-component", json=ask_news(client), headers=headers)

    assert answer.status_code == status


def test_a_form_cannot_ask_for_news(client: FlaskClient) -> None:
    answer = client.post("/_dash-update-component", data="{}", content_type="text/plain", headers=SAME)

    assert answer.status_code == 415


def test_an_oversized_question_is_refused(client: FlaskClient) -> None:
    answer = client.post(
        "/_dash-update-component",
        data=b" " * (LONGEST_BODY + 1),
        content_type="application/json",
        headers=SAME,
    )

    assert answer.status_code == 413


@pytest.mark.parametrize(
    "body", [b"{", b"[]", b"{}", b"null", b'{"output":"x.children","changedPropIds":[]}']
)
def test_a_question_that_is_none_is_refused(client: FlaskClient, body: bytes) -> None:
    answer = client.post("/_dash-update-component", data=body, content_type="application/json", headers=SAME)

    assert answer.status_code == 400


def test_a_question_that_fails_gets_a_sentence(client: FlaskClient) -> None:
    question = ask_news(client, inputs=[])

    answer = client.post("/_dash-update-component", json=question, headers=SAME)

    assert answer.status_code == 500
    assert answer.text == "The page could not answer this request. The run goes on without it."


@pytest.mark.parametrize("route", [*READ_ROUTES, "/nowhere"])
def test_every_answer_carries_the_policy(client: FlaskClient, route: str) -> None:
    answer = client.get(route, headers={"Host": HOST})

    policy = dict(part.strip().split(" ", 1) for part in answer.headers["Content-Security-Policy"].split(";"))
    assert policy["default-src"] == "'none'"
    assert policy["connect-src"] == "'self'"
    assert policy["frame-ancestors"] == "'none'"
    assert "unsafe" not in policy["script-src"]
    assert answer.headers["X-Content-Type-Options"] == "nosniff"
    assert answer.headers["Referrer-Policy"] == "same-origin"


def test_nothing_but_assets_is_kept_by_the_browser(client: FlaskClient) -> None:
    layout = client.get("/_dash-layout", headers={"Host": HOST})
    style = client.get("/assets/page.css", headers={"Host": HOST})

    assert layout.headers["Cache-Control"] == "no-store"
    assert style.headers.get("Cache-Control") != "no-store"


@pytest.mark.parametrize(
    ("host", "loopback"),
    [
        ("127.0.0.1", True),
        ("localhost", True),
        ("::1", True),
        ("127.9.9.9", True),
        ("0.0.0.0", False),
        ("::", False),
        ("192.168.1.7", False),
        ("bench.example", False),
        ("", False),
    ],
)
def test_loopback_addresses_are_told_from_others(host: str, loopback: bool) -> None:
    assert is_loopback(host) is loopback
