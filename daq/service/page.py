"""The page as a process of its own: killed or flooded, it must not move the sequencer's timing."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import IO, Self, cast

from daq.errors import DaqError, StorageError
from daq.service.extensions import page_module


def make_lab(lab: Path) -> None:
    """Make the lab folder when it is not there yet."""
    try:
        lab.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        reason = (error.strerror or "cannot be made").lower()
        raise StorageError(reason, where=str(lab), remedy="Name another folder with --into") from error


class PageProcess:
    """A running page; closing it ends the process."""

    def __init__(self, lab: Path, options: Sequence[str] = ()) -> None:
        command = [sys.executable, "-m", page_module(), str(lab), "--until-eof", *options]
        # A session of its own: Ctrl-C ends the run after its stand, and must not end the page.
        self._process = subprocess.Popen(
            command,
            stdout=subprocess.PIPE,
            text=True,
            stdin=subprocess.PIPE,  # its end tells the page that this program is gone, however it went
            start_new_session=True,
        )
        first = cast(IO[str], self._process.stdout).readline()
        if not first.startswith("page: "):
            self.close()
            raise DaqError("the page did not start", where="page", remedy="Run without --page, or look above")
        self.address = first.removeprefix("page: ").strip()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def wait(self) -> None:
        """Return when the page has ended."""
        self._process.wait()

    def close(self) -> None:
        """End the page."""
        self._process.terminate()
        self._process.wait(timeout=10)
        for stream in (self._process.stdin, self._process.stdout):
            if stream:
                stream.close()
