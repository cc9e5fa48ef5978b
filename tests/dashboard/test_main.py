"""`python -m dashboard` as a process: what it prints, and how it ends."""

from __future__ import annotations

import signal
import socket
import subprocess
import sys
import urllib.request
from pathlib import Path

import pytest

from dashboard.__main__ import main
from tests.dashboard import feeds


def test_the_address_comes_first_and_a_signal_ends_it(tmp_path: Path) -> None:
    feeds.put(tmp_path, feeds.feed())
    command = [sys.executable, "-m", "dashboard", str(tmp_path)]

    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as page:
        assert page.stdout is not None
        address = page.stdout.readline().removeprefix("page: ").strip()
        with urllib.request.urlopen(address, timeout=10) as answer:
            status = answer.status
        page.send_signal(signal.SIGTERM)
        _, complaints = page.communicate(timeout=10)

    assert (status, page.returncode, complaints) == (200, 0, "")


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "192.168.1.7", "bench.example"])
def test_an_address_off_this_computer_is_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], host: str
) -> None:
    status = main([str(tmp_path), "--host", host])

    assert status == 2
    assert "while nobody can log in" in capsys.readouterr().err


def test_a_lab_that_is_not_there_is_a_sentence(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    status = main([str(tmp_path / "nowhere")])

    assert status == 4
    assert capsys.readouterr().err.count("\n") == 1


@pytest.mark.parametrize("name", ["nothing", "..", "../runs", ""])
def test_a_run_that_is_not_there_is_a_sentence(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str
) -> None:
    feeds.put(tmp_path, feeds.feed())

    status = main([str(tmp_path), "--run", name])

    assert status == 4
    assert "there is no run" in capsys.readouterr().err


def test_a_port_that_is_taken_is_a_sentence(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        status = main([str(tmp_path), "--port", str(taken.getsockname()[1])])

    assert status == 1
    assert "Choose another --port" in capsys.readouterr().err


def test_a_port_that_is_none_is_a_sentence(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    status = main([str(tmp_path), "--port", "70000"])

    assert status == 1
    assert "cannot listen" in capsys.readouterr().err


def test_the_page_ends_with_whoever_started_it(tmp_path):
    words = [sys.executable, "-m", "dashboard", str(tmp_path), "--until-eof"]
    page = subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    assert page.stdin is not None
    assert page.stdout is not None
    page.stdout.readline()

    page.stdin.close()

    assert page.wait(timeout=30) == 0
    page.stdout.close()
