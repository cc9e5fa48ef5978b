"""People of a lab, from the command line to a page that is reached from afar."""

from __future__ import annotations

import io
import json
import subprocess
import sys
import urllib.error
import urllib.request
from pathlib import Path

import pytest

from daq.cli import main
from daq.storage.people import Person, people, person_with

PASSWORD = "four lamps in a row"


def typed(monkeypatch: pytest.MonkeyPatch, text: str) -> None:
    monkeypatch.setattr("sys.stdin", io.StringIO(text))


def test_somebody_is_let_in_with_a_password_that_is_no_argument(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    typed(monkeypatch, PASSWORD + "\n")

    status = main(["people", str(tmp_path), "add", "Night watch", "--role", "operator", "--json"])

    figures = json.loads(capsys.readouterr().out.splitlines()[-1])
    assert status == 0
    assert figures["people"] == [{"name": "Night watch", "role": "operator"}]
    assert person_with(tmp_path, "Night watch", PASSWORD) == Person("Night watch", "operator")


def test_a_password_is_changed_sessions_are_ended_and_somebody_is_let_out(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    typed(monkeypatch, f"{PASSWORD}\nanother four lamps\n")

    codes = [
        main(["people", str(tmp_path), *words])
        for words in (["add", "Kim"], ["password", "Kim"], ["end-sessions"], ["remove", "Kim"], [])
    ]

    said = capsys.readouterr().out
    assert codes == [0] * 5
    assert "Kim may log in as watcher" in said
    assert "Kim has a new password" in said
    assert "0 sessions ended" in said
    assert "nobody: the page is read at this computer only" in said
    assert people(tmp_path) == []


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["add"], "whom to add? Give a name"),
        (["remove", "Kim"], "knows no 'Kim'"),
        (["add", "Kim"], "12 to 200 characters"),
    ],
)
def test_what_is_wrong_is_a_sentence(
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
    words: list[str],
    says: str,
) -> None:
    typed(monkeypatch, "short\n")

    status = main(["people", str(tmp_path), *words])

    assert status == 2
    assert says in capsys.readouterr().err


def test_a_page_listens_to_others_once_somebody_can_log_in(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    typed(monkeypatch, PASSWORD + "\n")
    main(["people", str(tmp_path), "add", "Night watch"])
    command = [sys.executable, "-m", "dashboard", str(tmp_path), "--host", "0.0.0.0"]

    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as page:
        assert page.stdout is not None
        port = page.stdout.readline().rstrip("/\n").rpartition(":")[2]
        with urllib.request.urlopen(f"http://127.0.0.1:{port}/", timeout=10) as answer:
            turned = answer.url
        with pytest.raises(urllib.error.HTTPError) as layout:
            urllib.request.urlopen(f"http://127.0.0.1:{port}/_dash-layout", timeout=10)
        page.terminate()
        _, complaints = page.communicate(timeout=10)

    assert turned.endswith("/login?to=/")
    assert layout.value.code == 401
    assert complaints == "Passwords cross the network readable by others: put a TLS proxy in front.\n"
