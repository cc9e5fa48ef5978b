"""A lab with people, and clients of its page that are logged in, or not."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from flask.testing import FlaskClient

from daq.storage.people import add_person
from dashboard.app import build
from dashboard.login import CSRF, csrf_of
from tests.dashboard import feeds

HOST = "127.0.0.1:8050"
SAME = {"Host": HOST, "Origin": f"http://{HOST}", "Sec-Fetch-Site": "same-origin"}
RUN = "20261201T201500Z-lantern-3"
PASSWORD = "four lamps in a row"
PEOPLE = {"Day watch": "watcher", "Night watch": "operator"}
ASKED = "asked-says.children"


def lab_with_people(folder: Path) -> Path:
    feeds.put(folder, feeds.feed())
    for name, role in PEOPLE.items():
        add_person(folder, name, role, PASSWORD)
    return folder


def client_of(lab: Path, **how: Any) -> FlaskClient:
    made: FlaskClient = build(lab, **how).server.test_client()
    return made


def log_in(client: FlaskClient, name: str, password: str = PASSWORD, to: str = "/", **more: Any) -> Any:
    form = {"name": name, "password": password}
    return client.post(f"/login?to={to}", data=form, headers=SAME, base_url=f"http://{HOST}", **more)


def cookie(client: FlaskClient, name: str) -> str:
    found = client.get_cookie(name, domain="127.0.0.1")
    return found.value if found else ""


def own(client: FlaskClient) -> dict[str, str]:
    """Return the headers that the page's own script sends from a logged-in browser."""
    return SAME | {"X-CSRFToken": cookie(client, CSRF)}


def ask(client: FlaskClient, asked: Any, headers: dict[str, str]) -> Any:
    """Ask something of a run as the page's script does."""
    question = {
        "output": ASKED,
        "outputs": {"id": "asked-says", "property": "children"},
        "inputs": [{"id": "asked", "property": "data", "value": asked}],
        "state": [],
        "changedPropIds": ["asked.data"],
    }
    return client.post("/_dash-update-component", json=question, headers=headers, base_url=f"http://{HOST}")


def csrf_matches(client: FlaskClient, session: str) -> bool:
    return cookie(client, CSRF) == csrf_of(cookie(client, session))
