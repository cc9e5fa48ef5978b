"""A disk whose power can be cut: what was not synced is lost, wholly, partly or not at all.

`write` makes contents durable and `sync_dir` the names of a folder, as on a real disk; at a cut the run
folder is copied with what would have survived. The journal is SQLite's own: it is copied as SQLite left it.
"""

from __future__ import annotations

import random
import threading
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from daq.storage.disk import Disk
from daq.storage.snapshot import JOURNAL

MODES = ("lose", "some", "keep")  # of the names not yet synced: none, a random prefix, all of them


@dataclass(frozen=True)
class Cut:
    """A copy of the run folder as a power cut at `step` left it; `rows` were durable by then."""

    step: str
    mode: str
    folder: Path
    rows: int


class FakeDisk(Disk):
    """Remembers what is durable; `cut_at` says whether to cut at a step, asked with its name and number.

    The classes below break one rule each, from when `broken` is raised.
    """

    def __init__(self, run: Path, cuts_folder: Path, cut_at: Callable[[str, int], bool]) -> None:
        self.run, self.cuts_folder, self.cut_at = run, cuts_folder, cut_at
        self.rows: Callable[[], int] = lambda: 0
        self.cuts: list[Cut] = []
        self.forgot = threading.Event()  # a chunk has been sealed and its rows forgotten
        self.broken = False
        self._random = random.Random(1)
        self._contents: dict[Path, bytes] = {}  # by name, as a running program sees it
        self._durable: dict[Path, bytes] = {}  # by name, what the platter holds
        self._pending: dict[Path, list[Path]] = {}  # folder -> names that are not durable, in order
        self._journal: dict[str, bytes] = {}
        self._steps = 0
        cuts_folder.mkdir(parents=True, exist_ok=True)

    def write(self, path: Path, data: bytes | memoryview) -> None:
        super().write(path, data)
        self._contents[path] = bytes(data)

    def replace(self, source: Path, target: Path) -> None:
        super().replace(source, target)
        self._contents[target] = self._contents.pop(source)
        self._pending.setdefault(target.parent, []).append(target)
        for folder in target.relative_to(self.run).parents[:-1]:
            self._pending.setdefault((self.run / folder).parent, []).append(self.run / folder)

    def sync_dir(self, folder: Path) -> None:
        for path in self._pending.pop(folder, []):
            self._durable[path] = self._contents.get(path, b"")

    def step(self, name: str) -> None:
        if self.cut_at(name, self._steps):
            self.cuts += [self._cut(name, mode) for mode in MODES]
        self._steps += 1
        self._journal = self._journal_now()
        if name == "forgot":
            self.forgot.set()

    def _cut(self, name: str, mode: str) -> Cut:
        copy = self.cuts_folder / f"{self._steps:04}-{name}-{mode}"
        copy.mkdir()
        survivors = dict(self._durable)
        for names in self._pending.values() if mode != "lose" else ():
            kept = len(names) if mode == "keep" else self._random.randint(0, len(names))
            survivors.update({path: self._contents.get(path, b"") for path in names[:kept]})
        for path, data in survivors.items():
            self._put_back(copy, path, data, survivors)
        journal = self._journal_now()
        if JOURNAL not in journal and mode == "lose":  # unlinked, but that name was not synced either
            journal = self._journal
        for file, data in journal.items():
            (copy / file).write_bytes(data)
        return Cut(name, mode, copy, self.rows())

    def _put_back(self, copy: Path, path: Path, data: bytes, survivors: dict[Path, bytes]) -> None:
        inside = path.relative_to(self.run)
        if path.is_dir() or any(self.run / folder not in survivors for folder in inside.parents[:-1]):
            return
        (copy / inside).parent.mkdir(parents=True, exist_ok=True)
        (copy / inside).write_bytes(data)

    def _journal_now(self) -> dict[str, bytes]:
        names = (JOURNAL, f"{JOURNAL}-wal")
        return {name: (self.run / name).read_bytes() for name in names if (self.run / name).exists()}


class NoFileSync(FakeDisk):
    """Files are not synced: their names may outlive their contents."""

    def write(self, path: Path, data: bytes | memoryview) -> None:
        super().write(path, data)
        if self.broken:
            self._contents[path] = b""


class NoFolderSync(FakeDisk):
    """Folders are not synced."""

    def sync_dir(self, folder: Path) -> None:
        if not self.broken:
            super().sync_dir(folder)


class LateSync(FakeDisk):
    """Rows leave the journal before the folders of their chunks are synced."""

    _late: tuple[Path, ...] = ()

    def sync_dir(self, folder: Path) -> None:
        if self.broken:
            self._late += (folder,)
        else:
            super().sync_dir(folder)

    def step(self, name: str) -> None:
        super().step(name)
        if name == "forgot" or (name == "committed" and self._late):
            for folder in self._late:
                super().sync_dir(folder)
            self._late, self.broken = (), False


class LateWrite(FakeDisk):
    """The cursor says that rows are sealed before their chunks are written."""

    _late: tuple[tuple[Path, Path, bytes], ...] = ()

    def write(self, path: Path, data: bytes | memoryview) -> None:
        if self.broken:
            self._late += ((path, path, bytes(data)),)
        else:
            super().write(path, data)

    def replace(self, source: Path, target: Path) -> None:
        if self.broken:
            self._late = (*self._late[:-1], (source, target, self._late[-1][2]))
        else:
            super().replace(source, target)

    def step(self, name: str) -> None:
        super().step(name)
        if name == "forgot":
            for source, target, data in self._late:
                super().write(source, data)
                super().replace(source, target)
            self._late, self.broken = (), False
