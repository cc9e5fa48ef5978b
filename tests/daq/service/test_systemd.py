"""The supervisor is told over its own socket, path or abstract, and nothing is said outside a unit."""

from __future__ import annotations

import os
import socket

import pytest

from daq.service.systemd import Supervisor


@pytest.mark.parametrize("abstract", [False, True])
def test_ready_status_and_watchdog_arrive(tmp_path, abstract):
    address = f"@tercet-test-{os.getpid()}" if abstract else str(tmp_path / "notify")
    now_s = iter([0.0, 0.0, 10.0, 30.0, 30.0])
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
        line.bind("\0" + address[1:] if abstract else address)
        environment = {
            "NOTIFY_SOCKET": address,
            "WATCHDOG_USEC": "60000000",
            "WATCHDOG_PID": str(os.getpid()),
        }
        supervisor = Supervisor(environment, lambda: next(now_s))

        supervisor.ready()
        supervisor.status("counting,\nvisit 1")
        supervisor.alive()  # at 0 s
        supervisor.alive()  # at 10 s: half of the period has not passed
        supervisor.alive()  # at 30 s

        line.settimeout(5)
        said = [line.recv(100).decode() for _ in range(4)]
        line.setblocking(False)
        with pytest.raises(BlockingIOError):
            line.recv(100)

    assert said == ["READY=1", "STATUS=counting, visit 1", "WATCHDOG=1", "WATCHDOG=1"]


@pytest.mark.parametrize(
    "environment", [{}, {"NOTIFY_SOCKET": "/nowhere/at/all", "WATCHDOG_USEC": "1"}, {"WATCHDOG_PID": "1"}]
)
def test_without_a_supervisor_nothing_happens(environment):
    supervisor = Supervisor(environment)

    supervisor.ready()
    supervisor.alive()
