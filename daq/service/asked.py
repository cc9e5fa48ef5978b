"""What has been asked of a run: by its terminal, and by operators through the lab book."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from daq.service.requests import Request


@dataclass(slots=True)
class Asked:
    """What is asked of a run while it is under way, and of the program that carries it out.

    `end` this run after this stand; `leave`: end it and the program too; `stop` at once. A stop breaks in
    only while `interruptible`, that is while visits are performed. `requests` gives what operators left,
    `settled` tells them what became of it, `idle` waits a little on the wall clock while a run holds. `kind`
    and `who` say which kind of end it is (daq.estimate.stopping) and who asked for it.
    """

    end: bool = False
    end_after_lap: bool = False
    leave: bool = False
    stop: bool = False
    by_system: bool = False  # the computer ends the program (SIGTERM), not a person the run
    interruptible: bool = False
    kind: str = ""
    who: str = ""
    requests: Callable[[], Sequence[Request]] = tuple
    settled: Callable[[Request, str], None] = lambda request, outcome: None
    idle: Callable[[], None] = lambda: None

    @property
    def ends(self) -> bool:
        """Whether the run is to end after its stand."""
        return self.end or self.leave

    def for_another_run(self) -> None:
        """Forget what was asked of the run before."""
        self.end = self.end_after_lap = False
        self.kind = self.who = ""
