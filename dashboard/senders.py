"""Where a request comes from: by which name this computer was called, and by whose page."""

from __future__ import annotations

import ipaddress
from collections.abc import Collection
from urllib.parse import urlsplit

from flask import request

Refusal = tuple[int, str]


def is_loopback(host: str) -> bool:
    """Return whether an address to listen on is reached from this computer alone."""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def wrong_sender(names: Collection[str] | None) -> Refusal | None:
    """Refuse other names for this computer (DNS rebinding) and what another site makes a browser send.

    Parameters
    ----------
    names
        Names by which the page may be called, besides any address in digits; None where it is called by
        this computer alone.
    """
    host = (urlsplit(f"//{request.host}").hostname or "").lower()
    if not (is_loopback(host) or (names is not None and (host in names or _is_address(host)))):
        remedy = "Start it with --name to call it so." if names is not None else ""
        return 421, f"This page does not answer to this name. {remedy}".strip()
    origin = request.headers.get("Origin")
    if origin is not None and urlsplit(origin).netloc != request.host:
        return 403, "This request comes from another site."
    site = request.headers.get("Sec-Fetch-Site", "none")
    is_link = request.method == "GET" and request.headers.get("Sec-Fetch-Mode") == "navigate"
    if site not in ("same-origin", "none") and not is_link:
        return 403, "This request comes from another site."
    return None


def own_page_asks() -> bool:
    """Return whether the browser says that this page's own script sent the request."""
    return request.headers.get("Origin") is not None or request.headers.get("Sec-Fetch-Site") == "same-origin"


def _is_address(host: str) -> bool:
    """Return whether a host is written in digits: a name server cannot make it another computer's."""
    try:
        ipaddress.ip_address(host)
    except ValueError:
        return False
    return True
