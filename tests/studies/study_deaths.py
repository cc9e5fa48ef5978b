"""Deaths: one study, drawn in every way and through every death, has one SHA-256.

python -m tests.studies.study_deaths [nights] [way ...]

Each way is `tercet study configs/studies/coverage.toml`, as a user gives it, in a folder of its own: serial;
with workers of its own; on a scheduler and workers started by hand; and there after kill -9 of a worker, of
the client, of the scheduler, and of all three in turn, after which the same command is given again. 1 where
two digests differ.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.scale.ledger import DONE
from tests.daq.scale.outside import Outside
from tests.examples import CONFIGS

NIGHTS = 20_000
BLOCKS = 100
LOOK_EVERY_S = 0.05


@dataclass(frozen=True)
class Study:
    """A study in a folder: how many nights it has, and how far it is."""

    folder: Path
    nights: int

    def start(self, *words: str) -> subprocess.Popen[str]:
        """Start the command, as a user gives it."""
        file = CONFIGS / "studies" / "coverage.toml"
        command = [sys.executable, "-m", "daq", "study", str(file), "--into", str(self.folder), "--json"]
        return subprocess.Popen([*command, *self._size(), *words], stdout=subprocess.PIPE, text=True)

    def _size(self) -> tuple[str, ...]:
        return "--draws", str(self.nights), "--block", str(max(1, self.nights // BLOCKS))

    def finish(self, *words: str) -> str:
        """Carry the study to its end and return its digest."""
        return str(answered(self.start(*words))["digest"])

    def done(self) -> int:
        """Return how many nights are drawn."""
        path = self.folder / DONE
        lines = path.read_text().splitlines()[1:] if path.exists() else []
        return sum(json.loads(line)["count"] for line in lines)

    def wait_for(self, share: float) -> None:
        """Wait until so much of it is done."""
        while self.done() < share * self.nights:
            time.sleep(LOOK_EVERY_S)


def answered(process: subprocess.Popen[str]) -> dict[str, Any]:
    """Return what a command answered."""
    out, _ = process.communicate()
    found: dict[str, Any] = json.loads(out.splitlines()[-1])
    return found


@contextmanager
def outside(study: Study, name: str) -> Iterator[Outside]:
    """Give a scheduler with two workers."""
    with closing(Outside(study.folder.parent / name)) as one:
        yield one


def by_address(study: Study) -> str:
    """Draw on a scheduler by address."""
    with outside(study, "cluster") as there:
        return study.finish("--cluster", there.address)


def worker_dies(study: Study) -> str:
    """Kill a worker a third of the way."""
    with outside(study, "cluster") as there:
        going = study.start("--cluster", there.address)
        study.wait_for(1 / 3)
        there.kill_worker()
        return str(answered(going)["digest"])


def client_dies(study: Study) -> str:
    """Kill the client a third of the way, and give the command again."""
    with outside(study, "cluster") as there:
        going = study.start("--cluster", there.address)
        study.wait_for(1 / 3)
        going.kill()
        going.wait()
        assert study.done() < study.nights
        return study.finish("--cluster", there.address)


def scheduler_dies(study: Study) -> str:
    """Kill the scheduler a third of the way, and give the command again with another one."""
    with outside(study, "first") as there:
        going = study.start("--cluster", there.address)
        study.wait_for(1 / 3)
        there.kill_scheduler()
        assert "the scheduler has gone" in answered(going)["problems"][0]
    assert study.done() < study.nights
    with outside(study, "second") as there:
        return study.finish("--cluster", there.address)


def all_die(study: Study) -> str:
    """Kill a worker, then the client, then the scheduler."""
    with outside(study, "first") as there:
        going = study.start("--cluster", there.address)
        study.wait_for(0.2)
        there.kill_worker()
        study.wait_for(0.4)
        going.kill()
        going.wait()
        going = study.start("--cluster", there.address)
        study.wait_for(0.6)
        there.kill_scheduler()
        assert "the scheduler has gone" in answered(going)["problems"][0]
    assert study.done() < study.nights
    with outside(study, "second") as there:
        return study.finish("--cluster", there.address)


WAYS: dict[str, Callable[[Study], str]] = {
    "serial": lambda study: study.finish(),
    "1-worker": lambda study: study.finish("--workers", "1"),
    "2-workers": lambda study: study.finish("--workers", "2"),
    "3-workers": lambda study: study.finish("--workers", "3", "--block", "37"),
    "address": by_address,
    "worker-dies": worker_dies,
    "client-dies": client_dies,
    "scheduler-dies": scheduler_dies,
    "all-die": all_die,
}


def main(words: list[str]) -> int:
    """Draw in every way that is named, and say whether the digests are one."""
    nights = int(words[0]) if words else NIGHTS
    digests = set()
    for way in words[1:] or WAYS:
        with tempfile.TemporaryDirectory() as folder:
            began_s = time.monotonic()
            digest = WAYS[way](Study(Path(folder) / "study", nights))
            print(f"{way:<16}{nights:>7} nights  {digest}  {time.monotonic() - began_s:6.0f} s", flush=True)
            digests.add(digest)
    print("one digest" if len(digests) == 1 else f"{len(digests)} digests differ")
    return int(len(digests) > 1)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
