"""Every route for everybody: who asks, by which name, from whose page, and with which token."""

from __future__ import annotations

from itertools import product
from pathlib import Path
from typing import Any

import pytest
from flask.testing import FlaskClient

from daq.storage.lab_book import select
from daq.storage.people import Person
from dashboard.access import Door
from dashboard.asking import leave
from dashboard.operate import ACTS
from tests.dashboard import feeds
from tests.dashboard.doors import ASKED, HOST, PEOPLE, RUN, ask, client_of, lab_with_people, log_in, own
from tests.dashboard.test_access import ask_news

HOLD = {"run": RUN, "what": "hold", "about": ""}
WHO = {"anonymous": None, "watcher": "Day watch", "operator": "Night watch"}
READ = ("/", f"/runs/{RUN}", "/_dash-layout", "/_dash-dependencies", "/assets/page.js", "/metrics")
OPEN = ("/login", "/healthz", "/assets/page.css", "/assets/10-theme.js", "/assets/mark.svg")
WRONG = {
    "right": {},
    "wrong Host": {"Host": "evil.example"},
    "wrong Origin": {"Origin": "http://evil.example"},
    "wrong token": {"X-CSRFToken": "0" * 64},
}


@pytest.fixture(scope="module")
def lab(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = lab_with_people(tmp_path_factory.mktemp("lab"))
    (made / "metrics.prom").write_text("# EOF\n")
    return made


@pytest.fixture(scope="module")
def clients(lab: Path) -> dict[str, FlaskClient]:
    made = {who: client_of(lab) for who in WHO}
    for who, name in WHO.items():
        if name:
            log_in(made[who], name)
    return made


def wanted(kind: str, who: str, how: str) -> int:
    """Return the status that a question of a kind deserves."""
    if how in ("wrong Host", "wrong Origin"):
        return 421 if how == "wrong Host" else 403
    if kind == "open":
        return 200
    if who == "anonymous":
        return {"page": 302}.get(kind, 401)
    if kind in ("page", "read"):
        return 200
    if how == "wrong token" or (kind == "ask" and who == "watcher"):
        return 403
    return 200


@pytest.mark.parametrize(("route", "who", "how"), list(product((*READ, *OPEN), WHO, WRONG)))
def test_what_is_read_is_given_to_those_who_may(
    clients: dict[str, FlaskClient], route: str, who: str, how: str
) -> None:
    kind = "open" if route in OPEN else "page" if route in ("/", f"/runs/{RUN}") else "read"

    answer = clients[who].get(route, headers={"Host": HOST} | WRONG[how], base_url=f"http://{HOST}")

    assert answer.status_code == wanted(kind, who, how)


@pytest.mark.parametrize(("kind", "who", "how"), list(product(("news", "ask"), WHO, WRONG)))
def test_questions_are_answered_to_those_who_may(
    lab: Path, clients: dict[str, FlaskClient], kind: str, who: str, how: str
) -> None:
    client = clients[who]
    headers = own(client) | WRONG[how]
    before = len(select(lab, "requests"))

    if kind == "ask":
        answer = ask(client, HOLD, headers)
    else:
        question = ask_news(clients["watcher"])
        answer = client.post(
            "/_dash-update-component", json=question, headers=headers, base_url=f"http://{HOST}"
        )

    assert answer.status_code == wanted(kind, who, how)
    assert len(select(lab, "requests")) - before == (kind == "ask" and answer.status_code == 200)


def test_another_sessions_token_is_refused(clients: dict[str, FlaskClient]) -> None:
    answer = ask(clients["operator"], HOLD, own(clients["watcher"]))

    assert answer.status_code == 403


def test_a_request_bears_the_name_of_who_logged_in(lab: Path, clients: dict[str, FlaskClient]) -> None:
    answer = ask(clients["operator"], HOLD | {"who": "somebody else"}, own(clients["operator"]))

    assert "Hold: asked at" in answer.get_json()["response"]["asked-says"]["children"]
    row = select(lab, "requests")[-1]
    assert (row["run"], row["what"], row["who"]) == (RUN, "hold", "Night watch")


@pytest.mark.parametrize(
    "asked",
    [
        None,
        [],
        {},
        HOLD | {"what": "fire"},
        HOLD | {"what": ["hold"]},
        HOLD | {"run": "../../etc"},
        HOLD | {"run": ""},
        HOLD | {"what": "book"},
        HOLD | {"run": "20261201T201500Z-other"},
        HOLD | {"about": "x" * 501},
    ],
)
def test_what_is_not_understood_is_not_asked(lab: Path, clients: dict[str, FlaskClient], asked: Any) -> None:
    before = len(select(lab, "requests"))

    answer = ask(clients["operator"], asked, own(clients["operator"]))

    assert "nothing was asked" in answer.get_json()["response"]["asked-says"]["children"]
    assert len(select(lab, "requests")) == before


def test_nothing_is_asked_of_a_run_that_has_ended(tmp_path: Path) -> None:
    feeds.put(tmp_path, feeds.ended())

    said = leave(tmp_path, HOLD, Person("Night watch", "operator"))

    assert said == "The run has ended meanwhile; nothing was asked."
    assert select(tmp_path, "requests") == []


def test_the_action_itself_asks_for_the_role_again(lab: Path) -> None:
    with pytest.raises(PermissionError):
        leave(lab, HOLD, Person("Day watch", "watcher"))


def test_a_question_without_a_role_keeps_the_page_from_starting() -> None:
    door = Door(
        person=lambda token: None,
        is_closed=lambda: True,
        is_run=lambda name: False,
        roles={"a.children": "watcher", "c.children": "anybody"},
    )

    with pytest.raises(ValueError, match=r"no role is declared for b\.children, c\.children"):
        door.check(["a.children", "b.children", "c.children"])


def test_every_kind_of_request_is_for_operators(clients: dict[str, FlaskClient]) -> None:
    for what in ACTS:
        assert ask(clients["watcher"], HOLD | {"what": what}, own(clients["watcher"])).status_code == 403
    assert ASKED == "asked-says.children"
    assert set(PEOPLE.values()) == {"watcher", "operator"}
