"""Who may ask what of the page: a gate before every route that refuses by default."""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from hmac import compare_digest
from urllib.parse import quote

from flask import Flask, Response, g, redirect, request

from daq.records import ROLES
from daq.storage.people import NOBODY, Person
from dashboard.login import csrf_of, token_sent
from dashboard.senders import Refusal, own_page_asks, wrong_sender

LONGEST_BODY = 64 * 1024
_READ = re.compile(r"/|/metrics|/_dash-(layout|dependencies|component-suites/.+)|/assets/.+")
_ANYBODY = (
    "/login",
    "/healthz",
    "/assets/page.css",
    "/assets/10-theme.js",
    "/assets/mark.svg",
)
_UPDATE = "/_dash-update-component"
_RUN = re.compile(r"/runs/([A-Za-z0-9][A-Za-z0-9._-]*)")
_HEADERS = {
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
    "Referrer-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), microphone=(), geolocation=()",
}
_FAILED = "The page could not answer this request. The run goes on without it."


@dataclass(frozen=True, slots=True)
class Door:
    """What the gate asks when it decides.

    `person` whose token it is (None lets everybody at this computer read), `is_closed` whether people have
    to log in, `is_run` whether a run of this name exists, `names` see `wrong_sender`, `roles` the least role
    for each output that the server answers; no other question is let through.
    """

    person: Callable[[str], Person | None]
    is_closed: Callable[[], bool]
    is_run: Callable[[str], bool]
    roles: Mapping[str, str]
    names: Collection[str] | None = None

    def check(self, answered: Collection[str]) -> None:
        """Refuse to open while a question that the server answers has no role."""
        wild = sorted(set(answered) - {output for output, role in self.roles.items() if role in ROLES})
        if wild:
            raise ValueError(f"no role is declared for {', '.join(wild)}: the page does not start")


def guard(server: Flask, door: Door, script_hashes: Collection[str]) -> None:
    """Put the gate before every route of a server, all routes registered, and the headers on every answer."""
    server.config["MAX_CONTENT_LENGTH"] = LONGEST_BODY
    headers = _HEADERS | {"Content-Security-Policy": content_policy(script_hashes)}

    def gate() -> Response | None:
        refusal = wrong_sender(door.names) or _too_large() or _stranger(door) or _wrong_request(door)
        if refusal is None:
            return None
        if refusal[0] == 302:
            return redirect(refusal[1])  # type: ignore[return-value]
        return Response(refusal[1], refusal[0], content_type="text/plain; charset=utf-8")

    def close(response: Response) -> Response:
        for name, value in headers.items():
            response.headers[name] = value
        if not request.path.startswith(("/assets/", "/_dash-component-suites/")):
            response.headers["Cache-Control"] = "no-store"
        return response

    server.before_request(gate)
    server.register_error_handler(500, lambda _: (_FAILED, 500, {"Content-Type": "text/plain"}))
    server.after_request(close)


def content_policy(script_hashes: Collection[str]) -> str:
    """Return the policy that lets the browser run this server's scripts and nothing else."""
    scripts = " ".join(["'self'", *script_hashes])
    return (
        f"default-src 'none'; script-src {scripts}; style-src 'self' 'unsafe-inline'; img-src 'self' data:; "
        "connect-src 'self'; font-src 'self'; base-uri 'none'; form-action 'self'; frame-ancestors 'none'"
    )


def _too_large() -> Refusal | None:
    return (413, "The request is too large.") if (request.content_length or 0) > LONGEST_BODY else None


def _stranger(door: Door) -> Refusal | None:
    """Find out who asks, and refuse whoever has to log in first."""
    token = token_sent()
    known = door.person(token) if token else None
    g.person = known or NOBODY
    if known or not door.is_closed() or request.path in _ANYBODY:
        return None
    if request.method == "GET" and (request.path == "/" or _RUN.fullmatch(request.path)):
        return 302, f"/login?to={quote(request.path)}"
    return 401, "Log in first."


def _wrong_request(door: Door) -> Refusal | None:
    if request.path == _UPDATE:
        return _wrong_update(door)
    if request.path in ("/login", "/logout"):
        return _wrong_form()
    run = _RUN.fullmatch(request.path)
    if not (request.path in _ANYBODY or _READ.fullmatch(request.path) or (run and door.is_run(run[1]))):
        return 404, "There is no such page or run here."
    return None if request.method in ("GET", "HEAD") else (405, "This page is only read.")


def _wrong_form() -> Refusal | None:
    if request.method == "GET" and request.path == "/login":
        return None
    if request.method != "POST":
        return 405, "Send the form instead."
    return None if own_page_asks() else (403, "This request does not come from the page itself.")


def _wrong_update(door: Door) -> Refusal | None:
    if request.method != "POST":
        return 405, "News of the run is asked for with POST."
    if not own_page_asks():
        return 403, "News of the run is given to the page itself only."
    token = token_sent()
    if token and not compare_digest(csrf_of(token), request.headers.get("X-CSRFToken", "")):
        return 403, "This request does not come from the page that was opened. Load the page again."
    if not request.is_json:
        return 415, "News of the run is asked for in JSON."
    asked = request.get_json(silent=True)
    role = door.roles.get(str(asked.get("output"))) if isinstance(asked, dict) else None
    if role is None:
        return 400, "There is no such question."
    return None if g.person.may(role) else (403, "An operator may ask this. Log in as one.")
