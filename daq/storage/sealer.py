"""The thread that seals: it takes whole chunks out of the journal while visits go on being committed."""

from __future__ import annotations

import logging
import threading
from collections.abc import Callable

from daq.errors import StorageError

log = logging.getLogger(__name__)


class Sealer:
    """Calls `seal_next` (return whether there was a chunk to seal) whenever it is woken.

    A seal that fails costs no visit: its rows stay in the journal, `error` says why, and it is tried again.
    """

    def __init__(self, seal_next: Callable[[], bool]) -> None:
        self.error: StorageError | None = None
        self._seal_next = seal_next
        self._wake = threading.Event()
        self._ending = False
        self._thread = threading.Thread(target=self._run, name="sealer", daemon=True)
        self._thread.start()

    def wake(self) -> None:
        """Say that a chunk may be due."""
        self._wake.set()

    def close(self) -> None:
        """Return when a seal that is under way is done; none is begun after it."""
        self._ending = True
        self._wake.set()
        self._thread.join()

    def _run(self) -> None:
        while not self._ending:
            self._wake.wait()
            self._wake.clear()
            self._seal_what_is_due()

    def _seal_what_is_due(self) -> None:
        try:
            while not self._ending and self._seal_next():
                self.error = None
        except StorageError as error:
            log.warning("sealing failed, the visits stay in the journal: %s", error)
            self.error = error
