"""A scheduler with workers, each a process of its own, as somebody would start them by hand."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
from pathlib import Path

import daq

ROOT = Path(daq.__file__).parents[1]
WAIT_S = 60.0


def free_address() -> str:
    """Return an address of this computer that nobody listens at."""
    with socket.create_server(("127.0.0.1", 0)) as free:
        return f"tcp://127.0.0.1:{free.getsockname()[1]}"


class Outside:
    """Holds the processes; `path` is where the workers take the program from."""

    def __init__(self, folder: Path, workers: int = 2, path: Path = ROOT) -> None:
        self.address = free_address()
        port = self.address.rpartition(":")[2]
        self._folder, self._path = folder, path
        self._scheduler = self._start(
            "scheduler", "--host", "127.0.0.1", "--port", port, "--no-dashboard", "--no-show"
        )
        self._workers = [
            self._start(
                *("worker", self.address, "--host", "127.0.0.1", "--nthreads", "1", "--no-dashboard"),
                *("--local-directory", str(folder / f"worker-{number}")),
            )
            for number in range(workers)
        ]

    def kill_worker(self) -> None:
        """Kill -9 one worker with what would start it again."""
        os.killpg(self._workers[0].pid, signal.SIGKILL)

    def kill_scheduler(self) -> None:
        """Kill -9 the scheduler."""
        self._scheduler.kill()

    def close(self) -> None:
        """End what is left."""
        processes = (*self._workers, self._scheduler)
        for process in processes:
            process.terminate()
        for process in processes:
            try:
                process.wait(WAIT_S)
            except subprocess.TimeoutExpired:
                os.killpg(process.pid, signal.SIGKILL)

    def _start(self, what: str, *words: str) -> subprocess.Popen[bytes]:
        command = [sys.executable, "-m", "dask", what, *words]
        environment = os.environ | {"PYTHONPATH": f"{self._path}{os.pathsep}{ROOT}"}
        return subprocess.Popen(
            command,
            env=environment,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            cwd=self._path,
            start_new_session=True,
        )
