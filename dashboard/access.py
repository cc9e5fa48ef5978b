"""Who may ask what of the page: a gate before every route that refuses by default."""

from __future__ import annotations

import ipaddress
import re
from collections.abc import Callable, Collection
from urllib.parse import urlsplit

from flask import Flask, Response, request

LONGEST_BODY = 64 * 1024
_OPEN = re.compile(r"/|/_dash-(layout|dependencies|component-suites/.+)|/assets/.+")
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


def is_loopback(host: str) -> bool:
    """Return whether an address to listen on is reached from this computer alone."""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def guard(
    server: Flask, is_run: Callable[[str], bool], answered: Collection[str], script_hashes: Collection[str]
) -> None:
    """Put the gate before every route of a server, and the headers on every answer.

    Parameters
    ----------
    server
        The page's Flask server, all routes registered.
    is_run
        Whether a run of this name exists.
    answered
        Outputs of the callbacks that the server answers; no other question is let through.
    script_hashes
        Hashes of the inline scripts that the page itself writes.
    """
    server.config["MAX_CONTENT_LENGTH"] = LONGEST_BODY
    headers = _HEADERS | {"Content-Security-Policy": content_policy(script_hashes)}

    def gate() -> Response | None:
        refusal = _wrong_sender() or _wrong_request(is_run, answered)
        return Response(refusal[1], refusal[0], content_type="text/plain; charset=utf-8") if refusal else None

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


def _wrong_sender() -> tuple[int, str] | None:
    """Refuse other names for this computer (DNS rebinding) and what another site makes a browser send."""
    if not is_loopback(urlsplit(f"//{request.host}").hostname or ""):
        return 421, "This page answers to localhost only."
    origin = request.headers.get("Origin")
    if origin is not None and urlsplit(origin).netloc != request.host:
        return 403, "This request comes from another site."
    site = request.headers.get("Sec-Fetch-Site", "none")
    is_link = request.method == "GET" and request.headers.get("Sec-Fetch-Mode") == "navigate"
    if site not in ("same-origin", "none") and not is_link:
        return 403, "This request comes from another site."
    return None


def _wrong_request(is_run: Callable[[str], bool], answered: Collection[str]) -> tuple[int, str] | None:
    if (request.content_length or 0) > LONGEST_BODY:
        return 413, "The request is too large."
    if request.path == _UPDATE:
        return _wrong_update(answered)
    run = _RUN.fullmatch(request.path)
    if not (_OPEN.fullmatch(request.path) or (run and is_run(run[1]))):
        return 404, "There is no such page or run here."
    return None if request.method in ("GET", "HEAD") else (405, "This page is only read.")


def _wrong_update(answered: Collection[str]) -> tuple[int, str] | None:
    if request.method != "POST":
        return 405, "News of the run is asked for with POST."
    if request.headers.get("Origin") is None and request.headers.get("Sec-Fetch-Site") != "same-origin":
        return 403, "News of the run is given to the page itself only."
    if not request.is_json:
        return 415, "News of the run is asked for in JSON."
    asked = request.get_json(silent=True)
    known = isinstance(asked, dict) and asked.get("output") in answered
    return None if known else (400, "There is no such question.")
