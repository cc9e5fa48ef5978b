"""Outlets: what the service tells the world while it runs: messages, heartbeat, metrics, its supervisor."""

from __future__ import annotations

import logging
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from apscheduler.schedulers.background import BackgroundScheduler

from daq.errors import DaqError
from daq.estimate.blinding import Blinding
from daq.estimate.standing import Change
from daq.itinerary import Itinerary
from daq.records import Reading
from daq.service.daily import evening_word, summary_of
from daq.service.heartbeat import Pulse, send_heartbeat
from daq.service.messages import by_apprise, post_evening, send_digest, send_notes, send_urgent
from daq.service.metrics import Tally, write_metrics
from daq.service.settings import LabSettings, settings_of
from daq.service.systemd import Supervisor
from daq.service.telling import tell_people

log = logging.getLogger(__name__)

SEND_EVERY_S = 10.0


class Outlets:
    """Tells the world how a lab's service is; a fault out there goes to the log and never to the run."""

    def __init__(self, lab: Path, scheduler: BackgroundScheduler) -> None:
        self._lab, self._since = lab, datetime.now(UTC)
        self._pulse, self._supervisor, self._tally = Pulse(), Supervisor(), Tally()
        self._sending = scheduler.add_job(self.send, "interval", seconds=SEND_EVERY_S, max_instances=1)
        heartbeat = self._settings().heartbeat
        if heartbeat is not None:
            every_s = heartbeat.every_s
            scheduler.add_job(
                self._beat, "interval", seconds=every_s, max_instances=1, next_run_time=self._since
            )

    def ready(self) -> None:
        """Say that the service is up."""
        self._supervisor.ready()
        self._write(None)

    def begins(self, itinerary: Itinerary) -> None:
        """Take in what a run that begins will be like."""
        self._pulse.expect(float(itinerary.dwell_s.max(initial=0.0)))

    def wishes(self) -> dict[str, Any]:
        """Return what a run has to call, as fields of `Wanted`."""
        return {
            "on_visit": self._took,
            "on_warning": self._warned,
            "on_feed": self._write,
            "alive": self.alive,
        }

    def alive(self) -> None:
        """Note that the sequencer moves on: after a visit, or after a bounded wait."""
        self._pulse.beat()
        self._supervisor.alive()

    def send(self) -> None:
        """Send the messages that are due; what cannot be sent waits in the lab book."""
        try:
            messages = self._settings().messages
            if messages is None:
                return
            now = datetime.now(UTC)
            lab, since, zone = self._lab, self._since, messages.zone
            post_evening(lab, messages, now, since, lambda: evening_word(lab, messages, now))
            send_urgent(lab, messages, now, by_apprise)
            send_digest(lab, messages, now, since, lambda: summary_of(lab, zone, now), by_apprise)
        except DaqError as error:
            log.error("%s", error)

    def send_rest(self, title: str) -> None:
        """Send what is urgent, and everything else as one message under a title; it waits if it cannot go."""
        self.send()
        try:
            messages = self._settings().messages
            now = datetime.now(UTC)
            if messages is None:
                return
            summary = summary_of(self._lab, messages.zone, now)
            if not send_notes(self._lab, messages, now, title, summary, by_apprise):
                log.warning("messages could not be sent; they wait in the lab for its next run or service")
        except DaqError as error:
            log.error("%s", error)

    def _settings(self) -> LabSettings:
        try:
            return settings_of(self._lab)
        except DaqError as error:
            log.error("%s", error)
            return LabSettings()

    def _beat(self) -> None:
        try:
            heartbeat = self._settings().heartbeat
            if heartbeat is not None:
                send_heartbeat(heartbeat, self._pulse)
        except DaqError as error:
            log.error("%s", error)

    def _took(self, reading: Reading) -> None:
        self._tally.add(reading)

    def _warned(self, run: str, change: Change, quietly: bool) -> None:
        try:
            tell_people(self._lab, run, change, quietly=quietly)
            if change.warning.says.wakes and not quietly:
                self._sending.modify(next_run_time=datetime.now(UTC))  # at once, but beside the run
        except DaqError as error:
            log.error("%s", error)

    def _write(self, feed: Mapping[str, Any] | None) -> None:
        if feed is not None:
            self._tally.hides = Blinding(str(feed["blinding"])).hides
        try:
            write_metrics(self._lab, feed, self._tally)
        except DaqError as error:
            log.error("%s", error)
        if feed is not None and feed["visit"] is not None:
            visit = feed["visit"]
            self._supervisor.status(f"{feed['state']}, visit {visit['number'] + 1} of {visit['of']}")


@contextmanager
def outlets_of_run(lab: Path) -> Iterator[Outlets | None]:
    """Give a run in the foreground what a service has, where the lab says whom to tell; None where not.

    When it is over, urgent messages and the rest are sent; what cannot be sent waits in the lab book.

    Raises
    ------
    DescriptionError
        When the settings of the lab cannot be read.
    """
    settings = settings_of(lab)
    if settings.messages is None and settings.heartbeat is None:
        yield None
        return
    scheduler = BackgroundScheduler(timezone=UTC)
    outlets = Outlets(lab, scheduler)
    scheduler.start()
    try:
        yield outlets
    finally:
        scheduler.shutdown(wait=True)
        outlets.send_rest("a run in the foreground is over")
