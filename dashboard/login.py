"""Logging in and out: a form, a cookie that no script can read, and a limit before a password is checked."""

from __future__ import annotations

import hashlib
import re
import threading
import time
from collections import deque
from collections.abc import Callable
from pathlib import Path
from urllib.parse import quote

from flask import Flask, Response, redirect, request

from daq.storage.people import person_with
from daq.storage.sessions import LASTS, end_session, open_session

SESSION, CSRF = "tercet_session", "_csrf_token"
WITHIN_S = 900.0
TRIES_OF_A_NAME, TRIES_OF_AN_ADDRESS, TRIES_OF_ALL = 5, 20, 100
AT_ONCE = 2  # passwords checked at the same time
_FORM = (Path(__file__).parent / "login.html").read_text(encoding="utf-8")
_PLACE = re.compile(r"/|/runs/[A-Za-z0-9][A-Za-z0-9._-]*")


def token_sent() -> str:
    """Return the token that a request carries, or nothing."""
    return request.cookies.get(SESSION, "")


def csrf_of(token: str) -> str:
    """Return what the page's own scripts send besides the cookie: another site can read neither."""
    return hashlib.sha256(f"csrf {token}".encode()).hexdigest()


class Limiter:
    """Counts wrong passwords by name and address; successful ones are not counted."""

    def __init__(self, now_s: Callable[[], float] = time.monotonic) -> None:
        self._now_s, self._wrong, self._lock = (
            now_s,
            deque[tuple[float, str, str]](maxlen=1000),
            threading.Lock(),
        )
        self.checking = threading.BoundedSemaphore(AT_ONCE)

    def wait_s(self, name: str, address: str) -> float:
        """Return how long somebody has to wait before another try, in seconds."""
        with self._lock:
            while self._wrong and self._wrong[0][0] <= self._now_s() - WITHIN_S:
                self._wrong.popleft()
            tries = list(self._wrong)
        same_address = [entry for entry in tries if entry[2] == address]
        same_name = [entry for entry in same_address if entry[1] == name]
        limits = (same_name, TRIES_OF_A_NAME), (same_address, TRIES_OF_AN_ADDRESS), (tries, TRIES_OF_ALL)
        since_s = [found[-limit][0] for found, limit in limits if len(found) >= limit]
        return max(since_s) + WITHIN_S - self._now_s() if since_s else 0.0

    def failed(self, name: str, address: str) -> None:
        """Take down a wrong password."""
        with self._lock:
            self._wrong.append((self._now_s(), name, address))


def add_login(server: Flask, lab: Path, limiter: Limiter) -> None:
    """Add the routes of logging in and out, and a sign of life, to the page's server."""

    @server.get("/healthz")
    def alive() -> Response:
        return Response("ok\n", content_type="text/plain")

    @server.get("/login")
    def form() -> Response:
        return _form("")

    @server.post("/login")
    def enter() -> Response:
        return _enter(lab, limiter)

    @server.post("/logout")
    def leave() -> Response:
        end_session(lab, token_sent())
        answer: Response = redirect("/login", 303)  # type: ignore[assignment]
        answer.delete_cookie(SESSION)
        answer.delete_cookie(CSRF)
        return answer


def _enter(lab: Path, limiter: Limiter) -> Response:
    name, address = request.form.get("name", "")[:64], request.remote_addr or ""
    wait_s = limiter.wait_s(name, address)
    if wait_s > 0:
        return _form(f"Too many wrong passwords. Try again in {wait_s / 60:.0f} min.", 429)
    if not limiter.checking.acquire(blocking=False):
        return _form("Others are logging in just now. Try again.", 429)
    try:
        person = person_with(lab, name, request.form.get("password", ""))
    finally:
        limiter.checking.release()
    if person is None:
        limiter.failed(name, address)
        return _form("This name and this password do not belong together.", 401)
    return _entered(open_session(lab, person.name))


def _entered(token: str) -> Response:
    answer: Response = redirect(_place(), 303)  # type: ignore[assignment]
    lasts, safe = int(LASTS.total_seconds()), request.is_secure
    answer.set_cookie(SESSION, token, max_age=lasts, httponly=True, samesite="Strict", secure=safe)
    answer.set_cookie(CSRF, csrf_of(token), max_age=lasts, samesite="Strict", secure=safe)
    return answer


def _place() -> str:
    """Return where to go after logging in: a page of this server, whatever the address says."""
    place = request.args.get("to", "/")
    return place if _PLACE.fullmatch(place) else "/"


def _form(says: str, status: int = 200) -> Response:
    text = _FORM.replace("{says}", says).replace("{to}", quote(_place()))
    return Response(text, status, content_type="text/html; charset=utf-8")
