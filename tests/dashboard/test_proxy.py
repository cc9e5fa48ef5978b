"""The page behind a TLS proxy on the same computer, as DEVELOPERS.md has it; the proxy here is a stand-in.

It ends TLS, passes the Host on, and says in X-Forwarded-* who asked and how. A real one does the same.
"""

from __future__ import annotations

import http.client
import http.server
import ssl
import subprocess
import sys
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import urlencode

import pytest
import trustme

from daq.storage.people import add_person
from tests.dashboard import feeds
from tests.dashboard.doors import PASSWORD

NAME = "bench.example"
GUEST = "192.0.2.7"  # an address for documentation (RFC 5737)


@dataclass(frozen=True)
class Front:
    """Where the proxy listens, and whom it trusts to have signed its certificate."""

    port: int
    tls: ssl.SSLContext

    def ask(self, method: str, path: str, body: str = "", **headers: str) -> http.client.HTTPResponse:
        connection = http.client.HTTPSConnection("127.0.0.1", self.port, context=self.tls, timeout=20)
        headers = {"Host": NAME, "Origin": f"https://{NAME}"} | headers
        if body:
            headers["Content-Type"] = "application/x-www-form-urlencoded"
        connection.request(method, path, body, headers)
        answer = connection.getresponse()
        answer.read()
        return answer


def proxy_to(port: int, guest: str) -> type[http.server.BaseHTTPRequestHandler]:
    """Return a proxy that passes everything on to a page, with what it knows of who asked."""

    class Proxy(http.server.BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def _pass_on(self) -> None:
            body = self.rfile.read(int(self.headers.get("Content-Length", 0)))
            asks = self.headers.get("X-Test-Guest", guest)
            told = {"X-Forwarded-For": asks, "X-Forwarded-Host": NAME, "X-Forwarded-Proto": "https"}
            page = http.client.HTTPConnection("127.0.0.1", port, timeout=20)
            page.request(self.command, self.path, body, dict(self.headers) | told)
            answer = page.getresponse()
            content = answer.read()
            self.send_response(answer.status)
            for name, value in answer.getheaders():
                if name.lower() not in (
                    "transfer-encoding",
                    "content-length",
                    "connection",
                    "date",
                    "server",
                ):
                    self.send_header(name, value)
            self.send_header("Content-Length", str(len(content)))
            self.end_headers()
            self.wfile.write(content)

        do_GET = do_POST = _pass_on  # noqa: N815

        def log_message(self, *_: object) -> None: ...

    return Proxy


@pytest.fixture
def front(tmp_path: Path) -> Iterator[Front]:
    feeds.put(tmp_path, feeds.feed())
    add_person(tmp_path, "Night watch", "operator", PASSWORD)
    words = [sys.executable, "-m", "dashboard", str(tmp_path), "--behind-proxy", "--name", NAME]
    authority = trustme.CA()
    here, there = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER), ssl.create_default_context()
    authority.issue_cert("127.0.0.1", NAME).configure_cert(here)
    authority.configure_trust(there)
    with subprocess.Popen(words, stdout=subprocess.PIPE, text=True) as page:
        assert page.stdout is not None
        port = int(page.stdout.readline().strip().rstrip("/").rpartition(":")[2])
        with http.server.ThreadingHTTPServer(("127.0.0.1", 0), proxy_to(port, GUEST)) as proxy:
            proxy.socket = here.wrap_socket(proxy.socket, server_side=True)
            threading.Thread(target=proxy.serve_forever, daemon=True).start()
            yield Front(proxy.server_address[1], there)
            proxy.shutdown()
        page.terminate()


def test_behind_a_tls_proxy_people_log_in_and_cookies_stay_on_tls(front: Front) -> None:
    turned = front.ask("GET", "/")
    entered = front.ask("POST", "/login", urlencode({"name": "Night watch", "password": PASSWORD}))

    cookies = entered.headers.get_all("Set-Cookie") or []
    kept = "; ".join(cookie.partition(";")[0] for cookie in cookies)
    read = front.ask("GET", "/", Cookie=kept)
    assert (turned.status, turned.headers["Location"]) == (302, "/login?to=/")
    assert (entered.status, read.status) == (303, 200)
    assert all("Secure" in cookie and "SameSite=Strict" in cookie for cookie in cookies)


def test_behind_a_proxy_other_names_and_other_sites_are_refused(front: Front) -> None:
    assert front.ask("GET", "/healthz").status == 200
    assert front.ask("POST", "/login", "name=x", Origin="https://evil.example").status == 403


def test_wrong_passwords_are_counted_by_who_asked_and_not_by_the_proxy(front: Front) -> None:
    wrong = urlencode({"name": "Night watch", "password": "four lamps in a box"})

    codes = [front.ask("POST", "/login", wrong).status for _ in range(6)]

    other = front.ask("POST", "/login", wrong, **{"X-Test-Guest": "192.0.2.8"})
    assert codes == [401] * 5 + [429]
    assert other.status == 401
